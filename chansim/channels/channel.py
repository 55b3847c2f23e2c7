"""From a response function to a channel: a few wavenumbers that stand for it.

The response is projected on ramps of 5 cm-1; the atlas gives wavenumbers and
weights for each ramp, together a fine reference of some hundred wavenumbers.
A handful of them, with non-negative weights, is then chosen so that radiances
of invented atmospheres come out as with the reference. Each stays
monochromatic: Beer's law holds exactly at each.
"""

import hashlib
import os
import tempfile
import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import platformdirs
from scipy.linalg import solveh_banded

from chansim._version import __version__
from chansim.channels.atlas import load_atlas
from chansim.errors import ResponseError
from chansim.planck import brightness_temperature, planck, planck_temperature_slope
from chansim.spectra.continuum import collision_induced_cross_section, water_continuum_parts
from chansim.spectra.selection import choose_nodes, condensed, exchange_nodes
from chansim.spectra.training import training_set
from chansim.spectra.training_radiance import scene_kinds, training_radiance

MOST_NODES, LEAST_NODES = 20, 8
TOLERANCE = 0.012  # K, root-mean-square over the weighted training scenes
TRAINING_COLUMNS, TRAINING_SEED = 160, 41
CHECK_COLUMNS, CHECK_SEED = 30, 42
_FIT_TEMPERATURES = np.arange(180.0, 341.0, 2.0)  # K, range of the band-correction fit
_IMPORTANCE = np.array([1.0, 0.5, 0.35])  # of clear, reflecting and cloud-top scenes
_BLACK_TEMPERATURES = np.linspace(185.0, 335.0, 16)  # K
_BLACK_IMPORTANCE = 4.0  # against a training scene
_RECIPE = "1"  # raise when the way of preparing changes, so that old cache files are not used
_VALUES_AT_ONCE = 65536


@dataclass(frozen=True)
class Channel:
    """A channel ready for simulation.

    id : identifier; name : words for titles
    central_wavenumber : response-weighted mean [cm-1]
    bandwidth : effective bandwidth [cm-1]
    band_offset, band_slope : of T_black = (T_equivalent - offset) / slope at the central wavenumber [K], [1]
    band_residual : largest error of that fit over 180-340 K [K]
    node_wavenumber : (nodes,) [cm-1]; node_weight : (nodes,) sum close to 1 [1]
    log_tables : (gases, nodes, P, T) log cross-sections [cm2 molecule-1]
    self_tables : (nodes, P, T) relative self effect of water
    continuum, collision : (4, nodes) and (5, nodes) coefficients (see spectra.continuum)
    fit_error, fit_worst : node fit against the fine reference on columns not used in it [K]
    response_wavenumber, response : the response function [cm-1], [1]
    atlas_digest : sha256 of the atlas
    notes : what was done to the input
    """

    id: str
    name: str
    central_wavenumber: float
    bandwidth: float
    band_offset: float
    band_slope: float
    band_residual: float
    node_wavenumber: np.ndarray
    node_weight: np.ndarray
    log_tables: np.ndarray
    self_tables: np.ndarray
    continuum: np.ndarray
    collision: np.ndarray
    fit_error: float
    fit_worst: float
    response_wavenumber: np.ndarray
    response: np.ndarray
    atlas_digest: str
    notes: tuple = ()

    @property
    def central_wavelength_um(self):
        """Wavelength of the central wavenumber [um]."""
        return 1e4 / self.central_wavenumber

    @property
    def kind(self):
        """ "shortwave" below 5 um, "water_vapour" 5.3-7.8 um, else "window" (how a picture is scaled)."""
        wavelength = self.central_wavelength_um
        return "shortwave" if wavelength < 5.0 else "water_vapour" if 5.3 < wavelength < 7.8 else "window"

    def radiance(self, temperature):
        """Channel radiance of a black body [mW m-2 sr-1 (cm-1)-1]; temperature [K], any shape."""
        return _in_blocks(lambda t: planck(self.node_wavenumber, t[..., None]) @ self.node_weight, temperature)

    def brightness_temperature(self, radiance):
        """Temperature of the black body with this channel radiance [K]; exact inverse of `radiance`."""
        return _in_blocks(self._brightness_temperature, radiance)

    def _brightness_temperature(self, radiance):
        with np.errstate(divide="ignore", invalid="ignore"):
            t = (brightness_temperature(self.central_wavenumber, radiance) - self.band_offset) / self.band_slope
            for _ in range(3):
                slope = planck_temperature_slope(self.node_wavenumber, t[..., None]) @ self.node_weight
                t = t + (radiance - self.radiance(t)) / slope
        return np.where(radiance > 0, t, np.nan)


def _in_blocks(function, values):
    """A function of every value, block by block: it needs many times the memory of what it is given."""
    values = np.asarray(values, dtype=float)
    if values.size <= _VALUES_AT_ONCE:
        return function(values)
    flat, out = values.ravel(), np.empty(values.size)
    for start in range(0, flat.size, _VALUES_AT_ONCE):
        block = slice(start, start + _VALUES_AT_ONCE)
        out[block] = function(flat[block])
    return out.reshape(values.shape)


def band_average(wavenumber, response, values):
    """Response-weighted mean of values (..., n) given at the response's points."""
    return np.trapezoid(response * values, wavenumber) / np.trapezoid(response, wavenumber)


def _refined(wavenumber, response, step=0.25):
    """The response (linear between its points) on a fine uniform grid."""
    n = max(int(np.ceil((wavenumber[-1] - wavenumber[0]) / step)), 200)
    fine = np.union1d(np.linspace(wavenumber[0], wavenumber[-1], n + 1), wavenumber)
    return fine, np.interp(fine, wavenumber, response)


def band_correction(wavenumber, response):
    """Linear fit between the equivalent temperature at the central wavenumber and the black-body temperature.

    T_equivalent = offset + slope * T_black, T_equivalent the inverse Planck
    function of the band-averaged radiance (common practice of the trade).

    Returns
    -------
    offset [K], slope [1], largest residual of T_black over 180-340 K [K]
    """
    nu, r = _refined(wavenumber, response)
    centre = band_average(nu, r, nu)
    radiance = band_average(nu, r, planck(nu, _FIT_TEMPERATURES[:, None]))
    equivalent = brightness_temperature(centre, radiance)
    slope, offset = np.polyfit(_FIT_TEMPERATURES, equivalent, 1)
    residual = np.abs((equivalent - offset) / slope - _FIT_TEMPERATURES).max()
    return float(offset), float(slope), float(residual)


def ramp_projection(wavenumber, response, knots):
    """Best piecewise-linear form of the response on equidistant knots (least squares, then >= 0).

    Returns (knots,) values; their integral equals the integral of the response.
    """
    step = knots[1] - knots[0]
    nu, r = _refined(wavenumber, response, step / 40.0)
    position = (nu - knots[0]) / step
    load = np.array([np.trapezoid(r * np.maximum(1.0 - np.abs(position - k), 0.0), nu) for k in range(knots.size)])
    near = np.flatnonzero(load > 0.0)  # knots beyond the response stay at zero
    near = np.arange(near[0], near[-1] + 1)
    bands = np.zeros((2, near.size))
    bands[1], bands[0, 1:] = 2.0 * step / 3.0, step / 6.0
    bands[1, (near == 0) | (near == knots.size - 1)] = step / 3.0
    values = np.zeros(knots.size)
    values[near] = np.maximum(solveh_banded(bands, load[near]), 0.0)
    integral = step * (values.sum() - 0.5 * (values[0] + values[-1]))
    return values * np.trapezoid(r, nu) / integral


def fine_reference(response, atlas):
    """Atlas nodes under a response and their weights (sum close to 1): (indices, weights)."""
    knots = np.append(atlas.interval_start, atlas.interval_start[-1] + atlas.interval_width)
    values = ramp_projection(response.wavenumber, response.response, knots)
    weights = values[atlas.interval] * atlas.weights[:, 0] + values[atlas.interval + 1] * atlas.weights[:, 1]
    nodes = np.flatnonzero(weights > 1e-7 * weights.sum())
    return nodes, _held_to_planck(response, atlas.wavenumber[nodes], weights[nodes] / weights[nodes].sum())


def _held_to_planck(response, wavenumber, weights):
    """Weights times one factor, so that a black body of 260 K reads as through the response itself.

    The kept wavenumbers of an interval reproduce radiances within some hundredths of a kelvin; the factor takes out
    what of it is common to all scenes.
    """
    nu, r = _refined(response.wavenumber, response.response)
    return weights * band_average(nu, r, planck(nu, 260.0)) / np.sum(weights * planck(wavenumber, 260.0))


def _reference_radiance(atlas, nodes, columns, seed):
    training = training_set(columns, atlas.pressure, seed)
    water, pairs = atlas.smooth_at(nodes)
    # (gases, nodes, P, T) -> (gases, P, T, nodes)
    tables = np.ascontiguousarray(np.moveaxis(atlas.log_tables(nodes), 1, -1), dtype=np.float32)
    own = np.ascontiguousarray(np.moveaxis(atlas.self_tables(nodes), 0, -1), dtype=np.float32)
    return training_radiance(
        training,
        atlas.wavenumber[nodes],
        atlas.temperature,
        tables,
        own,
        lambda p, t: water_continuum_parts(water, p, t)[0],
        lambda p, t: water_continuum_parts(water, p, t)[1],
        lambda p, t: collision_induced_cross_section(pairs, p, t),
    )


def _scaled(radiance, reference, wavenumber):
    """Radiances in units of 1 K at the scene's own brightness temperature."""
    target = radiance @ reference
    scale = 1.0 / planck_temperature_slope(wavenumber, brightness_temperature(wavenumber, target))
    return radiance * scale[:, None], target * scale


def _training_problem(atlas, nodes, reference, wavenumber):
    """Least-squares rows: clear scenes count fully, reflecting surfaces and cloud tops less (there are many)."""
    scaled, target = _scaled(_reference_radiance(atlas, nodes, TRAINING_COLUMNS, TRAINING_SEED), reference, wavenumber)
    training = training_set(TRAINING_COLUMNS, atlas.pressure, TRAINING_SEED)
    importance = _IMPORTANCE[scene_kinds(training)]
    scaled, target = scaled * importance[:, None], target * importance
    return condensed(*_with_black_bodies(scaled, target[:, None], atlas.wavenumber[nodes], reference, wavenumber))


def _with_black_bodies(scaled, target, node_wavenumber, reference, wavenumber):
    """Adds opaque scenes of one temperature: they hold the weights to the Planck function of the channel."""
    black = planck(node_wavenumber, _BLACK_TEMPERATURES[:, None]) * _BLACK_IMPORTANCE
    scale = 1.0 / planck_temperature_slope(wavenumber, _BLACK_TEMPERATURES)
    return (
        np.concatenate([scaled, black * scale[:, None]]),
        np.concatenate([target, ((black @ reference) * scale)[:, None]]),
    )


def prepare_channel(response, *, channel_id=None, name=None, atlas=None, tolerance=TOLERANCE, most_nodes=MOST_NODES):
    """Prepare a channel from its response function (a few seconds, no cache).

    Parameters
    ----------
    response : Response
    channel_id, name : default to the name of the response
    atlas : Atlas; None = the one of the package
    tolerance : node fit to stop at [K]
    most_nodes : at most so many wavenumbers

    Returns
    -------
    Channel

    Raises
    ------
    ResponseError : the response lies between two nodes of the atlas (a laser line is no channel)
    """
    atlas = atlas or load_atlas()
    nodes, reference = fine_reference(response, atlas)
    if nodes.size < 2:
        raise ResponseError(f"{response.name}: {response.bandwidth:.2g} cm-1 wide; too narrow for the absorption atlas")
    centre = response.central_wavenumber
    problem = _training_problem(atlas, nodes, reference, centre)
    chosen, weights, _ = choose_nodes(*problem, tolerance, most_nodes, rounds=4, least=LEAST_NODES)
    chosen, weights, _ = exchange_nodes(*problem, chosen, rounds=30, least_gain=0.002)
    order = np.argsort(chosen)
    chosen, weights = chosen[order], weights[order, 0]
    scaled, target = _scaled(_reference_radiance(atlas, nodes, CHECK_COLUMNS, CHECK_SEED), reference, centre)
    error = scaled[:, chosen] @ weights - target
    kept = nodes[chosen]
    water, pairs = atlas.smooth_at(kept)
    return Channel(
        channel_id or response.name,
        name or channel_id or response.name,
        centre,
        response.bandwidth,
        *band_correction(response.wavenumber, response.response),
        atlas.wavenumber[kept],
        weights,
        atlas.log_tables(kept),
        atlas.self_tables(kept),
        np.stack([water.wavenumber, water.self_coefficient, water.foreign_coefficient, water.self_exponent]),
        np.stack([pairs.wavenumber, pairs.nitrogen_warm, pairs.nitrogen_cold, pairs.oxygen, pairs.oxygen_slope]),
        float(np.sqrt(np.mean(error**2))),
        float(np.abs(error).max()),
        response.wavenumber,
        response.response,
        atlas.digest,
        response.notes,
    )


def cache_folder():
    """Where prepared channels are kept: $CHANSIM_CACHE or the user's cache folder."""
    return Path(os.environ.get("CHANSIM_CACHE") or platformdirs.user_cache_dir("chansim")) / "channels"


def _cache_path(response, channel_id, name, atlas):
    digest = hashlib.sha256()
    for part in (response.wavenumber, response.response):
        digest.update(np.ascontiguousarray(part).tobytes())
    settings = (
        TOLERANCE,
        MOST_NODES,
        LEAST_NODES,
        TRAINING_COLUMNS,
        TRAINING_SEED,
        _IMPORTANCE.tolist(),
        _BLACK_IMPORTANCE,
    )
    digest.update(repr((channel_id, name, response.notes, atlas.digest, __version__, _RECIPE, settings)).encode())
    return cache_folder() / f"{digest.hexdigest()[:32]}.npz"


def ready_channel(response, *, channel_id=None, name=None, atlas=None):
    """`prepare_channel`, kept on disk for the next time (see `cache_folder`)."""
    atlas = atlas or load_atlas()
    channel_id = channel_id or response.name
    path = _cache_path(response, channel_id, name, atlas)
    channel = _load(path)
    if channel is None:
        channel = prepare_channel(response, channel_id=channel_id, name=name, atlas=atlas)
        try:
            _store(path, channel)
        except OSError as error:
            warnings.warn(
                f"prepared channels cannot be kept in {path.parent} ({error}); set CHANSIM_CACHE to a "
                "writable folder to save the time",
                stacklevel=2,
            )
    return channel


def _store(path, channel):
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, temporary = tempfile.mkstemp(dir=path.parent, suffix=".npz")
    os.close(handle)
    try:
        np.savez_compressed(temporary, **{key: np.asarray(value) for key, value in vars(channel).items()})
        os.replace(temporary, path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise


def _load(path):
    try:
        with np.load(path) as stored:
            fields = {key: stored[key] for key in stored.files}
    except (OSError, ValueError, EOFError, KeyError):
        return None  # absent or damaged: it is made again
    for key, value in fields.items():
        if key == "notes":
            fields[key] = tuple(str(v) for v in value)
        elif value.ndim == 0:
            fields[key] = str(value) if value.dtype.kind == "U" else float(value)
    try:
        return Channel(**fields)
    except TypeError:
        return None
