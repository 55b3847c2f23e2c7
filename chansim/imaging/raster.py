"""Which pixel of a grid lies at which place of a map: worked out once, used for every channel."""

from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from chansim.errors import ViewError
from chansim.imaging.projections import extent, is_even, same_projection, to_places, to_plane

_PIXELS = 1000  # along the longer side of a map that is not drawn on its own grid
_REACH = 0.75  # of the local grid length, beyond which a place is outside: a little over half a diagonal


@dataclass
class Raster:
    """A map raster over a grid.

    extent : west, east, south, north edge in the projection of the map
    index : (row, column) numbers of the pixel in the flattened grid, row 0 in the north; -1 outside
    """

    extent: tuple
    index: np.ndarray

    def sample(self, values):
        """Masked array of a field on the raster: masked outside the grid and where the field is NaN."""
        flat = np.append(np.asarray(values, dtype=float).ravel(), np.nan)
        return np.ma.masked_invalid(flat[self.index])

    @property
    def outside(self):
        """True where the grid has no pixel."""
        return self.index < 0


def make_raster(grid, projection, pixels=_PIXELS):
    """The raster of a map.

    Parameters
    ----------
    grid : projections.Grid
    projection : cartopy projection of the map
    pixels : along the longer side, when the map is not drawn on the grid itself

    Returns
    -------
    Raster

    Raises
    ------
    ViewError : the projection shows nothing of the grid
    """
    native = grid.x is not None and same_projection(grid.projection, projection)
    if native and is_even(grid.x) and is_even(grid.y):
        return _on_own_grid(grid)
    edges = (*extent(grid.x), *extent(grid.y)) if native else _shown(grid, projection)
    shape = _shape(edges, pixels)
    x = edges[0] + (np.arange(shape[1]) + 0.5) / shape[1] * (edges[1] - edges[0])
    y = edges[3] - (np.arange(shape[0]) + 0.5) / shape[0] * (edges[3] - edges[2])
    if native:
        index = _combined(_nearest(grid.y, y)[:, None], _nearest(grid.x, x)[None, :], grid)
    elif grid.x is not None:
        index = _index_by_axes(grid, projection, *np.meshgrid(x, y))
    else:
        index = _index_by_distance(grid, projection, *np.meshgrid(x, y))
    index[(index >= 0) & ~grid.on_earth.ravel()[np.maximum(index, 0)]] = -1
    if np.all(index < 0):
        raise ViewError("the projection of the map shows nothing of the data; choose source or latlon")
    return Raster(edges, index)


def _on_own_grid(grid):
    index = np.where(grid.on_earth.ravel(), np.arange(grid.latitude.size), -1).reshape(grid.latitude.shape)
    index = index if grid.y[0] > grid.y[-1] else index[::-1]
    index = index if grid.x[0] < grid.x[-1] else index[:, ::-1]
    return Raster((*extent(grid.x), *extent(grid.y)), index)


def _shape(edges, pixels):
    width, height = edges[1] - edges[0], edges[3] - edges[2]
    longer = max(width, height)
    return max(int(round(pixels * height / longer)), 2), max(int(round(pixels * width / longer)), 2)


def _shown(grid, projection):
    """Edges of the part of a projection that the grid covers."""
    on_earth = grid.on_earth
    x, y = to_plane(projection, grid.longitude[on_earth], grid.latitude[on_earth])
    limits = (*projection.x_limits, *projection.y_limits)
    seen = (x >= limits[0]) & (x <= limits[1]) & (y >= limits[2]) & (y <= limits[3])
    if not np.any(seen):
        raise ViewError("the projection of the map shows nothing of the data; choose source or latlon")
    margin = 0.5 / max(np.sqrt(seen.sum()) - 1.0, 1.0)
    edges = []
    for values in (x[seen], y[seen]):
        low, high = values.min(), values.max()
        reach = margin * (high - low) if high > low else 0.5
        edges += [low - reach, high + reach]
    west, east, south, north = edges
    return max(west, limits[0]), min(east, limits[1]), max(south, limits[2]), min(north, limits[3])


def _nearest(axis, wanted):
    """Number of the cell of a monotonic axis that holds each value, -1 beyond its ends."""
    order = np.argsort(axis)
    ascending = axis[order]
    middle = 0.5 * (ascending[1:] + ascending[:-1])
    low, high = ascending[0] - (middle[0] - ascending[0]), ascending[-1] + (ascending[-1] - middle[-1])
    inside = (wanted >= low) & (wanted <= high)
    return np.where(inside, order[np.searchsorted(middle, np.where(inside, wanted, low))], -1)


def _combined(row, column, grid):
    return np.where((row >= 0) & (column >= 0), row * grid.x.size + column, -1)


def _index_by_axes(grid, projection, x, y):
    """From the map to the projection of the grid, there to the cell."""
    points = grid.projection.transform_points(projection, x, y)
    source_x, source_y = points[..., 0], points[..., 1]
    if abs(grid.projection.x_limits[1] - grid.projection.x_limits[0] - 360.0) < 1e-6:
        west = extent(grid.x)[0]
        source_x = west + np.mod(source_x - west, 360.0)  # degrees may have turned once round
    seen = np.isfinite(source_x) & np.isfinite(source_y)
    row, column = _nearest(grid.y, np.where(seen, source_y, np.inf)), _nearest(grid.x, np.where(seen, source_x, np.inf))
    return _combined(row, column, grid)


def _index_by_distance(grid, projection, x, y):
    """The nearest pixel on the sphere, where one is near enough."""
    on_earth = np.flatnonzero(grid.on_earth.ravel())
    sources = _unit_vectors(grid.longitude.ravel()[on_earth], grid.latitude.ravel()[on_earth])
    tree = cKDTree(sources)
    reach = _REACH * _grid_length(grid, tree, sources, on_earth)
    longitude, latitude = to_places(projection, x, y)
    seen = np.isfinite(longitude) & np.isfinite(latitude)
    distance, nearest = tree.query(_unit_vectors(longitude[seen], latitude[seen]))
    index = np.full(x.shape, -1, dtype=np.int64)
    index[seen] = np.where(distance <= reach[nearest], on_earth[nearest], -1)
    return index


def _unit_vectors(longitude, latitude):
    longitude, latitude = np.radians(longitude), np.radians(latitude)
    ring = np.cos(latitude)
    return np.column_stack([ring * np.cos(longitude), ring * np.sin(longitude), np.sin(latitude)])


def _grid_length(grid, tree, sources, on_earth):
    """Distance to the next pixels, for each pixel on the Earth [Earth radii]."""
    if grid.latitude.ndim != 2 or min(grid.latitude.shape) < 2:
        neighbours = min(5, len(sources))
        if neighbours == 1:
            return np.full(1, np.radians(0.5))
        return tree.query(sources, k=neighbours)[0][:, -1]
    vectors = np.full((grid.latitude.size, 3), np.nan)
    vectors[on_earth] = sources
    vectors = vectors.reshape(*grid.latitude.shape, 3)
    length = np.zeros(grid.latitude.shape)
    for axis in (0, 1):
        step = np.nan_to_num(np.linalg.norm(np.diff(vectors, axis=axis), axis=-1))
        pad = [(0, 0), (0, 0)]
        for pad[axis] in ((1, 0), (0, 1)):
            length = np.maximum(length, np.pad(step, pad))
    return length.ravel()[on_earth]
