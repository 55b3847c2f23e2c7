"""Planck's law in wavenumber and its inverse."""

import math

import numpy as np
from numba import njit

from chansim.constants import FIRST_RADIATION, SECOND_RADIATION


def planck(wavenumber, temperature):
    """Spectral radiance of a black body [mW m-2 sr-1 (cm-1)-1].

    wavenumber [cm-1] and temperature [K] broadcast against each other.
    """
    return FIRST_RADIATION * wavenumber**3 / np.expm1(SECOND_RADIATION * wavenumber / temperature)


def planck_temperature_slope(wavenumber, temperature):
    """dB/dT [mW m-2 sr-1 (cm-1)-1 K-1]."""
    u = SECOND_RADIATION * wavenumber / temperature
    return planck(wavenumber, temperature) * u / temperature / -np.expm1(-u)


def brightness_temperature(wavenumber, radiance):
    """Temperature of the black body with this spectral radiance [K]; radiance > 0."""
    return SECOND_RADIATION * wavenumber / np.log1p(FIRST_RADIATION * wavenumber**3 / radiance)


@njit(cache=True)
def planck_scalar(wavenumber, temperature):
    """`planck` for compiled code."""
    return FIRST_RADIATION * wavenumber**3 / math.expm1(SECOND_RADIATION * wavenumber / temperature)
