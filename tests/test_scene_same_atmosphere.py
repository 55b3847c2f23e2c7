"""The same atmosphere in six vertical coordinates and on three grids: the same columns, the same picture."""

import numpy as np
import pytest
import xarray as xr
from scene_atmosphere import GRIDS, KAPPA, MASS_RATIO, VERTICALS, columns, humidity_at, model_file, temperature_at

import chansim
from chansim.scene.reading import open_scene

CHANNELS = ["wv063", "ir104"]
SAME = 0.02  # K, of brightness temperature
EVERY = [(vertical, grid) for vertical in VERTICALS for grid in GRIDS]


@pytest.fixture(scope="module")
def air():
    return {name: values[:, np.arange(6) % 2] for name, values in columns().items()}


@pytest.mark.parametrize(("vertical", "grid"), EVERY)
def test_same_columns(vertical, grid, air, tmp_path):
    file = tmp_path / "model.nc"
    model_file(vertical, grid).to_netcdf(file)
    scene = open_scene(file)
    found = {n: scene[n].values.reshape(len(scene[n]), -1) for n in scene.data_vars if "level" in scene[n].dims}
    # the hydrostatic integration stands against 40000 steps; T_v is not quite linear in height between the levels
    np.testing.assert_allclose(found["pressure"], air["pressure"], rtol=3e-4 if vertical == "hybrid height" else 1e-7)
    np.testing.assert_allclose(found["temperature"], air["temperature"], atol=1e-3)
    np.testing.assert_allclose(found["specific_humidity"], air["humidity"], rtol=1e-6)
    np.testing.assert_allclose(found["cloud_liquid"], air["liquid"], atol=1e-9)
    np.testing.assert_allclose(found["cloud_ice"], air["ice"], atol=1e-9)
    if vertical == "hybrid height":
        np.testing.assert_allclose(found["height"], air["height"], atol=0.01)
    if vertical == "native":  # means of the heights between the levels
        means = 0.5 * (air["half_height"][1:] + air["half_height"][:-1])
        np.testing.assert_allclose(found["height"], means, atol=1.0)
    assert scene.attrs["masked_columns"] == 0


def test_native_recipe_agrees_with_metpy(air):
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    potential = calc.potential_temperature(air["pressure"] * units.Pa, air["temperature"] * units.K).magnitude
    scene = open_scene(model_file("native", "cells"))
    written = model_file("native", "cells")["T"].values[::-1] + 300.0
    np.testing.assert_allclose(written, potential, rtol=5e-4)  # MetPy: kappa 0.28571 from its own constants
    back = calc.temperature_from_potential_temperature(scene["pressure"].values * units.Pa, written * units.K)
    np.testing.assert_allclose(scene["temperature"], back.magnitude, rtol=5e-4)
    ratio = calc.mixing_ratio_from_specific_humidity(scene["specific_humidity"].values * units.dimensionless)
    np.testing.assert_allclose(model_file("native", "cells")["QVAPOR"].values[::-1], ratio.magnitude, rtol=1e-6)
    assert KAPPA == pytest.approx(0.2857, abs=1e-4) and MASS_RATIO == pytest.approx(0.622, abs=1e-3)


def test_heights_of_the_sample_agree_with_metpy(air):
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    pressure = np.geomspace(101325.0, 1000.0, 4000)
    ratio = humidity_at(pressure) / (1.0 - humidity_at(pressure))
    thickness = calc.thickness_hydrostatic(
        pressure * units.Pa, temperature_at(pressure) * units.K, mixing_ratio=ratio * units.dimensionless
    ).magnitude
    radius = 6371008.8
    expected = radius * thickness / (radius - thickness)
    found = np.interp(np.log(1000.0), np.log(air["pressure"][:, 0]), air["height"][:, 0])
    assert found == pytest.approx(expected, abs=15.0)  # 31 km; interpolated between two levels


@pytest.fixture(scope="module")
def pictures():
    """Brightness temperatures (channel, column) by vertical coordinate and grid."""
    found = {}
    for vertical, grid in EVERY:
        picture = chansim.simulate(open_scene(model_file(vertical, grid)), channels=CHANNELS)
        found[vertical, grid] = picture["brightness_temperature"].values.reshape(2, 6)
    return found


def test_same_picture(pictures):
    expected = pictures["pressure field", "cells"]
    assert 200.0 < expected.min() and np.ptp(expected[1]) > 0.5  # the two kinds of column differ
    for key, found in pictures.items():
        np.testing.assert_allclose(found, expected, atol=SAME, err_msg=str(key))


def test_half_levels_of_the_file_change_nothing_in_clear_air(pictures):
    data = model_file("hybrid sigma-pressure").drop_vars(["clw", "cli"])
    clear = open_scene(data)
    half = columns()["half_pressure"][:, np.arange(6) % 2]
    exact = clear.assign(half_pressure=(("half_level", *clear["surface_pressure"].dims), half))
    found = [chansim.simulate(s, channels=CHANNELS)["brightness_temperature"].values for s in (clear, exact)]
    np.testing.assert_allclose(found[0], found[1], atol=1e-3)


def test_coarse_pressure_levels_within_their_own_interpolation_error(pictures, capsys):
    """13 standard levels instead of 60: what is lost is lost in the file, not in the reading."""
    levels = np.array([1000, 925, 850, 700, 600, 500, 400, 300, 250, 200, 150, 100, 50]) * 100.0
    fine = model_file().drop_vars(["pfull", "t", "hus", "clw", "cli", "lev"])
    kinds = np.zeros(6, dtype=int)  # the sea column: the mountain stands in several of these levels
    attrs = {"standard_name": "air_pressure", "units": "Pa"}
    coarse = fine.isel(ncells=kinds).assign_coords(plev=("plev", levels, attrs))
    for name, profile, standard_name, units in (
        ("t", temperature_at, "air_temperature", "K"), ("hus", humidity_at, "specific_humidity", "kg kg-1"),
    ):  # fmt: skip
        values = np.repeat(profile(levels)[:, None], 6, axis=1)
        coarse[name] = (("plev", "ncells"), values, {"standard_name": standard_name, "units": units})
    clear = open_scene(model_file().drop_vars(["clw", "cli"]))
    expected = chansim.simulate(clear, channels=CHANNELS)["brightness_temperature"].values[:, 0]
    found = chansim.simulate(open_scene(coarse), channels=CHANNELS)["brightness_temperature"].values[:, 0]
    # the file's own error: the fine columns thinned to the same levels, which the reading has no part in
    pressure = clear["pressure"].values[:, :1]
    thinned = clear.isel(ncells=[0]).copy()
    for name, profile in (("temperature", temperature_at), ("specific_humidity", humidity_at)):
        # ln q in ln p, as the solver takes humidity between levels
        bend, back = (np.log, np.exp) if name == "specific_humidity" else (np.asarray, np.asarray)
        between = back(np.interp(np.log(pressure[:, 0]), np.log(levels[::-1]), bend(profile(levels[::-1]))))
        inside = (pressure[:, 0] >= levels.min()) & (pressure[:, 0] <= levels.max())
        thinned[name] = xr.where(
            xr.DataArray(inside, dims="level"), xr.DataArray(between, dims="level"), clear[name].isel(ncells=[0])
        ).transpose(*clear[name].dims)
    own = chansim.simulate(thinned, channels=CHANNELS)["brightness_temperature"].values[:, 0]
    with capsys.disabled():
        print(
            f"\n13 pressure levels: off by {found - expected} K; interpolation alone {own - expected} K (wv063, ir104)"
        )
    assert np.all(np.abs(found - expected) < 2.0 * np.abs(own - expected) + 0.1)
    assert np.abs(found - expected).max() > SAME  # else the levels of this test are too fine to show anything
