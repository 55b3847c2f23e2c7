"""Opens GRIB, CF netCDF, Zarr and in-memory Datasets as a list of fields at one time."""

import contextlib
import glob
import warnings
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import scipy.io
import xarray as xr

from chansim.errors import SceneError
from chansim.scene import grib, merging
from chansim.scene.dataset_fields import fields_of, horizontal_dims

IN_MEMORY = "in-memory Dataset"
_KIND_HELP = "chansim reads GRIB, netCDF and Zarr"
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
    fields = fields_of(dataset)
    return Source(name, kind, fields, time, times, dataset, log)


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
