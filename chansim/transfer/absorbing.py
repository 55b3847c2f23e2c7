"""The absorbing solver: exact formal solution without scattering, source linear in
optical depth with a small bend.

Radiance at the top = sum over layers of (layer emission x transmittance above)
+ transmittance x (emissivity x B(surface) + (1 - emissivity) x downwelling).
The reflected downwelling travels at the view angle (specular reflection).
"""

import math

from numba import njit

from chansim.constants import SECOND_RADIATION

STEEPEST = 1.8  # of `density_slope`: absorption that grows twentyfold within a layer is not a smooth profile


@njit(cache=True)
def absorbed_fraction(path):
    """1 - exp(-path), accurate for thin layers [1]."""
    return path * (1.0 - 0.5 * path * (1.0 - path / 3.0)) if path < 1e-4 else 1.0 - math.exp(-path)


@njit(cache=True)
def far_weight(path, absorbed):
    """Weight of the far side's Planck function in the emission of a layer, per absorbed fraction [1].

        Emission = absorbed x (B_near + (B_far - B_near) x far_weight); the integral of a source linear in
    optical depth with a small bend.
    """
    if path < 1e-3:
        return 0.5 - path / 12.0
    return 1.0 / path - (1.0 - absorbed) / absorbed


@njit(cache=True)
def bend_weight(path, absorbed):
    """Integral of f (1 - f) exp(-path f) d(path f), f from 0 to 1: weight of the bend of the source [1]."""
    if path < 0.05:
        return path * (1.0 / 6.0 - path * (1.0 / 12.0 - path * (1.0 / 40.0 - path / 180.0)))
    return (path - 2.0 + (path + 2.0) * (1.0 - absorbed)) / (path * path)


@njit(cache=True)
def density_slope(above, here, below):
    """How much the absorption per ln p grows through a layer, relative to its mean, within -2 and 2 [1].

    above, here, below : optical depth per ln p of the layer and its neighbours
    """
    total = above + 2.0 * here + below
    return 2.0 * (below - above) / total if total > 0.0 else 0.0


@njit(cache=True)
def source_bend(planck_above, planck_below, middle_factor, slope):
    """Departure of the source from a straight line in optical depth.

    Temperature is linear in ln p; absorption grows downward, so that half of
    the optical depth lies below the middle of the layer, and the Planck
    function is convex in temperature. The source is
    B_above + (B_below - B_above) f + bend f (1 - f), f the fraction of the optical depth.

    middle_factor : B(mean temperature) / sqrt(B_above B_below), see `middle_factor`
    slope : see `density_slope`, of this layer [1]
    """
    convex = 0.5 * (planck_above + planck_below) - math.sqrt(planck_above * planck_below) * middle_factor
    half = 0.5 * slope  # tanh(a / 2) where absorption grows as exp(a) through the layer
    offset = 0.5 * half / (1.0 + math.sqrt(1.0 - half * half))  # 1/2 - fraction of the depth above the middle
    skew = offset / (0.25 - offset * offset)
    return skew * (planck_below - planck_above) - 4.0 * convex


@njit(cache=True)
def middle_factor(wavenumber, above, below):
    """B at the mean of two temperatures over the geometric mean of B at both (Wien form) [1]."""
    mean = 0.5 * (above + below)
    return 1.0 + SECOND_RADIATION * wavenumber * (below - above) ** 2 / (4.0 * mean * mean * mean)


@njit(cache=True)
def absorbing_radiance(path, planck_level, bend, planck_surface, emissivity):
    """Radiance at the top of one column at one wavenumber.

    Parameters
    ----------
    path : (layers,) slant optical depths, top -> surface
    planck_level : (layers + 1,) Planck function at the levels
    bend : (layers,) bend of the source in each layer (see `source_bend`); 0 is linear in optical depth
    planck_surface : of the skin
    emissivity : of the surface [1]

    Returns
    -------
    radiance at the top, transmittance from the surface to the top
    """
    upward, downward, transmittance = 0.0, 0.0, 1.0
    for j in range(path.size):
        absorbed = absorbed_fraction(path[j])
        weight = far_weight(path[j], absorbed)
        bent = bend[j] * bend_weight(path[j], absorbed)
        above, below = planck_level[j], planck_level[j + 1]
        upward += transmittance * (absorbed * (above + (below - above) * weight) + bent)
        downward = downward * (1.0 - absorbed) + absorbed * (below + (above - below) * weight) + bent
        transmittance *= 1.0 - absorbed
    return (upward + transmittance * (emissivity * planck_surface + (1.0 - emissivity) * downward), transmittance)
