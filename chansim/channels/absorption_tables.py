"""Run-time absorption tables of channels: fine, linear, ready for the compiled solver.

Rows of the first axis ("slots"): 0 dry air with the gases that are not given
per level, 1 water, 2 water times its mole fraction, 3 and up one for each gas
given per level. Entries are cross-sections [cm2 molecule-1] on a grid uniform
in ln p and in T; nodes of all channels lie side by side on the last axis.
"""

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline

from chansim.channels.atlas import GASES
from chansim.spectra.continuum import (
    CollisionInduced,
    WaterContinuum,
    collision_induced_cross_section,
    water_continuum_parts,
)

PRESSURES = np.geomspace(5.0, 115000.0, 125)  # Pa; steps of 8 % in p
TEMPERATURES = np.arange(170.0, 331.0, 10.0)  # K
FIRST_GAS_SLOT = 3


@dataclass(frozen=True)
class AbsorptionTables:
    """Tables of several channels.

    table : (P, T, slots, nodes) float32 [cm2 molecule-1]
    wavenumber, weight : (nodes,) [cm-1], [1]
    first : (channels + 1,) where the nodes of each channel begin
    gases : gases with their own slot, in order
    """

    table: np.ndarray
    wavenumber: np.ndarray
    weight: np.ndarray
    first: np.ndarray
    gases: tuple


def _on_fine_grid(coarse_p, coarse_t, tables):
    """Cubic splines through log tables (..., P, T) -> (..., fine P, fine T)."""
    along_p = CubicSpline(np.log(coarse_p), tables, axis=-2)(np.log(PRESSURES.clip(coarse_p[0], coarse_p[-1])))
    return CubicSpline(coarse_t, along_p, axis=-1)(TEMPERATURES)


def absorption_tables(channels, well_mixed, given, coarse_pressure, coarse_temperature):
    """Tables for a set of channels.

    Parameters
    ----------
    channels : sequence of Channel
    well_mixed : {gas: function of pressure [Pa] -> mole fraction of dry air} for gases without a field
    given : gases (other than h2o) whose mole fraction comes with each level
    coarse_pressure, coarse_temperature : of the channels' tables [Pa], [K]

    Returns
    -------
    AbsorptionTables
    """
    parts = [_channel_table(c, well_mixed, given, coarse_pressure, coarse_temperature) for c in channels]
    counts = [c.node_wavenumber.size for c in channels]
    return AbsorptionTables(
        np.ascontiguousarray(np.concatenate(parts, axis=-1), dtype=np.float32),
        np.concatenate([c.node_wavenumber for c in channels]),
        np.concatenate([c.node_weight for c in channels]),
        np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        tuple(given),
    )


def _channel_table(channel, well_mixed, given, coarse_pressure, coarse_temperature):
    log_k = _on_fine_grid(coarse_pressure, coarse_temperature, channel.log_tables)
    k = dict(zip(GASES, np.exp(log_k)))  # each (nodes, P, T)
    p, t = PRESSURES[:, None, None], TEMPERATURES[None, :, None]
    water = WaterContinuum(*channel.continuum[[0, 1, 2, 3]])
    foreign, own = (np.moveaxis(part, -1, 0) for part in water_continuum_parts(water, p, t))
    relative = _on_fine_grid(coarse_pressure, coarse_temperature, channel.self_tables)
    dry = np.moveaxis(collision_induced_cross_section(CollisionInduced(*channel.collision), p, t), -1, 0).copy()
    for gas, profile in well_mixed.items():
        dry += k[gas] * profile(PRESSURES)[:, None]
    slots = [dry, k["h2o"] + foreign, k["h2o"] * relative + own - foreign] + [k[gas] for gas in given]
    return np.transpose(np.stack(slots), (2, 3, 0, 1))  # (slots, nodes, P, T) -> (P, T, slots, nodes)
