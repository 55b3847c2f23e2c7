"""Parametric vertical coordinates: one formula per function, for arrays and DataArrays that broadcast.

Source of all: CF conventions 1.11, appendix D (dimensional vertical coordinates from dimensionless ones).
"""

import numpy as np


def pressure_from_hybrid_sigma(ap, b, surface_pressure):
    """Pressure on hybrid sigma-pressure levels, p = ap + b p_s (with ap = a p_0).

    Parameters
    ----------
    ap : pressure term of the levels [Pa]
    b : share of the surface pressure [1]
    surface_pressure : array [Pa]

    Returns
    -------
    array [Pa]

    Source: CF appendix D, atmosphere hybrid sigma pressure coordinate.
    """
    return ap + b * surface_pressure


def pressure_from_sigma(sigma, surface_pressure, top_pressure):
    """Pressure on sigma levels, p = p_top + sigma (p_s - p_top).

    Parameters
    ----------
    sigma : array, 0 at the top of the model, 1 at the ground [1]
    surface_pressure : array [Pa]
    top_pressure : number or array [Pa]

    Returns
    -------
    array [Pa]

    Source: CF appendix D, atmosphere sigma coordinate.
    """
    return top_pressure + sigma * (surface_pressure - top_pressure)


def pressure_from_log_pressure(log_level, reference_pressure):
    """Pressure on log-pressure levels, p = p_0 exp(-lev).

    Parameters
    ----------
    log_level : array [1]
    reference_pressure : number [Pa]

    Returns
    -------
    array [Pa]

    Source: CF appendix D, atmosphere natural log pressure coordinate.
    """
    return reference_pressure * np.exp(-log_level)


def height_from_hybrid_height(a, b, orography):
    """Height above sea level on hybrid height levels, z = a + b orog.

    Parameters
    ----------
    a : array [m]
    b : array [1]
    orography : array, height of the ground [m]

    Returns
    -------
    array [m]

    Source: CF appendix D, atmosphere hybrid height coordinate.
    """
    return a + b * orography


def height_from_sleve(a, b1, b2, top_height, coarse_orography, fine_orography):
    """Height above sea level on smooth level vertical (SLEVE) levels, z = a z_top + b1 z_1 + b2 z_2.

    Parameters
    ----------
    a, b1, b2 : arrays [1]
    top_height : number, top of the model [m]
    coarse_orography, fine_orography : arrays, the two parts of the height of the ground [m]

    Returns
    -------
    array [m]

    Source: CF appendix D, atmosphere smooth level vertical (SLEVE) coordinate.
    """
    return a * top_height + b1 * coarse_orography + b2 * fine_orography


def full_from_half(half, axis=0):
    """Means of neighbouring half levels: what a full level of a hybrid coordinate is.

    Parameters
    ----------
    half : array with the half levels along `axis`, one more than full levels
    axis : number of the axis

    Returns
    -------
    array, one shorter along `axis`

    Source: Simmons and Burridge 1981, Mon. Wea. Rev. 109, 758-766; the choice of most models that give
    half-level coefficients only.
    """
    half = np.moveaxis(np.asarray(half, dtype=float), axis, 0)
    return np.moveaxis(0.5 * (half[:-1] + half[1:]), 0, axis)
