"""Water vapour: one formula per function, NumPy arrays or scalars of any matching shapes."""

import numpy as np

from chansim.constants import WATER_TO_AIR

_TRIPLE_POINT = 273.16  # K
_ALL_ICE = 250.16  # K, ECMWF IFS documentation part IV, chapter 12: below it saturation is over ice


def saturation_vapour_pressure_water(temperature):
    """Saturation vapour pressure over liquid water, also supercooled.

    Parameters
    ----------
    temperature : array [K], 123 to 332

    Returns
    -------
    array [Pa]

    Source: Murphy and Koop 2005, Q. J. R. Meteorol. Soc. 131, eq. 10.
    """
    t = temperature
    log_t = np.log(t)
    return np.exp(
        54.842763 - 6763.22 / t - 4.210 * log_t + 0.000367 * t
        + np.tanh(0.0415 * (t - 218.8)) * (53.878 - 1331.22 / t - 9.44523 * log_t + 0.014025 * t)
    )  # fmt: skip


def saturation_vapour_pressure_ice(temperature):
    """Saturation vapour pressure over ice.

    Parameters
    ----------
    temperature : array [K], above 110; meaningful up to 273.16

    Returns
    -------
    array [Pa]

    Source: Murphy and Koop 2005, Q. J. R. Meteorol. Soc. 131, eq. 7.
    """
    t = temperature
    return np.exp(9.550426 - 5723.265 / t + 3.53068 * np.log(t) - 0.00728332 * t)


def saturation_vapour_pressure_mixed(temperature):
    """Saturation over water above the triple point, over ice below 250.16 K, in between a mixture.

    Parameters
    ----------
    temperature : array [K]

    Returns
    -------
    array [Pa]

    Source: the liquid share ((T - 250.16) / (273.16 - 250.16))**2 of the ECMWF IFS documentation,
    part IV, chapter 12.
    """
    share = np.clip((temperature - _ALL_ICE) / (_TRIPLE_POINT - _ALL_ICE), 0.0, 1.0) ** 2
    over_water = saturation_vapour_pressure_water(temperature)
    return share * over_water + (1.0 - share) * saturation_vapour_pressure_ice(temperature)


def saturation_vapour_pressure_ice_below_freezing(temperature):
    """Saturation over ice below the triple point, over water above it.

    Parameters
    ----------
    temperature : array [K]

    Returns
    -------
    array [Pa]
    """
    return np.where(
        temperature < _TRIPLE_POINT,
        saturation_vapour_pressure_ice(temperature),
        saturation_vapour_pressure_water(temperature),
    )


# what a model may mean by relative humidity, by name
SATURATION = {
    "water": saturation_vapour_pressure_water,
    "ice_below_freezing": saturation_vapour_pressure_ice_below_freezing,
    "mixed": saturation_vapour_pressure_mixed,
}


def specific_humidity_from_vapour_pressure(vapour_pressure, pressure):
    """Specific humidity, q = eps e / (p - (1 - eps) e).

    Parameters
    ----------
    vapour_pressure, pressure : arrays [Pa]

    Returns
    -------
    array [kg kg-1]
    """
    return WATER_TO_AIR * vapour_pressure / (pressure - (1.0 - WATER_TO_AIR) * vapour_pressure)


def vapour_pressure_from_specific_humidity(specific_humidity, pressure):
    """Partial pressure of water vapour, e = q p / (eps + (1 - eps) q).

    Parameters
    ----------
    specific_humidity : array [kg kg-1]
    pressure : array [Pa]

    Returns
    -------
    array [Pa]
    """
    return specific_humidity * pressure / (WATER_TO_AIR + (1.0 - WATER_TO_AIR) * specific_humidity)


def specific_humidity_from_relative_humidity(relative_humidity, temperature, pressure, over="water"):
    """Specific humidity from relative humidity, RH = e / e_s (WMO-No. 8: e_s over liquid water).

    Parameters
    ----------
    relative_humidity : array [1]
    temperature : array [K]
    pressure : array [Pa]
    over : "water" (WMO), "ice_below_freezing" or "mixed": what the saturation is taken over

    Returns
    -------
    array [kg kg-1]
    """
    return specific_humidity_from_vapour_pressure(relative_humidity * SATURATION[over](temperature), pressure)


def relative_humidity_from_specific_humidity(specific_humidity, temperature, pressure, over="water"):
    """Relative humidity, RH = e / e_s.

    Parameters
    ----------
    specific_humidity : array [kg kg-1]
    temperature : array [K]
    pressure : array [Pa]
    over : see `specific_humidity_from_relative_humidity`

    Returns
    -------
    array [1]
    """
    return vapour_pressure_from_specific_humidity(specific_humidity, pressure) / SATURATION[over](temperature)


def specific_humidity_from_dew_point(dew_point, pressure):
    """Specific humidity of air whose vapour is saturated over liquid water at the dew point.

    Parameters
    ----------
    dew_point : array [K]
    pressure : array [Pa]

    Returns
    -------
    array [kg kg-1]
    """
    return specific_humidity_from_vapour_pressure(saturation_vapour_pressure_water(dew_point), pressure)


def specific_humidity_from_mixing_ratio(mixing_ratio):
    """Specific humidity from the mass of vapour per mass of dry air, q = r / (1 + r).

    Parameters
    ----------
    mixing_ratio : array [kg kg-1]

    Returns
    -------
    array [kg kg-1]
    """
    return mixing_ratio / (1.0 + mixing_ratio)


def mole_fraction_from_specific_humidity(specific_humidity):
    """Mole fraction of water vapour in moist air, x = q / (eps + (1 - eps) q).

    Parameters
    ----------
    specific_humidity : array [kg kg-1]

    Returns
    -------
    array [1]
    """
    return specific_humidity / (WATER_TO_AIR + (1.0 - WATER_TO_AIR) * specific_humidity)


def specific_humidity_from_mole_fraction(mole_fraction):
    """Specific humidity from the mole fraction of water vapour in moist air.

    Parameters
    ----------
    mole_fraction : array [1]

    Returns
    -------
    array [kg kg-1]
    """
    return WATER_TO_AIR * mole_fraction / (1.0 - (1.0 - WATER_TO_AIR) * mole_fraction)


def virtual_temperature(temperature, specific_humidity):
    """Temperature of dry air as light as the moist air, T_v = T (1 + (1 / eps - 1) q).

    Parameters
    ----------
    temperature : array [K]
    specific_humidity : array [kg kg-1]

    Returns
    -------
    array [K]
    """
    return temperature * (1.0 + (1.0 / WATER_TO_AIR - 1.0) * specific_humidity)
