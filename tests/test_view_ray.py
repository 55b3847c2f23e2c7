"""Rays through the atmosphere against the sphere, against PROJ's geocentric conversion, against plain Python."""

import numpy as np
import pyproj
import pytest

from chansim.view.angles import EQUATOR_RADIUS, POLE_RADIUS, geostationary_angles
from chansim.view.ray import follow_rays, parallax_distance, ray_places

GEOD = pyproj.Geod(a=EQUATOR_RADIUS, b=POLE_RADIUS)


def test_displacement_of_a_sheet_at_10_km():
    """A sheet at 10 km seen at 60 degrees: h tan z = 17.32 km on a flat Earth, 17.253 km on a sphere of 6371 km
    (law of sines; by hand: 60 - arcsin(sin 60 * 6371 / 6381) = 0.155159 degrees of 111.195 km)."""
    assert parallax_distance(60.0, 10e3, 6371e3) == pytest.approx(17.2529e3, rel=1e-5)
    for latitude in (0.0, 30.0, -60.0, 80.0):
        for azimuth in (0.0, 90.0, 200.0):
            place = ray_places(latitude, 20.0, 60.0, azimuth, 10e3)
            forward, _, distance = GEOD.inv(20.0, latitude, place[1], place[0])
            assert distance == pytest.approx(parallax_distance(60.0, 10e3, 6371e3), rel=1e-3)
            assert (forward - azimuth + 180.0) % 360.0 - 180.0 == pytest.approx(0.0, abs=0.02)


def test_against_exact_geometry():
    """The point found lies at the height asked for and in the direction asked for: PROJ's geocentric conversion of
    the points and, for a geostationary imager, its own place."""
    rng = np.random.default_rng(3)
    latitude, longitude, height = rng.uniform(-70, 70, 300), rng.uniform(-60, 60, 300), rng.uniform(0, 50e3, 300)
    zenith, azimuth = geostationary_angles(latitude, longitude, 10.0)
    seen = zenith < 80.0
    latitude, longitude, height, zenith, azimuth = (a[seen] for a in (latitude, longitude, height, zenith, azimuth))
    above = ray_places(latitude, longitude, zenith, azimuth, height)
    ellipsoid = f"+a={EQUATOR_RADIUS} +b={POLE_RADIUS}"
    geocentric = pyproj.Transformer.from_pipeline(f"+proj=cart {ellipsoid}")
    foot = np.array(geocentric.transform(longitude, latitude, np.zeros_like(latitude)))
    point = np.array(geocentric.transform(above[1], above[0], height))
    satellite = 42164e3 * np.array([np.cos(np.radians(10.0)), np.sin(np.radians(10.0)), 0.0])[:, None]
    direction = (satellite - foot) / np.linalg.norm(satellite - foot, axis=0)
    along = (point - foot) - direction * np.sum(direction * (point - foot), axis=0)
    displacement = GEOD.inv(longitude, latitude, above[1], above[0])[2]
    assert (np.linalg.norm(along, axis=0) < 1e-3 * displacement + 0.1).all()  # 0.1 % of the displacement
    assert np.linalg.norm(along, axis=0).max() < 3.0  # m


def test_simple_rays():
    assert ray_places(30.0, 179.9, 0.0, 0.0, 20e3) == pytest.approx((30.0, 179.9), abs=1e-9)
    assert ray_places(30.0, 40.0, 70.0, 120.0, 0.0) == pytest.approx((30.0, 40.0), abs=1e-9)
    east = ray_places(0.0, 179.9, 70.0, 90.0, 20e3)
    assert east[1] > 180.0 and east[0] == pytest.approx(0.0, abs=1e-9)  # runs on across the date line
    over_pole = ray_places(89.9, 0.0, 70.0, 0.0, 10e3)
    assert over_pole[0] < 90.0 and abs(over_pole[1]) == pytest.approx(180.0)
    assert np.isnan(ray_places(np.nan, 0.0, 10.0, 0.0, 1e3)[0])


def test_compiled_against_plain():
    rng = np.random.default_rng(5)
    arguments = [rng.uniform(*limits, 100) for limits in ((-90, 90), (-180, 180), (0, 84), (0, 360), (-100, 80e3))]
    results = np.empty((2, 2, 100))
    follow_rays(*arguments, *results[0])
    follow_rays.py_func(*arguments, *results[1])
    np.testing.assert_allclose(results[0], results[1], rtol=1e-12)
