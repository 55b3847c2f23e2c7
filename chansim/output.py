"""Writing results: CF netCDF or Zarr, never half a file, never over an older one unasked."""

import contextlib
import os
import shutil
import tempfile
import warnings
from pathlib import Path

import numpy as np
import xarray as xr

from chansim.errors import ChansimError, OutputError

EXISTING = ("keep", "replace")
KEYWORDS = "satellite infrared imagery, brightness temperature, numerical weather prediction, simulation"
# what a variable is called, where its maker has not said it
_LONG_NAMES = {
    "channel": "channel of the imager",
    "channel_name": "name of the channel",
    "channel_kind": "kind of the channel",
    "central_wavenumber": "central wavenumber of the channel",
    "bandwidth": "effective width of the channel",
    "band_offset": "offset of the band correction of temperature",
    "band_slope": "slope of the band correction of temperature",
    "node_count": "wavenumbers at which the channel is computed",
    "node_fit_error": "fit error of the channel",
    "latitude": "latitude",
    "longitude": "longitude",
    "time": "valid time",
    "member": "member of the ensemble",
    "land_fraction": "land fraction",
    "grid_mapping": "grid mapping",
}
_TEMPERATURES = {
    "brightness_temperature": "temperature: on_scale",
    "brightness_temperature_clear": "temperature: on_scale",
    "node_fit_error": "temperature: difference",
}
_TIME_UNITS = "seconds since 1970-01-01 00:00:00"


def check_target(path, existing="keep"):
    """Make sure a result can be written before hours are spent on it.

    path : file (.nc) or store (.zarr); existing : "keep" or "replace"

    Raises
    ------
    OutputError : exists and is to be kept, no such folder, not writable, unknown kind of file
    """
    path = Path(path)
    if existing not in EXISTING:
        raise OutputError(f"existing={existing!r}: use one of {', '.join(EXISTING)}")
    if path.suffix not in (".nc", ".zarr"):
        raise OutputError(f"{path}: write to a name that ends in .nc (netCDF) or .zarr (Zarr)")
    if path.exists() and existing == "keep":
        raise OutputError(f"{path}: exists and is kept; choose another name or ask for replacement (--replace)")
    if not path.parent.is_dir():
        raise OutputError(f"{path}: the folder {path.parent} does not exist; make it first")
    if not os.access(path.parent, os.W_OK):
        raise OutputError(f"{path}: the folder {path.parent} is not writable")


def write_dataset(dataset, path, existing="keep", *, unlimited=()):
    """Write a result to netCDF (.nc) or Zarr (.zarr) and return the path.

    dataset : result; path : file or store; existing : "keep" or "replace"; unlimited : netCDF dimensions that may grow

    The data go to a temporary name in the same folder first and are renamed
    when complete; an interrupt leaves nothing behind. Raises OutputError.
    """
    path = Path(path)
    check_target(path, existing)
    dataset = cf_ready(dataset)
    try:
        temporary = Path(tempfile.mkdtemp(prefix=f".{path.stem}-", dir=path.parent)) / path.name
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror})") from error
    try:
        if path.suffix == ".zarr":
            with plain_strings():
                dataset.to_zarr(temporary, mode="w", consolidated=False, encoding=encoding(dataset, ".zarr"))
        else:
            options = {"engine": "netcdf4", "encoding": encoding(dataset, ".nc")}
            dataset.to_netcdf(temporary, unlimited_dims=list(unlimited), **options)
        if path.is_dir():
            shutil.rmtree(path)
        os.replace(temporary, path)
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error})") from error
    finally:
        shutil.rmtree(temporary.parent, ignore_errors=True)
    return path


def open_result(path):
    """A result of `chansim.simulate` or of a series, lazily.

    path : .nc or .zarr

    Raises
    ------
    ChansimError : it cannot be read, or is not such a result
    """
    try:
        kind = {"engine": "zarr", "consolidated": False} if str(path).endswith(".zarr") else {"engine": "netcdf4"}
        result = xr.open_dataset(path, **kind)
    except (OSError, ValueError, RuntimeError) as error:
        raise ChansimError(f"{path}: cannot be read as a result of 'chansim simulate' ({error})") from None
    if "brightness_temperature" not in result or "channel" not in result.dims:
        raise ChansimError(f"{path}: not a result of 'chansim simulate': it has no brightness_temperature by channel")
    return result


@contextlib.contextmanager
def plain_strings():
    """Context in which Zarr does not warn that few programs read its strings: they are the names of channels."""
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message=".*(Zarr V3 specification|Zarr format 3|does not have a stable)")
        yield


def grid_mapping_name(dataset):
    """Name of the grid mapping variable of a Dataset, None when it has none."""
    named = (n for n, v in dataset.variables.items() if "grid_mapping_name" in v.attrs or "crs_wkt" in v.attrs)
    return next(named, None)


def picture_dims(dataset):
    """The dimensions of the pixels, those of `latitude`; of latitude and longitude where each has its own."""
    dims = [d for name in ("latitude", "longitude") if name in dataset.variables for d in dataset[name].dims]
    return tuple(d for d in dict.fromkeys(dims) if d not in ("channel", "time", "member"))


def cf_ready(dataset):
    """A result with what CF-1.11 and ACDD-1.3 want beside the values.

    Parameters
    ----------
    dataset : result of `chansim.simulate`, or several of them along `time` and `member`

    Returns
    -------
    xarray.Dataset, a shallow copy: every variable on the pixels names its grid mapping, every variable has a long
    name, times are on one scale, global attributes tell extent, time and history
    """
    dataset = dataset.copy()
    mapping, dims = grid_mapping_name(dataset), picture_dims(dataset)
    for name in dataset.variables:
        attributes = dict(dataset[name].attrs)
        if name in _LONG_NAMES:
            attributes.setdefault("long_name", _LONG_NAMES[name])
        if name in _TEMPERATURES and attributes.get("units") == "K":
            attributes["units_metadata"] = _TEMPERATURES[name]
        if name in dataset.data_vars and dims and set(dims) <= set(dataset[name].dims):
            attributes["coverage_content_type"] = "modelResult"
            if mapping:
                attributes["grid_mapping"] = mapping
        for flags in {"flag_masks", "flag_values"} & set(attributes):  # a Zarr store keeps them as plain numbers
            attributes[flags] = np.asarray(attributes[flags], dtype=dataset[name].dtype)
        dataset[name].attrs = attributes
    for name in ("latitude", "longitude"):
        axis = [d for d in dims if d in dataset.coords and dataset[d].attrs.get("standard_name") == name and d != name]
        if axis and name in dataset.coords:
            dataset[name].attrs.pop("standard_name", None)  # the axis has it, and a file has room for one
    _name_axes(dataset, dims, dataset[mapping].attrs.get("grid_mapping_name") if mapping else None)
    if "channel" in dataset.coords:
        dataset["channel"].attrs["standard_name"] = "sensor_band_identifier"
    if "time" in dataset.coords:
        dataset["time"].attrs |= {"standard_name": "time", "units_metadata": "leap_seconds: none"}
    dataset.attrs = {**_extent(dataset), "keywords": KEYWORDS, **dataset.attrs}
    software = dataset.attrs.get("software", "chansim")
    dataset.attrs.setdefault("source", f"{dataset.attrs.get('model', 'model not named')}, simulated by {software}")
    dataset.attrs.setdefault("history", f"{dataset.attrs.get('date_created', '')} simulated by {software}".strip())
    return dataset


def _name_axes(dataset, dims, projection):
    """Standard names and units of the coordinates of rows and columns that tell none themselves."""
    if len(dims) != 2:
        return
    words = {
        "latitude_longitude": (("latitude", "degrees_north"), ("longitude", "degrees_east")),
        "rotated_latitude_longitude": (("grid_latitude", "degrees"), ("grid_longitude", "degrees")),
        "geostationary": tuple((f"projection_{axis}_angular_coordinate", "rad") for axis in "yx"),
    }
    plane = tuple((f"projection_{axis}_coordinate", "m") for axis in "yx")
    if any(dim in dataset.coords and np.abs(dataset[dim].values).max() > 1.0 for dim in dims):
        words.pop("geostationary")  # scan angles times height
    for dim, axis, (name, units) in zip(dims, "yx", words.get(projection, plane)):
        if dim not in dataset.coords or "standard_name" in dataset[dim].attrs:
            continue
        dataset[dim].attrs.setdefault("long_name", f"{axis} coordinate of the grid")
        if projection is not None:
            dataset[dim].attrs |= {"standard_name": name, "units": dataset[dim].attrs.get("units", units)}


def _extent(dataset):
    """ACDD attributes on where and when."""
    attributes = {}
    for name, short, units in (("latitude", "lat", "degrees_north"), ("longitude", "lon", "degrees_east")):
        if name in dataset.variables and np.isfinite(dataset[name].values).any():
            values = dataset[name].values
            attributes[f"geospatial_{short}_min"] = float(np.nanmin(values))
            attributes[f"geospatial_{short}_max"] = float(np.nanmax(values))
            attributes[f"geospatial_{short}_units"] = units
    if "time" in dataset.coords and dataset["time"].dtype.kind == "M":
        times = dataset["time"].values.ravel()
        times = times[~np.isnat(times)]
        if times.size:
            attributes["time_coverage_start"] = f"{np.datetime_as_string(times.min(), unit='s')}Z"
            attributes["time_coverage_end"] = f"{np.datetime_as_string(times.max(), unit='s')}Z"
    return attributes


def encoding(dataset, suffix):
    """xarray encoding of a result: compressed, coordinates without fill value, times that CF readers know.

    suffix : ".nc" or ".zarr"
    """
    chosen = {}
    for name, variable in dataset.variables.items():
        if variable.dtype.kind == "M":
            chosen[name] = {"units": _TIME_UNITS, "calendar": "standard", "dtype": "int64"}
        elif variable.dtype.kind == "f" and (name in dataset.dims or set(variable.dims) <= {"channel"}):
            chosen[name] = {"_FillValue": None}
        elif variable.dtype.kind == "f" and suffix == ".nc" and variable.ndim:
            chosen[name] = {"zlib": True, "complevel": 4, "shuffle": True}
    return chosen
