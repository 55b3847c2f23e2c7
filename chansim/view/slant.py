"""The scene that every pixel of an imager looks through.

For each pixel the ray to the imager is followed up through the geometric heights of the model. Where it meets the
surface of a model level, the values of that level are taken, so that high cloud appears where the imager sees it
(parallax). What belongs to the ground is taken where the ray leaves it.
"""

import functools
import uuid

import dask.array
import numpy as np
import xarray as xr
from numba import njit

from chansim.errors import ViewError
from chansim.scene.hydrostatic import scene_heights
from chansim.scene.variables import VARIABLES
from chansim.view.angles import LARGEST_ZENITH, in_words
from chansim.view.ray import follow_rays
from chansim.view.source_grid import locator

METHODS = ("slanted", "vertical")
INTERPOLATIONS = ("nearest", "bilinear")
PIXELS_AT_ONCE = 16384
# a ray may leave the domain of the model above this: there is next to no cloud or water vapour up there, and the
# nearest column of the domain serves
CLEAR_ABOVE = 20e3  # m
_IN_MEMORY = 1e9  # bytes of a result above which it stays lazy
_HIGHEST = 80e3  # m, for the part of the scene that a block of pixels needs
_STEPS = 5  # of the search for the height where a ray meets a level
_HEIGHT_TOLERANCE = 3.0  # m
_NEAREST_ONLY = ("surface_class", "column_valid")
_MARGIN = 2  # columns around what a block of pixels sees


def scene_on_pixels(
    scene,
    latitude,
    longitude,
    zenith,
    azimuth,
    *,
    method="slanted",
    interpolation="nearest",
    grid_mapping=None,
    lazy="auto",
):
    """A canonical scene on the pixels of an imager.

    Parameters
    ----------
    scene : canonical Dataset from `chansim.open_scene`; may be lazy
    latitude, longitude : of the pixels on the ellipsoid, arrays or DataArrays of one or two dimensions, NaN where
        a pixel sees no ground [degrees]
    zenith, azimuth : direction from the pixel to the imager, azimuth clockwise from north; numbers or of the same
        shape [degrees]
    method : "slanted" follows the ray; "vertical" takes the column that stands over the pixel
    interpolation : "nearest" column of the model, or "bilinear" between four (not for lists of cells). Cloud
        that is interpolated gets thinner and wider
    grid_mapping : CF grid mapping variable of the pixels, when they have one
    lazy : "auto" computes a result of less than 1 GB at once and leaves a larger one lazy, in pieces of rows;
        "always", "never"

    Returns
    -------
    xarray.Dataset, a canonical scene over (level, pixel dimensions): dimensions, coordinates and names of
    `latitude` when it is a DataArray, else (y, x) or (pixel). `column_valid` is False for space, outside the
    model's domain (also where the ray leaves it below 20 km), from zenith 85 degrees on, and where the
    model columns are not valid. With `view_zenith_angle` and `view_azimuth_angle` [degrees], so that it serves
    `chansim.simulate` as its view as well. Attribute `view_columns` tells how the columns were taken.

    Raises
    ------
    ViewError : unknown method or interpolation, shapes that do not fit, a single column, or no pixel within the
        domain (the message tells both extents)

    Source: straight rays, see `ray.ray_places`; the level surfaces are met by fixed-point iteration.
    """
    _check_choice("method", method, METHODS)
    _check_choice("interpolation", interpolation, INTERPOLATIONS)
    _check_choice("lazy", lazy, ("auto", "always", "never"))
    pixels = _as_pixels(latitude, longitude, zenith, azimuth)
    sampler = _Sampler(scene, locator(scene), method, interpolation)
    _require_overlap(sampler, pixels)
    result = _assemble(sampler, pixels)
    if grid_mapping is not None:
        result["grid_mapping"] = grid_mapping
        for name, variable in result.data_vars.items():
            if set(pixels["latitude"].dims) <= set(variable.dims):
                result[name].attrs["grid_mapping"] = "grid_mapping"
    if lazy == "never" or (lazy == "auto" and result.nbytes < _IN_MEMORY):
        result = result.compute()
        result.attrs["masked_columns"] = int((~result["column_valid"]).sum())
    return result


def scene_on_grid(scene, grid, **options):
    """A canonical scene on the pixels of a geostationary fixed grid.

    Parameters
    ----------
    scene : canonical Dataset
    grid : `fixed_grid.FixedGrid`
    options : method, interpolation, lazy, see `scene_on_pixels`

    Returns
    -------
    xarray.Dataset, see `scene_on_pixels`, with the grid mapping of the fixed grid and its words as attribute `view`

    Raises
    ------
    ViewError : no pixel sees the domain of the scene; the message tells which longitudes would
    """
    pixels = grid.pixels()
    seen = grid.to_scan_angles(scene["latitude"].values, scene["longitude"].values)[0]
    if not np.isfinite(seen).any():
        raise ViewError(
            f"the satellite at {grid.longitude:g} degrees east sees no part of the scene; "
            + in_words(scene["latitude"].values, scene["longitude"].values)
        )
    angles = pixels["view_zenith_angle"], pixels["view_azimuth_angle"]
    result = scene_on_pixels(
        scene, pixels["latitude"], pixels["longitude"], *angles, grid_mapping=grid.grid_mapping(), **options
    )
    return result.assign_attrs(view=grid.describe())


def _check_choice(name, value, choices):
    if value not in choices:
        raise ViewError(f"unknown {name} {value!r}; use one of {', '.join(choices)}")


def _as_pixels(latitude, longitude, zenith, azimuth):
    """Dataset of the four arrays over the pixel dimensions."""
    if not isinstance(latitude, xr.DataArray):
        latitude = np.asarray(latitude, dtype=float)
        if latitude.ndim not in (1, 2) or latitude.size == 0:
            raise ViewError(f"latitude has shape {latitude.shape}; give pixels in one or two dimensions")
        latitude = xr.DataArray(latitude, dims=("y", "x") if latitude.ndim == 2 else ("pixel",))
    pixels = {"latitude": latitude}
    for name, values in (("longitude", longitude), ("zenith", zenith), ("azimuth", azimuth)):
        if isinstance(values, xr.DataArray):
            values = (
                values.transpose(*latitude.dims).values if set(values.dims) == set(latitude.dims) else values.values
            )
        values = np.asarray(values, dtype=float)
        if values.ndim and values.shape != latitude.shape:
            raise ViewError(f"{name} has shape {values.shape}, latitude {latitude.shape}; both must be the same")
        pixels[name] = (latitude.dims, np.broadcast_to(values, latitude.shape))
    coordinates = {n: c for n, c in latitude.coords.items() if n not in ("latitude", "longitude", "time")}
    return xr.Dataset({n: v if isinstance(v, tuple) else (v.dims, v.values) for n, v in pixels.items()}, coordinates)


def _require_overlap(sampler, pixels):
    latitude, longitude = pixels["latitude"].values, pixels["longitude"].values
    if sampler.locator.locate(latitude, longitude)[2].any():
        return
    scene = sampler.scene
    extents = [
        f"latitude {np.nanmin(a):.2f} to {np.nanmax(a):.2f}, longitude {np.nanmin(o):.2f} to {np.nanmax(o):.2f}"
        for a, o in ((latitude, longitude), (scene["latitude"].values, scene["longitude"].values))
        if np.isfinite(a).any()
    ]
    if len(extents) == 1:
        raise ViewError("no pixel sees the ground: all latitudes are missing")
    raise ViewError(f"no pixel lies within the domain of the scene: pixels {extents[0]}; scene {extents[1]}")


def _assemble(sampler, pixels):
    """The lazy result, in blocks of whole rows of pixels."""
    dims, shape = pixels["latitude"].dims, pixels["latitude"].shape
    rows = max(1, PIXELS_AT_ONCE // int(np.prod(shape[1:])))
    chunked = pixels.reset_coords(drop=True).drop_vars(dims, errors="ignore").chunk({dims[0]: rows})

    template = {}
    for name in sampler.output_names():
        extra, dtype = sampler.form(name)
        chunks = (*extra, chunked.chunksizes[dims[0]], *shape[1:])
        template[name] = (
            (*sampler.extra_dims(name), *dims),
            dask.array.zeros((*extra, *shape), dtype=dtype, chunks=chunks),
        )
    found = xr.map_blocks(_work, chunked, kwargs={"sampler": sampler}, template=xr.Dataset(template))
    variables = {
        name: (v.dims, v.data, _without_mapping(sampler.scene[name].attrs)) for name, v in found.data_vars.items()
    }
    return _finish(sampler, pixels, variables)


def _work(part, sampler):
    """One block of pixels, as a Dataset."""
    values = sampler.block(*(part[name].values for name in ("latitude", "longitude", "zenith", "azimuth")))
    dims = part["latitude"].dims
    return xr.Dataset({name: ((*sampler.extra_dims(name), *dims), v) for name, v in values.items()})


def _without_mapping(attributes):
    return {k: v for k, v in attributes.items() if k != "grid_mapping"}


def _finish(sampler, pixels, variables):
    scene = sampler.scene
    for name in scene.data_vars:
        if name not in variables and name != "grid_mapping" and not set(scene[name].dims) & set(sampler.dims):
            variables[name] = scene[name].variable
    for name, standard_name in (("zenith", "sensor_zenith_angle"), ("azimuth", "sensor_azimuth_angle")):
        attributes = {"units": "degree", "standard_name": standard_name}
        variables[f"view_{name}_angle"] = (pixels["latitude"].dims, pixels[name].values, attributes)
    coordinates = {n: c for n, c in pixels.coords.items()}
    for name in ("latitude", "longitude"):
        coordinates[name] = (pixels["latitude"].dims, pixels[name].values, dict(scene[name].attrs))
    coordinates |= {
        n: c for n, c in scene.coords.items() if not set(c.dims) & set(sampler.dims) and n not in coordinates
    }
    result = xr.Dataset(variables, coordinates, attrs=dict(scene.attrs))
    result.attrs.pop("masked_columns", None)
    result.attrs["view_columns"] = f"{sampler.method} columns of the scene, {sampler.interpolation}"
    return result


class _Sampler:
    """Takes the columns of blocks of pixels from a scene."""

    def __init__(self, scene, where, method, interpolation):
        self.scene, self.locator = scene, where
        self.method, self.interpolation = method, interpolation
        self.dims = scene["column_valid"].dims
        self._token = uuid.uuid4().hex
        if interpolation == "bilinear" and not where.between:
            raise ViewError("a list of cells has no rows and columns to interpolate between; use 'nearest'")

    def __dask_tokenize__(self):
        # a name for the graph; without it dask would hash the values of the whole scene
        return type(self).__name__, self._token

    @functools.cached_property
    def _own_names(self):
        return [n for n, v in self.scene.data_vars.items() if set(self.dims) <= set(v.dims)]

    def output_names(self):
        """Variables that stand on the horizontal grid."""
        return list(self._own_names)

    def extra_dims(self, name):
        """Dimensions of a variable that are not horizontal: (), ("level",) or (half levels,)."""
        extra = tuple(d for d in self.scene[name].dims if d not in self.dims)
        if len(extra) > 1:
            raise ViewError(f"{name} has dimensions {self.scene[name].dims}; choose one of {extra[1:]} first")
        return extra

    def form(self, name):
        """Shape beside the horizontal dimensions, and dtype."""
        return tuple(self.scene.sizes[d] for d in self.extra_dims(name)), self.scene[name].dtype

    def block(self, latitude, longitude, zenith, azimuth):
        """{name: array (levels, pixels) or (pixels)} of one block of pixels."""
        shape = latitude.shape
        flat = [np.ascontiguousarray(a, dtype=float).ravel() for a in (latitude, longitude, zenith, azimuth)]
        usable = np.isfinite(flat[0]) & np.isfinite(flat[1]) & (flat[2] >= 0.0) & (flat[2] < LARGEST_ZENITH)
        usable &= np.isfinite(flat[3])
        usable &= self.locator.locate(flat[0], flat[1])[2]
        seen = [a[usable] for a in flat]
        results = {}
        values = self._columns(*seen) if usable.any() else {}
        for name in self._own_names:
            extra, dtype = self.form(name)
            fill = np.nan if dtype.kind == "f" and name not in _NEAREST_ONLY else 0
            whole = np.full((*extra, usable.size), fill, dtype=dtype)
            if name in values:
                whole[..., usable] = values[name]
            results[name] = whole.reshape(*extra, *shape)
        return results

    def _columns(self, latitude, longitude, zenith, azimuth):
        """{name: array (levels, rays) or (rays)} of rays that start within the domain."""
        rays = _Rays(self.locator, latitude, longitude, zenith, azimuth)
        if self.method == "vertical":
            rays.zenith = np.zeros_like(zenith)
        part = _Part(self.scene, self.dims, self.locator, rays)
        trace = _Trace(part, rays, self.scene.sizes["level"], self.interpolation)
        return trace.run(self._own_names)


class _Rays:
    """Rays from pixels; `at(height)` gives the row, the column and whether they are inside."""

    def __init__(self, where, latitude, longitude, zenith, azimuth):
        self.locator = where
        self.latitude, self.longitude, self.zenith, self.azimuth = latitude, longitude, zenith, azimuth

    def at(self, height):
        latitude, longitude = np.empty_like(self.latitude), np.empty_like(self.latitude)
        heights = np.broadcast_to(np.asarray(height, dtype=float), self.latitude.shape)
        follow_rays(
            self.latitude, self.longitude, self.zenith, self.azimuth, np.ascontiguousarray(heights), latitude, longitude
        )
        return self.locator.locate(latitude, longitude)


class _Part:
    """The part of a scene that some rays pass through, in memory; fields are (row, column) arrays."""

    def __init__(self, scene, dims, where, rays):
        self.dims, self.shape = dims, where.shape
        self.slices, self.wraps = self._extent(where, rays)
        chosen = {d: s for d, s in zip(dims, self.slices)}
        # a scene that is in memory already is not copied
        self.scene = scene.isel(chosen).load()
        self._heights, self._arrays = None, {}

    def _extent(self, where, rays):
        rows, columns = where.shape
        if not where.between:
            return (slice(0, rows), slice(0, 1)), False
        found = [rays.at(h)[:2] for h in np.linspace(0.0, _HIGHEST, 9)]
        row, column = (np.stack([f[i] for f in found]) for i in (0, 1))
        first, last = int(row.min()) - _MARGIN, int(row.max()) + 1 + _MARGIN
        left, right = int(column.min()) - _MARGIN, int(column.max()) + 1 + _MARGIN
        down = slice(max(first, 0), min(last, rows - 1) + 1)
        if where.wraps and (left < 0 or right >= columns):
            return (down, slice(0, columns)), True
        return (down, slice(max(left, 0), min(right, columns - 1) + 1)), False

    def place(self, row, column):
        """Row and column of the scene to those of the part."""
        row = np.clip(row - self.slices[0].start, 0.0, self.slices[0].stop - self.slices[0].start - 1.0)
        column = column - self.slices[1].start
        if not self.wraps:
            column = np.clip(column, 0.0, self.slices[1].stop - self.slices[1].start - 1.0)
        return row, column

    def field(self, name, level=None):
        """One field (row, column); `level` counts along the other dimension. 1-D fields: a number, or the whole."""
        if name not in self._arrays:
            variable = self.scene[name].variable
            if set(self.dims) <= set(variable.dims):
                variable = variable.transpose(..., *self.dims)
                values = variable.values
                self._arrays[name] = values if len(self.dims) == 2 else values[..., None]
            else:
                self._arrays[name] = variable.values
        values = self._arrays[name]
        return values if level is None else values[level]

    def height(self, level):
        """Height of a level (row, column) [m]."""
        if self._heights is None:
            heights = scene_heights(self.scene).transpose("level", *self.dims).values
            self._heights = heights if len(self.dims) == 2 else heights[..., None]
        return self._heights[level]


class _Trace:
    """Follows rays from the ground up and takes the values of each level where they meet it."""

    def __init__(self, part, rays, levels, interpolation):
        self.part, self.rays, self.levels, self.interpolation = part, rays, levels, interpolation
        self.moving = bool((rays.zenith > 0.0).any())

    def run(self, names):
        part, scene = self.part, self.part.scene
        self.foot, valid = self._foot()
        on_levels = [n for n in names if "level" in scene[n].dims]
        half = [n for n in names if n in VARIABLES and VARIABLES[n].kind == "half_level"]
        results = {n: self._on_the_ground(n) for n in names if n not in on_levels and n not in half}
        for name in (*on_levels, *half):
            count = next(scene.sizes[d] for d in scene[name].dims if d not in part.dims)
            results[name] = np.empty((count, self.rays.zenith.size), dtype=scene[name].dtype)
        position = self.foot
        self.below = np.full(self.rays.zenith.shape, np.inf)  # pressure at the level below
        self.below_height = np.full(self.rays.zenith.shape, -np.inf)
        for name in half:
            results[name][-1] = self.sample(name, part.field(name, -1), self.foot)
        for level in range(self.levels - 1, -1, -1):
            position, inside = self._meet(level, position)
            valid &= inside
            for name in on_levels:
                results[name][level] = self.sample(name, part.field(name, level), position)
            for name in half:
                results[name][level] = self.sample(name, part.field(name, level), position)
            if self.moving:
                valid &= self.sample("column_valid", part.field("column_valid"), position)
        results["column_valid"] = results["column_valid"] & valid
        self._order_half_levels(results, half)
        return results

    def _on_the_ground(self, name):
        """A variable of the surface, with or without one more dimension."""
        extra = [d for d in self.part.scene[name].dims if d not in self.part.dims]
        if not extra:
            return self.sample(name, self.part.field(name), self.foot)
        count = self.part.scene.sizes[extra[0]]
        return np.stack([self.sample(name, self.part.field(name, i), self.foot) for i in range(count)])

    def sample(self, name, values, position):
        """Values of a field at positions."""
        kind = "nearest" if name in _NEAREST_ONLY or values.dtype.kind != "f" else self.interpolation
        return _sampled(values, *position, self.part.wraps, kind)

    def _foot(self):
        """Where the rays leave the ground, and whether that is within the domain."""
        row, column, inside = self.rays.at(0.0)
        position = self.part.place(row, column)
        if "orography" not in self.part.scene or not self.moving:
            return position, inside
        for _ in range(_STEPS):
            ground = np.nan_to_num(self._smooth(self.part.field("orography"), position))
            row, column, inside = self.rays.at(ground)
            position = self.part.place(row, column)
        return position, inside

    def _smooth(self, values, position):
        """Between columns whenever the grid allows, so that the search for a height does not jump."""
        kind = "bilinear" if self.rays.locator.between else "nearest"
        return _sampled(values, *position, self.part.wraps, kind).astype(float)

    def _meet(self, level, position):
        """Where rays meet a level, starting from where they meet the one below; whether within the domain."""
        inside = np.ones(self.rays.zenith.shape, dtype=bool)
        if not self.moving:
            return position, inside
        heights = self.part.height(level)
        height = self._smooth(heights, position)
        found = position
        for _ in range(_STEPS):
            known = np.where(np.isfinite(height), height, 0.0)
            row, column, inside = self.rays.at(known)
            found = self.part.place(row, column)
            again = self._smooth(heights, found)
            change = np.abs(again - height)
            height = np.where(np.isfinite(again), again, height)
            if not (change > _HEIGHT_TOLERANCE).any():
                break
        found = self._keep_order(level, heights, found, position)
        return found, inside | ~(height < CLEAR_ABOVE)

    def _keep_order(self, level, heights, found, position):
        """A level that is below ground where it is met, or not above the one below, is taken from the column there."""
        pressure = self.part.field("pressure", level)
        everywhere = pressure.ndim == 0
        at = np.full(found[0].shape, pressure) if everywhere else self._take(pressure, found)
        height = self._take(heights, found)
        ground = self._take(self.part.field("surface_pressure"), found)
        good = np.isfinite(height) & (height > self.below_height) & (at < self.below) & (at <= ground * (1.0 + 1e-5))
        result = tuple(np.where(good, new, old) for new, old in zip(found, position))
        self.below = np.full_like(at, pressure) if everywhere else self._take(pressure, result)
        taken = self._take(heights, result)
        self.below_height = np.where(np.isfinite(taken), taken, self.below_height)
        return result

    def _take(self, values, position):
        return _sampled(values, *position, self.part.wraps, self.interpolation).astype(float)

    def _order_half_levels(self, results, half):
        """Half levels that are not between their levels any more are put there."""
        if "half_pressure" not in half or "pressure" not in results:
            return
        pressure, between = results["pressure"], results["half_pressure"][1:-1]
        wrong = ~((between > pressure[:-1]) & (between < pressure[1:]))
        between[wrong] = np.sqrt(pressure[:-1] * pressure[1:])[wrong]


def _sampled(values, row, column, wraps, kind):
    """Values of a field (rows, columns) at fractional positions."""
    if kind == "nearest":
        rows = np.rint(row).astype(np.intp)
        columns = np.rint(column).astype(np.intp) % values.shape[1]
        return values[rows, columns]
    out = np.empty(row.shape, dtype=values.dtype)
    interpolate(np.ascontiguousarray(values), np.ascontiguousarray(row), np.ascontiguousarray(column), wraps, out)
    return out


@njit(cache=True, nogil=True)
def interpolate(values, row, column, wraps, out):
    """Bilinear between the four columns around each position; the nearest one where any of them is missing."""
    rows, columns = values.shape
    for i in range(row.size):
        top = min(int(np.floor(row[i])), max(rows - 2, 0))
        left = int(np.floor(column[i]))
        if not wraps:
            left = min(left, max(columns - 2, 0))
        down, across = row[i] - top, column[i] - left
        bottom, right = min(top + 1, rows - 1), left + 1
        if wraps:
            left, right = left % columns, right % columns
        else:
            right = min(right, columns - 1)
        value = (1.0 - down) * ((1.0 - across) * values[top, left] + across * values[top, right]) + down * (
            (1.0 - across) * values[bottom, left] + across * values[bottom, right]
        )
        if np.isnan(value):
            value = values[bottom if down > 0.5 else top, right if across > 0.5 else left]
        out[i] = value
