"""Emissivity of the surface: rough sea by theory, land, desert, snow and ice by class.

Sea: Fresnel reflection averaged over the wave slopes of Cox & Munk 1954
(J. Opt. Soc. Am. 44, 838), as in Masuda et al. 1988 (Remote Sens. Environ. 24,
313): one reflection, facets weighted by what the imager sees of them.
"""

import cmath
import functools
import math

import numpy as np
from numba import njit

from chansim.errors import OpticsError
from chansim.optics.refractive_index import refractive_index

ZENITHS = np.concatenate([np.arange(0.0, 60.0, 5.0), np.arange(60.0, 86.0, 2.5)])  # degrees
WINDS = np.array([0.0, 2.0, 4.0, 7.0, 10.0, 15.0, 20.0, 30.0])  # m s-1
_SLOPES = 41
_HORIZON = math.cos(math.radians(85.0))
_DARK = 40.0  # slopes less likely than exp(-40) mirror nothing
# spectral emissivity by class at some wavelengths; typical values of published spectral libraries, from memory:
# vegetation and soil near 0.98, quartz sand dips at 8-9.5 um and below 4.5 um, snow and ice close to black
_WAVELENGTHS_UM = np.array([3.5, 3.9, 4.5, 6.0, 7.5, 8.2, 8.6, 9.2, 9.7, 10.5, 11.2, 12.3, 13.3, 15.4])
_CLASSES = {
    1: [0.96, 0.965, 0.97, 0.975, 0.975, 0.97, 0.97, 0.97, 0.972, 0.976, 0.978, 0.98, 0.98, 0.98],
    2: [0.80, 0.82, 0.88, 0.94, 0.94, 0.88, 0.85, 0.86, 0.91, 0.95, 0.96, 0.97, 0.97, 0.97],
    3: [0.985, 0.985, 0.985, 0.985, 0.987, 0.988, 0.988, 0.989, 0.990, 0.993, 0.995, 0.990, 0.985, 0.980],
    4: [0.975, 0.975, 0.975, 0.97, 0.975, 0.977, 0.978, 0.98, 0.982, 0.985, 0.987, 0.975, 0.965, 0.96],
}


def fresnel_reflectance(index, cosine):
    """Unpolarised reflectance of a flat surface (Fresnel; Born & Wolf) [1].

    index : complex refractive index against air; cosine : of the angle of incidence
    """
    cosine = np.asarray(cosine, dtype=float)
    inside = np.sqrt(1.0 - (1.0 - cosine**2) / index**2)
    vertical = (index * cosine - inside) / (index * cosine + inside)
    horizontal = (cosine - index * inside) / (cosine + index * inside)
    return 0.5 * (np.abs(vertical) ** 2 + np.abs(horizontal) ** 2)


def slope_variance(wind_speed):
    """Mean square slope of the sea, both components (Cox & Munk 1954, clean surface) [1]; wind [m s-1] at 12.5 m."""
    return 0.003 + 0.00512 * wind_speed


def rough_sea_emissivity(wavenumber, zenith, wind_speed):
    """Emissivity of the wind-roughened sea.

    wavenumber [cm-1], zenith [degrees], wind_speed [m s-1]: scalars

    Returns
    -------
    mean of 1 - Fresnel reflectance over the facets that face the imager [1]
    """
    index = complex(refractive_index("water", wavenumber))
    spread = math.sqrt(0.5 * slope_variance(wind_speed))
    axis = np.linspace(-4.0, 4.0, _SLOPES) * spread
    x, y = np.meshgrid(axis, axis, indexing="ij")
    density = np.exp(-0.5 * (x**2 + y**2) / spread**2)
    theta = math.radians(zenith)
    # facet normal (-x, -y, 1) cos(tilt); the imager in the x-z plane
    facing = math.cos(theta) - x * math.sin(theta)  # cosine of incidence over cosine of tilt
    cosine = np.clip(facing / np.sqrt(1.0 + x**2 + y**2), 0.0, 1.0)
    weight = density * np.maximum(facing, 0.0)
    return float(np.sum(weight * (1.0 - fresnel_reflectance(index, cosine))) / np.sum(weight))


@functools.lru_cache(maxsize=256)
def sea_table(wavenumber):
    """Emissivity of the sea on `ZENITHS` x `WINDS` at a wavenumber [cm-1]."""
    return np.array([[rough_sea_emissivity(wavenumber, z, w) for w in WINDS] for z in ZENITHS])


def class_emissivity(surface_class, wavenumber):
    """Emissivity of land (1), desert (2), snow (3) or ice (4) at a wavenumber [cm-1]; no angle dependence [1]."""
    return float(np.interp(1e4 / wavenumber, _WAVELENGTHS_UM, _CLASSES[surface_class]))


@njit(cache=True)
def _interpolate(table, zeniths, winds, zenith, wind_speed, out):
    for c in range(zenith.size):
        i = min(max(np.searchsorted(zeniths, zenith[c]) - 1, 0), zeniths.size - 2)
        j = min(max(np.searchsorted(winds, wind_speed[c]) - 1, 0), winds.size - 2)
        a = min(max((zenith[c] - zeniths[i]) / (zeniths[i + 1] - zeniths[i]), 0.0), 1.0)
        b = min(max((wind_speed[c] - winds[j]) / (winds[j + 1] - winds[j]), 0.0), 1.0)
        out[c] = ((1.0 - a) * ((1.0 - b) * table[i, j] + b * table[i, j + 1])
                  + a * ((1.0 - b) * table[i + 1, j] + b * table[i + 1, j + 1]))  # fmt: skip


def channel_emissivity(surface_class, land_fraction, zenith, wind_speed, channel_wavenumbers, channel_weights):
    """Surface emissivity of channels.

    Parameters
    ----------
    surface_class : (columns,) int (see scene.variables.SURFACE_CLASSES), or None: sea and land by land_fraction
    land_fraction : (columns,) [1]; zenith : (columns,) [degrees]; wind_speed : (columns,) [m s-1]
    channel_wavenumbers, channel_weights : nodes [cm-1] and weights of each channel

    Raises
    ------
    OpticsError : an unknown surface class

    Returns
    -------
    (channels, columns) [1]; without a class, sea and land are mixed by land_fraction
    """
    if surface_class is not None and not np.isin(surface_class, (0, 1, 2, 3, 4)).all():
        wrong = surface_class[~np.isin(surface_class, (0, 1, 2, 3, 4))][0]
        raise OpticsError(f"surface class {wrong}: known are 0 sea, 1 land, 2 desert, 3 snow, 4 ice")
    out = np.empty((len(channel_wavenumbers), zenith.size))
    sea = np.empty(zenith.size)
    land = np.clip(land_fraction, 0.0, 1.0)
    for i, (nodes, weights) in enumerate(zip(channel_wavenumbers, channel_weights)):
        centre = round(float(np.average(nodes, weights=weights)), 1)
        _interpolate(
            sea_table(centre),
            ZENITHS,
            WINDS,
            np.ascontiguousarray(zenith, dtype=float),
            np.ascontiguousarray(wind_speed, dtype=float),
            sea,
        )
        ground = np.full(zenith.size, class_emissivity(1, centre))
        share = land
        if surface_class is not None:  # a class that is given wins over the land fraction
            for number in (2, 3, 4):
                ground[surface_class == number] = class_emissivity(number, centre)
            share = np.where(surface_class == 0, 0.0, 1.0)
        out[i] = sea + (ground - sea) * share
    return out


@njit(cache=True)
def glint_reflectance(view_cosine, sun_cosine, relative_azimuth, wind_speed, index_real, index_imaginary):
    """Bidirectional reflectance of the wind-roughened sea [sr-1]; 0 when imager or sun is not above the horizon.

    Reflected radiance = this x solar irradiance on a plane across the beam x sun_cosine. Relative azimuth
    [radians] is pi where imager and sun face each other (the specular direction). For many wavenumbers at one
    place take `glint_facets` once and `fresnel_intensity` for each: this is their product.

    Source: Cox & Munk 1954; rho(incidence) P(slopes) / (4 cos(view) cos(sun) cos(tilt)**4).
    """
    share, incidence = glint_facets(view_cosine, sun_cosine, relative_azimuth, wind_speed)
    if share == 0.0:
        return 0.0
    return share * fresnel_intensity(incidence, index_real, index_imaginary)


@njit(cache=True)
def glint_facets(view_cosine, sun_cosine, relative_azimuth, wind_speed):
    """(P(slopes) / (4 cos(view) cos(sun) cos(tilt)**4) [sr-1], cosine of incidence) of the mirroring facets.

    Within 5 degrees of the horizon waves hide each other, which is left out: the cosines of the denominator are
    held at cos 85 degrees there. Arguments and source as for `glint_reflectance`.
    """
    if not (view_cosine > 0.0 and sun_cosine > 0.0):
        return 0.0, 1.0
    sines = (1.0 - view_cosine * view_cosine) * (1.0 - sun_cosine * sun_cosine)
    cosine_angle = view_cosine * sun_cosine + math.sqrt(max(0.0, sines)) * math.cos(relative_azimuth)
    squared = 0.5 * (1.0 + cosine_angle)  # cosine of incidence, squared
    tilt_squared = (view_cosine + sun_cosine) ** 2 / (4.0 * max(squared, 1e-12))
    variance = 0.003 + 0.00512 * wind_speed
    exponent = (1.0 / tilt_squared - 1.0) / variance
    if exponent > _DARK:
        return 0.0, 1.0
    probability = math.exp(-exponent) / (math.pi * variance)
    cosines = max(view_cosine, _HORIZON) * max(sun_cosine, _HORIZON)
    return probability / (4.0 * cosines * tilt_squared * tilt_squared), math.sqrt(min(squared, 1.0))


@njit(cache=True)
def fresnel_intensity(cosine, index_real, index_imaginary):
    """`fresnel_reflectance` of one angle, for compiled callers [1]."""
    index = complex(index_real, index_imaginary)
    inside = cmath.sqrt(index * index - (1.0 - cosine * cosine))  # index times the cosine inside
    horizontal = (cosine - inside) / (cosine + inside)
    steep = index * index * cosine
    vertical = (steep - inside) / (steep + inside)
    return 0.5 * (horizontal.real**2 + horizontal.imag**2 + vertical.real**2 + vertical.imag**2)
