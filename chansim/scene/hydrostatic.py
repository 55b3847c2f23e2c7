"""Heights and pressures in hydrostatic balance. `level`, where there is one, is axis 0, top to surface."""

import numpy as np

from chansim.constants import EARTH_RADIUS, GAS_CONSTANT, MOLAR_MASS_DRY_AIR, STANDARD_GRAVITY
from chansim.scene.humidity import virtual_temperature

GAS_CONSTANT_DRY_AIR = GAS_CONSTANT / MOLAR_MASS_DRY_AIR  # J kg-1 K-1
SCALE = GAS_CONSTANT_DRY_AIR / STANDARD_GRAVITY  # m K-1
STANDARD_LAPSE_RATE = 6.5e-3  # K m-1, US Standard Atmosphere 1976, troposphere
_STANDARD_TEMPERATURE = 288.15  # K, the same at sea level
_STANDARD_PRESSURE = 101325.0  # Pa
_KAPPA = 2.0 / 7.0  # R / c_p of a diatomic gas


def layer_thickness(pressure_below, pressure_above, virtual_temperature_mean):
    """Geopotential thickness of a layer, dz = (R T_v / g) ln(p_below / p_above).

    Parameters
    ----------
    pressure_below, pressure_above : arrays [Pa]
    virtual_temperature_mean : array, mean over ln p [K]

    Returns
    -------
    array [m]

    Source: hypsometric equation, e.g. Wallace and Hobbs 2006, eq. 3.24.
    """
    return SCALE * virtual_temperature_mean * np.log(pressure_below / pressure_above)


def lapse_layer_thickness(pressure_below, pressure_above, virtual_temperature_above):
    """Geopotential thickness of a layer that warms downward at the standard lapse rate.

    Parameters
    ----------
    pressure_below, pressure_above : arrays [Pa]
    virtual_temperature_above : array, at the upper side [K]

    Returns
    -------
    array [m]

    Source: US Standard Atmosphere 1976, eq. 33a, solved for the height difference.
    """
    growth = (pressure_below / pressure_above) ** (SCALE * STANDARD_LAPSE_RATE)
    return virtual_temperature_above / STANDARD_LAPSE_RATE * (growth - 1.0)


def geometric_height(geopotential_height):
    """Geometric height above sea level, z = R H / (R - H).

    Parameters
    ----------
    geopotential_height : array [m]

    Returns
    -------
    array [m]

    Source: US Standard Atmosphere 1976, eq. 19, with the mean Earth radius.
    """
    return EARTH_RADIUS * geopotential_height / (EARTH_RADIUS - geopotential_height)


def geopotential_height(geometric_height):
    """Geopotential height, H = R z / (R + z).

    Parameters
    ----------
    geometric_height : array [m]

    Returns
    -------
    array [m]

    Source: US Standard Atmosphere 1976, eq. 18.
    """
    return EARTH_RADIUS * geometric_height / (EARTH_RADIUS + geometric_height)


def standard_height(pressure):
    """Geopotential height of a pressure in the troposphere of the US Standard Atmosphere 1976.

    Parameters
    ----------
    pressure : array [Pa], above 22632

    Returns
    -------
    array [m]

    Source: US Standard Atmosphere 1976, eq. 33a.
    """
    ratio = (pressure / _STANDARD_PRESSURE) ** (SCALE * STANDARD_LAPSE_RATE)
    return _STANDARD_TEMPERATURE / STANDARD_LAPSE_RATE * (1.0 - ratio)


def temperature_from_potential(potential_temperature, pressure):
    """Temperature, T = theta (p / 1000 hPa)**(2/7).

    Parameters
    ----------
    potential_temperature : array [K]
    pressure : array [Pa]

    Returns
    -------
    array [K]

    Source: Poisson's equation, e.g. Wallace and Hobbs 2006, eq. 3.54.
    """
    return potential_temperature * (pressure / 1e5) ** _KAPPA


def pressure_from_heights(height, temperature_v, known_pressure, known_height, ground=-np.inf):
    """Pressure on levels of known height, in hydrostatic balance with a pressure known at one height.

    T_v is linear in height between levels, in which the integral is exact; below the lowest level it grows at the
    standard lapse rate, above the top one it is constant. Levels under the ground, or without temperature below the
    first one that has it, get the standard lapse rate too.

    Parameters
    ----------
    height : array (level, ...), geopotential [m]
    temperature_v : array (level, ...), virtual temperature [K]
    known_pressure, known_height : arrays (...), e.g. of the ground [Pa, m]
    ground : array (...), geopotential [m]

    Returns
    -------
    array (level, ...) [Pa]

    Source: hypsometric equation, e.g. Wallace and Hobbs 2006, eq. 3.24, d ln p = -g / (R T_v) dz.
    """
    temperature_v = _continued_downward(height, temperature_v, ground, STANDARD_LAPSE_RATE)
    depth = _inverse_integral(height, temperature_v, known_height, STANDARD_LAPSE_RATE)
    return known_pressure * np.exp(depth / SCALE)


def pressure_from_heights_and_potential(height, potential_temperature_v, known_pressure, known_height, ground=-np.inf):
    """The same where the virtual potential temperature is known; it is linear in height, constant beyond the levels.

    Parameters
    ----------
    height : array (level, ...), geopotential [m]
    potential_temperature_v : array (level, ...), virtual potential temperature [K]
    known_pressure, known_height, ground : see there [Pa, m, m]

    Returns
    -------
    array (level, ...) [Pa]

    Source: hydrostatic equation in the Exner function, d Pi = -g / (c_p theta_v) dz, e.g. Holton and Hakim 2013.
    """
    potential_temperature_v = _continued_downward(height, potential_temperature_v, ground, 0.0)
    depth = _inverse_integral(height, potential_temperature_v, known_height, 0.0)
    exner = (known_pressure / 1e5) ** _KAPPA + depth * _KAPPA / SCALE  # g / c_p = kappa g / R
    return 1e5 * np.maximum(exner, 1e-3) ** (1.0 / _KAPPA)


def pressure_from_density(density, temperature_v):
    """Pressure by the ideal gas law, p = rho R T_v.

    Parameters
    ----------
    density : array, of moist air [kg m-3]
    temperature_v : array, virtual temperature [K]

    Returns
    -------
    array [Pa]

    Source: e.g. Wallace and Hobbs 2006, eq. 3.15.
    """
    return density * GAS_CONSTANT_DRY_AIR * temperature_v


def pressure_from_density_and_potential(density, potential_temperature_v):
    """The same from the virtual potential temperature, p = p_0 (rho R theta_v / p_0)**(1 / (1 - kappa)).

    Parameters
    ----------
    density : array, of moist air [kg m-3]
    potential_temperature_v : array [K]

    Returns
    -------
    array [Pa]

    Source: ideal gas law with Poisson's equation, e.g. Wallace and Hobbs 2006, eq. 3.15 and 3.54.
    """
    return 1e5 * (density * GAS_CONSTANT_DRY_AIR * potential_temperature_v / 1e5) ** (1.0 / (1.0 - _KAPPA))


def pressure_from_exner(exner):
    """Pressure from the Exner function, p = p_0 Pi**(c_p / R).

    Parameters
    ----------
    exner : array [1]

    Returns
    -------
    array [Pa]

    Source: Poisson's equation, e.g. Wallace and Hobbs 2006, eq. 3.54.
    """
    return 1e5 * exner ** (1.0 / _KAPPA)


def _continued_downward(height, values, ground, lapse_rate):
    """Values with those under the ground, or missing at the bottom, continued from above at a lapse rate."""
    values = np.array(values, dtype=float)
    for k in range(1, len(values)):
        under = (height[k] < ground) | np.isnan(values[k])
        continued = values[k - 1] + lapse_rate * (height[k - 1] - height[k])
        values[k] = np.where(under, continued, values[k])
    return values


def _inverse_integral(height, values, known_height, lapse_rate):
    """Integral of dz / values from each level up to a known height; negative above it (level, ...)."""
    layers = [_layer_integral(height[k], height[k + 1], values[k], values[k + 1]) for k in range(len(height) - 1)]
    from_top = np.concatenate([np.zeros((1, *values.shape[1:])), np.cumsum(layers, axis=0)]) if layers else 0.0 * values
    # above the top level: constant; below the lowest: at the lapse rate
    known = -(known_height - height[0]) / values[0]
    for k in range(len(height) - 1):
        share = (height[k] - known_height) / np.where(height[k] == height[k + 1], 1.0, height[k] - height[k + 1])
        there = values[k] + share * (values[k + 1] - values[k])
        inside = from_top[k] + _layer_integral(height[k], known_height, values[k], np.maximum(there, 1.0))
        known = np.where((known_height <= height[k]) & (known_height >= height[k + 1]), inside, known)
    there = values[-1] + lapse_rate * (height[-1] - known_height)
    beneath = from_top[-1] + _layer_integral(height[-1], known_height, values[-1], np.maximum(there, 1.0))
    return from_top - np.where(known_height < height[-1], beneath, known)


def _layer_integral(upper_height, lower_height, upper, lower):
    """Integral of dz / T over a layer in which T is linear: thickness over the logarithmic mean."""
    contrast = lower - upper
    small = np.abs(contrast) < 1e-6 * upper
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = np.where(small, 0.5 * (upper + lower), contrast / np.log(lower / upper))
    return (upper_height - lower_height) / mean


def heights_from_surface(pressure, temperature, specific_humidity, surface_pressure, surface_height):
    """Geopotential heights of the levels, integrated upward from the surface.

    T_v is linear in ln p between levels; from the surface to the lowest level above it, it follows the
    standard lapse rate.

    Parameters
    ----------
    pressure : array (level, ...), or (level,) [Pa]
    temperature : array (level, ...) [K]
    specific_humidity : array (level, ...) [kg kg-1]
    surface_pressure : array (...) [Pa]
    surface_height : array (...), geopotential [m]

    Returns
    -------
    array (level, ...) [m], NaN on levels below ground
    """
    temperature_v = virtual_temperature(temperature, specific_humidity)
    pressure = np.asarray(pressure, dtype=float)
    if pressure.ndim == 1:
        pressure = pressure.reshape((-1,) + (1,) * (temperature_v.ndim - 1))
    pressure = np.broadcast_to(pressure, temperature_v.shape)
    height = np.full(temperature_v.shape, np.nan)
    below = np.full(temperature_v.shape[1:], np.nan)
    for k in range(len(pressure) - 1, -1, -1):
        above_ground = pressure[k] <= surface_pressure
        first = above_ground & np.isnan(below)
        from_surface = surface_height + lapse_layer_thickness(surface_pressure, pressure[k], temperature_v[k])
        if k + 1 < len(pressure):
            mean = 0.5 * (temperature_v[k] + temperature_v[k + 1])
            from_level = below + layer_thickness(pressure[k + 1], pressure[k], mean)
        else:
            from_level = from_surface
        height[k] = np.where(first, from_surface, np.where(above_ground, from_level, np.nan))
        below = height[k]
    return height


def surface_pressure_from_heights(pressure, height, temperature, surface_height):
    """Pressure where the height of the levels meets the ground.

    Between two levels ln p is linear in height; below the lowest level the column goes on at the standard
    lapse rate.

    Parameters
    ----------
    pressure : array (level,) or (level, ...) [Pa]
    height : array (level, ...) [m]
    temperature : array (level, ...) [K]
    surface_height : array (...) [m]

    Returns
    -------
    array (...) [Pa]
    """
    pressure = np.asarray(pressure, dtype=float)
    if pressure.ndim == 1:
        pressure = pressure.reshape((-1,) + (1,) * (np.ndim(height) - 1))
    log_pressure = np.log(np.broadcast_to(pressure, np.shape(height)))
    result = np.full(np.shape(surface_height), np.nan)
    for k in range(len(height) - 1):
        inside = (height[k] >= surface_height) & (height[k + 1] <= surface_height)
        weight = (height[k] - surface_height) / np.where(inside, height[k] - height[k + 1], 1.0)
        value = np.where(inside, log_pressure[k] + weight * (log_pressure[k + 1] - log_pressure[k]), 0.0)
        result = np.where(inside, np.exp(value), result)
    drop = height[-1] - surface_height
    warmth = 1.0 + STANDARD_LAPSE_RATE * drop / temperature[-1]
    below = np.exp(log_pressure[-1]) * np.maximum(warmth, 0.1) ** (1.0 / (SCALE * STANDARD_LAPSE_RATE))
    return np.where(drop > 0.0, below, result)


def scene_heights(scene):
    """Geometric heights of the levels of a canonical scene.

    The scene's own `height` when it has one; else hydrostatic, from `orography`, or from the height that
    the US Standard Atmosphere gives the surface pressure.

    Parameters
    ----------
    scene : canonical Dataset; a lazy one stays lazy

    Returns
    -------
    DataArray (level, ...) above mean sea level [m], NaN below ground unless the scene gives heights there
    """
    import xarray as xr

    if "height" in scene:
        return scene["height"]
    surface_pressure = scene["surface_pressure"]
    ground = scene["orography"] if "orography" in scene else standard_height(surface_pressure)
    column_dims = [["level"], ["level"], ["level"], [], []]

    def integrate(pressure, temperature, specific_humidity, surface_pressure, ground):
        # apply_ufunc puts the level last
        on_top = [np.moveaxis(values, -1, 0) for values in (pressure, temperature, specific_humidity)]
        geopotential = heights_from_surface(*on_top, surface_pressure, geopotential_height(ground))
        return np.moveaxis(geometric_height(geopotential), 0, -1)

    heights = xr.apply_ufunc(
        integrate,
        scene["pressure"],
        scene["temperature"],
        scene["specific_humidity"],
        surface_pressure,
        ground,
        input_core_dims=column_dims,
        output_core_dims=[["level"]],
        dask="parallelized",
        output_dtypes=[float],
    )
    heights = heights.transpose("level", ...).rename("height")
    heights.attrs = {"units": "m", "standard_name": "height_above_mean_sea_level"}
    return heights
