"""Sunlight that reaches the top of the atmosphere, by wavenumber.

ASTM E490-00, Standard Solar Constant and Zero Air Mass Solar Spectral Irradiance Tables, 3.2-16.5 um, steps of
0.02 um below 5 um. No uncertainty is given with the values in the infrared. Its neighbour ASTM G173-03
(extraterrestrial column, to 4 um) has the same mean between 3.7 and 4 um (within 0.1 %, single points within
1 %) and is 1.8 % lower between 3.4 and 3.7 um. Near 5 um the table falls to a solar brightness temperature of
5200 K, which may be 5-10 % too low in irradiance. Take 2 % (one standard deviation) between 3.5 and 4.1 um and
5 % beyond.
"""

import functools
from importlib import resources

import numpy as np

from chansim.errors import DataError, ViewError

LOWEST_WAVENUMBER, HIGHEST_WAVENUMBER = 1e4 / 16.0, 1e4 / 3.2  # cm-1
RELATIVE_UNCERTAINTY = 0.02  # one standard deviation, 3.5-4.1 um


def solar_irradiance(wavenumber):
    """Solar spectral irradiance at 1 astronomical unit.

    For another day of the year multiply by `solar_position.solar_distance_factor(time)`. Lines of the solar
    spectrum are not resolved: the table is a mean over about 10 cm-1.

    Parameters
    ----------
    wavenumber : any shape, 625 to 3125 [cm-1]

    Returns
    -------
    on a surface facing the sun, shape of `wavenumber` [mW m-2 (cm-1)-1]

    Raises
    ------
    ViewError : wavenumber outside the table

    Source: ASTM E490-00, linear in wavenumber between its points.
    """
    wavenumber = np.asarray(wavenumber, dtype=float)
    if not ((wavenumber >= LOWEST_WAVENUMBER) & (wavenumber <= HIGHEST_WAVENUMBER)).all():
        raise ViewError(
            f"wavenumbers {np.min(wavenumber):g} to {np.max(wavenumber):g} cm-1: the solar irradiance is tabulated "
            f"from {LOWEST_WAVENUMBER:g} to {HIGHEST_WAVENUMBER:g} cm-1 (3.2 to 16 um)"
        )
    return np.interp(wavenumber, *_table())


def per_wavenumber(wavelength_um, irradiance):
    """Irradiance per cm-1 [mW m-2 (cm-1)-1] from that per um [W m-2 um-1]; wavelength [um].

    F_wavenumber = F_wavelength * wavelength**2 / 1e4, from |d wavelength / d wavenumber|
    """
    return 1e3 * irradiance * wavelength_um**2 / 1e4


@functools.cache
def _table():
    """Wavenumber [cm-1], ascending, and irradiance [mW m-2 (cm-1)-1]."""
    try:
        text = (resources.files("chansim") / "data" / "solar_irradiance.csv").read_text()
    except OSError as error:
        raise DataError(f"chansim/data/solar_irradiance.csv cannot be read ({error}); install chansim again") from None
    rows = [line.split(",") for line in text.splitlines() if not line.startswith("#")][1:]
    wavelength_um, irradiance = np.array(rows, dtype=float).T
    return 1e4 / wavelength_um[::-1], per_wavenumber(wavelength_um, irradiance)[::-1]
