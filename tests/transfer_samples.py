"""Runs the compiled solver on a few hand-made columns."""

import numpy as np

from chansim.channels.absorption_tables import PRESSURES, TEMPERATURES, absorption_tables
from chansim.channels.atlas import load_atlas
from chansim.constants import WATER_TO_AIR
from chansim.transfer.scattering import quadrature
from chansim.transfer.solve import RESULTS, solve_columns

GIVEN = ("co2", "o3", "n2o", "ch4", "co")
GASES = ("h2o", *GIVEN)


def specific_humidity(mole_fraction):
    return mole_fraction * WATER_TO_AIR / (1.0 - mole_fraction * (1.0 - WATER_TO_AIR))


def solve_profile(channels, pressure, temperature, mole_fraction, zenith, skin, emissivity=1.0, threads=None):
    """Clear column seen at several zenith angles: dict of (channels, angles)."""
    atlas = load_atlas()
    tables = absorption_tables(channels, {}, GIVEN, atlas.pressure, atlas.temperature)
    n, levels = len(zenith), pressure.size

    def columns(values):
        return np.ascontiguousarray(np.broadcast_to(values, (n, levels)), dtype=float)

    q = specific_humidity(mole_fraction[0])
    half = np.concatenate([[0.9 * pressure[0]], np.sqrt(pressure[1:] * pressure[:-1]), [pressure[-1]]])
    grid = (
        np.log(PRESSURES[0]),
        np.log(PRESSURES[1] / PRESSURES[0]),
        TEMPERATURES[0],
        TEMPERATURES[1] - TEMPERATURES[0],
    )
    nodes = tables.weight.size
    nothing = (np.zeros((0, 3)), *[np.zeros((0, 2, nodes))] * 3, np.zeros((0, 2, nodes, 5)))
    results = np.zeros((len(RESULTS), len(channels), n))
    solve_columns(
        np.ones(n, dtype=bool),
        (
            pressure[None, :].copy(),
            columns(temperature),
            columns(q),
            np.ascontiguousarray(np.broadcast_to(mole_fraction[1:, None, :], (5, n, levels))),
            half[None, :],
        ),
        (
            np.full(n, pressure[-1]),
            np.full(n, temperature[-1]),
            np.full(n, q[-1]),
            np.full(n, float(skin)),
            np.zeros(n),
        ),
        (np.array([1.1, 1.2]) * pressure[0], np.full((n, 2), temperature[0]), np.zeros((6, n, 2))),
        (np.zeros((0, n, levels)), np.zeros((0, n, levels)), np.zeros((n, levels))),
        nothing,
        (
            np.zeros(nodes),
            np.full(nodes, -1),
            np.zeros((0, 2, 0, 1)),
            np.zeros((0, 2, 0, 1)),
            np.zeros(1),
            np.zeros((0, 2)),
        ),
        (np.full(n, -1.0), np.ones(n), np.zeros(n), np.zeros(n)),
        np.cos(np.radians(zenith)),
        np.full((len(channels), n), emissivity),
        (tables.table, grid, tables.wavenumber, tables.weight, tables.first),
        (0, 2000.0, 1, 0),
        quadrature(2),
        quadrature(2),
        results,
        threads,
    )
    return dict(zip(RESULTS, results))
