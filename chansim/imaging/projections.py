"""The grid of a result as cartopy sees it: from CF grid mappings to projections."""

import difflib
import inspect
import re
from dataclasses import dataclass

import cartopy.crs as ccrs
import numpy as np
import pyproj
import shapely

from chansim.errors import SceneError, ViewError

_REGULAR = 0.02  # largest departure from even spacing, in grid lengths
_GEODETIC = ccrs.Geodetic()


@dataclass
class Grid:
    """Where the pixels lie.

    latitude, longitude : arrays of the horizontal shape [degrees]; NaN where a pixel looks into space
    x, y : 1-D coordinates of the pixels in `projection`, or None where the grid is not regular
    projection : cartopy projection of x and y, or None
    """

    latitude: np.ndarray
    longitude: np.ndarray
    x: np.ndarray | None = None
    y: np.ndarray | None = None
    projection: ccrs.Projection | None = None

    @property
    def on_earth(self):
        """True where a pixel sees the Earth."""
        return np.isfinite(self.latitude) & np.isfinite(self.longitude)


class PlaneProjection(ccrs.Projection):
    """Any projected CRS, drawn in a rectangle of its own plane."""

    def __init__(self, crs, bounds):
        super().__init__(crs)
        self.bounds = tuple(float(b) for b in bounds)
        west, east, south, north = self.bounds
        self.threshold = min(east - west, north - south) / 500.0

    @property
    def boundary(self):
        """The rectangle as a ring."""
        west, east, south, north = self.bounds
        return shapely.LinearRing([(west, south), (west, north), (east, north), (east, south)])

    @property
    def x_limits(self):
        """West and east edge."""
        return self.bounds[:2]

    @property
    def y_limits(self):
        """South and north edge."""
        return self.bounds[2:]


def read_grid(dataset, field="brightness_temperature"):
    """The grid of a result.

    Parameters
    ----------
    dataset : xarray.Dataset with `latitude`, `longitude`; projection coordinates and a CF grid mapping
        named by the field where the grid is projected or regular
    field : variable to be drawn

    Returns
    -------
    Grid

    Raises
    ------
    SceneError : no latitude and longitude
    """
    for name in ("latitude", "longitude"):
        if name not in dataset.variables:
            raise SceneError(f"cannot draw: the Dataset has no '{name}'; it needs the place of every pixel")
    template = dataset[field].isel(channel=0) if "channel" in dataset[field].dims else dataset[field]
    dims = template.dims
    places = (dataset[name].astype(float).broadcast_like(template) for name in ("latitude", "longitude"))
    grid = Grid(*(place.transpose(*dims).values for place in places))
    if len(dims) != 2:
        return grid
    placed = plane_axes(dataset, field)
    if placed is not None:
        _set_projected(grid, *placed)
    elif _crs(dataset, field) is None:
        _set_regular_degrees(grid)
    return grid


def plane_axes(dataset, field="brightness_temperature"):
    """The CRS of a result and where its rows and columns lie in it.

    Parameters
    ----------
    dataset, field : see `read_grid`

    Returns
    -------
    crs : pyproj.CRS
    x, y : of the pixel centres along the last and the last but one dimension [m, or degrees where the CRS is in
        degrees]; scan angles of a geostationary grid times the height of the satellite

    None when the field names no grid mapping or has no such coordinates

    Raises
    ------
    SceneError : a grid mapping that cannot be used
    """
    dims = [d for d in dataset[field].dims if d != "channel"]
    crs = _crs(dataset, field)
    axes = [dataset[d] if d in dataset.coords else None for d in dims]
    if crs is None or len(dims) != 2 or not all(a is not None and a.size > 1 for a in axes):
        return None
    y, x = (a.values.astype(float) for a in axes)
    mapping = crs.to_cf()
    if mapping.get("grid_mapping_name") == "geostationary" and _in_radians(axes[0]):
        y, x = (v * mapping["perspective_point_height"] for v in (y, x))
    if not (np.all(np.isfinite(x)) and np.all(np.isfinite(y))):
        return None
    return crs, x, y


def _crs(dataset, field):
    attrs = {**dataset[field].encoding, **dataset[field].attrs}
    name = str(attrs.get("grid_mapping", "")).split(":")[0].strip()
    if name not in dataset.variables:
        return None
    mapping = {k: v.tolist() if isinstance(v, (np.ndarray, np.generic)) else v for k, v in dataset[name].attrs.items()}
    try:
        return pyproj.CRS.from_cf(mapping)
    except (pyproj.exceptions.CRSError, KeyError, ValueError) as error:
        raise SceneError(f"cannot draw: the grid mapping '{name}' is not one that can be used ({error})") from error


def _set_projected(grid, crs, x, y):
    if crs.is_geographic and not crs.is_derived:
        middle = _middle(x)
        grid.projection, grid.x, grid.y = ccrs.PlateCarree(central_longitude=middle), x - middle, y
        return
    grid.projection, grid.x, grid.y = cartopy_projection(crs, x, y), x, y


def _in_radians(axis):
    return str(axis.attrs.get("units", "m")).lower() in ("rad", "radian", "radians")


def _middle(longitude):
    return float(0.5 * (longitude.min() + longitude.max()))


def _set_regular_degrees(grid):
    """A latitude-longitude grid that does not say that it is one."""
    if not np.all(grid.on_earth):
        return
    latitude, longitude = grid.latitude, np.unwrap(grid.longitude, period=360.0, axis=1)
    same_rows = np.ptp(latitude, axis=1).max() < 1e-6 * 90.0
    same_columns = np.ptp(longitude, axis=0).max() < 1e-6 * 180.0
    if same_rows and same_columns and min(latitude.shape) > 1:
        middle = _middle(longitude[0])
        grid.x, grid.y = longitude[0] - middle, latitude[:, 0]
        grid.projection = ccrs.PlateCarree(central_longitude=middle)


def cartopy_projection(crs, x, y):
    """A cartopy projection for a CRS.

    Parameters
    ----------
    crs : pyproj.CRS: rotated latitude-longitude, geostationary, or any projected one
    x, y : 1-D coordinates that have to fit in [m, or degrees when rotated]

    Returns
    -------
    cartopy projection with the coordinates of the CRS

    Raises
    ------
    SceneError : a CRS without a plane (geocentric, vertical, ...)
    """
    mapping = crs.to_cf()
    name = mapping.get("grid_mapping_name")
    if name == "rotated_latitude_longitude":
        return ccrs.RotatedPole(
            pole_longitude=mapping["grid_north_pole_longitude"],
            pole_latitude=mapping["grid_north_pole_latitude"],
            central_rotated_longitude=mapping.get("north_pole_grid_longitude", 0.0),
            globe=_globe(crs),
        )
    if name == "geostationary":
        return ccrs.Geostationary(
            central_longitude=mapping["longitude_of_projection_origin"],
            satellite_height=mapping["perspective_point_height"],
            false_easting=mapping.get("false_easting", 0.0),
            false_northing=mapping.get("false_northing", 0.0),
            sweep_axis=mapping.get("sweep_angle_axis", "y"),
            globe=_globe(crs),
        )
    if not crs.is_projected:
        raise SceneError(f"cannot draw in the CRS '{crs.name}': it is neither a projection nor latitude and longitude")
    return PlaneProjection(crs, _bounds(x, y))


def _globe(crs):
    ellipsoid = crs.ellipsoid
    return ccrs.Globe(
        ellipse=None, semimajor_axis=ellipsoid.semi_major_metre, semiminor_axis=ellipsoid.semi_minor_metre
    )


def _bounds(x, y):
    """The cells around the coordinates, with a margin for what reaches over the edge."""
    edges = (*extent(x), *extent(y))
    margin = 0.02 * max(edges[1] - edges[0], edges[3] - edges[2])
    return edges[0] - margin, edges[1] + margin, edges[2] - margin, edges[3] + margin


def extent(axis):
    """Lower and upper edge of the outermost cells of a 1-D axis."""
    half = 0.5 * abs(axis[-1] - axis[0]) / (axis.size - 1)
    return axis.min() - half, axis.max() + half


def is_even(axis):
    """True when an axis has even spacing."""
    steps = np.diff(axis)
    return bool(np.abs(steps - steps.mean()).max() <= _REGULAR * np.abs(steps.mean()))


def target_projection(grid, projection):
    """The projection of a map.

    Parameters
    ----------
    grid : Grid
    projection : "source" (latitude-longitude where the grid has none), "latlon", the name of a cartopy projection
        such as "orthographic", put over the middle of the grid, or a cartopy projection

    Returns
    -------
    cartopy projection

    Raises
    ------
    ViewError : anything else
    """
    if isinstance(projection, ccrs.Projection):
        return projection
    if projection not in ("source", "latlon"):
        return projection_by_name(str(projection), grid)
    if projection == "source" and grid.projection is not None:
        return grid.projection
    if isinstance(grid.projection, ccrs.PlateCarree):
        return grid.projection
    return ccrs.PlateCarree(central_longitude=middle_longitude(grid))


def projection_names():
    """{name in lower case: class} of the cartopy projections that need no more than a centre."""
    names = {}
    for name, kind in vars(ccrs).items():
        if not (isinstance(kind, type) and issubclass(kind, ccrs.Projection)) or name.startswith("_"):
            continue
        parameters = list(inspect.signature(kind.__init__).parameters.values())[1:]
        if inspect.isabstract(kind) or any(p.default is p.empty and p.kind not in (2, 4) for p in parameters):
            continue
        names[name.lower()] = kind
    return names


def projection_by_name(name, grid):
    """A cartopy projection over the middle of a grid.

    name : of a class in `cartopy.crs`, in any case, with or without spaces, - and _; grid : Grid

    Raises
    ------
    ViewError : no such projection; the message tells the names that come near, or some of all
    """
    known = projection_names()
    plain = re.sub(r"[\s_-]", "", name).lower()
    if plain not in known:
        near = difflib.get_close_matches(plain, known, n=4) or [n for n in _OFTEN_USED if n in known]
        raise ViewError(
            f"projection '{name}': not known; use source, latlon or the name of a cartopy projection, such as "
            + ", ".join(near)
        )
    kind, options = known[plain], {}
    accepted = inspect.signature(kind.__init__).parameters
    latitude = grid.latitude[grid.on_earth]
    middle = float(0.5 * (latitude.min() + latitude.max())) if latitude.size else 0.0
    if "central_longitude" in accepted:
        options["central_longitude"] = middle_longitude(grid)
    if "central_latitude" in accepted:
        options["central_latitude"] = middle
    if "standard_parallels" in accepted and middle < 0.0:
        options["standard_parallels"] = (-33.0, -45.0)
        if "cutoff" in accepted:
            options["cutoff"] = 30.0
    return kind(**options)


_OFTEN_USED = (
    "orthographic", "mercator", "lambertconformal", "lambertazimuthalequalarea", "northpolarstereo",
    "southpolarstereo", "robinson", "equalearth", "geostationary",
)  # fmt: skip


def middle_longitude(grid):
    """The longitude opposite to the widest gap between the pixels [degrees_east]."""
    longitude = np.sort(np.mod(grid.longitude[grid.on_earth].ravel(), 360.0))
    if not longitude.size:
        raise SceneError("cannot draw: no pixel of the Dataset lies on the Earth")
    gaps = np.diff(np.append(longitude, longitude[0] + 360.0))
    widest = int(np.argmax(gaps))
    middle = longitude[widest] + 0.5 * gaps[widest] + 180.0
    return float((middle + 180.0) % 360.0 - 180.0)


def same_projection(first, second):
    """True when two projections have the same coordinates."""
    if first is None or second is None:
        return False
    return first is second or pyproj.CRS(first) == pyproj.CRS(second)


def to_plane(projection, longitude, latitude):
    """Coordinates of places in a projection; NaN where it does not show them.

    Parameters
    ----------
    longitude, latitude : arrays of one shape [degrees]

    Returns
    -------
    x, y : arrays of that shape
    """
    points = projection.transform_points(_GEODETIC, np.asarray(longitude, float), np.asarray(latitude, float))
    x, y = points[..., 0], points[..., 1]
    seen = np.isfinite(x) & np.isfinite(y)
    return np.where(seen, x, np.nan), np.where(seen, y, np.nan)


def to_places(projection, x, y):
    """Longitude, latitude [degrees] of coordinates in a projection; NaN off the Earth."""
    points = _GEODETIC.transform_points(projection, np.asarray(x, float), np.asarray(y, float))
    seen = np.isfinite(points[..., 0]) & np.isfinite(points[..., 1])
    return np.where(seen, points[..., 0], np.nan), np.where(seen, points[..., 1], np.nan)
