"""Hydrostatic heights against the US Standard Atmosphere 1976 and MetPy."""

import numpy as np
import pytest
from scene_samples import pressure_level_file

import chansim  # noqa: F401
from chansim.scene import hydrostatic
from chansim.scene.hydrostatic import scene_heights
from chansim.scene.reading import open_scene

# US Standard Atmosphere 1976, table I: geopotential height, temperature, pressure
STANDARD = [(0.0, 288.15, 101325.0), (11000.0, 216.65, 22632.1), (20000.0, 216.65, 5474.89), (32000.0, 228.65, 868.02)]


def test_heights_of_the_standard_atmosphere():
    ussa1976 = pytest.importorskip("ussa1976", reason="ussa1976 is not installed")
    geometric = np.linspace(80000.0, 0.0, 801)
    standard = ussa1976.compute(z=geometric[::-1], variables=["p", "t"])
    pressure, temperature = standard["p"].values[::-1], standard["t"].values[::-1]
    dry = np.zeros_like(temperature)
    found = hydrostatic.heights_from_surface(pressure, temperature, dry, np.array(101325.0), np.array(0.0))
    # ussa1976 rests on an Earth radius of 6356.766 km, ours is the mean radius: 0.03 % at 80 km
    np.testing.assert_allclose(hydrostatic.geometric_height(found), geometric, rtol=5e-4, atol=0.5)
    expected = 6356766.0 * geometric / (6356766.0 + geometric)  # geopotential, US Standard Atmosphere eq. 18
    np.testing.assert_allclose(found, expected, rtol=1e-4, atol=0.5)


@pytest.mark.parametrize(("height", "temperature", "pressure"), STANDARD[:2])
def test_standard_height(height, temperature, pressure):
    assert hydrostatic.standard_height(pressure) == pytest.approx(height, abs=0.5)
    drop = hydrostatic.lapse_layer_thickness(101325.0, pressure, temperature)
    assert drop == pytest.approx(height, abs=0.5)


def test_isothermal_layer():
    thickness = hydrostatic.layer_thickness(22632.1, 5474.89, 216.65)
    assert thickness == pytest.approx(9000.0, abs=0.5)  # US Standard Atmosphere 1976, 11 to 20 km


def test_thickness_agrees_with_metpy():
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    pressure = np.geomspace(10000.0, 100000.0, 40)
    temperature = np.linspace(215.0, 300.0, 40)
    specific = np.linspace(1e-6, 0.018, 40)
    found = hydrostatic.heights_from_surface(pressure, temperature, specific, np.array(100000.0), np.array(0.0))
    ratio = specific / (1.0 - specific)
    virtual = calc.virtual_temperature(temperature * units.K, ratio * units("kg/kg"))
    expected = calc.thickness_hydrostatic(pressure[::-1] * units.Pa, virtual[::-1]).to("m").magnitude
    assert found[0] - found[-1] == pytest.approx(expected, rel=1e-3)


def test_potential_temperature_agrees_with_metpy():
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    pressure = np.array([20000.0, 50000.0, 85000.0])
    theta = np.array([340.0, 315.0, 300.0])
    expected = calc.temperature_from_potential_temperature(pressure * units.Pa, theta * units.K).magnitude
    np.testing.assert_allclose(hydrostatic.temperature_from_potential(theta, pressure), expected, rtol=1e-4)


def test_geometric_and_geopotential_height():
    # US Standard Atmosphere 1976, table I: 11 019 m geometric is 11 000 m geopotential
    assert hydrostatic.geometric_height(11000.0) == pytest.approx(11019.0, abs=0.5)
    heights = np.array([-100.0, 0.0, 9000.0, 80000.0])
    back = hydrostatic.geopotential_height(hydrostatic.geometric_height(heights))
    np.testing.assert_allclose(back, heights, atol=1e-6)


def test_levels_below_ground_have_no_height():
    pressure = np.array([50000.0, 85000.0, 92500.0, 100000.0])
    temperature = np.array([[250.0, 250.0], [280.0, 280.0], [283.0, np.nan], [288.0, np.nan]])
    surface_pressure = np.array([101000.0, 86000.0])
    found = hydrostatic.heights_from_surface(
        pressure, temperature, np.zeros_like(temperature), surface_pressure, np.array([0.0, 1400.0])
    )
    assert np.isnan(found[2:, 1]).all() and np.isfinite(found[:, 0]).all() and np.isfinite(found[:2, 1]).all()
    # 10 hPa at 280 K is R T / g ln(860 / 850) = 96 m
    assert found[1, 1] == pytest.approx(1400.0 + 96.0, abs=1.0)


def test_surface_pressure_from_heights_inverts_the_integration():
    pressure = np.geomspace(20000.0, 100000.0, 30)
    temperature = np.broadcast_to(np.linspace(220.0, 295.0, 30)[:, None], (30, 3))
    height = hydrostatic.heights_from_surface(pressure, temperature, 0 * temperature, np.full(3, 1e5), np.zeros(3))
    ground = np.array([0.0, 1234.0, -50.0])
    found = hydrostatic.surface_pressure_from_heights(pressure, height, temperature, ground)
    assert found[0] == pytest.approx(1e5, rel=1e-9)
    # barometric formula by hand for a lapse of 6.5 K/km downward from 295 K over 50 m
    assert found[2] == pytest.approx(1e5 * (1 + 0.0065 * 50 / 295.0) ** 5.2559, rel=1e-5)
    inside = np.interp(1234.0, height[::-1, 1], np.log(pressure[::-1]))
    assert found[1] == pytest.approx(np.exp(inside), rel=1e-9)


@pytest.mark.parametrize("chunks", [None, {"lat": 1}])
def test_heights_of_a_scene(chunks):
    source = pressure_level_file()
    scene = open_scene(source if chunks is None else source.chunk(chunks))
    heights = scene_heights(scene)
    assert heights.dims == scene["temperature"].dims
    assert (chunks is not None) == bool(heights.chunks)
    # 500 hPa lies near 5.5 km (common practice)
    assert 5400.0 < float(heights.isel(level=4, lat=0, lon=0)) < 5700.0
