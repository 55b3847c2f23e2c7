"""Results as GeoTIFF for geographic information systems: one band for each channel.

Needs rasterio, which `pip install "chansim[geotiff]"` brings.
"""

import os
import shutil
import tempfile
from pathlib import Path

import numpy as np
import pyproj

from chansim.errors import ChansimError, OutputError
from chansim.imaging.projections import is_even, plane_axes, read_grid
from chansim.output import EXISTING

ENDINGS = (".tif", ".tiff")
_TAGS = ("title", "summary", "model", "imager", "view", "source_file", "software")


def write_geotiff(dataset, path, *, field="brightness_temperature", existing="keep"):
    """Write one field of a result as GeoTIFF, north on top.

    Parameters
    ----------
    dataset : result of `chansim.simulate` on a regular grid (a projection, a rotated pole, latitude and longitude,
        a geostationary fixed grid), of one time
    path : name that ends in .tif; a CRS that a GeoTIFF cannot hold goes to a file .tif.aux.xml beside it
    field : variable to write, over (channel, y, x) or (y, x)
    existing : "keep" or "replace" a file that is there

    Returns
    -------
    pathlib.Path; float32 with NaN where there is no value, band descriptions, units, the caution among the tags.
    Coordinates of a fixed grid are scan angles times the height of the satellite [m]

    Raises
    ------
    OutputError : rasterio is missing, the file exists and is kept, not writable, no regular grid
    """
    path = Path(path)
    check_geotiff(path, existing)
    if field not in dataset:
        raise OutputError(f"{path}: the result has no '{field}'; it has {', '.join(map(str, dataset.data_vars))}")
    crs, x, y = _regular_axes(dataset, path, field)
    values = _bands(dataset, path, field)
    values = values if y[0] > y[-1] else values[:, ::-1]
    values = values if x[0] < x[-1] else values[:, :, ::-1]
    try:
        folder = Path(tempfile.mkdtemp(prefix=f".{path.stem}-", dir=path.parent))
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror})") from error
    try:
        _write(folder / path.name, dataset, field, values, crs, (x.min(), x.max(), y.min(), y.max()))
        for made in sorted(folder.iterdir(), reverse=True):  # the side file first
            os.replace(made, path.parent / made.name)
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error})") from error
    finally:
        shutil.rmtree(folder, ignore_errors=True)
    return path


def check_geotiff(path, existing="keep"):
    """Make sure that a GeoTIFF can be written there; OutputError."""
    path = Path(path)
    _rasterio(path)
    if existing not in EXISTING:
        raise OutputError(f"existing={existing!r}: use one of {', '.join(EXISTING)}")
    if path.suffix.lower() not in ENDINGS:
        raise OutputError(f"{path}: a GeoTIFF ends in {' or '.join(ENDINGS)}")
    if path.exists() and existing == "keep":
        raise OutputError(f"{path}: exists and is kept; choose another name or ask for replacement (--replace)")
    if not path.parent.is_dir() or not os.access(path.parent, os.W_OK):
        raise OutputError(f"{path}: the folder {path.parent} does not exist or is not writable")


def _rasterio(path):
    try:
        import rasterio
    except ImportError:
        raise OutputError(f'{path}: GeoTIFF needs rasterio; install it with pip install "chansim[geotiff]"') from None
    return rasterio


def _regular_axes(dataset, path, field):
    """CRS, x, y of a grid with even spacing; OutputError for others."""
    try:
        placed = plane_axes(dataset, field)
        grid = read_grid(dataset, field) if placed is None else None
    except ChansimError as error:
        raise OutputError(f"{path}: {error}") from None
    if placed is None and grid.x is not None:
        placed = pyproj.CRS.from_epsg(4326), grid.x + grid.projection.proj4_params["lon_0"], grid.y
    if placed is None or not (is_even(placed[1]) and is_even(placed[2])):
        raise OutputError(
            f"{path}: GeoTIFF holds grids with even spacing in one projection only, this one is curvilinear, a list of "
            "cells or uneven; simulate it on a satellite's fixed grid (--sector, --full-disk) or keep to netCDF"
        )
    return placed


def _bands(dataset, path, field):
    """Values (band, row, column)."""
    values = dataset[field]
    extra = [d for d in values.dims[:-2] if d != "channel" and values.sizes[d] > 1]
    if extra:
        raise OutputError(f"{path}: the result goes over {', '.join(map(str, extra))}; select one of each first")
    values = np.asarray(values.values, dtype=np.float32)
    return values.reshape(-1, *values.shape[-2:])


def _write(path, dataset, field, values, crs, edges):
    rasterio = _rasterio(path)
    count, rows, columns = values.shape
    west, east, south, north = edges
    step_x, step_y = (east - west) / (columns - 1), (north - south) / (rows - 1)
    transform = rasterio.Affine(step_x, 0.0, west - step_x / 2.0, 0.0, -step_y, north + step_y / 2.0)
    options = {"compress": "deflate", "predictor": 3, "tiled": True} if min(rows, columns) >= 512 else {}
    with rasterio.open(
        path, "w", driver="GTiff", width=columns, height=rows, count=count, dtype="float32", nodata=np.nan,
        crs=rasterio.crs.CRS.from_wkt(crs.to_wkt()), transform=transform, **options,
    ) as file:  # fmt: skip
        file.write(values)
        words = dataset[field].attrs.get("long_name", field)
        units = str(dataset[field].attrs.get("units", ""))
        for band in range(count):
            file.set_band_description(band + 1, f"{_channel_words(dataset, field, band)}{words} [{units}]")
        file.units = [units] * count
        tags = {name: str(dataset.attrs[name]) for name in _TAGS if name in dataset.attrs}
        if "time" in dataset.coords and dataset["time"].size == 1 and not np.isnat(dataset["time"].values).any():
            tags["valid_time"] = np.datetime_as_string(dataset["time"].values.ravel()[0], unit="s")
        file.update_tags(**tags)


def _channel_words(dataset, field, band):
    if "channel" not in dataset[field].dims:
        return ""
    words = str(dataset["channel"].values[band])
    if "central_wavenumber" in dataset.coords:
        words += f" ({1e4 / float(dataset['central_wavenumber'].values[band]):.2f} um)"
    return f"{words}: "
