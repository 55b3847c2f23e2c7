"""The invented land and sea: where land is, how high, what covers it. Positions in degrees."""

import numpy as np
from texture import bell, smooth_noise, step

SEA, LAND, DESERT, SNOW = 0, 1, 2, 3  # flag values of surface_class
PLATEAU_CENTRE = (53.0, 37.5)  # degrees_east, degrees_north


def land_fraction(longitude, latitude):
    """Share of land [1]: a continent in the north-east, a cape in the north-west, islands in the tropics."""
    x, y = longitude, latitude
    south_coast = 20.5 + 2.6 * np.sin((x - 39.0) / 5.2) + 0.12 * (x - 45.0)
    west_coast = 38.5 + 2.2 * np.sin(y / 3.7) - 0.10 * (y - 30.0)
    inland = np.minimum(y - south_coast, x - west_coast)  # about degrees from the coast
    inland = inland - 9.0 * bell(x, y, 58.0, 21.5, 3.0, 4.5)  # a gulf
    cape = 5.0 - np.hypot((x - 10.0) / 1.25, (y - 37.5) * 1.05)
    island = 2.4 - np.hypot((x - 19.5) / 1.6, y - 4.5)
    islets = 3.4 * bell(x, y, 60.0, -2.0, 4.0, 2.0) + smooth_noise(x, y, wavelength=4.0, seed=11) - 4.0
    nearest = np.maximum.reduce([inland, cape, island, islets])
    ragged = nearest + 0.65 * smooth_noise(x, y, wavelength=7.0, seed=12, octaves=5, persistence=0.62)
    return np.clip(0.5 + ragged / 0.3, 0.0, 1.0)


def orography(longitude, latitude):
    """Height of the ground [m]: a plateau of some 4500 m in the continent, hills, an island volcano."""
    x, y = longitude, latitude
    land = land_fraction(x, y)
    roughness = smooth_noise(x, y, wavelength=5.0, seed=21, octaves=5)
    ridges = 1.0 - np.abs(smooth_noise(x, y, wavelength=4.0, seed=22, octaves=4))
    nearness = plateau(x, y)
    high = nearness * (4300.0 + 180.0 * roughness) + 900.0 * 4.0 * nearness * (1.0 - nearness) * ridges
    hills = 260.0 * step(x, 42.0, 8.0) * step(y, 24.0, 6.0) * (1.1 + 0.8 * roughness)
    range_west = 1500.0 * bell(x, y, 42.5, 30.0, 1.6, 7.0) * np.maximum(ridges, 0.2)
    cape = 500.0 * bell(x, y, 10.5, 37.5, 4.0, 3.0) * (1.2 + 0.8 * roughness)
    volcano = 1900.0 * bell(x, y, 19.0, 4.8, 1.1, 0.9)
    return np.maximum(land * (25.0 + np.maximum(high + hills + range_west + cape + volcano, 0.0)), 0.0)


def plateau(longitude, latitude):
    """1 on the plateau, 0 away from it, with a steep rim [1]."""
    ragged = 0.10 * smooth_noise(longitude, latitude, wavelength=6.0, seed=23, octaves=4)
    x0, y0 = PLATEAU_CENTRE
    return step(1.0 + ragged - np.hypot((longitude - x0) / 7.5, (latitude - y0) / 4.0), 0.0, 0.28)


def snow_cover(longitude, latitude):
    """Share of snow on land [1]: on high ground and in the far north."""
    texture = smooth_noise(longitude, latitude, wavelength=3.0, seed=31)
    high = step(orography(longitude, latitude) + 250.0 * texture, 2500.0 - 60.0 * (latitude - 35.0), 700.0)
    north = step(latitude + 0.9 * texture, 42.2, 1.4) * step(longitude, 36.0, 6.0)
    return np.maximum(high * step(latitude, 27.0, 4.0), north)


def aridity(longitude, latitude):
    """1 in the desert, 0 outside [1]."""
    ragged = 1.3 * smooth_noise(longitude, latitude, wavelength=6.0, seed=32)
    inside = step(longitude + ragged, 43.5, 3.0) * step(latitude, 14.0, 2.0)
    return inside * (1.0 - step(latitude + ragged, 32.0, 3.0))


def surface_class(longitude, latitude):
    """Flag values of the surface, int8."""
    land = land_fraction(longitude, latitude) >= 0.5
    kind = np.where(aridity(longitude, latitude) > 0.5, DESERT, LAND)
    kind = np.where(snow_cover(longitude, latitude) > 0.5, SNOW, kind)
    return np.where(land, kind, SEA).astype(np.int8)


def sea_surface_temperature(longitude, latitude):
    """Temperature of the sea [K]: warm in the south-east, cool off the west coast of the continent."""
    x, y = longitude, latitude
    zonal = 301.8 - 0.0118 * np.maximum(y - 2.0, 0.0) ** 2 - 0.12 * np.maximum(y - 12.0, 0.0)
    upwelling = 3.2 * bell(x, y, 33.0, 21.0, 7.0, 8.0)
    warm_pool = 1.2 * bell(x, y, 58.0, 5.0, 12.0, 8.0)
    eddies = 0.35 + 0.55 * step(y, 30.0, 6.0)
    return zonal - upwelling + warm_pool + eddies * smooth_noise(x, y, wavelength=4.5, seed=33)
