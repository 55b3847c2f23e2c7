"""Where the terms of a parametric vertical coordinate stand in a file.

In order: the table [vertical] of a mapping, the CF attribute `formula_terms`, the coefficients in a GRIB
header, coefficients under the plain names that converters write (hyam, hybm, hyai, hybi).
"""

from dataclasses import dataclass, field

import numpy as np
import xarray as xr

from chansim.constants import STANDARD_GRAVITY
from chansim.errors import SceneError
from chansim.scene import coordinates
from chansim.scene.units import convert, is_convertible

# {kind: (terms in the formula, units of each)}; kinds are CF names without "atmosphere_" and "_coordinate"
KINDS = {
    "hybrid_sigma_pressure": {"ap": "Pa", "a": "1", "p0": "Pa", "b": "1", "ps": "Pa"},
    "sigma": {"sigma": "1", "ps": "Pa", "ptop": "Pa"},
    "ln_pressure": {"p0": "Pa", "lev": "1"},
    "hybrid_height": {"a": "m", "b": "1", "orog": "m"},
    "sleve": {"a": "1", "b1": "1", "b2": "1", "ztop": "m", "zsurf1": "m", "zsurf2": "m"},
}
GIVES_HEIGHT = ("hybrid_height", "sleve")
_NEEDED = {
    "hybrid_sigma_pressure": ("ap", "b", "ps"),
    "sigma": ("sigma", "ps", "ptop"),
    "ln_pressure": ("p0", "lev"),
    "hybrid_height": ("a", "b", "orog"),
    "sleve": ("a", "b1", "b2", "ztop", "zsurf1", "zsurf2"),
}
# not terms of a formula, but part of the table [vertical]
EXTRA_KEYS = ("coordinate", "ap_half", "b_half", "known_pressure", "known_height")
# names of the coefficients in files of common converters, on levels and between them
_PLAIN_NAMES = (("hyam", "hybm", "hyai", "hybi"), ("a_model", "b_model", "a_model_half", "b_model_half"))


@dataclass
class Parametric:
    """A parametric vertical coordinate.

    kind : key of `KINDS`
    terms : {term: number or DataArray [SI]}; over the levels, the columns, or neither
    half : {"ap": array, "b": array} at the half levels [Pa, 1], {} when they are not known
    surface_name : field that served as the surface pressure or orography, "" for none
    log : lines on where the terms come from
    """

    kind: str
    terms: dict
    half: dict = field(default_factory=dict)
    surface_name: str = ""
    log: list = field(default_factory=list)


def find_parametric(temperature, found, opened, vertical=None):
    """The parametric coordinate of the levels of a field.

    Parameters
    ----------
    temperature : Field that defines the levels
    found : Recognised
    opened : Source
    vertical : table [vertical] of a mapping, or None

    Returns
    -------
    Parametric; None when the levels do not have one

    Raises
    ------
    SceneError : terms missing, of the wrong length or in wrong units; an unknown kind
    """
    search = _Search(temperature, found, opened)
    if vertical and "coordinate" in vertical and vertical["coordinate"] != "height":
        return _from_mapping(search, vertical)
    if (pv := temperature.evidence.get("pv")) is not None:
        return _from_header(search, np.asarray(pv, dtype=float))
    coord = _coordinate_with_terms(search)
    if coord is not None:
        return _from_attributes(search, coord)
    if temperature.level_dim == "sigma" and opened.dataset is None:
        return _sigma_of_grib(search)
    return _from_plain_names(search)


class _Search:
    """Finds terms by name and brings them onto the dimensions of the temperature."""

    def __init__(self, temperature, found, opened):
        self.temperature, self.found, self.opened = temperature, found, opened
        self.dim = temperature.level_dim
        self.count = temperature.data.sizes[self.dim]
        self.by_name = {f.name: f for f in opened.fields}

    def has(self, name):
        """True when the file has something of that name."""
        dataset = self.opened.dataset
        return name in self.by_name or (dataset is not None and name in dataset.variables)

    def named(self, name, units, term):
        """A term by the name of a variable, or a number as it is [units]."""
        if isinstance(name, (int, float)):
            return float(name)
        if isinstance(name, (list, tuple)):
            return self._on_levels(xr.DataArray(np.asarray(name, dtype=float), dims="coefficient"), term)
        data, own_units = self._variable(name, term)
        if term == "ps" and self._is_logarithm(name, data):
            data, own_units = np.exp(data.astype(float)), "Pa"
        data = data.drop_vars(list(data.coords))
        if data.dtype.kind != "f":
            data = data.astype(float)
        try:
            data = convert(data, own_units, units, name)
        except SceneError as error:
            raise SceneError(
                f"vertical coordinate: term {term} = {name} has units '{own_units}', but {units} is needed; correct "
                f"its units attribute, or give numbers in {units} in the mapping file:\n  [vertical]\n  {term} = [...]"
            ) from error
        return data if data.ndim == 0 or set(data.dims) <= self._column_dims() else self._on_levels(data, name)

    def _variable(self, name, term):
        if name in self.by_name:
            return self.by_name[name].data, self.by_name[name].units
        dataset = self.opened.dataset
        if dataset is None or name not in dataset.variables:
            raise SceneError(f"vertical coordinate: the term {term} should be '{name}', which is not in the file")
        data = dataset[name]
        data = data.isel({d: 0 for d in data.dims if data.sizes[d] == 1 and d != self.dim})
        return data, data.attrs.get("units")

    def _is_logarithm(self, name, data):
        log_field = self.found.fields.get("log_surface_pressure")
        return log_field is not None and log_field.name == name

    def _column_dims(self):
        return {d for d in self.temperature.data.dims if d != self.dim}

    def _on_levels(self, data, name):
        """Coefficients with the dimension of the levels; those of all levels are picked by level number."""
        if data.dims == (self.dim,) or data.ndim != 1:
            if self.dim in data.dims and set(data.dims) <= {self.dim, *self._column_dims()}:
                return data
            raise SceneError(
                f"vertical coordinate: {name} has dimensions {data.dims}, which are not those of the levels "
                f"({self.dim}) or of the columns of {self.temperature.name}"
            )
        (own,) = data.dims
        if data.sizes[own] == self.count:
            return data.rename({own: self.dim})
        numbers = self.level_numbers()
        if numbers is not None and data.sizes[own] >= numbers.max() and self.count < data.sizes[own]:
            return data.isel({own: numbers - 1}).rename({own: self.dim})
        raise SceneError(
            f"vertical coordinate: {name} has {data.sizes[own]} coefficients, but {self.temperature.name} has "
            f"{self.count} levels ({self.dim}); give one for each level, or number the levels (1 at the top) in the "
            "coordinate so that they can be picked"
        )

    def level_numbers(self):
        """Numbers of the levels, 1 at the top of the model, from the coordinate; None when it is something else."""
        coord = self.temperature.data.coords.get(self.dim)
        if coord is None or coord.dtype.kind not in "fiu":
            return None
        values = coord.values.astype(float)
        whole = np.rint(values)
        return whole.astype(int) if np.array_equal(values, whole) and whole.min() >= 1 else None


def surface_pressure_of(found):
    """Surface pressure that a file has for itself [Pa], and its name; (None, "") when it has none."""
    for quantity, units in (("surface_pressure", "Pa"), ("log_surface_pressure", "1")):
        f = found.fields.get(quantity)
        if f is not None:
            data = f.data.drop_vars(list(f.data.coords)).astype(float)
            data = convert(data, found.units[quantity], units, f.name)
            return (np.exp(data) if quantity == "log_surface_pressure" else data), f.name
    return None, ""


def orography_of(found):
    """Height of the ground that a file has for itself [m], and its name; (None, "") when it has none."""
    for quantity, units, scale in (("orography", "m", 1.0), ("surface_geopotential", "m2 s-2", STANDARD_GRAVITY)):
        f = found.fields.get(quantity)
        if f is not None:
            data = f.data.drop_vars(list(f.data.coords)).astype(float)
            return convert(data, found.units[quantity], units, f.name) / scale, f.name
    return None, ""


def _coordinate_with_terms(search):
    """Variable that carries a parametric standard name or formula terms for the levels."""
    coord = search.temperature.data.coords.get(search.dim)
    candidates = [coord] if coord is not None else []
    if (dataset := search.opened.dataset) is not None:
        candidates += [dataset[n] for n, v in dataset.variables.items() if v.dims == (search.dim,)]
    for c in candidates:
        if "formula_terms" in c.attrs or "formula_terms" in c.encoding:
            return c
    for c in candidates:
        if _kind_of(c) is not None:
            return c
    return None


def _kind_of(coord):
    name = str(coord.attrs.get("standard_name", ""))
    kind = name.removeprefix("atmosphere_").removesuffix("_coordinate")
    return kind if kind in KINDS else None


def parse_terms(text):
    """{term: name of a variable} of a CF `formula_terms` attribute, e.g. "ap: hyam b: hybm ps: PS"."""
    words = str(text).replace(":", ": ").split()
    pairs = {words[i].rstrip(":"): words[i + 1] for i in range(0, len(words) - 1, 2)}
    if len(words) % 2 or not all(words[i].endswith(":") for i in range(0, len(words), 2)):
        raise SceneError(f"formula_terms '{text}' cannot be read; it is written 'ap: hyam b: hybm ps: PS'")
    return pairs


def _from_attributes(search, coord):
    text = coord.attrs.get("formula_terms", coord.encoding.get("formula_terms"))
    kind = _kind_of(coord)
    if text is None:
        plain = _from_plain_names(search) if kind == "hybrid_sigma_pressure" else None
        if plain is None and kind == "sigma":
            return _complete(search, kind, {"sigma": coord.name}, f"coordinate {coord.name}")
        return plain or _complete(search, kind, {}, f"coordinate {coord.name}, which has no formula_terms")
    names = parse_terms(text)
    if kind is None:  # a coordinate without standard name may still carry terms that tell
        kind = next((k for k, needed in _NEEDED.items() if set(_without_base(needed)) <= set(names)), None)
        if kind is None:
            raise SceneError(
                f"coordinate {coord.name}: formula_terms '{text}' belong to none of "
                f"{', '.join(f'atmosphere_{k}_coordinate' for k in KINDS)}; give its standard_name"
            )
    parametric = _complete(search, kind, names, f"formula_terms of {coord.name}")
    if kind == "hybrid_sigma_pressure" and not parametric.half:
        parametric.half = _half_from_bounds(search, coord, parametric) or _half_from_plain_names(search)
    return parametric


def _without_base(needed):
    return [term for term in needed if term != "ap"]


def _from_mapping(search, table):
    kind = str(table["coordinate"]).removeprefix("atmosphere_").removesuffix("_coordinate")
    if kind not in KINDS:
        raise SceneError(
            f"mapping [vertical]: coordinate '{table['coordinate']}' is not one of height, {', '.join(KINDS)}"
        )
    names = {key: value for key, value in table.items() if key not in EXTRA_KEYS}
    unknown = set(names) - set(KINDS[kind])
    if unknown:
        raise SceneError(
            f"mapping [vertical]: '{sorted(unknown)[0]}' is no term of {kind}; it has {', '.join(KINDS[kind])}"
        )
    half = {}
    if "ap_half" in table and "b_half" in table:
        half = {term: _half_values(search, table[f"{term}_half"], KINDS[kind][term], term) for term in ("ap", "b")}
    return _complete(search, kind, names, "mapping", half)


def _half_values(search, value, units, term):
    """Half-level coefficients, one more than levels, as an array."""
    if isinstance(value, (list, tuple)):
        values = np.asarray(value, dtype=float)
    else:
        data, own_units = search._variable(value, f"{term}_half")
        values = convert(data.values.astype(float), own_units, units, value)
    numbers = search.level_numbers()
    if values.ndim == 1 and len(values) > search.count + 1 and numbers is not None and numbers.max() < len(values):
        if np.all(np.diff(numbers) == 1):
            return values[numbers[0] - 1 : numbers[-1] + 1]
        return None
    if values.shape != (search.count + 1,):
        raise SceneError(
            f"vertical coordinate: {value if isinstance(value, str) else term} has {values.size} half-level "
            f"coefficients, but {search.temperature.name} has {search.count} levels, which need {search.count + 1}"
        )
    return values


def _complete(search, kind, names, origin, half=None):
    """The coordinate with all its terms, or an error that lists those missing."""
    units = KINDS[kind]
    half = half if half and all(v is not None for v in half.values()) else {}
    absent = [t for t, name in names.items() if t in units and isinstance(name, str) and not search.has(name)]
    if absent:
        raise SceneError(_missing_terms(search, kind, names, absent, origin))
    terms = {term: search.named(name, units[term], term) for term, name in names.items() if term in units}
    _take_base_pressure(search, kind, names, terms)
    for term in ("ap", "b"):
        if half and term not in terms and kind == "hybrid_sigma_pressure":
            terms[term] = xr.DataArray(coordinates.full_from_half(half[term]), dims=search.dim)
    parametric = Parametric(kind, terms, half, str(names.get("ps", names.get("orog", ""))))
    if "ps" in _NEEDED[kind] and "ps" not in terms:
        terms["ps"], parametric.surface_name = surface_pressure_of(search.found)
    if "orog" in _NEEDED[kind] and "orog" not in terms:
        terms["orog"], parametric.surface_name = orography_of(search.found)
    missing = [term for term in _NEEDED[kind] if terms.get(term) is None]
    if missing:
        raise SceneError(_missing_terms(search, kind, names, missing, origin))
    given = ", ".join(f"{term} = {_in_words(name)}" for term, name in names.items()) or "what the file has"
    parametric.log.append(f"pressure <- {kind.replace('_', ' ')} coordinate, by {origin} ({given})")
    return parametric


def _take_base_pressure(search, kind, names, terms):
    """ap = a p0; a coefficient called `a` that carries pressure units is ap already."""
    if kind != "hybrid_sigma_pressure" or "ap" in terms or "a" not in terms:
        return
    if "p0" in terms:
        terms["ap"] = terms["a"] * terms["p0"]


def _in_words(value):
    return f"{len(value)} numbers" if isinstance(value, (list, tuple)) else str(value)


def _missing_terms(search, kind, names, missing, origin):
    wanted = {"ap": "ap (or a and p0)", "ps": "ps (surface pressure, or its logarithm)", "orog": "orog (orography)"}
    present = {term: name for term, name in names.items() if term not in missing}
    lines = [f'coordinate = "{kind}"', *(f"{term} = {_toml(name)}" for term, name in present.items())]
    lines += [f'{term} = "NAME"' for term in missing]
    sought = {term: f" (sought as '{names[term]}')" if term in names else "" for term in missing}
    named = ", ".join(wanted.get(m, m) + sought[m] for m in missing)
    return (
        f"{search.temperature.name}: its levels '{search.dim}' are a {kind.replace('_', ' ')} coordinate "
        f"(atmosphere_{kind}_coordinate, by {origin}), but {named} {'is' if len(missing) == 1 else 'are'} missing, so "
        "they give no pressure. Add to the mapping file:" + "".join(f"\n  {line}" for line in ["[vertical]", *lines])
    )


def _toml(value):
    if isinstance(value, (list, tuple)):
        return "[...]"
    return f'"{value}"' if isinstance(value, str) else str(value)


def _half_from_bounds(search, coord, parametric):
    """Half-level coefficients from the bounds of the coordinate, whose own formula_terms name them."""
    dataset, bounds = search.opened.dataset, coord.attrs.get("bounds", coord.encoding.get("bounds"))
    if dataset is None or bounds not in dataset.variables:
        return {}
    text = dataset[bounds].attrs.get("formula_terms", dataset[bounds].encoding.get("formula_terms"))
    if text is None:
        return {}
    names = parse_terms(text)
    half = {}
    for term in ("ap", "a", "b"):
        if term in names and names[term] in dataset.variables:
            edges = dataset[names[term]].values.astype(float)
            units = dataset[names[term]].attrs.get("units", KINDS["hybrid_sigma_pressure"][term])
            joined = _joined_bounds(convert(edges, units, KINDS["hybrid_sigma_pressure"][term], names[term]))
            if joined is not None and len(joined) == search.count + 1:
                half[term] = joined
    if "a" in half and "p0" in parametric.terms:
        half["ap"] = half.pop("a") * float(parametric.terms["p0"])
    return half if set(half) == {"ap", "b"} else {}


def _joined_bounds(edges):
    """Half levels from bounds (level, 2) that touch; None when they do not."""
    if edges.ndim != 2 or edges.shape[1] != 2:
        return None
    for pair in (edges, edges[:, ::-1]):
        if np.allclose(pair[1:, 0], pair[:-1, 1], rtol=1e-6, atol=1e-9):
            return np.append(pair[:, 0], pair[-1, 1])
    return None


def _from_header(search, pv):
    """Coefficients in the header of GRIB messages: pairs at half levels, or at the levels themselves.

    Source: WMO manual on codes, GRIB section 4: list of vertical coordinate values; a then b.
    """
    numbers = search.level_numbers()
    count = len(pv) // 2
    if len(pv) % 2 or numbers is None or numbers.max() > count:
        shown = "not numbered" if numbers is None else f"numbered up to {numbers.max()}"
        raise SceneError(
            f"{search.temperature.name}: the GRIB header holds {len(pv)} coefficients (pv), which do not fit levels "
            f"{shown}: {count - 1} levels need {2 * count}. The file was cut or edited wrongly; give the "
            'coefficients by mapping: [vertical] coordinate = "hybrid_sigma_pressure"; ap = [...]; b = [...]'
        )
    ap, b = pv[:count], pv[count:]
    half = {}
    if numbers.max() == count:  # as many pairs as levels: they belong to the levels
        names = {"ap": list(ap[numbers - 1]), "b": list(b[numbers - 1])}
        origin = "coefficients at levels in the GRIB header"
    else:
        names = {"ap": list(coordinates.full_from_half(ap)[numbers - 1])}
        names["b"] = list(coordinates.full_from_half(b)[numbers - 1])
        origin = "half-level coefficients in the GRIB header"
        if np.all(np.diff(numbers) == 1):
            part = slice(numbers[0] - 1, numbers[-1] + 1)
            half = {"ap": ap[part], "b": b[part]}
    parametric = _complete(search, "hybrid_sigma_pressure", names, origin, half)
    parametric.log = [f"pressure <- hybrid sigma pressure coordinate, by {count} {origin}"]
    return parametric


def _sigma_of_grib(search):
    """Sigma levels of GRIB, whose top is at zero pressure (WMO code table 4.5, type 104)."""
    values = search.temperature.data[search.dim].values.astype(float)
    sigma = list(values / (1e4 if values.max() > 1.5 else 1.0))  # GRIB 1 counts in 1/10000
    return _complete(search, "sigma", {"sigma": sigma, "ptop": 0.0}, "GRIB sigma levels")


def _from_plain_names(search):
    """Coefficients called hyam, hybm (levels) and hyai, hybi (half levels), as converters write them."""
    dataset = search.opened.dataset
    for a, b, a_half, b_half in _PLAIN_NAMES:
        on_full, on_half = search.has(a) and search.has(b), search.has(a_half) and search.has(b_half)
        if dataset is None or not (on_full or on_half):
            continue
        scale, base = _unit_of_a(search, a if on_full else a_half)
        names, half = {}, {}
        if on_half:
            half = {"ap": _half_values(search, a_half, scale, "ap"), "b": _half_values(search, b_half, "1", "b")}
            half = {} if half["ap"] is None or half["b"] is None else half
            if half:
                half["ap"] = half["ap"] * base
        if on_full:
            names = {"ap" if base == 1.0 else "a": a, "b": b} | ({} if base == 1.0 else {"p0": base})
        return _complete(search, "hybrid_sigma_pressure", names, f"the variables {a if on_full else a_half}", half)
    return None


def _half_from_plain_names(search):
    """Half-level coefficients that converters add beside formula terms; {} when they are absent or do not fit."""
    for _, _, a_half, b_half in _PLAIN_NAMES:
        if search.opened.dataset is None or not (search.has(a_half) and search.has(b_half)):
            continue
        try:
            units, base = _unit_of_a(search, a_half)
            half = {"ap": _half_values(search, a_half, units, "ap"), "b": _half_values(search, b_half, "1", "b")}
        except SceneError:  # they are a bonus; the levels have their own terms
            return {}
        if half["ap"] is not None and half["b"] is not None:
            return {"ap": half["ap"] * base, "b": half["b"]}
    return {}


def _unit_of_a(search, name):
    """Units of the first coefficient, and the pressure it is to be multiplied by [Pa]."""
    data, units = search._variable(name, "a")
    if units is not None and is_convertible(units, "Pa"):
        return "Pa", 1.0
    for base in ("P0", "p0"):
        if search.has(base):
            return "1", float(search.named(base, "Pa", "p0"))
    if units is None and float(np.abs(data).max()) > 1.5:
        raise SceneError(f"vertical coordinate: {name} has no units; set its units attribute to Pa")
    raise SceneError(
        f"vertical coordinate: {name} is dimensionless, so a reference pressure is needed: add a variable p0, or say "
        f'[vertical] coordinate = "hybrid_sigma_pressure"; a = "{name}"; p0 = 100000.0'
    )
