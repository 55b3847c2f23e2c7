"""Invented atmospheres that span what occurs, for choosing representative wavenumbers.

They are drawn from a seeded generator and from no published set, so that the
published atmospheres (AFGL 1986, MIPAS 2007) stay independent tests.
"""

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import PchipInterpolator

GASES = ("h2o", "co2", "o3", "n2o", "ch4", "co")


@dataclass(frozen=True)
class TrainingSet:
    """Invented columns on one pressure grid, top -> surface.

    pressure : (levels,) [Pa]
    temperature : (columns, levels) [K]
    mole_fraction : {gas: (columns, levels)} [1]
    surface_temperature : (columns,) [K]
    surface_level : (columns,) index of the lowest level of each column
    """

    pressure: np.ndarray
    temperature: np.ndarray
    mole_fraction: dict
    surface_temperature: np.ndarray
    surface_level: np.ndarray


def _smooth_noise(rng, log_pressure, amplitude, scale=1.2):
    """Random profile of the given standard deviation, correlated over `scale` in ln p."""
    knots = np.arange(log_pressure.min() - scale, log_pressure.max() + 2 * scale, scale)
    return PchipInterpolator(knots, rng.normal(0.0, amplitude, knots.size))(log_pressure)


def _saturation_mole_fraction(pressure, temperature):
    """Over water (Bolton 1980, Mon. Weather Rev. 108, eq. 10): good enough to bound the humidity."""
    celsius = np.maximum(temperature, 150.0) - 273.15
    return np.minimum(611.2 * np.exp(17.67 * celsius / (celsius + 243.5)) / pressure, 0.06)


def _temperature(rng, pressure, surface_air):
    log_p = np.log(pressure)
    warmth = np.clip((surface_air - 230.0) / 75.0, 0.0, 1.0)
    tropopause = np.exp(np.log(28000.0) + warmth * np.log(9000.0 / 28000.0) + rng.normal(0.0, 0.15))
    coldest = rng.normal(216.0, 6.0) - 20.0 * warmth**2
    middle_fall = surface_air - (surface_air - coldest) * rng.uniform(0.27, 0.40)
    knots = [
        (105000.0, surface_air + 0.5),
        (60000.0, middle_fall),
        (tropopause, coldest),
        (tropopause / 4.0, coldest + rng.uniform(-4.0, 14.0)),
        (500.0, rng.normal(240.0, 12.0)),
        (100.0, rng.normal(266.0, 12.0)),
        (20.0, rng.normal(240.0, 12.0)),
        (4.0, rng.normal(210.0, 14.0)),
    ]
    if surface_air < 265.0 or rng.random() < 0.25:  # low-level inversion
        depth = rng.uniform(2.0, 15.0)
        knots.insert(1, (rng.uniform(84000.0, 94000.0), surface_air + depth - 4.0))
    p, t = np.array(sorted(knots)).T
    profile = PchipInterpolator(np.log(p), t)(log_p) + _smooth_noise(rng, log_p, 2.5)
    return np.clip(profile, 172.0, 325.0)


def _water(rng, pressure, temperature):
    log_p = np.log(pressure)
    relative = np.clip(rng.uniform(0.15, 0.9) + _smooth_noise(rng, log_p, 0.35, 0.5), 0.01, 1.05)
    stratosphere = rng.uniform(3e-6, 7e-6)
    x = relative * _saturation_mole_fraction(pressure, temperature)
    above = pressure < pressure[np.argmin(np.where(pressure > 6000.0, temperature, 999.0))]
    return np.where(above, stratosphere, np.maximum(x, 2e-6))


def _ozone(rng, pressure):
    log_p = np.log(pressure)
    peak, where = rng.uniform(4e-6, 11e-6), np.log(rng.uniform(500.0, 1500.0))
    width = np.where(log_p > where, rng.uniform(0.7, 1.35), rng.uniform(1.0, 1.9))  # below and above the peak
    layer = peak * np.exp(-0.5 * ((log_p - where) / width) ** 2)
    low = rng.uniform(1e-8, 9e-8) * np.exp(rng.uniform(-0.3, 0.8) * np.log(101325.0 / pressure).clip(0.0, 2.0))
    return layer + low + rng.uniform(0.2e-6, 1.6e-6) * np.exp(-0.5 * ((log_p - np.log(20.0)) / 1.3) ** 2)


def _trace(rng, pressure, surface_value, half_pressure, slope):
    """Well mixed below, falling above `half_pressure`."""
    return surface_value / (1.0 + (half_pressure * rng.uniform(0.6, 1.6) / pressure) ** slope)


def training_set(columns, pressure, seed):
    """Draw invented columns.

    Parameters
    ----------
    columns : how many
    pressure : (levels,) increasing [Pa]
    seed : of the generator

    Returns
    -------
    TrainingSet
    """
    rng = np.random.default_rng(seed)
    n = pressure.size
    temperature = np.empty((columns, n))
    mole_fraction = {gas: np.empty((columns, n)) for gas in GASES}
    surface_temperature = np.empty(columns)
    surface_level = np.empty(columns, dtype=np.int64)
    surface_air = rng.permutation(np.linspace(222.0, 312.0, columns))
    for c in range(columns):
        temperature[c] = _temperature(rng, pressure, surface_air[c])
        mole_fraction["h2o"][c] = _water(rng, pressure, temperature[c])
        mole_fraction["o3"][c] = _ozone(rng, pressure)
        mole_fraction["co2"][c] = rng.uniform(310e-6, 900e-6)
        mole_fraction["n2o"][c] = _trace(rng, pressure, rng.uniform(250e-9, 450e-9), 1000.0, 1.0)
        mole_fraction["ch4"][c] = _trace(rng, pressure, rng.uniform(1.2e-6, 3e-6), 500.0, 0.8)
        mole_fraction["co"][c] = (
            _trace(rng, pressure, rng.uniform(40e-9, 250e-9), 10000.0, 1.5) + 2e-8 + 2e-6 * np.exp(-pressure / 10.0)
        )
        bottom = 101325.0 if rng.random() < 0.8 else rng.uniform(55000.0, 95000.0)
        surface_level[c] = int(np.argmin(np.abs(pressure - bottom)))
        surface_temperature[c] = temperature[c, surface_level[c]] + rng.normal(0.0, 5.0)
    return TrainingSet(pressure, temperature, mole_fraction, surface_temperature, surface_level)
