"""Water vapour against published tables and MetPy."""

import numpy as np
import pytest

import chansim  # noqa: F401
from chansim.scene import humidity

TEMPERATURE = np.linspace(240.0, 310.0, 15)
PRESSURE = np.linspace(30000.0, 101325.0, 15)


@pytest.mark.parametrize(
    ("temperature", "over_ice", "over_water"),
    [  # Murphy and Koop 2005, table C1 (test values; from memory)
        (150.0, 6.106e-6, 1.562e-5),
        (180.0, 0.0053975, 0.011239),
        (210.0, 0.70202, 1.2335),
        (240.0, 27.272, 37.667),
        (273.15, 611.154, 611.213),
    ],
)
def test_saturation_reproduces_the_published_test_values(temperature, over_ice, over_water):
    assert humidity.saturation_vapour_pressure_ice(temperature) == pytest.approx(
        over_ice, rel=1e-4
    )  # to the digits printed
    assert humidity.saturation_vapour_pressure_water(temperature) == pytest.approx(over_water, rel=1e-4)


def test_saturation_at_300_kelvin():
    # Murphy and Koop 2005, table C1 (from memory)
    assert humidity.saturation_vapour_pressure_water(300.0) == pytest.approx(3536.8, rel=2e-5)


@pytest.mark.parametrize(
    ("celsius", "pascal"),
    # Wagner and Pruss 2002 (IAPWS-95), saturation pressure of water; from memory
    [(0.01, 611.657), (10.0, 1228.2), (20.0, 2339.2), (30.0, 4247.0), (40.0, 7384.9)],
)
def test_saturation_agrees_with_the_steam_tables(celsius, pascal):
    assert humidity.saturation_vapour_pressure_water(celsius + 273.15) == pytest.approx(pascal, rel=1e-3)


def test_saturation_agrees_with_the_wmo_formula():
    # WMO-No. 8 (2018), annex 4.B: e_w = 6.112 exp(17.62 t / (243.12 + t)) hPa, -45 to 60 degC;
    # e_i = 6.112 exp(22.46 t / (272.62 + t)) hPa, -65 to 0 degC
    celsius = np.linspace(-40.0, 45.0, 30)
    wmo = 611.2 * np.exp(17.62 * celsius / (243.12 + celsius))
    np.testing.assert_allclose(humidity.saturation_vapour_pressure_water(celsius + 273.15), wmo, rtol=6e-3)
    celsius = np.linspace(-65.0, 0.0, 30)
    wmo = 611.2 * np.exp(22.46 * celsius / (272.62 + celsius))
    np.testing.assert_allclose(humidity.saturation_vapour_pressure_ice(celsius + 273.15), wmo, rtol=6e-3)


def test_mixed_saturation_lies_between_ice_and_water():
    temperature = np.linspace(230.0, 290.0, 61)
    mixed = humidity.saturation_vapour_pressure_mixed(temperature)
    ice = humidity.saturation_vapour_pressure_ice(temperature)
    water = humidity.saturation_vapour_pressure_water(temperature)
    np.testing.assert_allclose(mixed[temperature < 250.0], ice[temperature < 250.0])
    np.testing.assert_allclose(mixed[temperature > 273.2], water[temperature > 273.2])
    between = (temperature > 251.0) & (temperature < 273.0)
    assert np.all((mixed > ice)[between] & (mixed < water)[between])


@pytest.fixture(scope="module")
def metpy():
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    return calc, units


def test_relative_humidity_agrees_with_metpy(metpy):
    calc, units = metpy
    relative = np.linspace(0.05, 1.0, 15)
    ratio = calc.mixing_ratio_from_relative_humidity(
        PRESSURE * units.Pa, TEMPERATURE * units.K, relative * units.dimensionless
    )
    expected = calc.specific_humidity_from_mixing_ratio(ratio).magnitude
    ours = humidity.specific_humidity_from_relative_humidity(relative, TEMPERATURE, PRESSURE)
    # MetPy's saturation (Ambaum 2020) takes constant heat capacities: by 0.4 % apart at 37 degC, where the
    # steam tables above hold us to 0.1 %, and by 1 % at -33 degC
    np.testing.assert_allclose(ours, expected, rtol=1e-2)
    warm = TEMPERATURE > 273.15
    np.testing.assert_allclose(ours[warm], expected[warm], rtol=5e-3)


def test_dew_point_agrees_with_metpy(metpy):
    calc, units = metpy
    dew_point = TEMPERATURE - 5.0
    expected = calc.specific_humidity_from_dewpoint(PRESSURE * units.Pa, dew_point * units.K).magnitude
    ours = humidity.specific_humidity_from_dew_point(dew_point, PRESSURE)
    np.testing.assert_allclose(ours, expected, rtol=1e-2)


def test_mixing_ratio_and_virtual_temperature_agree_with_metpy(metpy):
    calc, units = metpy
    ratio = np.linspace(1e-4, 0.03, 15)
    expected = calc.specific_humidity_from_mixing_ratio(ratio * units("kg/kg")).magnitude
    specific = humidity.specific_humidity_from_mixing_ratio(ratio)
    np.testing.assert_allclose(specific, expected, rtol=1e-12)
    expected = calc.virtual_temperature(TEMPERATURE * units.K, ratio * units("kg/kg")).magnitude
    np.testing.assert_allclose(humidity.virtual_temperature(TEMPERATURE, specific), expected, rtol=1e-5)


def test_every_conversion_has_its_inverse():
    specific = np.geomspace(1e-7, 0.03, 20)
    fraction = humidity.mole_fraction_from_specific_humidity(specific)
    np.testing.assert_allclose(humidity.specific_humidity_from_mole_fraction(fraction), specific, rtol=1e-13)
    vapour = humidity.vapour_pressure_from_specific_humidity(specific, 9e4)
    np.testing.assert_allclose(vapour, fraction * 9e4, rtol=1e-13)  # Dalton
    np.testing.assert_allclose(humidity.specific_humidity_from_vapour_pressure(vapour, 9e4), specific, rtol=1e-13)
    for over in humidity.SATURATION:
        relative = humidity.relative_humidity_from_specific_humidity(specific, 265.0, 9e4, over)
        back = humidity.specific_humidity_from_relative_humidity(relative, 265.0, 9e4, over)
        np.testing.assert_allclose(back, specific, rtol=1e-12)


def test_boiling_air_is_all_vapour():
    assert humidity.specific_humidity_from_vapour_pressure(5e4, 5e4) == pytest.approx(1.0)
