"""Solar irradiance against a black body, a second standard and its own source."""

import numpy as np
import pytest

from chansim.errors import ViewError
from chansim.planck import brightness_temperature, planck
from chansim.view.solar_irradiance import per_wavenumber, solar_irradiance

# IAU 2015 nominal solar radius over the astronomical unit (IAU 2012)
SOLID_ANGLE = np.pi * (695700.0e3 / 149597870700.0) ** 2  # sr, 6.794e-5


def test_against_a_black_body():
    """The sun is close to a black body of 5772 K (IAU 2015 nominal effective temperature), a few per cent fainter
    in the middle infrared, where its continuum comes from higher, cooler layers."""
    wavenumber = np.linspace(2430.0, 2900.0, 95)  # 3.45-4.1 um
    ratio = solar_irradiance(wavenumber) / (SOLID_ANGLE * planck(wavenumber, 5772.0))
    assert 0.93 < ratio.min() < ratio.max() < 1.0
    temperature = brightness_temperature(wavenumber, solar_irradiance(wavenumber) / SOLID_ANGLE)
    assert 5500.0 < temperature.min() < temperature.max() < 5750.0
    # 5 um: the sun's brightness temperature is known to lie between 5100 and 5700 K (from memory)
    assert 5100.0 < brightness_temperature(2000.0, solar_irradiance(2000.0) / SOLID_ANGLE) < 5700.0


def test_against_the_other_standard():
    """ASTM G173-03, extraterrestrial column, as pvlib ships it (to 4 um)."""
    spectrum = pytest.importorskip("pvlib").spectrum
    table = spectrum.get_reference_spectra()["extraterrestrial"]
    for low, high, most in ((3.7, 4.0, 0.01), (3.45, 3.7, 0.025)):
        part = table[(table.index >= low * 1e3) & (table.index <= high * 1e3)]
        wavelength_um = part.index.values / 1e3
        ours = solar_irradiance(1e4 / wavelength_um)
        theirs = per_wavenumber(wavelength_um, part.values * 1e3)
        assert np.mean(ours / theirs) == pytest.approx(1.0, abs=most)
        assert np.abs(ours / theirs - 1.0).max() < most + 0.012


def test_values_of_the_standard():
    """ASTM E490-00: 10.19 W m-2 um-1 at 3.84 um, 3.504 at 5 um; conversion by hand: 10.19 * 3.84**2 / 10."""
    assert solar_irradiance(1e4 / 3.84) == pytest.approx(15.0258, rel=1e-4)
    assert solar_irradiance(2000.0) == pytest.approx(8.760, rel=1e-4)
    assert solar_irradiance(np.array([[2500.0, 2600.0]])).shape == (1, 2)


def test_outside_the_table():
    with pytest.raises(ViewError, match="625 to 3125"):
        solar_irradiance([2600.0, 4000.0])
    with pytest.raises(ViewError, match="tabulated"):
        solar_irradiance(np.nan)


def test_table_is_as_the_recipe_makes_it():
    pytest.importorskip("sbpy")
    from chansim.view import build_tables

    assert (build_tables.DATA / "solar_irradiance.csv").read_text().splitlines() == build_tables.solar_irradiance()
