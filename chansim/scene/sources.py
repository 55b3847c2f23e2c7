"""Opens GRIB, CF netCDF, Zarr and in-memory Datasets as a list of fields at one time."""

import contextlib
import glob
import re
import warnings
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import scipy.io
import xarray as xr

from chansim.errors import SceneError
from chansim.scene import grib, merging
from chansim.scene.recognition import Field
from chansim.scene.units import is_convertible

IN_MEMORY = "in-memory Dataset"
_KIND_HELP = "chansim reads GRIB, netCDF and Zarr"
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
_ENSEMBLE_NAMES = ("number", "member", "realization", "ensemble", "ens")


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
    source : path of a GRIB or netCDF file or a Zarr store, a list of such paths or a pattern with * and ? (times
        or variables spread over files), or an xarray.Dataset
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
        return _from_dataset(_with_dates(source.copy()), IN_MEMORY, "Dataset", time, select)
    paths = paths_of(source)
    kind = kind_of_all(paths)
    if kind == "GRIB":
        return _from_grib(paths, time, select, chunks)
    if len(paths) == 1:
        return _from_dataset(_open_dataset(paths[0], kind, chunks), str(paths[0]), kind, time, select)
    datasets = {str(path): _open_dataset(path, kind, chunks) for path in paths}
    return _from_datasets(datasets, name_of(paths), kind, time, select)


def paths_of(source):
    """List of paths: the one given, those of a list, or those a pattern with * ? [ matches, sorted by name."""
    if isinstance(source, (list, tuple)):
        paths = [path for one in source for path in paths_of(one)]
        if not paths:
            raise SceneError("an empty list of files; name at least one")
        return paths
    if isinstance(source, xr.Dataset):
        raise SceneError("a list may hold paths only; join Datasets with xarray.merge or xarray.concat first")
    path = Path(source).expanduser()
    if not path.exists() and any(mark in str(path) for mark in "*?["):
        found = sorted(glob.glob(str(path)))
        if not found:
            raise SceneError(f"{path}: no file fits this pattern; check folder and pattern")
        return [Path(name) for name in found]
    return [path]


def kind_of_all(paths):
    """The kind all files share; SceneError when they are of several kinds."""
    kinds = {}
    for path in paths:
        kinds.setdefault(file_kind(path), []).append(path)
    if len(kinds) > 1:
        first = "; ".join(f"{paths[0]} is {kind}" for kind, paths in kinds.items())
        raise SceneError(
            f"files of several kinds cannot be joined: {first}; convert them to one kind, or leave one out"
        )
    return next(iter(kinds))


def name_of(paths):
    """What messages call a list of files."""
    return str(paths[0]) if len(paths) == 1 else f"{paths[0]} and {len(paths) - 1} more"


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


def _from_grib(paths, time, select, chunks):
    headers = [header for path in paths for header in grib.scan(path)]
    times = grib.valid_times(headers)
    name = name_of(paths)
    time = _pick_time(name, times, time)
    fields = grib.fields_at(name, headers, time, select, chunks)
    return Source(name, "GRIB", fields, time, times)


def _from_datasets(datasets, name, kind, time, select):
    """The part of each file that is valid at one time, merged; nothing is read but coordinates."""
    parts, log, stamps = {}, [], set()
    for path, dataset in datasets.items():
        parts[path], more = _select_extra(dataset, path, {d: v for d, v in select.items() if d in dataset.dims})
        log += more
        stamps |= set(_times_of(parts[path]))
    absent = [d for d in select if not any(d in dataset.dims for dataset in datasets.values())]
    if absent:
        raise SceneError(f"{name}: select names '{absent[0]}', which is no dimension of any of the files")
    times = sorted(stamps)
    time = _pick_time(name, times, time) if times else time
    at_time = {}
    for path, dataset in parts.items():
        own = _times_of(dataset)
        if own and time not in own:
            continue
        at_time[path] = _select_time(dataset, path, time if own else None)[0]
    merged = merging.merged(at_time, lambda d, part: d not in horizontal_dims(part))
    source = _from_dataset(merged, name, kind, None, {})
    return Source(name, kind, source.fields, time, times, source.dataset, log + source.log)


def _times_of(dataset):
    """Valid times of a Dataset, numpy.datetime64 [s]; [] when it gives none."""
    try:
        return _select_time(dataset, "", None)[2]
    except _SeveralTimes as error:
        return error.times


class _SeveralTimes(SceneError):
    """A time has to be named; `times` are those there are."""

    def __init__(self, message, times):
        super().__init__(message)
        self.times = times


def times_of_source(source):
    """Sorted valid times of a source, see `reading.scene_times`."""
    if isinstance(source, xr.Dataset):
        return sorted(set(_times_of(_with_dates(source))))
    paths = paths_of(source)
    kind = kind_of_all(paths)
    if kind == "GRIB":
        return sorted({time for path in paths for time in grib.valid_times(grib.scan(path))})
    times = set()
    for path in paths:
        with _open_dataset(path, kind, None) as dataset:
            times |= set(_times_of(dataset))
    return sorted(times)


def members_of_source(source):
    """Ensemble members of a source, see `reading.scene_members`."""
    if isinstance(source, xr.Dataset):
        return _members_of(source)
    paths = paths_of(source)
    kind = kind_of_all(paths)
    if kind == "GRIB":
        numbers = {h.keys["number"] for path in paths for h in grib.scan(path)} - {None}
        return {"number": sorted(numbers)} if numbers else {}
    members = {}
    for path in paths:
        with _open_dataset(path, kind, None) as dataset:
            for dim, labels in _members_of(dataset).items():
                members[dim] = sorted({*members.get(dim, []), *labels})
    return members


def _members_of(dataset):
    dims = [d for d in dataset.dims if str(d).lower() in _ENSEMBLE_NAMES]
    return {d: dataset[d].values.tolist() if d in dataset.indexes else list(range(dataset.sizes[d])) for d in dims}


def _pick_time(name, times, time):
    if time is None and len(times) == 1:
        return times[0]
    shown = ", ".join(str(t) for t in times[:12]) + (", ..." if len(times) > 12 else "")
    if time is None:
        raise _SeveralTimes(f'{name}: holds {len(times)} times ({shown}); say which, e.g. time="{times[0]}"', times)
    if time not in times:
        raise SceneError(f"{name}: nothing is valid at {time}; the source has {shown}")
    return time


def _open_dataset(path, kind, chunks):
    options = {"engine": "zarr", "consolidated": _is_consolidated(path)} if kind == "Zarr" else {}
    with refusing_damage(path):
        if kind == "netCDF":
            _refuse_short_classic(path)
        return _with_dates(xr.open_dataset(path, chunks=chunks, decode_timedelta=False, **options))


def _with_dates(dataset):
    """Times that are characters (`2018-09-17_00:00:00`), or dates of another calendar, as numpy.datetime64."""
    if any(v.dtype.kind == "M" and v.size for v in dataset.variables.values()):
        return dataset
    for name, variable in dataset.variables.items():
        if variable.ndim > 1 or variable.dtype.kind not in "SUO" or not variable.size:
            continue
        if variable.dtype.kind != "O" and str(name).lower() not in ("times", "time", "valid_time"):
            continue
        try:
            stamps = [_as_stamp(value) for value in np.atleast_1d(variable.values)]
        except (ValueError, TypeError):
            continue
        stamps = np.array(stamps, dtype="datetime64[ns]").reshape(variable.shape)
        return dataset.drop_vars(name).assign_coords({name: (variable.dims, stamps, {"standard_name": "time"})})
    return dataset


def _as_stamp(value):
    if hasattr(value, "isoformat"):
        return np.datetime64(value.isoformat(), "s")
    text = value.decode() if isinstance(value, bytes) else str(value)
    if len(text) < 10:
        raise ValueError(text)
    return np.datetime64(text.strip().replace("_", "T"), "s")


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
        place, level_dim = f"extra dimension {', '.join(map(str, extra or levels))}", ""
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
