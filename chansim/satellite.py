"""Scene x imager x fixed grid -> the picture on the very pixels of a geostationary imager.

Slanted columns, footprint, noise and counts in one call; rows of sub-pixels are simulated block by block, so that
they never lie in memory together.
"""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from chansim.channels.imager import load_imager
from chansim.errors import ViewError
from chansim.scene.reading import open_scene
from chansim.simulate import simulate
from chansim.view.angles import LARGEST_ZENITH
from chansim.view.footprint import add_noise, average_footprint, footprint_weights, quantise
from chansim.view.slant import scene_on_grid

SUBPIXELS_AT_ONCE = 262144
_BYTES_OF_A_VALUE = 70.0  # for each channel and pixel: the fields of the solver, those of the result, and copies
_BYTES_OF_A_PLACE = 80.0  # for each line of sight: latitude, longitude, angles, and copies


@dataclass(frozen=True)
class Detector:
    """What the detector makes of the light that comes in; recorded in the output.

    subpixels : along each side of a pixel; 1 looks through the middle of the pixel alone
    point_spread : full width at half maximum of a Gaussian footprint in pixels; None: all of the pixel, nothing else
    noise : noise-equivalent temperature difference, one number or {channel id: number} [K]; None is none
    noise_temperature : of the scene for which `noise` holds [K]
    seed : of the noise, whole number
    bits : of the counts, one number or {channel id: number}; None leaves the radiances as they are
    """

    subpixels: int = 1
    point_spread: float | None = None
    noise: float | dict | None = None
    noise_temperature: float = 300.0
    seed: int = 0
    bits: int | dict | None = None


def simulate_on_grid(
    scene, grid, imager="tarn", *, channels=None, columns="slanted", interpolation="nearest", detector=None, **options
):
    """Simulate the picture on the pixels of a geostationary imager.

    Parameters
    ----------
    scene : canonical Dataset from `chansim.open_scene`, or what that function reads
    grid : `chansim.view.fixed_grid.FixedGrid`, from `full_disk`, `sector` or `grid_of_file`
    imager, channels : see `chansim.simulate`
    columns : "slanted" (the ray is followed through the model) or "vertical" (the column over the pixel)
    interpolation : "nearest" or "bilinear", see `chansim.view.slant.scene_on_pixels`
    detector : Detector; None looks through the middle of each pixel, without noise
    options : settings, progress, see `chansim.simulate`

    Returns
    -------
    xarray.Dataset of `chansim.simulate` over (channel, y, x), missing in space and outside the domain of the scene;
    `masked_columns` counts pixels on the Earth without a value, `space_pixels` those that look past it

    Raises
    ------
    SceneError, ResponseError, ViewError : see there; ViewError as well when the satellite does not see the scene
    """
    detector = detector or Detector()
    if not (isinstance(scene, xr.Dataset) and "column_valid" in scene):
        scene = open_scene(scene)
    imager = load_imager(imager, channels)
    taken = {"method": columns, "interpolation": interpolation}
    if _check_subpixels(detector) > 1:
        result = _with_footprint(scene, grid, imager, detector, taken, options)
    else:
        pixels = scene_on_grid(scene, grid, **taken)
        result = simulate(pixels, imager, view=pixels, **options)
    result = _count_pixels(result)
    if detector.noise is not None:
        result = add_noise(
            result, imager.channels, detector.noise, reference_temperature=detector.noise_temperature,
            seed=detector.seed,
        )  # fmt: skip
    if detector.bits is not None:
        result = quantise(result, imager.channels, detector.bits)
    return result


def memory_needed(grid, channel_count, subpixels=1):
    """Memory that a picture takes while it is made, beside that of the scene [bytes]; within about a quarter.

    grid : FixedGrid; channel_count : number of channels; subpixels : along each side of a pixel
    """
    pixels = float(np.prod(grid.shape))
    return pixels * (_BYTES_OF_A_VALUE * channel_count + _BYTES_OF_A_PLACE * subpixels**2)


def _check_subpixels(detector):
    if detector.point_spread is not None and detector.subpixels < 2:
        raise ViewError("a point spread needs sub-pixels to average: give at least 2 along each side (3 serves)")
    if not 1 <= detector.subpixels <= 20:
        raise ViewError(f"subpixels {detector.subpixels}: give 1 to 20 along each side of a pixel")
    return detector.subpixels


def _with_footprint(scene, grid, imager, detector, taken, options):
    """The picture from sub-pixels, block by block of rows."""
    factor, shape = detector.subpixels, grid.shape
    spread, width = ("box", 1.0) if detector.point_spread is None else ("gaussian", detector.point_spread)
    beyond = (footprint_weights(factor, spread, width).size - factor) // 2
    halo = -(-beyond // factor)  # whole pixels above and below, so that a block knows its neighbours
    fine = scene_on_grid(scene, grid.finer(factor), lazy="always", **taken)
    progress, options = options.get("progress"), {k: v for k, v in options.items() if k != "progress"}
    rows = max(1, SUBPIXELS_AT_ONCE // (factor**2 * shape[1]))
    blocks = {}
    for start in range(0, shape[0], rows):
        stop = min(start + rows, shape[0])
        upper, lower = max(start - halo, 0), min(stop + halo, shape[0])
        part = fine.isel(y=slice(upper * factor, lower * factor))
        if bool((part["view_zenith_angle"] < LARGEST_ZENITH).any()):
            part = part.load()
            if bool(part["column_valid"].any()):
                block = simulate(part, imager, view=part, **options)
                block = average_footprint(block, imager.channels, factor, spread=spread, width=width)
                blocks[start] = block.isel(y=slice(start - upper, stop - upper))
        if progress is not None:
            progress(stop * shape[1], shape[0] * shape[1])
    if not blocks:
        raise ViewError("no pixel of the fixed grid sees a valid column of the scene")
    return _joined(blocks, grid, fine)


def _joined(blocks, grid, fine):
    """One picture from blocks of rows {first row: Dataset}; missing where there is no block."""
    first = next(iter(blocks.values()))
    pixels = grid.pixels()
    variables = {}
    for name, variable in first.data_vars.items():
        if name in pixels:
            variables[name] = (pixels[name].dims, pixels[name].values.astype(np.float32), variable.attrs)
        elif "y" in variable.dims:
            whole = np.full((*variable.shape[:-2], *grid.shape), np.nan, dtype=variable.dtype)
            for start, block in blocks.items():
                whole[..., start : start + block.sizes["y"], :] = block[name].values
            variables[name] = (variable.dims, whole, variable.attrs)
        else:
            variables[name] = variable
    coordinates = {n: c for n, c in first.coords.items() if not {"y", "x"} & set(c.dims)}
    coordinates |= {n: pixels[n] for n in ("y", "x", "latitude", "longitude")}
    result = xr.Dataset(variables, coordinates, attrs=dict(first.attrs))
    result.attrs["counted"] = _sum_of_counts(block.attrs["counted"] for block in blocks.values())
    result.attrs["view"] = "; ".join([grid.describe(), fine.attrs["view_columns"]])
    return result


def _sum_of_counts(texts):
    """Lines "what: number" of several blocks, added up."""
    total = {}
    for line in (line for text in texts for line in text.splitlines() if ": " in line):
        what, number = line.rsplit(": ", 1)
        total[what] = total.get(what, 0) + int(number)
    return "\n".join(f"{what}: {number}" for what, number in sorted(total.items())) or "nothing"


def _count_pixels(result):
    on_earth = np.isfinite(result["latitude"].values)
    seen = np.isfinite(result["brightness_temperature"]).any("channel").values
    return result.assign_attrs(masked_columns=int((on_earth & ~seen).sum()), space_pixels=int((~on_earth).sum()))
