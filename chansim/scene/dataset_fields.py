"""The fields of a Dataset at one time: which of its dimensions are levels, which places, and where a field lies."""

import re

from chansim.scene.recognition import Field
from chansim.scene.units import is_convertible

_PARAMETRIC = "atmosphere_"  # CF names of parametric vertical coordinates begin with this
_VERTICAL_STANDARD_NAMES = (
    "air_pressure", "height", "altitude", "height_above_mean_sea_level", "model_level_number",
    "air_potential_temperature", "geopotential_height", "height_above_reference_ellipsoid", "hybrid_sigma_pressure",
)  # fmt: skip
_VERTICAL_NAMES = (
    "level", "lev", "plev", "pressure", "pressure_level", "pres", "isobaric", "isobaricinhpa", "isobaricinpa",
    "hybrid", "model_level", "sigma", "height", "altitude", "z", "bottom_top", "bottom_top_stag", "generalvertical",
    "half_level", "theta", "nhym", "nhyi", "ilev",
)  # fmt: skip


def fields_of(dataset):
    """The fields of a Dataset.

    Parameters
    ----------
    dataset : Dataset without time and ensemble dimensions

    Returns
    -------
    list of Field; nothing is read
    """
    horizontal = horizontal_dims(dataset)
    fields = []
    for variable in [*dataset.data_vars, *(c for c in dataset.coords if c not in dataset.dims)]:
        data = dataset[variable]
        if data.dtype.kind not in "fiub" or _is_bookkeeping(data):
            continue
        fields.append(_dataset_field(data, dataset, horizontal))
    return fields


def _is_bookkeeping(data):
    attrs = {**data.encoding, **data.attrs}
    return "grid_mapping_name" in attrs or "crs_wkt" in attrs


def horizontal_dims(dataset):
    """Dimensions of the latitude and longitude, or of projection coordinates, in a Dataset."""
    dims = []
    for name, variable in dataset.variables.items():
        if _is_horizontal(name, variable):
            dims += [d for d in variable.dims if d not in dims]
    dims += [d for d in dataset.dims if d not in dims and unstaggered_name(d) in dims]
    return tuple(d for d in dims if not _is_vertical_dim(d, dataset))


def unstaggered_name(dim):
    """Name of a dimension without the mark of values that lie between: "west_east_stag" gives "west_east"."""
    return re.sub(r"[_-]?(stag|staggered)$", "", str(dim), flags=re.IGNORECASE)


_HORIZONTAL_STANDARD_NAMES = (
    "latitude", "longitude", "projection_x_coordinate", "projection_y_coordinate", "grid_latitude",
    "grid_longitude",
)  # fmt: skip


def _is_horizontal(name, variable):
    attrs = variable.attrs
    if attrs.get("standard_name") in _HORIZONTAL_STANDARD_NAMES or attrs.get("axis") in ("X", "Y"):
        return True
    return is_latitude(name, variable) or is_longitude(name, variable)


def is_latitude(name, variable):
    """True when a variable is a latitude by its standard name, its units or its plain name."""
    return _is_geographic(name, variable, "latitude", ("lat", "latitude", "xlat"), "n")


def is_longitude(name, variable):
    """True when a variable is a longitude by its standard name, its units or its plain name."""
    return _is_geographic(name, variable, "longitude", ("lon", "longitude", "xlong"), "e")


def _is_geographic(name, variable, standard_name, names, letter):
    attrs = variable.attrs
    if "standard_name" in attrs:
        return attrs["standard_name"] == standard_name
    units = str(attrs.get("units", "")).lower().replace("_", "")
    if units in (f"degrees{dict(n='north', e='east')[letter]}", f"degree{dict(n='north', e='east')[letter]}",
                 f"degree{letter}", f"degrees{letter}"):  # fmt: skip
        return True
    return units in ("", "degrees", "degree", "radian", "radians", "rad") and str(name).lower() in names


def _is_vertical_dim(dim, dataset):
    if dim in dataset.variables:
        attrs = dataset[dim].attrs
        standard_name = str(attrs.get("standard_name", ""))
        if standard_name in _VERTICAL_STANDARD_NAMES or standard_name.startswith(_PARAMETRIC):
            return True
        if attrs.get("axis") == "Z" or "positive" in attrs:
            return True
        if is_convertible(attrs.get("units", "unknown"), "Pa"):
            return True
    return str(dim).lower() in _VERTICAL_NAMES


def _dataset_field(data, dataset, horizontal):
    attrs = data.attrs
    levels = [d for d in data.dims if d not in horizontal and _is_vertical_dim(d, dataset)]
    if len(data.dims) > 1 and _deepest(dataset, horizontal) > 1:
        levels = [d for d in levels if data.sizes[d] > 1]  # one level of a file with columns is a single one
    extra = [d for d in data.dims if d not in horizontal and d not in levels and data.sizes[d] > 1]
    if not horizontal and len(extra) <= 2:
        extra = []  # columns whose places are missing, which is said later
    single = [d for d in data.dims if d not in horizontal and data.sizes[d] == 1 and d not in levels]
    data = data.isel({d: 0 for d in single})
    if not levels and len(extra) == 1 and extra[0] not in dataset.variables and horizontal:
        levels, extra = extra, []  # the one dimension left over
    if extra or len(levels) > 1:
        along = f", while the places lie along {', '.join(map(str, horizontal))}" if horizontal and extra else ""
        place, level_dim = f"extra dimension {', '.join(map(str, extra or levels))}{along}", ""
    elif levels:
        place, level_dim = "levels", levels[0]
    else:
        place, level_dim = _single_place(_with_own_coordinates(data, dataset)), ""
    evidence = {key: attrs[key] for key in ("standard_name", "long_name", "units") if key in attrs}
    if "long_name" not in evidence and "description" in attrs:  # as mesoscale models write it
        evidence["long_name"] = attrs["description"]
    if "GRIB_pv" in attrs:
        evidence["pv"] = attrs["GRIB_pv"]
    if level_dim and level_dim in dataset.variables:
        evidence["level_standard_name"] = dataset[level_dim].attrs.get("standard_name")
        evidence["level_units"] = dataset[level_dim].attrs.get("units", "K")
    evidence["short_name"] = attrs.get("GRIB_shortName", str(data.name))
    if "GRIB_paramId" in attrs:
        evidence["param_id"] = int(attrs["GRIB_paramId"])
    if "time: " in (methods := str(attrs.get("cell_methods", ""))) and "time: point" not in methods:
        evidence["over_time"] = methods
    return Field(str(data.name), lambda: data, place, level_dim, evidence)


def _deepest(dataset, horizontal):
    return max((n for d, n in dataset.sizes.items() if d not in horizontal and _is_vertical_dim(d, dataset)), default=0)


def _with_own_coordinates(data, dataset):
    """The field without scalar coordinates that the file gives to other fields only (xarray hands them to all)."""
    named = {name: str(v.encoding.get("coordinates", "")).split() for name, v in dataset.variables.items()}
    claimed = {coordinate for names in named.values() for coordinate in names}
    foreign = claimed - set(named.get(data.name, ()))
    return data.drop_vars([c for c in foreign if c in data.coords and data.coords[c].ndim == 0])


def _single_place(data):
    """Where a field without levels lies: "2m", "10m", a GRIB kind of level, or "single" when unsaid."""
    kind = data.attrs.get("GRIB_typeOfLevel")
    for name, coord in data.coords.items():
        if coord.ndim == 0 and coord.dtype.kind in "fi" and _is_height(name, coord):
            height = float(coord.values)
            if 1.0 <= height <= 2.5:
                return "2m"
            if 9.0 <= height <= 11.0:
                return "10m"
            return f"{height:g} m above ground"
        if coord.ndim == 0 and coord.dtype.kind in "fi" and _is_pressure(coord):
            return f"pressure {float(coord.values):g} {coord.attrs['units']}"
    if kind and kind != "heightAboveGround":
        return kind
    return "single"


def _is_height(name, coord):
    return coord.attrs.get("standard_name") == "height" or name in ("height", "heightAboveGround")


def _is_pressure(coord):
    return "units" in coord.attrs and is_convertible(coord.attrs["units"], "Pa")
