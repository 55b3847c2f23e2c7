"""The vertical coordinate: pressure on the levels, and every field brought onto the same ones.

The reader asks `level_pressure` for pressure on the levels of the temperature; `on_levels` then brings the
other fields onto these. `level` runs from the top of the atmosphere to the surface.
"""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from chansim.errors import SceneError
from chansim.scene import coordinates, hydrostatic
from chansim.scene.columns import CONDENSATES, HUMIDITY_ROUTES
from chansim.scene.formula_terms import GIVES_HEIGHT, KINDS, find_parametric
from chansim.scene.from_heights import hydrostatic_pressure, pressure_by_density
from chansim.scene.native import on_full_levels
from chansim.scene.recognition import Field
from chansim.scene.units import convert, is_convertible

# what is zero where the file stops, because models write it only where it can exist
_ZERO_BEYOND = ("cloud_fraction", *CONDENSATES, *(f"{name}_mixing_ratio" for name in CONDENSATES))
_SAME_PRESSURE = 1e-4  # relative difference below which two pressures are the same level


@dataclass
class LevelPressure:
    """Pressure of the levels of a scene.

    full : DataArray on the levels [Pa]
    half : DataArray on the half levels (dimension `half_level`), None where they are not exactly known [Pa]
    """

    full: xr.DataArray
    half: xr.DataArray | None = None


def level_pressure(temperature, recognised, opened, vertical=None):
    """Pressure of the levels of a field.

    Parameters
    ----------
    temperature : Field that defines the levels
    recognised : Recognised; receives lines of log, and the surface pressure or the heights that formulas give
    opened : Source
    vertical : table [vertical] of a mapping, or None

    Returns
    -------
    LevelPressure, with the dimension of the levels, and more unless it is the same for all columns [Pa]

    Raises
    ------
    SceneError : the levels carry no pressure, or terms to make it are missing
    """
    dim, log = temperature.level_dim, recognised.log
    coord = temperature.data.coords.get(dim)
    asked = bool(vertical and "coordinate" in vertical)
    if "pressure" not in recognised.mapped and not asked and coord is not None and _is_pressure(coord):
        log.append(f"pressure <- coordinate {dim} [{coord.attrs['units']}]")
        return LevelPressure(convert(coord.astype(float), coord.attrs["units"], "Pa", str(dim)))
    if not asked:
        given = _given_pressure(temperature, recognised, opened)
        if given is not None:
            return given
    parametric = find_parametric(temperature, recognised, opened, vertical)
    if parametric is not None and parametric.kind not in GIVES_HEIGHT:
        return _parametric_pressure(parametric, temperature, recognised, opened)
    if parametric is not None:
        _add_height(parametric, temperature, recognised)
    found = None if asked else pressure_by_density(temperature, recognised)
    if found is None:
        found = hydrostatic_pressure(temperature, recognised, opened, vertical)
    if found is None:
        raise SceneError(_no_pressure(temperature, coord, recognised))
    return LevelPressure(found)


def _given_pressure(temperature, recognised, opened):
    """Pressure, or the Exner function, as a field on the levels or between them; None when there is none."""
    for quantity, units in (("pressure", "Pa"), ("exner_function", "1")):
        given = recognised.fields.get(quantity)
        if given is None:
            continue
        values = convert(given.data.astype(float), recognised.units[quantity], units, given.name)
        values = values if quantity == "pressure" else hydrostatic.pressure_from_exner(values)
        count = temperature.data.sizes[temperature.level_dim]
        if given.level_dim == temperature.level_dim and values.sizes[given.level_dim] == count:
            return LevelPressure(values, _given_half_pressure(temperature, recognised, opened))
        full = on_full_levels(given, values, temperature.level_dim, count, "pressure")
        if full is not None:
            recognised.log.append(f"pressure: {given.name} lies between the levels; their means are taken on them")
            return LevelPressure(full, _without_coords(values).rename({given.level_dim: "half_level"}))
    return None


def _given_half_pressure(temperature, recognised, opened):
    """Pressure between the levels as the file gives it beside that on them; None when it does not."""
    wanted = {**temperature.data.sizes, temperature.level_dim: temperature.data.sizes[temperature.level_dim] + 1}
    candidates = [f for f in opened.fields if f.evidence.get("standard_name") == "air_pressure"]
    if (half := recognised.fields.get("half_pressure")) is not None:
        candidates.insert(0, half)
    for f in candidates:
        if f.place != "levels" or sorted(f.data.sizes.values()) != sorted(wanted.values()):
            continue
        if f.data.sizes[f.level_dim] != wanted[temperature.level_dim]:
            continue
        recognised.log.append(f"half_pressure <- {f.name} [{f.units}]")
        values = _without_coords(convert(f.data.astype(float), f.units, "Pa", f.name))
        return values.rename({f.level_dim: "half_level"}) if f.level_dim != "half_level" else values
    return None


def _without_coords(data):
    return data.drop_vars(list(data.coords))


def _parametric_pressure(parametric, temperature, recognised, opened):
    terms = {name: _like(value, temperature) for name, value in parametric.terms.items()}
    if parametric.kind == "hybrid_sigma_pressure":
        full = coordinates.pressure_from_hybrid_sigma(terms["ap"], terms["b"], terms["ps"])
    elif parametric.kind == "sigma":
        full = coordinates.pressure_from_sigma(terms["sigma"], terms["ps"], terms["ptop"])
    else:
        full = coordinates.pressure_from_log_pressure(terms["lev"], terms["p0"])
    recognised.log += parametric.log
    if "ps" in terms and not {"surface_pressure", "log_surface_pressure"} & set(recognised.fields):
        name = parametric.surface_name or "ps"
        recognised.fields["surface_pressure"] = Field(name, lambda: terms["ps"], "surface", evidence={"units": "Pa"})
        recognised.units["surface_pressure"] = "Pa"
        recognised.log.append(f"surface_pressure <- {name}, by the formula terms of the levels")
    half = None
    if parametric.half:
        ap, b = (xr.DataArray(parametric.half[term], dims="half_level") for term in ("ap", "b"))
        half = coordinates.pressure_from_hybrid_sigma(ap, b, terms["ps"])
    return LevelPressure(full, half)


def _like(value, temperature):
    """A term in chunks like those of the temperature, so that what is made of it stays lazy."""
    if not isinstance(value, xr.DataArray) or not temperature.data.chunks:
        return value
    sizes = temperature.data.chunksizes
    return value.chunk({d: sizes[d] for d in value.dims if d in sizes})


def _add_height(parametric, temperature, recognised):
    """Heights above sea level that a formula gives, as a field of the file."""
    terms = {name: _like(value, temperature) for name, value in parametric.terms.items()}
    if parametric.kind == "hybrid_height":
        height = coordinates.height_from_hybrid_height(terms["a"], terms["b"], terms["orog"])
    else:
        height = coordinates.height_from_sleve(*(terms[name] for name in KINDS["sleve"]))
    recognised.log += [line.replace("pressure <-", "height <-") for line in parametric.log]
    recognised.fields["height"] = Field(
        f"{parametric.kind} levels", lambda: height, "levels", temperature.level_dim, {"units": "m"}
    )
    recognised.units["height"] = "m"
    if not {"orography", "surface_geopotential"} & set(recognised.fields) and "orog" in terms:
        name = parametric.surface_name or "orog"
        recognised.fields["orography"] = Field(name, lambda: terms["orog"], "surface", evidence={"units": "m"})
        recognised.units["orography"] = "m"
        recognised.log.append(f"orography <- {name}, by the formula terms of the levels")


def _no_pressure(temperature, coord, recognised):
    """What the levels say of themselves, and every way to give them a pressure."""
    kind = "no values"
    if coord is not None:
        kind = coord.attrs.get("standard_name") or coord.attrs.get("long_name") or "no standard name"
    other = recognised.fields.get("pressure")
    beside = f" ({other.name} lies on other levels, '{other.level_dim}')" if other else ""
    return (
        f"{temperature.name}: its levels '{temperature.level_dim}' ({kind}) give no pressure{beside}. Add a field with "
        "standard_name 'air_pressure' on the same levels, or heights of the levels (standard_name altitude or "
        "geopotential_height) with surface pressure and orography, or give the coordinate pressure units, or say in a "
        f"mapping file one of:{_EXAMPLES}"
    )


_EXAMPLES = """
  [variables]
  pressure = "NAME"                     # or {sum = ["BASE", "PERTURBATION"]}
or
  [vertical]
  coordinate = "hybrid_sigma_pressure"
  ap = "NAME"
  b = "NAME"
  ps = "NAME"
or
  [vertical]
  coordinate = "sigma"
  sigma = "NAME"
  ps = "NAME"
  ptop = 0.0"""


def _is_pressure(coord):
    # a hybrid coordinate may carry hPa as units of its nominal values; its standard name tells
    if str(coord.attrs.get("standard_name", "air_pressure")) != "air_pressure":
        return False
    return "units" in coord.attrs and is_convertible(coord.attrs["units"], "Pa")


def runs_upward(pressure, dim):
    """True when the first level is the lowest."""
    others = {d: pressure.sizes[d] // 2 for d in pressure.dims if d != dim}
    first, last = (float(pressure.isel({dim: k, **others})) for k in (0, -1))
    if not np.isfinite([first, last]).all():
        first, last = (float(pressure.isel({dim: k}).max()) for k in (0, -1))
    return first > last


def on_levels(name, field, reference_dim, reference_pressure, notes, reference_count=None):
    """A field on the levels of the temperature.

    Parameters
    ----------
    name : quantity
    field : Field on levels
    reference_dim : dimension of the levels of the temperature
    reference_pressure : DataArray over it (1-D) to align pressure levels by, or None
    notes : list that receives what was filled
    reference_count : number of these levels

    Returns
    -------
    DataArray with dimension `reference_dim`; None when the field cannot be brought there

    Raises
    ------
    SceneError : humidity does not reach the lowest level
    """
    data = field.data
    own = data.coords.get(field.level_dim)
    alignable = reference_pressure is not None and own is not None and own.ndim == 1 and _is_pressure(own)
    if not alignable:
        count = reference_count or data.sizes.get(reference_dim, 0)
        if field.level_dim == reference_dim and data.sizes[reference_dim] == count:
            return data
        data = on_full_levels(field, data, reference_dim, count, name)
        if data is None:
            notes.append(f"{field.name}: on other levels ({field.level_dim}) than the temperature; not used")
        else:
            notes.append(f"{name}: {field.name} lies between the levels; means of neighbours are taken on them")
        return data
    pressure = convert(own.values.astype(float), own.attrs["units"], "Pa", field.name)
    wanted = reference_pressure.values
    position = [_find(pressure, p) for p in wanted]
    if position == list(range(len(wanted))) and len(pressure) == len(wanted):
        return data.rename({field.level_dim: reference_dim}) if field.level_dim != reference_dim else data
    slices = _fill_levels(name, field, data, position, wanted, notes)
    template = xr.DataArray(wanted, dims=reference_dim, name=reference_dim)
    return xr.concat(slices, dim=template, coords="minimal", compat="override")


def _find(pressure, wanted):
    hits = np.flatnonzero(np.abs(pressure - wanted) <= _SAME_PRESSURE * wanted)
    return int(hits[0]) if len(hits) else None


def _fill_levels(name, field, data, position, wanted, notes):
    """One slice a wanted level: found, interpolated between found ones, zero or NaN beyond them."""
    present = [k for k, where in enumerate(position) if where is not None]
    if not present:
        raise SceneError(f"{field.name}: shares no pressure level with the temperature")
    order = sorted(range(len(wanted)), key=lambda k: wanted[k])
    rank = {k: i for i, k in enumerate(order)}
    ranks = sorted(rank[k] for k in present)
    lowest_missing = [wanted[k] for k in range(len(wanted)) if rank[k] > ranks[-1]]
    if lowest_missing and name in HUMIDITY_ROUTES:
        raise SceneError(
            f"{field.name}: humidity is missing on the lowest levels ({_hpa(lowest_missing)} hPa) where the "
            "temperature is given; supply it there or drop these levels"
        )
    slices, interpolated, beyond = [], [], []
    for k, where in enumerate(position):
        if where is not None:
            piece = data.isel({field.level_dim: where})
        elif ranks[0] < rank[k] < ranks[-1]:
            piece = _between(data, field.level_dim, position, wanted, order, rank[k])
            interpolated.append(wanted[k])
        else:
            fill = 0.0 if name in _ZERO_BEYOND else np.nan
            piece = xr.full_like(data.isel({field.level_dim: 0}), fill)
            beyond.append(wanted[k])
        slices.append(piece.drop_vars(field.level_dim, errors="ignore"))
    if interpolated:
        notes.append(f"{name}: interpolated linearly in ln p to {_hpa(interpolated)} hPa, which {field.name} lacks")
    if beyond:
        what = "zero" if name in _ZERO_BEYOND else "reference atmosphere"
        notes.append(f"{name}: {what} at {_hpa(beyond)} hPa, which {field.name} lacks")
    return slices


def _between(data, dim, position, wanted, order, rank):
    above = next(order[r] for r in range(rank, -1, -1) if position[order[r]] is not None)
    below = next(order[r] for r in range(rank, len(order)) if position[order[r]] is not None)
    weight = np.log(wanted[order[rank]] / wanted[above]) / np.log(wanted[below] / wanted[above])
    upper, lower = (data.isel({dim: position[k]}).drop_vars(dim, errors="ignore") for k in (above, below))
    return (1.0 - float(weight)) * upper + float(weight) * lower


def _hpa(pressures):
    return ", ".join(f"{p / 100:g}" for p in sorted(pressures))
