"""The invented air: air masses, temperature, humidity, ozone. Positions in degrees, pressure in Pa.

Level fields have axis 0 from top to surface; `pressure` comes as (level, 1, 1).
"""

import numpy as np
from scipy.interpolate import PchipInterpolator
from texture import bell, smooth_noise, step, warped

LOW_CENTRE = (25.0, 39.0)  # degrees_east, degrees_north, of the cyclone
_LOW_RADIUS = 4.2  # degrees, where half of the largest rotation is reached
_LOW_ROTATION = np.radians(250.0)
_FRONT_LATITUDE = 37.5

# Air masses: temperature [K] of tropical, subtropical and polar air in winter
_KNOTS_HPA = (3, 5, 10, 20, 30, 50, 70, 100, 150, 200, 250, 300, 400, 500, 700, 850, 925, 1000, 1060)
_TEMPERATURE_K = (
    (251, 243, 231, 222, 217, 207, 199, 194.5, 206, 219.5, 231.5, 241.5, 257, 268, 283.5, 291.5, 296, 300, 303.3),
    (250, 242.5, 231, 222, 217.5, 210, 206, 203.5, 210, 217.5, 225, 233, 248.5, 260, 276.5, 285, 288.5, 292.5, 296),
    (247, 241, 230, 222, 219, 217, 216.5, 217, 218.5, 219.5, 219, 220, 229, 239, 255, 264, 267.5, 270.5, 273.5),
)
# ozone mole fraction [1e-6] of the same
_OZONE_PPM = (
    (2.8, 4.6, 9.4, 8.0, 5.2, 1.5, 0.50, 0.13, 0.07, 0.055, 0.05, 0.048, 0.045, 0.042, 0.038, 0.032, 0.03, 0.028,
     0.028),
    (2.9, 4.8, 8.6, 7.0, 5.0, 2.0, 0.85, 0.28, 0.13, 0.085, 0.065, 0.056, 0.05, 0.047, 0.043, 0.04, 0.038, 0.035,
     0.035),
    (3.0, 4.9, 6.6, 5.9, 5.0, 3.6, 2.4, 1.3, 0.75, 0.48, 0.30, 0.15, 0.065, 0.052, 0.046, 0.042, 0.04, 0.038, 0.038),
)  # fmt: skip
_STRATOSPHERIC_HUMIDITY = 2.9e-6  # kg/kg, about 4.7 parts per million by volume


def unwound(longitude, latitude):
    """Position before the cyclone stirred the air: each ring is turned back by the angle of its radius.

    The steady-vortex picture of frontogenesis (Doswell 1984, J. Atmos. Sci. 41) with a broader vortex.
    """
    shrink = np.cos(np.radians(LOW_CENTRE[1]))
    dx, dy = (longitude - LOW_CENTRE[0]) * shrink, latitude - LOW_CENTRE[1]
    angle = -_LOW_ROTATION / (1.0 + (np.hypot(dx, dy) / _LOW_RADIUS) ** 2)
    x = np.cos(angle) * dx - np.sin(angle) * dy
    y = np.sin(angle) * dx + np.cos(angle) * dy
    return LOW_CENTRE[0] + x / shrink, LOW_CENTRE[1] + y


def front_distance(longitude, latitude):
    """Degrees on the cold side of the polar front near the ground; negative in warm air."""
    x, y = unwound(*warped(longitude, latitude, wavelength=9.0, amplitude=0.16, seed=41))
    # before the stirring the front ran from south-west to north-east; a ridge stands over the continent
    wave = 0.42 * (x - LOW_CENTRE[0]) * step(-x, -33.0, 18.0) + 6.5 * step(x, 38.0, 10.0)
    return y - LOW_CENTRE[1] + 1.0 - wave


def air_mass(longitude, latitude, pressure):
    """0 in tropical, 1 in subtropical, 2 in polar air; the front leans over the cold air with height."""
    distance = front_distance(longitude, latitude)
    height = np.clip((1e5 - pressure) / 7e4, 0.0, 1.0)
    polar = step(distance - 2.5 * height, 0.0, 1.6 + 5.5 * height)
    wave = 1.2 * smooth_noise(longitude, latitude, wavelength=30.0, seed=42, octaves=2)
    subtropical = step(latitude + wave, 16.5, 17.0)
    return np.maximum(subtropical + polar, 0.0)


def _by_air_mass(table, mass, pressure):
    """Three profiles interpolated in ln p, then between air masses."""
    log_knots = np.log(np.array(_KNOTS_HPA) * 100.0)
    tropical, subtropical, polar = (PchipInterpolator(log_knots, row)(np.log(pressure)) for row in table)
    to_polar = np.clip(mass - 1.0, 0.0, 1.0)
    to_subtropical = np.clip(mass, 0.0, 1.0)
    return tropical + to_subtropical * (subtropical - tropical) + to_polar * (polar - subtropical)


def free_temperature(longitude, latitude, pressure):
    """Temperature [K] without the influence of the ground."""
    mass = air_mass(longitude, latitude, pressure)
    temperature = _by_air_mass(_TEMPERATURE_K, mass, pressure)
    eddies = 0.5 * smooth_noise(longitude, latitude, wavelength=14.0, seed=43, octaves=3)
    return temperature + eddies * step(pressure, 1.5e4, 2e4)


def ozone(longitude, latitude, pressure):
    """Mole fraction of ozone [1]."""
    return 1e-6 * np.exp(_by_air_mass(np.log(_OZONE_PPM), air_mass(longitude, latitude, pressure), pressure))


def sea_level_pressure(longitude, latitude):
    """[Pa]: a deep low, a subtropical high over the sea, a cold high over the continent."""
    x, y = longitude, latitude
    low = -3200.0 * np.exp(-np.hypot((x - LOW_CENTRE[0]) * 0.78, y - LOW_CENTRE[1]) / 4.5)
    high = 800.0 * bell(x, y, 22.0, 23.0, 16.0, 8.0) + 1900.0 * bell(x, y, 58.0, 38.0, 16.0, 9.0)
    return 101250.0 - 330.0 * bell(x, y, 36.0, 0.0, 25.0, 7.0) + high + low


def wind_speed(longitude, latitude):
    """10 m wind [m/s] from the pressure gradient with friction, trades and gusts of noise."""
    d = 0.05
    slope_x = sea_level_pressure(longitude + d, latitude) - sea_level_pressure(longitude - d, latitude)
    slope_y = sea_level_pressure(longitude, latitude + d) - sea_level_pressure(longitude, latitude - d)
    slope = np.hypot(slope_x / np.cos(np.radians(latitude)), slope_y) / (2.0 * d * 1.112e5)
    coriolis = np.maximum(1.458e-4 * np.abs(np.sin(np.radians(latitude))), 3.5e-5)
    trades = 3.0 * bell(0.0 * longitude, latitude, 0.0, 13.0, 1.0, 8.0)
    gusts = 1.0 + 0.18 * smooth_noise(longitude, latitude, wavelength=5.0, seed=44)
    return np.clip((0.50 * slope / (1.2 * coriolis) + trades + 2.0) * gusts, 0.5, 28.0)


def dryness(longitude, latitude):
    """1 in air that has sunk from the upper troposphere, 0 outside [1]: the subtropical belt and the dry slot."""
    x, y = warped(longitude, latitude, wavelength=16.0, amplitude=1.3, seed=45)
    belt_middle = 20.5 + 3.0 * np.sin((x - 12.0) / 9.0)
    belt = bell(0.0 * x, y, 0.0, belt_middle, 1.0, 5.2, power=2.5)
    streamer = 0.85 * bell(x + 0.55 * y, y, 66.0, 11.5, 3.2, 6.0)
    return np.clip(np.maximum.reduce([belt, streamer, dry_slot(longitude, latitude)]), 0.0, 1.0)


def dry_slot(longitude, latitude):
    """1 in the dry tongue behind the cold front that winds into the low [1]."""
    x, y = unwound(longitude, latitude)
    behind = front_distance(longitude, latitude)
    band = step(behind, 0.9, 1.0) * (1.0 - step(behind, 3.6, 1.8))
    west = step(-x, -26.0, 3.0) * step(x, 5.0, 8.0)
    return band * west * step(np.hypot((longitude - LOW_CENTRE[0]) * 0.78, latitude - LOW_CENTRE[1]), 1.2, 1.2)


def relative_humidity(longitude, latitude, pressure, surface_pressure):
    """Relative humidity over water [1] away from cloud, in the troposphere."""
    x, y = longitude, latitude
    moist = 1.0 - step(y + 1.5 * smooth_noise(x, y, wavelength=18.0, seed=46), 11.0, 9.0)
    winter = step(y, 30.0, 10.0)
    near_front = np.exp(-(((front_distance(x, y) + 1.2) / 2.2) ** 2)) * winter
    filaments = smooth_noise(*unwound(*warped(x, y, wavelength=8.0, amplitude=0.7, seed=47)), wavelength=11.0, seed=49)
    middle = 0.20 + 0.31 * moist + 0.18 * winter + 0.30 * near_front
    middle = middle * np.exp(0.30 * filaments) * (1.0 - 0.80 * dryness(x, y))
    low = 0.80 - 0.12 * step(y, 30.0, 8.0)
    depth = 0.115 + 0.16 * moist + 0.06 * winter + 0.3 * near_front
    above = np.clip(1.0 - pressure / surface_pressure, 0.0, 1.0)
    mixed = low + 0.05 * np.clip(above / depth, 0.0, 1.0)
    return np.clip(mixed + (np.clip(middle, 0.025, 0.85) - mixed) * step(above, depth, 0.05 + 0.25 * moist), 0.02, 0.93)


def tropopause_pressure(mass):
    """[Pa] by air mass: about 105 hPa in the tropics, 250 hPa in polar air."""
    return 10500.0 + 4500.0 * np.clip(mass, 0.0, 1.0) ** 2 + 10500.0 * np.clip(mass - 1.0, 0.0, 1.0)


def dried_above_tropopause(specific_humidity, pressure, tropopause):
    """Humidity [kg/kg] going over into that of the stratosphere across the tropopause."""
    share = step(np.log(tropopause / pressure), 0.12, 0.5)
    tropospheric = np.maximum(specific_humidity, _STRATOSPHERIC_HUMIDITY)
    return np.exp((1.0 - share) * np.log(tropospheric) + share * np.log(_STRATOSPHERIC_HUMIDITY))
