"""Scenes on pixels: the ray through the model's heights against exact geometry, on every kind of grid."""

import numpy as np
import pyproj
import pytest
import xarray as xr
from scipy.optimize import brentq
from view_samples import HEIGHT, PRESSURE, places_in, scene_on

from chansim.errors import ViewError
from chansim.scene.hydrostatic import scene_heights
from chansim.view.angles import EQUATOR_RADIUS, POLE_RADIUS, geostationary_angles
from chansim.view.fixed_grid import full_disk, sector
from chansim.view.ray import parallax_distance, ray_places
from chansim.view.slant import interpolate, scene_on_grid, scene_on_pixels

GEOD = pyproj.Geod(a=EQUATOR_RADIUS, b=POLE_RADIUS)
TEN_KM = int(np.flatnonzero(HEIGHT == 10e3)[0])
PIXELS = np.meshgrid(np.linspace(48.0, 52.0, 7), np.linspace(7.0, 13.0, 9), indexing="ij")
DIRECTIONS = geostationary_angles(*PIXELS, -30.0)


def slanted(scene, **options):
    return scene_on_pixels(scene, *PIXELS, *DIRECTIONS, **options)


def test_cloud_sheet_displacement():
    """A sheet at 10 km seen at 60 degrees is displaced by R (z - arcsin(R sin z / (R + h))), curvature included
    (law of sines on a sphere): within 0.1 %, in every azimuth."""
    scene = scene_on()
    for azimuth in (0.0, 75.0, 160.0, 290.0):
        found = scene_on_pixels(scene, *PIXELS, 60.0, azimuth, interpolation="bilinear")
        latitude, longitude = (p.values[TEN_KM] for p in places_in(found))
        distance = GEOD.inv(PIXELS[1], PIXELS[0], longitude, latitude)[2]
        np.testing.assert_allclose(distance, parallax_distance(60.0, 10e3, 6371e3), rtol=1e-3)


def test_edge_of_a_sheet_appears_where_it_should():
    """The pixel that sees the edge of a cloud sheet: the sheet ends at 10 E, the imager stands in the west, so the
    edge appears farther east by the displacement; nearest columns, within one of them."""
    scene = scene_on(step=0.05)
    scene["cloud_ice"][TEN_KM] = np.where(scene["longitude"] > 10.0, 1e-4, 0.0)
    longitude = np.arange(9.5, 11.5, 0.01)[None, :]
    latitude = np.full_like(longitude, 50.0)
    found = scene_on_pixels(scene, latitude, longitude, 60.0, 270.0)
    clear = scene_on_pixels(scene, latitude, longitude, 60.0, 270.0, method="vertical")
    expected = parallax_distance(60.0, 10e3, 6371e3) / (111.3e3 * np.cos(np.radians(50.0)))  # degrees of longitude
    edges = [float(longitude[0, (s["cloud_ice"].values[TEN_KM, 0] > 0).argmax()]) for s in (found, clear)]
    assert edges[1] == pytest.approx(10.0, abs=0.03)
    assert edges[0] - edges[1] == pytest.approx(expected, abs=0.05)
    assert expected == pytest.approx(0.241, abs=0.002)


@pytest.mark.parametrize("kind", ["regular", "lambert", "curvilinear", "cells"])
def test_every_level_on_every_grid(kind):
    """The same rays through the same atmosphere on four kinds of grids, against the exact place of each level."""
    bilinear = kind != "cells"
    scene = scene_on(kind, step=0.1 if bilinear else 0.05)
    found = slanted(scene, interpolation="bilinear" if bilinear else "nearest")
    assert found["temperature"].dims == ("level", "y", "x")
    assert found["column_valid"].all()
    latitude, longitude = (p.values for p in places_in(found))
    for level in range(HEIGHT.size):
        expected = ray_places(*PIXELS, *DIRECTIONS, HEIGHT[level])
        limit = 0.003 if bilinear else 0.06  # degrees; half the diagonal of a cell
        assert np.abs(latitude[level] - expected[0]).max() < limit
        assert np.abs(longitude[level] - expected[1]).max() < limit * 1.6
    np.testing.assert_allclose(found["skin_temperature"] - 250.0, PIXELS[0], atol=limit)
    np.testing.assert_array_equal(found["pressure"], PRESSURE)
    np.testing.assert_array_equal(found["latitude"], PIXELS[0])
    assert found.attrs["model"] == "invented" and found["time"].values == scene["time"].values


def test_tilted_levels():
    """Level surfaces that rise by 3 km over 10 degrees of latitude: against a root search along the exact ray."""
    scene = scene_on(step=0.1, height=lambda lat, lon: 300.0 * (lat - 50.0))
    found = slanted(scene, interpolation="bilinear")
    latitude = places_in(found)[0].values
    for i in ((0, 0), (3, 4), (6, 8)):
        ray = [a[i] for a in (*PIXELS, *DIRECTIONS)]

        def above(h, ray=ray):
            return h - 10e3 - 300.0 * (ray_places(*ray, h)[0] - 50.0)

        expected = ray_places(*ray, brentq(above, 5e3, 15e3))[0]
        assert latitude[TEN_KM][i] - ray[0] == pytest.approx(expected - ray[0], rel=2e-3)


def test_ground_is_where_the_ray_leaves_it():
    """Over a plateau at 3 km the surface fields are those of the place where the ray meets it."""
    scene = scene_on(step=0.1, ground=3e3)
    found = slanted(scene, interpolation="bilinear")
    expected = ray_places(*PIXELS, *DIRECTIONS, 3e3)[0]
    np.testing.assert_allclose(found["skin_temperature"] - 250.0, expected, atol=1e-4)
    assert np.abs(expected - PIXELS[0]).max() > 0.03


def test_vertical_takes_the_column_below():
    scene = scene_on()
    found = slanted(scene, method="vertical")
    latitude, longitude = places_in(found)
    assert np.ptp(latitude.values, axis=0).max() < 1e-9
    np.testing.assert_allclose(latitude[0], np.rint(PIXELS[0] * 4) / 4, atol=1e-9)
    np.testing.assert_allclose(longitude[0], np.rint(PIXELS[1] * 4) / 4, atol=1e-9)
    same = scene_on_pixels(scene, *PIXELS, 0.0, 0.0)  # straight down
    angles = ["view_zenith_angle", "view_azimuth_angle"]
    np.testing.assert_allclose(found[angles[0]], DIRECTIONS[0])
    xr.testing.assert_equal(same.drop_vars(angles).drop_attrs(), found.drop_vars(angles).drop_attrs())


def test_global_grid_across_the_date_line():
    """A global grid on 0-360, pixels on both sides of 180 and of 0."""
    y, x = np.arange(88.0, -89.0, -2.0), np.arange(0.0, 360.0, 2.0)
    latitude, longitude = np.meshgrid(y, x, indexing="ij")
    part = scene_on(step=2.0)
    scene = xr.Dataset(attrs=part.attrs)
    for name, variable in part.data_vars.items():
        shape = (*variable.shape[:-2], y.size, x.size)
        first = variable.values[..., :1, :1] if variable.ndim > 1 else variable.values
        values = np.broadcast_to(first, shape).copy() if variable.ndim > 1 else first
        scene[name] = (variable.dims, values)
    scene = scene.assign_coords(latitude=(("y", "x"), latitude), longitude=(("y", "x"), longitude))
    scene["temperature"][:] = 250.0 + 10.0 * np.cos(np.radians(longitude))
    lat, lon = np.meshgrid(np.linspace(-3.0, 3.0, 4), np.r_[178.7, -179.3, -0.3, 0.7, 359.5])
    found = scene_on_pixels(scene, lat, lon, 40.0, 90.0, interpolation="bilinear")
    assert found["column_valid"].all()
    expected = 250.0 + 10.0 * np.cos(np.radians(ray_places(lat, lon, 40.0, 90.0, 10e3)[1]))
    np.testing.assert_allclose(found["temperature"][TEN_KM], expected, atol=0.01)


def test_terrain_following_levels_stay_in_order():
    """Levels that follow rough mountains (neighbours 1 km apart): pressures of every slanted column still rise
    downward, with the surface pressure last, and half levels lie between."""
    rng = np.random.default_rng(6)
    scene = scene_on(step=0.25)
    ground = rng.uniform(0.0, 2000.0, scene["orography"].shape)
    surface_pressure = 101325.0 * np.exp(-ground / 7400.0)
    half_sigma = np.r_[0.01, 0.5 * (PRESSURE[1:] + PRESSURE[:-1]) / 101325.0, 1.0]
    sigma = np.sqrt(half_sigma[1:] * half_sigma[:-1])
    dims = ("level", "y", "x")
    scene["pressure"] = (dims, sigma[:, None, None] * surface_pressure)
    scene["half_pressure"] = (("half_level", "y", "x"), half_sigma[:, None, None] * surface_pressure)
    scene["surface_pressure"] = (("y", "x"), surface_pressure)
    scene["orography"] = (("y", "x"), ground)
    scene = scene.drop_vars("height")  # hydrostatic
    scene["temperature"] = (dims, np.full(scene["pressure"].shape, 7400.0 * 9.80665 / 287.0))
    for interpolation in ("nearest", "bilinear"):
        found = slanted(scene, interpolation=interpolation)
        assert found["column_valid"].all()
        pressure, half = found["pressure"].values, found["half_pressure"].values
        assert (np.diff(pressure, axis=0) > 0.0).all()
        assert ((half[1:-1] > pressure[:-1]) & (half[1:-1] < pressure[1:])).all()
        assert (pressure[-1] < found["surface_pressure"].values).all()
        np.testing.assert_allclose(half[-1], found["surface_pressure"])
        heights = scene_heights(found.drop_vars("height", errors="ignore")).values
        # the atmosphere is one of constant scale height: each level must be met at its own height
        np.testing.assert_allclose(heights[:5], -7400.0 * np.log(pressure[:5] / 101325.0), rtol=0.02)


def test_levels_below_ground_do_not_come_in():
    """Pressure levels with nonsense below high ground in part of the domain: what is above ground stays finite and
    sensible where the ray passes over the edge of the high ground."""
    scene = scene_on(step=0.1)
    high = scene["longitude"].values < 10.0
    scene["surface_pressure"] = (("y", "x"), np.where(high, 101325.0 * np.exp(-4200.0 / 7400.0), 101325.0))
    scene["orography"] = (("y", "x"), np.where(high, 4200.0, 0.0))
    below = PRESSURE[:, None, None] > scene["surface_pressure"].values
    scene["temperature"] = scene["temperature"].where(~below, np.nan)
    scene["height"] = scene["height"].where(~below, np.nan)
    found = slanted(scene)
    above = found["pressure"] <= found["surface_pressure"]
    assert np.isfinite(found["temperature"].where(above, 0.0)).all()
    assert found["column_valid"].all()


def test_outside_space_and_low_imager():
    """Outside the domain, space, a ray that leaves the domain in the troposphere, zenith angles from 85 degrees on
    and invalid columns are marked; a ray that leaves it in the stratosphere is not."""
    scene = scene_on()
    scene["column_valid"][:, 40] = False  # 8 E
    latitude = np.array([[50.0, 50.0, 50.0, 50.0, np.nan, 70.0, 50.0, 50.0]])
    longitude = np.array([[10.0, -1.95, -1.85, 10.0, 10.0, 10.0, 8.2, 9.0]])
    zenith = np.array([[60.0, 60.0, 60.0, 86.0, 60.0, 60.0, 60.0, np.nan]])
    found = scene_on_pixels(scene, latitude, longitude, zenith, 270.0)
    assert found["column_valid"].values[0].tolist() == [True, False, False, False, False, False, False, False]
    assert np.isnan(found["temperature"].values[:, 0, 4]).all() and np.isnan(found["latitude"].values[0, 4])
    # displacement at 15 km and 60 degrees is 0.36 degrees of longitude, at 30 km 0.72; the domain ends at 2.125 W
    assert scene_on_pixels(scene, [[50.0]], [[-1.6]], 60.0, 270.0)["column_valid"].item()
    assert found.attrs["masked_columns"] == 7


def test_bilinear_keeps_classes_and_falls_back_beside_gaps():
    scene = scene_on()
    scene["skin_temperature"][:, 50] = np.nan  # 10.5 E
    found = slanted(scene, interpolation="bilinear")
    assert set(np.unique(found["surface_class"])) <= {0.0, 1.0}
    beside = scene_on_pixels(scene, [[50.0, 50.0]], [[10.3, 10.45]], 0.0, 0.0, interpolation="bilinear")
    assert beside["skin_temperature"].values[0, 0] == pytest.approx(300.0)
    assert np.isnan(beside["skin_temperature"].values[0, 1])


def test_other_dimensions_and_names_are_kept():
    """A field with a channel dimension is taken at the ground; scalars and 1-D fields pass through."""
    scene = scene_on()
    scene["emissivity"] = ("channel", "y", "x"), np.stack([scene["latitude"], scene["longitude"]])
    scene["note"] = ((), 7)
    found = slanted(scene)
    assert found["emissivity"].dims == ("channel", "y", "x") and found["note"].item() == 7
    np.testing.assert_allclose(found["emissivity"][1], np.rint(PIXELS[1] * 4) / 4)


def test_pixels_of_a_fixed_grid():
    """Dimensions, coordinates and names of the pixels' own DataArrays are kept."""
    grid = sector(-30.0, 20e3, west=5.0, east=15.0, south=46.0, north=54.0)
    pixels = grid.pixels()
    found = scene_on_pixels(
        scene_on(), pixels.latitude, pixels.longitude, pixels.view_zenith_angle, pixels.view_azimuth_angle
    )
    assert found["temperature"].dims == ("level", "y", "x")
    np.testing.assert_array_equal(found["x"], grid.x)
    assert found["x"].attrs["standard_name"] == "projection_x_angular_coordinate"
    assert "grid_mapping" not in found and "grid_mapping" not in found["temperature"].attrs
    same = scene_on_grid(scene_on(), grid)
    assert same["grid_mapping"].attrs["grid_mapping_name"] == "geostationary"
    assert same["temperature"].attrs["grid_mapping"] == "grid_mapping"
    np.testing.assert_array_equal(same["temperature"], found["temperature"])
    np.testing.assert_array_equal(same["view_zenith_angle"], pixels["view_zenith_angle"])
    one = scene_on_pixels(scene_on(), np.array([50.0, 51.0]), np.array([9.0, 10.0]), 10.0, 180.0)
    assert one["column_valid"].dims == ("pixel",)


def test_lazy_is_the_same():
    """Lazy pixels, a lazy scene, both, and a piece of rows alone."""
    scene = scene_on()
    expected = slanted(scene)
    lazy = slanted(scene, lazy="always")
    assert lazy["temperature"].chunks is not None
    xr.testing.assert_equal(lazy.compute(), expected)
    xr.testing.assert_equal(lazy.isel(y=slice(2, 4)).load(), expected.isel(y=slice(2, 4)))
    chunked = slanted(scene.chunk({"y": 10, "x": 20, "level": -1}), lazy="always")
    xr.testing.assert_equal(chunked.compute(), expected)


def test_pieces_of_rows_do_not_show(monkeypatch):
    from chansim.view import slant

    expected = slanted(scene_on())
    monkeypatch.setattr(slant, "PIXELS_AT_ONCE", 9)
    xr.testing.assert_equal(slanted(scene_on()), expected)


def test_bad_input():
    scene = scene_on()
    with pytest.raises(ViewError, match="method"):
        slanted(scene, method="oblique")
    with pytest.raises(ViewError, match="interpolation"):
        slanted(scene, interpolation="cubic")
    with pytest.raises(ViewError, match="no pixel lies within.*latitude -10.00 to -10.00.*scene latitude 42.00"):
        scene_on_pixels(scene, [[-10.0]], [[100.0]], 0.0, 0.0)
    with pytest.raises(ViewError, match="sees the ground"):
        scene_on_pixels(scene, [[np.nan]], [[100.0]], 0.0, 0.0)
    with pytest.raises(ViewError, match="shape"):
        scene_on_pixels(scene, [[50.0]], [[10.0, 11.0]], 0.0, 0.0)
    with pytest.raises(ViewError, match="sub-satellite longitudes from .* degrees east the most"):
        scene_on_grid(scene, full_disk(170.0, 100e3))
    with pytest.raises(ViewError, match="cells"):
        slanted(scene_on("cells"), interpolation="bilinear")


def test_compiled_against_plain():
    rng = np.random.default_rng(1)
    values = rng.normal(size=(6, 7))
    values[2, 3] = np.nan
    row, column = rng.uniform(0, 5, 200), rng.uniform(0, 7, 200)
    for wraps in (True, False):
        results = np.empty((2, 200))
        place = column if wraps else np.clip(column, 0, 6)
        interpolate(values, row, place, wraps, results[0])
        interpolate.py_func(values, row, place, wraps, results[1])
        np.testing.assert_allclose(results[0], results[1], rtol=1e-13)
