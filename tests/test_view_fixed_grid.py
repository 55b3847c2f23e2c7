"""The geostationary fixed grid against PROJ and the worked example of a product guide."""

import math

import numpy as np
import pyproj
import pytest
import xarray as xr

from chansim.errors import ViewError
from chansim.view import fixed_grid
from chansim.view.angles import geostationary_angles
from chansim.view.fixed_grid import FixedGrid, full_disk, grid_of_file, sector

GRS80 = {"equator_radius": 6378137.0, "pole_radius": 6356752.31414, "orbit_radius": 35786023.0 + 6378137.0}


def goes_r_inverse(x, y, longitude):
    """Place of a scan angle, written from the formulas of the GOES-R Product Definition and User's Guide, volume 3,
    section 5.1.2.8.1 (the quadratic in the distance r_s), not from the code under test."""
    equator, pole, h = 6378137.0, 6356752.31414, 42164160.0
    a = math.sin(x) ** 2 + math.cos(x) ** 2 * (math.cos(y) ** 2 + equator**2 / pole**2 * math.sin(y) ** 2)
    b = -2.0 * h * math.cos(x) * math.cos(y)
    c = h**2 - equator**2
    r = (-b - math.sqrt(b * b - 4.0 * a * c)) / (2.0 * a)
    sx, sy, sz = r * math.cos(x) * math.cos(y), -r * math.sin(x), r * math.cos(x) * math.sin(y)
    latitude = math.atan(equator**2 / pole**2 * sz / math.hypot(h - sx, sy))
    return math.degrees(latitude), longitude - math.degrees(math.atan(sy / (h - sx)))


def test_worked_example():
    """GOES-R guide, same section: x = -0.024052, y = 0.095340 rad from 75 W is 33.846162 N, 84.690932 W."""
    assert goes_r_inverse(-0.024052, 0.095340, -75.0) == pytest.approx((33.846162, -84.690932), abs=2e-6)
    grid = FixedGrid(-75.0, [-0.024052], [0.095340], "x", **GRS80)
    assert grid.to_places(-0.024052, 0.095340) == pytest.approx((33.846162, -84.690932), abs=2e-6)
    assert grid.to_scan_angles(33.846162, -84.690932) == pytest.approx((-0.024052, 0.095340), abs=5e-8)


@pytest.mark.parametrize("sweep", ["x", "y"])
@pytest.mark.parametrize("longitude", [0.0, -75.0, 140.7, 359.5])
def test_against_proj(sweep, longitude):
    """Forward and inverse within 1e-7 rad of PROJ's geos projection all over the disk and at its limb; the same
    places are called space."""
    grid = full_disk(longitude, 40e3, sweep=sweep)
    crs = grid.crs()
    to_places = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)
    x, y = np.meshgrid(grid.x, grid.y)
    latitude, longitudes = grid.to_places(x, y)
    theirs_longitude, theirs_latitude = to_places.transform(x * grid.height, y * grid.height)
    on_earth = np.isfinite(latitude)
    assert (on_earth == np.isfinite(theirs_latitude)).all()
    assert 0.7 < on_earth.mean() < 0.8  # pi / 4
    np.testing.assert_allclose(latitude[on_earth], theirs_latitude[on_earth], atol=1e-9)
    away = (longitudes - theirs_longitude + 180.0) % 360.0 - 180.0
    np.testing.assert_allclose(away[on_earth], 0.0, atol=1e-9)
    assert (np.abs(longitudes[on_earth]) <= 180.0).all()
    latitude, longitudes = np.meshgrid(np.linspace(-90.0, 90.0, 121), np.linspace(-180.0, 180.0, 181))
    ours = grid.to_scan_angles(latitude, longitudes)
    theirs = pyproj.Proj(crs)(longitudes, latitude)
    seen = np.isfinite(ours[0])
    assert (seen == np.isfinite(theirs[0])).all()
    for mine, other in zip(ours, theirs, strict=True):
        np.testing.assert_allclose(mine[seen], other[seen] / grid.height, atol=1e-12)


@pytest.mark.parametrize("sweep", ["x", "y"])
def test_there_and_back(sweep):
    grid = full_disk(63.0, 100e3, sweep=sweep)
    latitude, longitude = grid.to_places(*np.meshgrid(grid.x, grid.y))
    x, y = grid.to_scan_angles(latitude, longitude)
    on_earth = np.isfinite(latitude)
    np.testing.assert_allclose(x[on_earth], np.broadcast_to(grid.x, grid.shape)[on_earth], atol=1e-9)
    np.testing.assert_allclose(y[on_earth], np.broadcast_to(grid.y[:, None], grid.shape)[on_earth], atol=1e-9)


@pytest.mark.parametrize("name", ["_forward", "_inverse"])
def test_compiled_against_plain(name):
    """The compiled kernel and the same function in plain Python."""
    kernel = getattr(fixed_grid, name)
    rng = np.random.default_rng(0)
    wide = 90.0 if name == "_forward" else 0.16
    first, second = rng.uniform(-wide, wide, (2, 200))
    for sweeps_x in (True, False):
        results = np.empty((2, 2, 200))
        for k, function in enumerate((kernel, kernel.py_func)):
            function(first, second, 0.3, sweeps_x, 6.61, 0.9966, *results[k])
        np.testing.assert_allclose(results[0], results[1], rtol=1e-13)
        assert np.isfinite(results[0]).any() and np.isnan(results[0]).any()


def test_full_disk_of_a_two_kilometre_imager():
    """GOES-R guide, table 5.1.2.6: the 2 km full disk has 5424 x 5424 pixels of 56 microradians, from -0.151844."""
    grid = full_disk(-75.0, 56e-6 * 35786023.0, sweep="x", **GRS80)
    assert grid.shape == (5424, 5424)
    assert grid.x[0] == pytest.approx(-0.151844, abs=1e-9)
    assert grid.y[0] == pytest.approx(0.151844, abs=1e-9)


def test_pixels():
    grid = full_disk(40.0, 100e3)
    pixels = grid.pixels()
    assert pixels.on_earth.dims == ("y", "x")
    row, column = grid.shape[0] // 2, grid.shape[1] // 2
    assert not pixels.on_earth[0, 0] and pixels.on_earth[row, column]
    assert (np.isfinite(pixels.view_zenith_angle) == pixels.on_earth).all()
    assert float(pixels.view_zenith_angle.max()) < 90.0
    middle = pixels.isel(y=row - 1, x=column)  # half a pixel north and east: the satellite is towards the south-west
    assert 180.0 < middle.view_azimuth_angle < 270.0
    zenith, azimuth = geostationary_angles(pixels.latitude.values, pixels.longitude.values, 40.0)
    np.testing.assert_allclose(pixels.view_zenith_angle, zenith)
    np.testing.assert_allclose(pixels.view_azimuth_angle, azimuth)
    assert float(pixels.latitude.isel(y=slice(0, row)).min()) > 0.0  # north on top


def test_zenith_is_scan_angle_plus_arc():
    """Geometry in the equator plane: zenith angle = longitude difference + scan angle."""
    grid = full_disk(0.0, 50e3)
    x = 0.1
    longitude = grid.to_places(x, 0.0)[1]
    assert grid.angles(0.0, longitude)[0] == pytest.approx(longitude + math.degrees(x), abs=1e-9)


@pytest.mark.parametrize("sweep", ["x", "y"])
def test_grid_mapping_reads_back(sweep):
    """A reader that follows CF gets the same projection, from the attributes and from the WKT."""
    grid = full_disk(-137.0, 200e3, sweep=sweep)
    attributes = grid.pixels()["geostationary"].attrs
    without_wkt = {k: v for k, v in attributes.items() if k != "crs_wkt"}
    places = np.array([-140.0, -120.0]), np.array([10.0, -50.0])
    expected = grid.to_scan_angles(places[1], places[0])
    for crs in (pyproj.CRS.from_cf(without_wkt), pyproj.CRS.from_wkt(attributes["crs_wkt"])):
        x, y = pyproj.Proj(crs)(*places)
        np.testing.assert_allclose(np.array([x, y]) / attributes["perspective_point_height"], expected, atol=1e-9)


def test_sector():
    """A sector takes rows and columns of the disk and holds all of its box."""
    disk = full_disk(10.0, 20e3)
    part = sector(10.0, 20e3, west=-10.0, east=25.0, south=35.0, north=55.0)
    assert set(part.x) <= set(disk.x) and set(part.y) <= set(disk.y)
    x, y = part.to_scan_angles(*np.meshgrid([35.0, 45.0, 55.0], [-10.0, 0.0, 25.0]))
    half = (disk.x[1] - disk.x[0]) / 2 * 1.0001
    assert part.x.min() - half <= x.min() and x.max() <= part.x.max() + half
    assert part.y.min() - half <= y.min() and y.max() <= part.y.max() + half
    assert part.x.max() - x.max() < 4 * half and y.min() - part.y.min() < 4 * half
    partly = sector(10.0, 20e3, west=60.0, east=150.0, south=-20.0, north=20.0)
    assert partly.pixels().on_earth.any()
    across = sector(170.0, 50e3, west=165.0, east=-165.0, south=-10.0, north=10.0)
    assert across.shape[1] > across.shape[0]


def test_sector_outside_the_disk():
    with pytest.raises(ViewError, match="outside the disk.*sub-satellite longitudes from"):
        sector(0.0, 20e3, west=150.0, east=170.0, south=-10.0, north=10.0)
    with pytest.raises(ViewError, match="too near a pole"):
        sector(0.0, 20e3, west=0.0, east=20.0, south=84.0, north=88.0)
    with pytest.raises(ViewError, match="outside the Earth's disk"):
        FixedGrid(0.0, np.linspace(0.12, 0.15, 10), np.linspace(0.15, 0.12, 10))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"longitude": 0.0, "resolution": 2.0}, "in metres"),
        ({"longitude": 400.0, "resolution": 20e3}, "-180 to 360"),
        ({"longitude": 0.0, "resolution": 20e3, "sweep": "z"}, "sweep"),
        ({"longitude": 0.0, "resolution": 20e3, "orbit_radius": 42164.0}, "orbit_radius"),
    ],
)
def test_bad_input(arguments, message):
    with pytest.raises(ViewError, match=message):
        full_disk(**arguments)


def test_bad_axes():
    with pytest.raises(ViewError, match="not regular"):
        FixedGrid(0.0, [0.0, 0.01, 0.05], [0.0])
    with pytest.raises(ViewError, match="radians"):
        FixedGrid(0.0, [0.0, 2000.0], [0.0])
    with pytest.raises(ViewError, match="south"):
        sector(0.0, 20e3, west=0.0, east=10.0, south=20.0, north=10.0)


@pytest.mark.parametrize("units", ["rad", "m"])
def test_grid_of_file(units):
    """An image that keeps its coordinates in radians or, as many do, in metres."""
    grid = full_disk(-75.0, 60e3, sweep="x", **GRS80)
    image = grid.pixels()
    if units == "m":
        image = image.assign_coords({a: image[a] * grid.height for a in "xy"})
        for axis in "xy":
            image[axis].attrs = {"units": "m", "standard_name": f"projection_{axis}_coordinate"}
    again = grid_of_file(image)
    np.testing.assert_allclose(again.x, grid.x)
    np.testing.assert_allclose(again.y, grid.y)
    assert (again.longitude, again.sweep, again.orbit_radius) == (-75.0, "x", grid.orbit_radius)
    with pytest.raises(ViewError, match="geostationary"):
        grid_of_file(xr.Dataset())


def test_finer():
    """Sub-pixels of a pixel have its centre as their mean; those of the finer full disk are the same."""
    grid = full_disk(0.0, 90e3)
    fine = grid.finer(3)
    np.testing.assert_allclose(fine.x.reshape(-1, 3).mean(axis=1), grid.x)
    np.testing.assert_allclose(fine.y.reshape(-1, 3)[:, 1], grid.y)
    np.testing.assert_allclose(np.diff(fine.x), (grid.x[1] - grid.x[0]) / 3.0)
    with pytest.raises(ViewError, match="whole number"):
        grid.finer(1.5)
