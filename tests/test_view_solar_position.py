"""Solar position against the worked example of the algorithm and two independent libraries."""

import numpy as np
import pytest

from chansim.errors import ViewError
from chansim.view import solar_position as sp

EXAMPLE = np.datetime64("2003-10-17T19:30:30")  # 12:30:30 at UTC-7


def test_worked_example():
    """Reda & Andreas 2004 (NREL/TP-560-34302, revised 2008), table A5.1: all intermediate and final values."""
    sun = sp.sun_at(EXAMPLE, delta_t=67.0)
    assert sun.distance == pytest.approx(0.9965422974, abs=1e-9)
    assert sun.right_ascension == pytest.approx(202.22741, abs=1e-5)
    assert sun.declination == pytest.approx(-9.31434, abs=1e-5)
    zenith, azimuth = sp.solar_angles(
        EXAMPLE, 39.742476, -105.1786, 1830.14, pressure=82000.0, temperature=284.15, delta_t=67.0
    )
    assert zenith == pytest.approx(50.11162, abs=1e-5)
    assert azimuth == pytest.approx(194.34024, abs=1e-5)


def test_places_and_times_against_pvlib():
    """pvlib.spa, an independent implementation of the same algorithm."""
    spa = pytest.importorskip("pvlib").spa
    rng = np.random.default_rng(4)
    time = np.datetime64("1979-01-01", "s") + rng.integers(0, int(60 * 365.25 * 86400), 300).astype("timedelta64[s]")
    latitude, longitude = rng.uniform(-89.9, 89.9, 300), rng.uniform(-180.0, 360.0, 300)
    ours = sp.solar_angles(time, latitude, longitude)
    for i in range(300):
        unix = np.array([time[i].astype("datetime64[s]").astype(float)])
        _, zenith, _, _, azimuth, _ = spa.solar_position_numpy(
            unix, latitude[i], longitude[i], 0.0, 1013.0, 10.0, sp.DELTA_T, 0.5667, 1
        )
        assert ours[0][i] == pytest.approx(zenith[0], abs=2e-6)
        assert np.cos(np.radians(ours[1][i] - azimuth[0])) > 1.0 - 1e-12


def test_against_an_ephemeris():
    """astropy's apparent sun (ERFA) seen from the ground, no refraction; UT1 - UTC is the main difference."""
    coordinates = pytest.importorskip("astropy.coordinates")
    from astropy import units
    from astropy.time import Time
    from astropy.utils import iers

    iers.conf.auto_download = False
    times = ["2018-03-21T06:00:00", "2018-06-21T12:00:00", "2019-09-10T17:43:21", "2020-12-31T23:00:00"]
    places = [(0.0, 0.0), (52.3, 13.1), (-33.0, -70.0), (78.0, 15.0)]
    for text in times:
        for latitude, longitude in places:
            where = coordinates.EarthLocation.from_geodetic(longitude * units.deg, latitude * units.deg)
            when = Time(text)
            seen = coordinates.get_sun(when).transform_to(coordinates.AltAz(obstime=when, location=where))
            zenith, azimuth = sp.solar_angles(text, latitude, longitude)
            assert zenith == pytest.approx(90.0 - seen.alt.deg, abs=0.006)
            away = np.abs((azimuth - seen.az.deg + 180.0) % 360.0 - 180.0)
            assert away * np.sin(np.radians(zenith)) < 0.006


def test_geometry_of_the_year():
    """Common knowledge: equinox sun near the zenith of the equator at noon, solstice declination 23.44 degrees,
    perihelion early in January (0.9833 au), aphelion early in July (1.0167 au)."""
    assert sp.solar_angles("2020-03-20T12:07", 0.0, 0.0)[0] < 0.6
    assert sp.sun_at("2020-06-20T21:43").declination == pytest.approx(23.436, abs=0.003)
    days = np.arange("2021-01-01", "2022-01-01", dtype="datetime64[D]")
    distance = sp.solar_distance(days)
    assert str(days[distance.argmin()]) in ("2021-01-02", "2021-01-03")
    assert str(days[distance.argmax()]) in ("2021-07-05", "2021-07-06")
    assert distance.min() == pytest.approx(0.9833, abs=1e-4)
    assert distance.max() == pytest.approx(1.0167, abs=1e-4)
    np.testing.assert_allclose(sp.solar_distance_factor(days), 1.0 / distance**2)


def test_terminator_has_no_step():
    """Along a parallel the zenith angle changes smoothly through 90 degrees, and refraction ends at its small limit."""
    longitude = np.linspace(-180.0, 180.0, 7201)
    zenith, azimuth = sp.solar_angles("2020-07-15T12:00", 20.0, longitude)
    assert np.abs(np.diff(zenith)).max() < 0.06  # 0.05 degrees of longitude
    assert zenith.min() < 90.0 < zenith.max()
    assert ((azimuth >= 0.0) & (azimuth < 360.0)).all()
    assert sp.refraction(0.0, 101000.0, 283.15) == pytest.approx(0.48, abs=0.02)
    assert sp.refraction(-2.0, 101000.0) == 0.0


def test_times_per_pixel():
    """A time per pixel gives what each time alone gives; a million pixels fit in one call."""
    time = np.array(["2020-01-01T00:00", "2020-01-01T06:30", "2020-01-01T00:00"], dtype="datetime64[m]")
    together = sp.solar_angles(time, np.array([10.0, 20.0, 30.0]), 5.0)
    for i, latitude in enumerate((10.0, 20.0, 30.0)):
        assert together[0][i] == sp.solar_angles(time[i], latitude, 5.0)[0]
        assert together[1][i] == sp.solar_angles(time[i], latitude, 5.0)[1]
    field = sp.solar_angles("2020-01-01T06:30", np.linspace(-80, 80, 1000)[:, None], np.linspace(-60, 60, 1000))
    assert field[0].shape == (1000, 1000)
    assert np.isfinite(field).all()


def test_scattering_angle():
    """Straight back 180; straight on 0; nadir view: 180 minus the solar zenith angle (geometry)."""
    assert sp.scattering_angle(40.0, 10.0, 40.0, 10.0) == pytest.approx(180.0, abs=1e-5)
    assert sp.scattering_angle(40.0, 10.0, 140.0, 190.0) == pytest.approx(0.0, abs=1e-5)
    assert sp.scattering_angle(0.0, 77.0, 35.0, 200.0) == pytest.approx(145.0)
    assert sp.scattering_angle(30.0, 190.0, 50.0, 10.0) == pytest.approx(100.0)  # forward half
    rng = np.random.default_rng(1)
    zenith, azimuth = np.radians(rng.uniform(0, 90, (2, 50))), np.radians(rng.uniform(0, 360, (2, 50)))
    view, sun = np.sin(zenith) * np.sin(azimuth), np.sin(zenith) * np.cos(azimuth)  # east, north
    vectors = np.stack([view, sun, np.cos(zenith)])
    expected = np.degrees(np.arccos(-(vectors[:, 0] * vectors[:, 1]).sum(axis=0)))
    ours = sp.scattering_angle(*np.degrees([zenith[0], azimuth[0], zenith[1], azimuth[1]]))
    np.testing.assert_allclose(ours, expected, atol=1e-6)


def test_relative_azimuth():
    assert sp.relative_azimuth(350.0, 10.0) == pytest.approx(20.0)
    assert sp.relative_azimuth(90.0, 270.0) == pytest.approx(180.0)
    assert sp.relative_azimuth(-10.0, 30.0) == pytest.approx(40.0)


def test_bad_input():
    with pytest.raises(ViewError, match="not a time"):
        sp.solar_angles("noon", 0.0, 0.0)
    with pytest.raises(ViewError, match="NaT"):
        sp.solar_angles(np.datetime64("NaT"), 0.0, 0.0)
    with pytest.raises(ViewError, match="latitude"):
        sp.solar_angles("2020-01-01", 100.0, 0.0)


def test_tables_are_as_the_recipe_makes_them():
    pytest.importorskip("pvlib")
    from chansim.view import build_tables

    for name in ("solar_terms.csv", "nutation_terms.csv"):
        assert (build_tables.DATA / name).read_text().splitlines() == build_tables.TABLES[name]()
