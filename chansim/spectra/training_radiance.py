"""Radiances of the training set at many wavenumbers, from cross-section tables.

Levels are the pressures of the tables, so only temperature is interpolated.
Each column is seen at several angles over its surface, over a reflecting
surface and over black cloud tops, so that transmittance to every height is
represented as well.
"""

import math

import numpy as np
from numba import njit

from chansim.constants import AVOGADRO, MOLAR_MASS_DRY_AIR, STANDARD_GRAVITY
from chansim.planck import planck_scalar

SECANTS = np.array([1.0, 1.5, 2.75])
REFLECTING_EMISSIVITY = 0.85
_CLOUD_STEP = 2  # a cloud top at every second table pressure
_CLOUD_TOP_ABOVE = 10000.0  # Pa, no cloud higher than this
_MOLECULES_PER_PASCAL = AVOGADRO / (MOLAR_MASS_DRY_AIR * STANDARD_GRAVITY) * 1e-4  # cm-2 Pa-1


def cubic_weights(grid, values):
    """Four-point Lagrange interpolation on an increasing grid.

    grid : (n >= 4,); values : any shape -> (first index, weights (..., 4))
    """
    values = np.asarray(values, dtype=float)
    first = np.clip(np.searchsorted(grid, values) - 2, 0, grid.size - 4)
    knots = grid[first[..., None] + np.arange(4)]
    weights = np.ones(values.shape + (4,))
    for i in range(4):
        for j in range(4):
            if i != j:
                weights[..., i] *= (values - knots[..., j]) / (knots[..., i] - knots[..., j])
    return first, weights


def scene_kinds(training):
    """Kind of each scene (row) of `training_radiance`: 0 clear, 1 reflecting surface, 2 cloud top."""
    kinds = []
    for bottom in training.surface_level:
        kinds += ([0, 1] + [2] * _cloud_levels(training.pressure, int(bottom)).size) * SECANTS.size
    return np.array(kinds)


def _cloud_levels(pressure, bottom):
    levels = np.arange(pressure.size)
    return levels[(pressure > _CLOUD_TOP_ABOVE) & (levels < bottom)][::-_CLOUD_STEP]


@njit(cache=True)
def _optical_depth(
    log_tables, first, weights, mole_fraction, water_self, foreign, own, collision, pressure, column, bottom, tau
):
    """Layer optical depths of one column (levels, wavenumbers), trapezoid rule between the table pressures."""
    gases, _, _, n = log_tables.shape
    level = np.zeros((2, n))
    for j in range(bottom + 1):
        now, before = j % 2, (j + 1) % 2
        x_water = mole_fraction[0, j]
        for i in range(n):
            level[now, i] = collision[j, i] * (1.0 - x_water)
        for g in range(gases):
            x = mole_fraction[g, j]
            t = first[j]
            for i in range(n):
                log_k = 0.0
                for a in range(4):
                    log_k += weights[j, a] * log_tables[g, j, t + a, i]
                k = math.exp(log_k)
                if g == 0:
                    ratio = 0.0
                    for a in range(4):
                        ratio += weights[j, a] * water_self[j, t + a, i]
                    k *= 1.0 + x * ratio
                    k += foreign[j, i] * (1.0 - x) + own[j, i] * x
                level[now, i] += k * x
        if j > 0:
            amount = 0.5 * (pressure[j] - pressure[j - 1]) * column
            for i in range(n):
                tau[j - 1, i] = amount * (level[now, i] + level[before, i])


@njit(cache=True)
def _column_scenes(tau, temperature, surface_temperature, bottom, wavenumber, secants, emissivity, clouds, out):
    """Radiances of one column: rows are angle x (surface, reflecting surface, cloud tops)."""
    per_angle = 2 + clouds.size
    for i in range(wavenumber.size):
        surface = planck_scalar(wavenumber[i], surface_temperature)
        for s in range(secants.size):
            upward, downward, transmittance, cloud = 0.0, 0.0, 1.0, clouds.size - 1
            above = planck_scalar(wavenumber[i], temperature[0])
            for j in range(bottom):
                while cloud >= 0 and clouds[cloud] == j:
                    out[s * per_angle + 2 + cloud, i] = upward + transmittance * above
                    cloud -= 1
                below = planck_scalar(wavenumber[i], temperature[j + 1])
                path = tau[j, i] * secants[s]
                t = math.exp(-path)
                mean = 0.5 if path < 1e-4 else (1.0 / path - t / (1.0 - t))
                absorbed = path if path < 1e-4 else 1.0 - t
                up = absorbed * (above + (below - above) * mean)
                upward += transmittance * up
                downward = downward * t + absorbed * (below + (above - below) * mean)
                transmittance *= t
                above = below
            out[s * per_angle, i] = upward + transmittance * surface
            out[s * per_angle + 1, i] = upward + transmittance * (emissivity * surface + (1.0 - emissivity) * downward)


def training_radiance(training, wavenumber, temperatures, log_tables, water_self, foreign, own, collision):
    """Top-of-atmosphere radiances of the training set.

    Parameters
    ----------
    training : TrainingSet on the pressures of the tables
    wavenumber : (n,) [cm-1]
    temperatures : (T,) of the tables [K]
    log_tables : (gases, P, T, n) natural logarithm of the cross-sections [cm2 molecule-1], dry air
    water_self : (P, T, n) relative change of the water cross-section per unit mole fraction
    foreign, own : functions (pressure, temperature) -> continuum cross-section (levels, n)
    collision : function (pressure, temperature) -> cross-section of dry air (levels, n)

    Returns
    -------
    (scenes, n) [mW m-2 sr-1 (cm-1)-1]
    """
    n, pressure = wavenumber.size, training.pressure
    rows = np.empty((scene_kinds(training).size, n))
    tau = np.empty((pressure.size, n))
    row = 0
    for c in range(training.temperature.shape[0]):
        t = training.temperature[c]
        bottom = int(training.surface_level[c])
        first, weights = cubic_weights(temperatures, t)
        x = np.stack([training.mole_fraction[gas][c] for gas in training.mole_fraction])
        p, tt = pressure[:, None], t[:, None]
        _optical_depth(
            log_tables,
            first,
            weights,
            x,
            water_self,
            foreign(p, tt),
            own(p, tt),
            collision(p, tt),
            pressure,
            _MOLECULES_PER_PASCAL,
            bottom,
            tau,
        )
        clouds = _cloud_levels(pressure, bottom)
        count = SECANTS.size * (2 + clouds.size)
        _column_scenes(
            tau,
            t,
            training.surface_temperature[c],
            bottom,
            wavenumber,
            SECANTS,
            REFLECTING_EMISSIVITY,
            clouds,
            rows[row : row + count],
        )
        row += count
    return rows
