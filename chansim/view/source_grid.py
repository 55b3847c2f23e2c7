"""Where a place lies on the horizontal grid of a scene: fractional row and column.

Row 0, column 0 is the first column of the scene; 0.5 lies midway to the next. A list of cells is a grid of one
column in which only whole rows occur. A place belongs to the grid up to half a grid length beyond its outer
points.
"""

import numpy as np
import pyproj
from scipy.spatial import cKDTree

from chansim.errors import ViewError

_WRAP_TOLERANCE = 0.1  # of a grid length, by which a global grid may miss 360 degrees
_CELL_REACH = 0.75  # of the distance to the 4th nearest cell: half the diagonal of a square is 0.71 of its side
_EDGE = 1e-6  # grid lengths, so that rounding does not put a point outside its own grid


def locator(scene):
    """The locator that fits the horizontal grid of a scene.

    Parameters
    ----------
    scene : canonical Dataset; regular latitude-longitude (also Gaussian or global), rotated or projected with
        `grid_mapping`, curvilinear, or a list of cells

    Returns
    -------
    object with `shape` (rows, columns), `wraps` (True when the columns go round the Earth), `between` (False when
    only whole rows occur) and `locate(latitude, longitude)` -> row, column (float, clipped to the grid), inside

    Raises
    ------
    ViewError : a single column
    """
    dims = scene["column_valid"].dims
    latitude, longitude = (scene[name].transpose(*dims).values for name in ("latitude", "longitude"))
    if latitude.size < 2:
        raise ViewError("a single column has no horizontal grid to look at; simulate it with a zenith angle instead")
    if len(dims) == 1:
        return Cells(latitude, longitude)
    crs = _crs(scene)
    if crs is not None and not _is_plain(crs) and all(d in scene.coords for d in dims):
        return Axes(scene[dims[0]].values, scene[dims[1]].values, crs)
    if _is_separable(latitude, longitude):
        return Axes(latitude[:, 0], longitude[0])
    return Curvilinear(latitude, longitude)


class Axes:
    """Rows and columns along two axes, of latitude and longitude or of a projection.

    y, x : coordinates of rows and columns, strictly monotonic [degrees, or units of the CRS]
    crs : pyproj CRS of the axes, None for latitude and longitude themselves
    """

    between = True

    def __init__(self, y, x, crs=None):
        self.y, self.x = np.asarray(y, dtype=float), np.asarray(x, dtype=float)
        self.shape = self.y.size, self.x.size
        self.angular = crs is None or crs.is_geographic or _is_rotated(crs)
        self._transform = None if crs is None else _to_projection(crs)
        if self.angular:
            self.x = np.unwrap(self.x, period=360.0)
        for name, values in (("rows", self.y), ("columns", self.x)):
            steps = np.diff(values)
            if steps.size and not ((steps > 0).all() or (steps < 0).all()):
                raise ViewError(f"the coordinates of the {name} of the scene neither rise nor fall throughout")
        self.wraps = self.angular and self._goes_round()

    def _goes_round(self):
        if self.x.size < 3:
            return False
        step = (self.x[-1] - self.x[0]) / (self.x.size - 1)
        return abs(abs(step) * self.x.size - 360.0) < _WRAP_TOLERANCE * abs(step)

    def locate(self, latitude, longitude):
        """See `locator`; latitude, longitude [degrees], any shape."""
        x, y = longitude, latitude
        if self._transform is not None:
            x, y = self._transform.transform(longitude, latitude)
        if self.angular:
            # the turn that lies nearest to the middle of the axis
            middle = 0.5 * (self.x[0] + self.x[-1])
            x = middle + (np.asarray(x) - middle + 180.0) % 360.0 - 180.0
        row, column = _position(self.y, y), _position(self.x, x)
        row = self._over_the_pole(row, y)
        inside = _within(row, self.shape[0])
        if self.wraps:
            inside &= np.isfinite(column)
            column = np.where(np.isfinite(column), column, 0.0) % self.shape[1]
        else:
            inside &= _within(column, self.shape[1])
            column = _clipped(column, self.shape[1])
        return _clipped(row, self.shape[0]), column, inside

    def _over_the_pole(self, row, y):
        """Rows of a global grid that ends within one row of a pole: the cap belongs to the last row."""
        if not self.angular or self.y.size < 2:
            return row
        for end, beside, last in ((0, 1, 0.0), (-1, -2, self.y.size - 1.0)):
            if abs(2.0 * self.y[end] - self.y[beside]) >= 90.0 - 1e-6:
                beyond = (y > self.y[end]) if self.y[end] > 0 else (y < self.y[end])
                row = np.where(beyond, last, row)
        return row


class Curvilinear:
    """Rows and columns whose latitude and longitude follow no simple rule; nearest point, then its grid vectors."""

    between = True
    wraps = False

    def __init__(self, latitude, longitude):
        self.shape = latitude.shape
        self._points = _on_sphere(latitude, longitude)
        self._tree = cKDTree(self._points.reshape(-1, 3))
        self._along = [_difference(self._points, axis) for axis in (0, 1)]

    def locate(self, latitude, longitude):
        """See `locator`."""
        places = _on_sphere(latitude, longitude)
        known = np.isfinite(places).all(axis=-1)
        safe = np.where(known[..., None], places, self._points[0, 0])
        nearest = self._tree.query(safe)[1]
        row, column = (i.astype(float) for i in np.unravel_index(nearest, self.shape))
        away = safe - self._points.reshape(-1, 3)[nearest]
        down, across = (vectors.reshape(-1, 3)[nearest] for vectors in self._along)
        # least squares of away = a * down + b * across
        dd, cc, dc = (np.sum(u * v, axis=-1) for u, v in ((down, down), (across, across), (down, across)))
        d, c = np.sum(away * down, axis=-1), np.sum(away * across, axis=-1)
        determinant = np.maximum(dd * cc - dc * dc, 1e-30)
        row = row + (d * cc - c * dc) / determinant
        column = column + (c * dd - d * dc) / determinant
        near = np.sum(away * away, axis=-1) <= dd + cc  # the tangent plane says nothing about the far side of the Earth
        inside = known & near & _within(row, self.shape[0]) & _within(column, self.shape[1])
        return _clipped(row, self.shape[0]), _clipped(column, self.shape[1]), inside


class Cells:
    """A list of cells; the nearest one counts."""

    between = False
    wraps = False

    def __init__(self, latitude, longitude):
        self.shape = latitude.size, 1
        points = _on_sphere(latitude, longitude)
        self._points, self._tree = points, cKDTree(points)
        neighbours = min(5, latitude.size)  # the nearest one is the cell itself
        self._reach = _CELL_REACH * self._tree.query(points, k=neighbours)[0][:, -1]

    def locate(self, latitude, longitude):
        """See `locator`; the column is 0."""
        places = _on_sphere(latitude, longitude)
        known = np.isfinite(places).all(axis=-1)
        distance, nearest = self._tree.query(np.where(known[..., None], places, self._points[0]))
        return np.asarray(nearest, dtype=float), np.zeros(np.shape(nearest)), known & (distance <= self._reach[nearest])


def _position(axis, values):
    """Fractional index of values on a monotonic axis, extended at both ends by its outer steps."""
    values = np.asarray(values, dtype=float)
    if axis.size == 1:
        return np.where(np.isfinite(values), 0.0, np.nan)  # one row or column stands for the whole width
    if axis[0] > axis[-1]:
        return axis.size - 1.0 - _position(axis[::-1], values)
    index = np.interp(values, axis, np.arange(axis.size, dtype=float))
    index = np.where(values < axis[0], (values - axis[0]) / (axis[1] - axis[0]), index)
    return np.where(values > axis[-1], axis.size - 1.0 + (values - axis[-1]) / (axis[-1] - axis[-2]), index)


def _within(index, size):
    return (index >= -0.5 - _EDGE) & (index <= size - 0.5 + _EDGE)


def _clipped(index, size):
    return np.clip(np.where(np.isfinite(index), index, 0.0), 0.0, size - 1.0)


def _on_sphere(latitude, longitude):
    phi, lam = np.radians(latitude), np.radians(longitude)
    return np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)], axis=-1)


def _difference(points, axis):
    """Vector from a grid point to the next, central."""
    if points.shape[axis] == 1:
        # a single row: any vector across it, as long as its points are apart
        other = _difference(points, 1 - axis)
        return np.cross(points, other)
    return np.gradient(points, axis=axis)


def _is_separable(latitude, longitude):
    """Latitude depends on the row alone, longitude on the column alone."""
    turned = (longitude - longitude[:1] + 180.0) % 360.0 - 180.0
    return bool(np.ptp(latitude, axis=1).max() < 1e-5 and np.abs(turned).max() < 1e-5)


def _crs(scene):
    attributes = scene["grid_mapping"].attrs if "grid_mapping" in scene else {}
    if not attributes:
        return None
    plain = {k: v.tolist() if isinstance(v, (np.ndarray, np.generic)) else v for k, v in attributes.items()}
    try:
        return pyproj.CRS.from_cf(plain)
    except (pyproj.exceptions.CRSError, KeyError, ValueError) as error:
        raise ViewError(f"the grid mapping of the scene cannot be used ({error}); drop `grid_mapping`") from None


def _is_rotated(crs):
    return crs.is_derived and crs.is_geographic or crs.to_cf().get("grid_mapping_name", "").startswith("rotated")


def _is_plain(crs):
    return crs.is_geographic and not _is_rotated(crs)


def _to_projection(crs):
    """From latitude and longitude in the datum of the projection, so that no datum shift comes in."""
    geographic = crs.source_crs if crs.is_derived and crs.source_crs is not None else crs.geodetic_crs
    return pyproj.Transformer.from_crs(geographic, crs, always_xy=True)
