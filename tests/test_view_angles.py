"""Directions to a geostationary satellite, against spherical formulas, pyproj and hand-made cases."""

import numpy as np
import pyproj
import pytest

from chansim.errors import ViewError
from chansim.view import angles
from chansim.view.lines_of_sight import geostationary_zenith


def test_against_earth_fixed_coordinates_of_pyproj():
    """Topocentric conversion of PROJ (EPSG method 9836) of the satellite's place, an independent implementation."""
    rng = np.random.default_rng(2)
    latitude, longitude, height = rng.uniform(-80, 80, 40), rng.uniform(-120, 20, 40), rng.uniform(0, 9e3, 40)
    ellipsoid = f"+a={angles.EQUATOR_RADIUS} +b={angles.POLE_RADIUS}"
    satellite = np.radians(-40.0)
    place = angles.GEOSTATIONARY_RADIUS * np.array([np.cos(satellite), np.sin(satellite), 0.0])
    zenith, azimuth = angles.geostationary_angles(latitude, longitude, -40.0, height)
    for i in range(40):
        at = f"+lat_0={latitude[i]:.17g} +lon_0={longitude[i]:.17g} +h_0={height[i]:.17g}"
        local = pyproj.Transformer.from_pipeline(f"+proj=topocentric {ellipsoid} {at}")
        east, north, up = local.transform(*place)
        assert zenith[i] == pytest.approx(np.degrees(np.arctan2(np.hypot(east, north), up)), abs=1e-9)
        assert azimuth[i] == pytest.approx(np.degrees(np.arctan2(east, north)) % 360.0, abs=1e-9)


def test_sphere():
    """On a sphere: tan(elevation) = (cos b - R/r) / sin b with cos b = cos(lat) cos(dlon), azimuth
    tan = tan(dlon) / sin(lat) (antenna look angles, e.g. Maral & Bousquet, Satellite Communications Systems)."""
    radius = 6371e3
    latitude, longitude = np.array([20.0, -45.0, 60.0]), np.array([30.0, -20.0, 10.0])
    cosine = np.cos(np.radians(latitude)) * np.cos(np.radians(longitude))
    elevation = np.arctan2(cosine - radius / 42164e3, np.sqrt(1 - cosine**2))
    zenith, azimuth = angles.geostationary_angles(latitude, longitude, 0.0, equator_radius=radius, pole_radius=radius)
    np.testing.assert_allclose(zenith, 90.0 - np.degrees(elevation), atol=1e-9)
    away = np.degrees(np.arctan(np.tan(np.radians(longitude)) / np.sin(np.radians(latitude))))
    np.testing.assert_allclose(azimuth, (180.0 + away) % 360.0 * (latitude > 0) + (away % 360.0) * (latitude < 0))


def test_simple_directions():
    zenith, azimuth = angles.geostationary_angles([0.0, 40.0, -40.0, 0.0, 0.0], [10.0, 10.0, 10.0, 50.0, -30.0], 10.0)
    assert zenith[0] == pytest.approx(0.0, abs=1e-9)
    np.testing.assert_allclose(azimuth[1:], [180.0, 0.0, 270.0, 90.0], atol=1e-9)
    np.testing.assert_allclose(geostationary_zenith(np.array([40.0, 0.0]), [10.0, 50.0], 10.0), zenith[[1, 3]])


def test_horizon():
    """The limb of the equator lies at arccos(6378.137 / 42164) = 81.30 degrees from the satellite; a pole is
    never seen; NaN is not visible."""
    zenith = angles.geostationary_angles(0.0, [81.29, 81.31, np.nan], 0.0)[0]
    assert angles.visible_mask(zenith).tolist() == [True, False, False]
    assert np.isnan(zenith[2])
    assert not angles.visible_mask(angles.geostationary_angles([90.0, -90.0], 0.0, 0.0)[0]).any()


def test_error_tells_the_longitudes():
    latitude, longitude = np.meshgrid(np.linspace(30, 40, 11), np.linspace(150, 170, 21), indexing="ij")
    with pytest.raises(ViewError, match="sees no part of the domain"):
        angles.require_visible(latitude, longitude, 0.0)
    west, east, best = angles.longitudes_that_see(latitude, longitude)
    assert best in (159, 160, 161)
    for inside, seen in ((west, True), (west - 1, False), (east, True), (east + 1, False)):
        assert (angles.geostationary_angles(latitude, longitude, inside)[0] < 90.0).any() == seen
    assert f"{west} eastward to {east}" in angles.in_words(latitude, longitude)
    zenith, azimuth, mask = angles.require_visible(latitude, longitude, 90.0)
    assert mask.any() and not mask.all()
    assert zenith.shape == azimuth.shape == mask.shape == latitude.shape


def test_across_the_date_line_and_at_the_pole():
    west, east, best = angles.longitudes_that_see(np.array([0.0, 5.0]), np.array([175.0, -175.0]))
    assert west > 0 > east and best in (-180, 179)
    assert angles.longitudes_that_see(np.array([85.0, 89.0]), np.array([0.0, 90.0])) is None
    with pytest.raises(ViewError, match="too near a pole"):
        angles.require_visible(np.array([85.0]), np.array([0.0]), 0.0)
    assert angles.longitudes_that_see(np.zeros(360), np.arange(360.0))[:2] == (-180, 179)
