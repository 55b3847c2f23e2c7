"""Opens GRIB, CF netCDF, Zarr and in-memory Datasets as a list of fields at one time."""

import contextlib
import warnings
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import scipy.io
import xarray as xr

from chansim.errors import SceneError
from chansim.scene import grib
from chansim.scene.recognition import Field
from chansim.scene.units import is_convertible

IN_MEMORY = "in-memory Dataset"
_KIND_HELP = "chansim reads GRIB, netCDF and Zarr"
_PARAMETRIC = "atmosphere_"  # CF names of parametric vertical coordinates begin with this
_VERTICAL_STANDARD_NAMES = (
    "air_pressure", "height", "altitude", "height_above_mean_sea_level", "model_level_number",
    "air_potential_temperature", "geopotential_height",
)  # fmt: skip
_VERTICAL_NAMES = (
    "level", "lev", "plev", "pressure", "pressure_level", "pres", "isobaric", "isobaricinhpa", "isobaricinpa",
    "hybrid", "model_level", "sigma", "height", "altitude", "z", "bottom_top", "generalvertical",
)  # fmt: skip
_ENSEMBLE_NAMES = ("number", "member", "realization", "ensemble")


@dataclass
class Source:
    """An opened source at one time.

    name : what messages call it
    kind : "GRIB", "netCDF", "Zarr" or "Dataset"
    fields : list of Field
    time : numpy.datetime64 or None when the source gives none
    times : all valid times of the source
    dataset : the Dataset for sources other than GRIB, else None
    log : lines worth telling the user
    """

    name: str
    kind: str
    fields: list
    time: object
    times: list
    dataset: xr.Dataset | None = None
    log: list = field(default_factory=list)


def open_source(source, *, time=None, select=None, chunks=None):
    """Opens a source and picks one time.

    Parameters
    ----------
    source : path of a GRIB or netCDF file or a Zarr store, or an xarray.Dataset
    time : valid time, anything `numpy.datetime64` takes; None when the source has just one
    select : {dimension: value or position} for dimensions that are neither space nor time
    chunks : None to read when needed, or what `xarray.open_dataset` takes

    Returns
    -------
    Source

    Raises
    ------
    SceneError : no such file, not a format chansim reads, damaged, several times and none named
    """
    select = dict(select or {})
    time = _as_time(time)
    if isinstance(source, xr.Dataset):
        return _from_dataset(source.copy(), IN_MEMORY, "Dataset", time, select)
    path = Path(source)
    kind = file_kind(path)
    if kind == "GRIB":
        return _from_grib(path, time, select, chunks)
    return _from_dataset(_open_dataset(path, kind, chunks), str(path), kind, time, select)


def file_kind(path):
    """ "GRIB", "netCDF" or "Zarr", from the content of a file or folder; SceneError when it is none."""
    path = Path(path)
    if not path.exists():
        raise SceneError(f"{path}: no such file; check the path")
    if path.is_dir():
        if any((path / mark).exists() for mark in ("zarr.json", ".zgroup", ".zmetadata")):
            return "Zarr"
        raise SceneError(f"{path}: a folder that is not a Zarr store; {_KIND_HELP}")
    try:
        with path.open("rb") as file:
            start = file.read(4096)
    except OSError as error:
        raise SceneError(f"{path}: cannot be read ({error.strerror}); check its permissions") from error
    if start.startswith((b"CDF\x01", b"CDF\x02", b"CDF\x05", b"\x89HDF\r\n\x1a\n")):
        return "netCDF"
    if b"GRIB" in start:  # a bulletin header may stand before the first message
        return "GRIB"
    raise SceneError(f"{path}: neither GRIB nor netCDF by its content; {_KIND_HELP}")


def _as_time(time):
    if time is None:
        return None
    try:
        return np.datetime64(time).astype("datetime64[s]")
    except (ValueError, TypeError) as error:
        raise SceneError(f"time: '{time}' is not a date; write it as 2018-09-17T00:00") from error


def _from_grib(path, time, select, chunks):
    headers = grib.scan(path)
    times = grib.valid_times(headers)
    time = _pick_time(str(path), times, time)
    fields = grib.fields_at(path, headers, time, select, chunks)
    return Source(str(path), "GRIB", fields, time, times)


def _pick_time(name, times, time):
    if time is None and len(times) == 1:
        return times[0]
    shown = ", ".join(str(t) for t in times[:12]) + (", ..." if len(times) > 12 else "")
    if time is None:
        raise SceneError(f'{name}: holds {len(times)} times ({shown}); say which, e.g. time="{times[0]}"')
    if time not in times:
        raise SceneError(f"{name}: nothing is valid at {time}; the source has {shown}")
    return time


def _open_dataset(path, kind, chunks):
    options = {"engine": "zarr", "consolidated": _is_consolidated(path)} if kind == "Zarr" else {}
    with refusing_damage(path):
        if kind == "netCDF":
            _refuse_short_classic(path)
        return xr.open_dataset(path, chunks=chunks, decode_timedelta=False, **options)


def _refuse_short_classic(path):
    """Raises when a classic netCDF file is shorter than its header says; the netCDF library reads zeros there."""
    with path.open("rb") as file:
        version = file.read(4)
    if version not in (b"CDF\x01", b"CDF\x02"):
        return
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # on closing while mapped
        # maps every variable, which fails beyond the end of the file; nothing is read
        scipy.io.netcdf_file(path, mmap=True).close()


def _is_consolidated(store):
    # asking in vain for consolidated metadata makes xarray warn
    if (store / ".zmetadata").exists():
        return True
    root = store / "zarr.json"
    return root.exists() and '"consolidated_metadata"' in root.read_text(encoding="utf-8")


@contextlib.contextmanager
def refusing_damage(name):
    """Turns what a back-end raises on damaged content into a SceneError; each raises its own kinds."""
    try:
        yield
    except (SceneError, Warning):
        raise
    except Exception as error:
        if name == IN_MEMORY:
            raise
        raise SceneError(f"{name}: damaged file, it cannot be read ({error}); fetch it again") from error


def _from_dataset(dataset, name, kind, time, select):
    dataset, log = _select_extra(dataset, name, select)
    dataset, time, times = _select_time(dataset, name, time)
    horizontal = horizontal_dims(dataset)
    fields = []
    for variable in [*dataset.data_vars, *(c for c in dataset.coords if c not in dataset.dims)]:
        data = dataset[variable]
        if data.dtype.kind not in "fiub" or _is_bookkeeping(data):
            continue
        fields.append(_dataset_field(data, dataset, horizontal))
    return Source(name, kind, fields, time, times, dataset, log)


def _is_bookkeeping(data):
    attrs = {**data.encoding, **data.attrs}
    return "grid_mapping_name" in attrs or "crs_wkt" in attrs


def _select_extra(dataset, name, select):
    """Picks from dimensions the user named; those of size 1 that are not space or levels go by themselves."""
    log = []
    for dim, value in select.items():
        if dim not in dataset.dims:
            raise SceneError(
                f"{name}: select names '{dim}', but the dimensions are {', '.join(map(str, dataset.dims))}"
            )
        try:
            has_labels = dim in dataset.indexes and value in dataset.indexes[dim]
            dataset = dataset.sel({dim: value}) if has_labels else dataset.isel({dim: value})
        except (KeyError, IndexError, TypeError) as error:
            raise SceneError(f"{name}: nothing at {dim} = {value}; it has {dataset.sizes[dim]} values") from error
    for dim in [d for d in dataset.dims if str(d).lower() in _ENSEMBLE_NAMES]:
        if dataset.sizes[dim] > 1:
            raise SceneError(
                f'{name}: dimension {dim} holds {dataset.sizes[dim]} members; say which, e.g. select={{"{dim}": 0}}'
            )
        dataset = dataset.isel({dim: 0})
    return dataset, log


def _select_time(dataset, name, time):
    """Dataset without time dimensions, the time picked (None if unknown) and all times."""
    coords = [c for c in _time_coords(dataset) if dataset[c].ndim == 1]
    scalars = [c for c in _time_coords(dataset) if dataset[c].ndim == 0]
    if not coords:
        scalars.sort(key=lambda c: dataset[c].attrs.get("standard_name") != "time" and c != "valid_time")
        if "valid_time" in scalars:
            scalars = ["valid_time"]
        known = [dataset[c].values.astype("datetime64[s]") for c in scalars if not np.isnat(dataset[c].values)]
        if known and time is not None and time != known[0]:
            raise SceneError(f"{name}: nothing is valid at {time}; the source is valid at {known[0]}")
        found = known[0] if known else time
        return dataset, found, [found] if found is not None else []
    dims = {}
    for c in coords:
        (dim,) = dataset[c].dims
        # on one dimension the valid time goes before the time of the analysis
        if dim not in dims or c == "valid_time":
            dims[dim] = c
    main = max(dims, key=lambda d: sum(d in v.dims for v in dataset.data_vars.values()))
    stamps = dataset[dims[main]].values.astype("datetime64[s]")
    time = _pick_time(name, list(stamps), time)
    for dim, c in dims.items():
        hits = np.flatnonzero(dataset[c].values.astype("datetime64[s]") == time)
        if len(hits):
            dataset = dataset.isel({dim: int(hits[0])})
        else:
            dataset = dataset.drop_dims(dim)
    return dataset, time, list(stamps)


def _time_coords(dataset):
    return [c for c in dataset.variables if np.issubdtype(dataset[c].dtype, np.datetime64)]


def horizontal_dims(dataset):
    """Dimensions of the latitude and longitude, or of projection coordinates, in a Dataset."""
    dims = []
    for name, variable in dataset.variables.items():
        if _is_horizontal(name, variable):
            dims += [d for d in variable.dims if d not in dims]
    return tuple(d for d in dims if not _is_vertical_dim(d, dataset))


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
    return units in ("", "degrees", "degree") and str(name).lower() in names


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
    extra = [d for d in data.dims if d not in horizontal and d not in levels and data.sizes[d] > 1]
    if not horizontal and len(extra) <= 2:
        extra = []  # columns whose places are missing, which is said later
    single = [d for d in data.dims if d not in horizontal and data.sizes[d] == 1 and d not in levels]
    data = data.isel({d: 0 for d in single})
    if not levels and len(extra) == 1 and extra[0] not in dataset.variables and horizontal:
        levels, extra = extra, []  # the one dimension left over
    if extra or len(levels) > 1:
        place, level_dim = f"extra dimension {', '.join(map(str, extra or levels))}", ""
    elif levels:
        place, level_dim = "levels", levels[0]
    else:
        place, level_dim = _single_place(_with_own_coordinates(data, dataset)), ""
    evidence = {key: attrs[key] for key in ("standard_name", "long_name", "units") if key in attrs}
    evidence["short_name"] = attrs.get("GRIB_shortName", str(data.name))
    if "GRIB_paramId" in attrs:
        evidence["param_id"] = int(attrs["GRIB_paramId"])
    if "time: " in (methods := str(attrs.get("cell_methods", ""))) and "time: point" not in methods:
        evidence["over_time"] = methods
    return Field(str(data.name), lambda: data, place, level_dim, evidence)


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
