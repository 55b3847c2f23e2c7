"""Native output of mesoscale models: base state plus perturbation, a constant added, values between levels.

Works on lists of fields before they are recognised, so that a sum is recognised like any other field. What
belongs together is told by the attributes of the fields, or by the user's mapping.
"""

import re
from dataclasses import replace

import xarray as xr

from chansim.errors import SceneError
from chansim.scene.dataset_fields import unstaggered_name
from chansim.scene.recognition import QUANTITIES, Field
from chansim.scene.units import convert

# the constant that mesoscale models take from potential temperature before they write it
BASE_POTENTIAL_TEMPERATURE = 300.0  # K
_BASE = re.compile(r"\bbase[\s-]?state\b|\bbase\b|\breference state\b")
_PERTURBATION = re.compile(r"\bperturbation\b|\bpert\.?(?=\s)|\bdeviation\b")
_SUMMED = ("pressure", "geopotential", "geopotential height", "potential temperature", "air pressure", "height")


def with_sums(fields, mapping=None):
    """Fields together with the sums that can be made of them.

    Parameters
    ----------
    fields : list of Field
    mapping : {quantity: name, or table with "name" or "sum" = [names], "add" = number [units of the field],
        "units", "staggered" = dimension}, or None

    Returns
    -------
    fields : list of Field, the sums among them
    mapping : the same with every entry a name, or {"name", "units"}
    log : lines on what was added up

    Raises
    ------
    SceneError : a name that is not in the file, parts that do not fit together
    """
    log = []
    fields = [*fields, *_paired(fields, log), *_offset_potential_temperature(fields, mapping or {}, log)]
    by_name = {f.name: f for f in fields}
    plain = {}
    for key, value in (mapping or {}).items():
        plain[key] = value
        if isinstance(value, dict) and set(value) & {"sum", "add", "staggered"}:
            made = _from_entry(key, value, by_name)
            fields.append(made)
            log.append(f"{key}: {made.name}, by mapping")
            plain[key] = {"name": made.name, "units": made.units}
    return fields, plain, log


def _paired(fields, log):
    """Sums of fields whose long names differ only in the words for base state and perturbation."""
    bases, sums = {}, []
    for f in fields:
        label = _label(f)
        if _BASE.search(label):
            bases.setdefault((_stem(label), f.level_dim), []).append(f)
    for f in fields:
        label = _label(f)
        if not _PERTURBATION.search(label) or _stem(label) not in _SUMMED:
            continue
        partners = bases.get((_stem(label), f.level_dim), [])
        if len(partners) != 1 or f.place != "levels":
            continue
        sums.append(_sum([partners[0], f], 0.0, f.units, _stem(label)))
        log.append(f"{sums[-1].name}: base state and perturbation of {_stem(label)}, by their long names")
    return sums


def _label(f):
    return str(f.evidence.get("long_name", "")).strip().lower()


def _stem(label):
    """A long name without the words for base state and perturbation."""
    label = _PERTURBATION.sub("", _BASE.sub("", label))
    label = re.sub(r"\(?\btheta\s*-\s*t0\)?", "", label)
    return " ".join(label.replace("(", " ").replace(")", " ").split())


def _offset_potential_temperature(fields, mapping, log):
    """Perturbation potential temperature without a base state field: theta - 300 K."""
    if set(mapping) & {"temperature", "potential_temperature"}:
        return []
    found = [f for f in fields if f.place == "levels" and _PERTURBATION.search(_label(f))]
    found = [f for f in found if _stem(_label(f)) == "potential temperature"]
    has_base = any(_BASE.search(_label(f)) and _stem(_label(f)) == "potential temperature" for f in fields)
    if len(found) != 1 or has_base:
        return []
    made = _sum(found, BASE_POTENTIAL_TEMPERATURE, found[0].units, "potential temperature")
    made.evidence["assumed"] = (
        f"{made.name}: the file gives potential temperature as the difference from a constant, taken to be 300 K; "
        f'another one by mapping: [variables] potential_temperature = {{name = "{found[0].name}", add = 300.0}}'
    )
    log.append(f"{made.name}: perturbation potential temperature and its constant")
    return [made]


def _from_entry(key, entry, by_name):
    """Field of a mapping entry with `sum`, `add` or `staggered`."""
    names = entry.get("sum", [entry.get("name")])
    if isinstance(names, str) or not names:
        raise SceneError(f'mapping: {key}: sum is a list of names, as in {{sum = ["P", "PB"]}}')
    for name in names:
        if name not in by_name:
            raise SceneError(f"mapping: {key} = '{name}' is not in the file, which has: {', '.join(by_name)}")
    parts = [by_name[name] for name in names]
    add = entry.get("add", 0.0)
    if isinstance(add, bool) or not isinstance(add, (int, float)):
        raise SceneError(f"mapping: {key}: add is a number in the units of the field, not {add!r}")
    for part in parts:
        part.evidence["is_part"] = True
    made = _sum(parts, float(add), entry.get("units", parts[0].units), "")
    if "staggered" in entry:
        made = _unstaggered(made, key, entry["staggered"])
    return made


def _sum(parts, constant, units, long_name):
    first = parts[0]
    name = " + ".join(f.name for f in parts) + (f" + {constant:g}" if constant else "")

    def open_sum():
        total = first.data
        for other in parts[1:]:
            _require_same_shape(first, other)
            total = total + convert(other.data, other.units, first.units, other.name).variable
        total = total + constant if constant else total
        return total.assign_attrs(first.data.attrs) if len(parts) > 1 or constant else total

    kept = {key: first.evidence[key] for key in ("over_time", "pv", "centre") if key in first.evidence}
    evidence = {**kept, "long_name": long_name, "short_name": name}
    if units is not None:
        evidence["units"] = units
    return Field(name, open_sum, first.place, first.level_dim, evidence, tuple(parts))


def _require_same_shape(first, other):
    if dict(first.data.sizes) != dict(other.data.sizes):
        raise SceneError(
            f"{first.name} {dict(first.data.sizes)} and {other.name} {dict(other.data.sizes)} cannot be added: "
            "their dimensions differ; are they staggered differently?"
        )


def _unstaggered(f, key, dim):
    """Means of neighbours along a dimension on which values lie between the levels or columns."""
    if dim is True:
        dim = f.level_dim
    if dim not in f.data.dims:
        raise SceneError(f"mapping: {key}: staggered = '{dim}' is no dimension of {f.name} {f.data.dims}")
    evidence = {**f.evidence, "averaged": dim}
    return replace(f, name=f"mean of {f.name}", open=lambda: means_along(f.data, dim), evidence=evidence)


def means_along(data, dim):
    """Means of neighbours along a dimension, which gets one shorter and loses its coordinate."""
    data = data.drop_vars([name for name, c in data.coords.items() if dim in c.dims])
    upper, lower = data.isel({dim: slice(None, -1)}), data.isel({dim: slice(1, None)})
    return (0.5 * (upper + lower)).assign_attrs(data.attrs)


def on_columns(f, template, level_dim, name):
    """A field on the horizontal positions of the template, averaged where it lies between the columns.

    Parameters
    ----------
    f : Field
    template : DataArray with the dimensions wanted
    level_dim : dimension of its levels
    name : quantity, for the message

    Returns
    -------
    DataArray; the field itself when it is not staggered

    Raises
    ------
    SceneError : it says that it is staggered, but is not one longer than the columns
    """
    data = f.data
    for own in [d for d in data.dims if d not in template.dims and d != f.level_dim]:
        target = unstaggered_name(own)
        if target in template.dims and target != level_dim:
            if data.sizes[own] != template.sizes[target] + 1:
                raise SceneError(_no_fit(name, f, own, data.sizes[own], target, template.sizes[target]))
            data = means_along(data, own).rename({own: target})
    return data


def _no_fit(name, f, own, size, target, wanted):
    return (
        f"{name} (from {f.name}): staggered along {own}, which has {size} values; {target} has {wanted} and needs "
        f"{wanted + 1} between and around them. The file was cut along one and not the other; cut both alike"
    )


def on_full_levels(f, data, reference_dim, count, name):
    """A field given between the levels, averaged onto them.

    Parameters
    ----------
    f : Field; data : its values
    reference_dim, count : dimension and number of the levels wanted
    name : quantity, for the message

    Returns
    -------
    DataArray with `reference_dim`; None when the field does not lie between the levels

    Raises
    ------
    SceneError : it says that it lies between the levels, but is not one longer
    """
    own = f.level_dim
    if f.evidence.get("averaged") == own and data.sizes[own] == count:
        return data.rename({own: reference_dim}) if own != reference_dim else data
    declared = unstaggered_name(own) == reference_dim and own != reference_dim
    if data.sizes[own] != count + 1:
        if declared:
            raise SceneError(_no_fit(name, f, own, data.sizes[own], reference_dim, count))
        return None
    if not (declared or name in _BETWEEN_LEVELS):
        return None
    data = means_along(data, own)
    return data.rename({own: reference_dim}) if own != reference_dim else data


# what models give between the levels without more ado
_BETWEEN_LEVELS = ("height", "geopotential_height", "geopotential", "height_above_ground", "pressure")


def with_isentropic(fields):
    """Fields together with the potential temperature that isentropic levels are made of."""
    has = {f.level_dim for f in fields if f.place == "levels" and _is_temperature(f)}
    made = []
    for f in fields:
        dim = f.level_dim
        if f.place != "levels" or dim in has or f.evidence.get("level_standard_name") != "air_potential_temperature":
            continue
        has.add(dim)
        made.append(_level_values(f, dim))
    return [*fields, *made]


def _is_temperature(f):
    names = QUANTITIES["temperature"].standard_names + QUANTITIES["potential_temperature"].standard_names
    return f.evidence.get("standard_name") in names or f.name in ("temperature", "potential_temperature")


def _level_values(f, dim):
    def open_levels():
        coord = f.data.coords[dim]
        values = xr.DataArray(coord.values.astype(float), dims=dim).broadcast_like(f.data.drop_vars(f.data.coords))
        return f.data.copy(data=values.transpose(*f.data.dims).data).assign_attrs(units=coord.attrs.get("units", "K"))

    evidence = {"standard_name": "air_potential_temperature", "units": f.evidence.get("level_units", "K")}
    return Field(f"levels {dim}", open_levels, "levels", dim, evidence)
