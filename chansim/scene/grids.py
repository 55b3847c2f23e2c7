"""The horizontal grid of a source: latitude and longitude of every point, and its projection."""

from dataclasses import dataclass, field

import numpy as np
import pyproj
import xarray as xr

from chansim.errors import SceneError
from chansim.scene.dataset_fields import is_latitude, is_longitude
from chansim.scene.units import convert

_REGULARITY = 0.02  # largest departure from a regular projected grid, in grid lengths
_NO_POSITION = (
    "no latitude and longitude found for {name}; add variables with standard_name 'latitude' and 'longitude' "
    "(units degrees_north, degrees_east), or a CF grid_mapping with projection coordinates"
)


@dataclass
class Grid:
    """Where the columns stand.

    dims : horizontal dimensions, (y, x) or (cell,); names of the source, never those of the coordinates
    renamed : {dimension in the source: dimension here}
    latitude, longitude : DataArrays over `dims` [degrees_north, degrees_east]
    axes : 1-D coordinates of the dimensions, with units m or degrees
    crs : pyproj CRS of `axes`, None when the grid is not projected or not known
    log : what was found
    """

    dims: tuple
    renamed: dict
    latitude: xr.DataArray
    longitude: xr.DataArray
    axes: dict = field(default_factory=dict)
    crs: pyproj.CRS | None = None
    log: list = field(default_factory=list)


def find_grid(data, dataset=None, positions=None):
    """The horizontal grid of a field.

    Parameters
    ----------
    data : DataArray of one field, as in the source
    dataset : the Dataset it comes from (for its grid mapping), None for GRIB
    positions : {"latitude": DataArray, "longitude": DataArray} for GRIB lists of cells, whose positions are fields

    Returns
    -------
    Grid

    Raises
    ------
    SceneError : latitude and longitude are absent, of the wrong shape, NaN or out of range
    """
    coords = {name: c for name, c in data.coords.items()}
    if dataset is not None:
        coords |= {n: v for n, v in dataset.variables.items() if set(v.dims) <= set(data.dims) and n not in coords}
        coords = {n: dataset[n] if n in dataset.variables else c for n, c in coords.items()}
    latitude = _pick(coords, is_latitude)
    longitude = _pick(coords, is_longitude)
    if latitude is None and longitude is None and positions:
        latitude, longitude = positions["latitude"], positions["longitude"]
    crs, crs_log = _source_crs(data, dataset)
    if latitude is None or longitude is None:
        grid = _from_projection(data, coords, crs)
    elif latitude.ndim == 1 and longitude.ndim == 1 and latitude.dims != longitude.dims:
        grid = _from_axes(latitude, longitude, crs)
    else:
        grid = _from_points(data, latitude, longitude, coords, crs)
    grid.log[:0] = crs_log
    _check_positions(grid)
    return grid


def _pick(coords, test):
    found = [c for name, c in coords.items() if test(name, c)]
    # bounds, staggered and corner positions have more dimensions
    return min(found, key=lambda c: (c.ndim > 2, -c.ndim)) if found else None


def _from_axes(latitude, longitude, crs):
    """Regular latitude-longitude (or Gaussian) grid; two dimensions from two axes."""
    renamed = {}
    for axis, short in ((latitude, "y"), (longitude, "x")):
        (dim,) = axis.dims
        if dim in ("latitude", "longitude"):
            renamed[dim] = short
    dims = tuple(renamed.get(axis.dims[0], axis.dims[0]) for axis in (latitude, longitude))
    lat, lon = (_degrees(c) for c in (latitude, longitude))
    lat2d, lon2d = np.meshgrid(lat, lon, indexing="ij")
    crs = crs or pyproj.CRS.from_cf({"grid_mapping_name": "latitude_longitude", "earth_radius": 6371229.0})
    grid = Grid(dims, renamed, xr.DataArray(lat2d, dims=dims), xr.DataArray(lon2d, dims=dims), crs=crs)
    _set_axes(grid, lon, lat)
    return grid


def _from_points(data, latitude, longitude, coords, crs):
    """Every point has its own latitude and longitude: curvilinear or projected grid, cells, one column."""
    if latitude.ndim == 0:
        lat, lon = (xr.DataArray(np.atleast_1d(_degrees(c)), dims="cell") for c in (latitude, longitude))
        return Grid(("cell",), {}, lat, lon)
    if latitude.ndim == 1 and latitude.sizes[latitude.dims[0]] not in data.shape:
        raise SceneError(
            f"latitude has {latitude.size} values ({latitude.dims[0]}), but {data.name} has {dict(data.sizes)}; the "
            "positions must be those of its columns, so both must be cut alike"
        )
    if set(latitude.dims) != set(longitude.dims) or not set(latitude.dims) <= set(data.dims):
        raise SceneError(
            f"latitude has dimensions {latitude.dims} and longitude {longitude.dims}; both must share the "
            f"horizontal dimensions of {data.name} {data.dims}"
        )
    order = tuple(d for d in data.dims if d in latitude.dims)
    renamed = {d: short for d, short in (("latitude", "y"), ("longitude", "x"), ("values", "cell")) if d in order}
    dims = tuple(renamed.get(d, d) for d in order)
    lat, lon = (xr.DataArray(_degrees(c.transpose(*order)), dims=dims) for c in (latitude, longitude))
    grid = Grid(dims, renamed, lat, lon)
    if len(dims) == 2 and crs is not None:
        _add_projected_axes(grid, {d: coords[d] for d in order if d in coords}, crs)
    return grid


def _add_projected_axes(grid, source_axes, crs):
    """x and y from the projected positions, when these lie on a regular grid of the projection."""
    x, y = project(crs, grid.longitude.values, grid.latitude.values)
    x_axis, y_axis = np.nanmedian(x, axis=0), np.nanmedian(y, axis=1)
    length = max(abs(x_axis[-1] - x_axis[0]) / max(len(x_axis) - 1, 1), 1e-9)
    departure = max(np.nanmax(np.abs(x - x_axis)), np.nanmax(np.abs(y - y_axis[:, None]))) / length
    if not departure < _REGULARITY:
        if _mapping_name(crs) == "latitude_longitude":
            return  # a curvilinear grid that only names its datum
        grid.log.append(
            f"grid mapping {_mapping_name(crs)}: latitude and longitude depart "
            f"from it by {departure:.2g} grid lengths; the projection is not kept"
        )
        return
    grid.crs = crs
    _set_axes(grid, x_axis, y_axis)


def _from_projection(data, coords, crs):
    """Latitude and longitude from projection coordinates and a grid mapping."""
    x = _by_standard_name(coords, ("projection_x_coordinate", "grid_longitude"))
    y = _by_standard_name(coords, ("projection_y_coordinate", "grid_latitude"))
    if crs is None or x is None or y is None:
        raise SceneError(_NO_POSITION.format(name=data.name))
    dims = (y.dims[0], x.dims[0])
    target = "degree" if crs.is_geographic else "m"
    x_axis = convert(x.values.astype(float), x.attrs.get("units", target), target, str(x.name))
    y_axis = convert(y.values.astype(float), y.attrs.get("units", target), target, str(y.name))
    longitude, latitude = unproject(crs, *np.meshgrid(x_axis, y_axis))
    grid = Grid(dims, {}, xr.DataArray(latitude, dims=dims), xr.DataArray(longitude, dims=dims), crs=crs)
    _set_axes(grid, x_axis, y_axis)
    return grid


_AXIS_ATTRS = {  # of y and x, by grid mapping
    "latitude_longitude": ({"units": "degrees_north"}, {"units": "degrees_east"}),
    "rotated_latitude_longitude": (
        {"units": "degrees", "standard_name": "grid_latitude"},
        {"units": "degrees", "standard_name": "grid_longitude"},
    ),
}
_PROJECTED_ATTRS = (
    {"units": "m", "standard_name": "projection_y_coordinate"},
    {"units": "m", "standard_name": "projection_x_coordinate"},
)


def _set_axes(grid, x_axis, y_axis):
    attrs = _AXIS_ATTRS.get(_mapping_name(grid.crs), _PROJECTED_ATTRS)
    for dim, values, axis, extra in zip(grid.dims, (y_axis, x_axis), "YX", attrs, strict=True):
        grid.axes[dim] = xr.DataArray(values, dims=dim, attrs={**extra, "axis": axis})


def _mapping_name(crs):
    return crs.to_cf().get("grid_mapping_name", crs.name)


def _by_standard_name(coords, names):
    return next((c for c in coords.values() if c.attrs.get("standard_name") in names), None)


def project(crs, longitude, latitude):
    """Projection coordinates x, y of places, in the datum of the projection [m, or degrees when rotated]."""
    return _transformer(crs, "forward").transform(longitude, latitude)


def unproject(crs, x, y):
    """Longitude, latitude of projection coordinates, in the datum of the projection [degrees]."""
    return _transformer(crs, "inverse").transform(x, y)


def _transformer(crs, direction):
    geographic = crs.source_crs if crs.is_derived and crs.source_crs is not None else crs.geodetic_crs
    pair = (geographic, crs) if direction == "forward" else (crs, geographic)
    return pyproj.Transformer.from_crs(*pair, always_xy=True)


def _source_crs(data, dataset):
    """CRS of a field from its CF grid mapping or its GRIB keys; (None, []) when there is none."""
    name = data.attrs.get("grid_mapping") or data.encoding.get("grid_mapping")
    if dataset is not None and name:
        name = str(name).split(":")[0].strip()
        if name not in dataset.variables:
            return None, [f"grid mapping '{name}' is named but not in the file; the projection is not kept"]
        return _crs_from_cf(name, dataset[name].attrs)
    if "GRIB_gridType" in data.attrs:
        return _crs_from_grib(data.attrs)
    if dataset is not None and "MAP_PROJ" in dataset.attrs:
        return _crs_from_global_attributes(dataset.attrs)
    return None, []


_NATIVE_RADIUS = 6370000.0  # m, of the sphere that models with these attributes use


def _crs_from_global_attributes(attrs):
    """CRS from the global attributes in which mesoscale models write their projection (MAP_PROJ, TRUELAT1, ...).

    Whether the positions lie on it is checked later, so a wrong guess does no harm.
    """

    def number(name, default=0.0):
        return float(np.atleast_1d(attrs.get(name, default))[0])

    names = {1: "lambert_conformal_conic", 2: "polar_stereographic", 3: "mercator"}
    kind = names.get(int(number("MAP_PROJ", -1)))
    if kind is None or "TRUELAT1" not in attrs:
        return None, []
    parallels = [number("TRUELAT1")]
    cf = {"grid_mapping_name": kind, "earth_radius": _NATIVE_RADIUS}
    if kind == "lambert_conformal_conic":
        parallels.append(number("TRUELAT2", parallels[0]))
        parallels = parallels[:1] if parallels[0] == parallels[1] else parallels
        origin = number("MOAD_CEN_LAT", number("CEN_LAT", parallels[0]))
        cf |= {"longitude_of_central_meridian": number("STAND_LON"), "latitude_of_projection_origin": origin}
    elif kind == "polar_stereographic":
        pole = 90.0 if parallels[0] > 0 else -90.0
        cf |= {"straight_vertical_longitude_from_pole": number("STAND_LON"), "latitude_of_projection_origin": pole}
    else:
        cf |= {"longitude_of_projection_origin": number("STAND_LON", number("CEN_LON"))}
    return _crs_from_cf("MAP_PROJ", cf | {"standard_parallel": parallels if len(parallels) > 1 else parallels[0]})


def _crs_from_cf(name, attrs):
    try:
        return pyproj.CRS.from_cf({k: _plain(v) for k, v in attrs.items()}), []
    except (pyproj.exceptions.CRSError, KeyError, ValueError) as error:
        return None, [f"grid mapping '{name}' cannot be used ({error}); the projection is not kept"]


def _plain(value):
    return value.tolist() if isinstance(value, (np.ndarray, np.generic)) else value


def _crs_from_grib(attrs):
    kind = attrs["GRIB_gridType"]
    if kind.startswith("rotated"):
        south = attrs["GRIB_latitudeOfSouthernPoleInDegrees"], attrs["GRIB_longitudeOfSouthernPoleInDegrees"]
        return pyproj.CRS.from_cf(
            {
                "grid_mapping_name": "rotated_latitude_longitude",
                "grid_north_pole_latitude": -south[0],
                "grid_north_pole_longitude": (south[1] + 360.0) % 360.0 - 180.0,
                "north_pole_grid_longitude": attrs.get("GRIB_angleOfRotationInDegrees", 0.0),
                "earth_radius": float(attrs.get("GRIB_radius", 6371229.0)),
            }
        ), []
    text = attrs.get("GRIB_projTargetString", "")
    if not text or "longlat" in text:
        return None, []
    try:
        return pyproj.CRS.from_proj4(text), []
    except pyproj.exceptions.CRSError as error:
        return None, [f"GRIB projection '{text}' cannot be used ({error}); the projection is not kept"]


def _degrees(coord):
    values = np.array(coord.values, dtype=float)  # a copy: positions are wrapped and clipped in place
    radians = str(coord.attrs.get("units", "")).lower() in ("radian", "radians", "rad")
    return np.degrees(values) if radians else values


def _check_positions(grid):
    for name, values, limits in (
        ("latitude", grid.latitude.values, (-90.0, 90.0)),
        ("longitude", grid.longitude.values, (-360.0, 540.0)),
    ):
        if not np.all(np.isfinite(values)):
            missing = np.count_nonzero(~np.isfinite(values))
            raise SceneError(f"{name}: {missing} of {values.size} points have none; every column needs a place")
        if values.min() < limits[0] - 1e-6 or values.max() > limits[1] + 1e-6:
            raise SceneError(
                f"{name}: values {values.min():g} to {values.max():g} are outside {limits[0]:g} to {limits[1]:g} "
                "degrees; are these radians, metres, or latitude and longitude swapped?"
            )
    np.clip(grid.latitude.values, -90.0, 90.0, out=grid.latitude.values)
    longitude = grid.longitude.values
    if longitude.min() < -180.0 or longitude.max() > 360.0:
        grid.longitude.values[...] = (longitude + 180.0) % 360.0 - 180.0


def grid_mapping_variable(crs):
    """A CF grid mapping variable with the parameters and the WKT of a CRS."""
    attrs = {k: v for k, v in crs.to_cf().items() if v is not None}
    return xr.DataArray(np.int32(0), attrs=attrs)
