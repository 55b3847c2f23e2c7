"""The packaged reference atmosphere against the AFGL 1986 profiles, and its continuity."""

import numpy as np
import pytest

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene import reference_atmosphere as reference

JULY, JANUARY = 196, 14
PLACES = {  # where and when each AFGL atmosphere stands
    "tropical": (0.0, JANUARY),
    "midlatitude_summer": (45.0, JULY),
    "midlatitude_winter": (45.0, JANUARY),
    "subarctic_summer": (70.0, JULY),
    "subarctic_winter": (70.0, JANUARY),
}
FORMULA = {"water": "H2O", "ozone": "O3", "carbon_monoxide": "CO"}


@pytest.mark.parametrize("atmosphere", PLACES)
def test_reproduces_the_afgl_profiles(atmosphere):
    joseki = pytest.importorskip("joseki", reason="joseki is not installed")
    source = joseki.make(f"afgl_1986-{atmosphere}")
    inside = (source["p"].values > 6.0) & (source["p"].values < 101000.0)
    pressure = source["p"].values[inside][::-1]
    latitude, day = PLACES[atmosphere]
    found = reference.reference_at_pressure("temperature", pressure, latitude, day)
    # our levels are 0.05 apart in ln p (0.35 km): the corners of the AFGL profiles are rounded by that much
    np.testing.assert_allclose(found, source["t"].values[inside][::-1], atol=0.5)
    for gas, formula in FORMULA.items():
        found = reference.reference_at_pressure(f"{gas}_mole_fraction", pressure, latitude, day)
        expected = source[f"x_{formula}"].values[inside][::-1]
        # water falls to a third over 1 km below the tropopause, so a rounded corner is some percent there
        np.testing.assert_allclose(found, expected, rtol=0.1)


@pytest.mark.parametrize(
    ("gas", "surface"), [("carbon_dioxide", 420e-6), ("methane", 1.92e-6), ("nitrous_oxide", 337e-9)]
)
def test_long_lived_gases_are_of_today(gas, surface):
    profile = reference.reference_profile(np.linspace(-90, 90, 7), 100)
    np.testing.assert_allclose(profile[f"{gas}_mole_fraction"][:, -1], surface, rtol=1e-5)
    assert np.all(profile[f"{gas}_mole_fraction"] <= surface * (1 + 1e-5))


def test_ozone_columns_are_plausible():
    # common practice: 250-300 Dobson units in the tropics, 300-400 in middle and high latitudes
    profile = reference.reference_profile(np.array([0.0, 45.0, 65.0]), JANUARY)
    pressure = profile["pressure"]
    molecules = np.trapezoid(profile["ozone_mole_fraction"], pressure, axis=-1) * 6.02214076e23 / (9.80665 * 28.9647e-3)
    dobson = molecules / 2.6867e20
    assert 240 < dobson[0] < 300 and 330 < dobson[1] < 420 and 340 < dobson[2] < 450


def test_grid_runs_from_top_to_surface():
    profile = reference.reference_profile(10.0, 200)
    assert profile["pressure"][0] == pytest.approx(5.0) and profile["pressure"][-1] == pytest.approx(110000.0)
    assert np.all(np.diff(profile["pressure"]) > 0)
    assert profile["temperature"].shape == profile["pressure"].shape


def test_shapes_follow_the_latitude():
    latitude = np.linspace(-80, 80, 12).reshape(3, 4)
    profile = reference.reference_profile(latitude, 5)
    assert profile["temperature"].shape == (3, 4, profile["pressure"].size)
    single = reference.reference_profile(float(latitude[1, 2]), 5)
    np.testing.assert_allclose(profile["temperature"][1, 2], single["temperature"])
    at_levels = reference.reference_at_pressure("temperature", profile["pressure"], latitude, 5)
    np.testing.assert_allclose(np.moveaxis(at_levels, 0, -1), profile["temperature"], rtol=1e-10)


@pytest.mark.parametrize("day", [JANUARY, 90, JULY, 300, None])
def test_no_seam_in_latitude(day):
    latitude = np.linspace(-90.0, 90.0, 1801)
    temperature = reference.reference_profile(latitude, day)["temperature"]
    step = np.abs(np.diff(temperature, axis=0)).max()
    # the largest contrast, 45 K of polar surface air between 15 and 60 degrees, is below 0.5 K per 0.1 degree
    assert step < 0.5
    curvature = np.abs(np.diff(temperature, n=2, axis=0)).max()
    assert curvature < 0.02  # no kink either


def test_no_seam_in_the_year():
    days = np.arange(1, 367)
    temperature = reference.reference_profile(np.full(366, 65.0), days)["temperature"]
    around = np.concatenate([temperature, temperature[:1]])
    assert np.abs(np.diff(around, axis=0)).max() < 0.5


def test_hemispheres_mirror_in_half_a_year():
    north = reference.reference_profile(50.0, JULY)["temperature"]
    south = reference.reference_profile(-50.0, JULY - 365.25 / 2)["temperature"]
    np.testing.assert_allclose(north, south, atol=1e-9)


def test_weights_sum_to_one():
    weights = reference.atmosphere_weights(np.linspace(-90, 90, 181), 77)
    np.testing.assert_allclose(weights.sum(axis=-1), 1.0, rtol=1e-12)
    assert weights.min() >= 0.0


@pytest.mark.parametrize("latitude", [91.0, np.nan])
def test_impossible_latitude(latitude):
    with pytest.raises(SceneError, match="latitude"):
        reference.reference_profile(np.array([0.0, latitude]), 1)


def test_recipe_rebuilds_the_packaged_file():
    pytest.importorskip("joseki", reason="joseki is not installed")
    from chansim.scene.build_reference import build

    rebuilt = build()
    for name, values in reference.reference_table().items():
        np.testing.assert_allclose(rebuilt[name].values, values, rtol=1e-6)
