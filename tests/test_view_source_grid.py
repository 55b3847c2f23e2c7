"""Rows and columns of places: every grid point finds itself, points between lie between, strangers are outside."""

import numpy as np
import pyproj
import pytest
import xarray as xr

from chansim.errors import ViewError
from chansim.scene.grids import grid_mapping_variable
from chansim.view.source_grid import locator


def scene_of(latitude, longitude, dims=("y", "x"), axes=None, crs=None):
    """A scene with nothing but its grid."""
    latitude, longitude = np.asarray(latitude, dtype=float), np.asarray(longitude, dtype=float)
    scene = xr.Dataset({"column_valid": (dims, np.ones(latitude.shape, dtype=bool))})
    scene = scene.assign_coords(latitude=(dims, latitude), longitude=(dims, longitude))
    for dim, values in (axes or {}).items():
        scene.coords[dim] = (dim, values)
    if crs is not None:
        scene["grid_mapping"] = grid_mapping_variable(crs)
    return scene


def regular(latitude, longitude):
    return scene_of(*np.meshgrid(latitude, longitude, indexing="ij"))


def projected(crs, step=50e3):
    y, x = np.arange(20) * step - 10 * step, np.arange(30) * step - 15 * step
    longitude, latitude = pyproj.Proj(crs)(*np.meshgrid(x, y), inverse=True)
    return scene_of(latitude, longitude, axes={"y": y, "x": x}, crs=crs)


def rotated():
    crs = pyproj.CRS.from_cf(
        {
            "grid_mapping_name": "rotated_latitude_longitude",
            "grid_north_pole_latitude": 39.0,
            "grid_north_pole_longitude": -170.0,
            "earth_radius": 6371229.0,
        }
    )
    y, x = np.arange(-10.0, 10.0, 0.5), np.arange(-8.0, 8.0, 0.5)
    to_places = pyproj.Transformer.from_crs(crs, crs.source_crs, always_xy=True)
    longitude, latitude = to_places.transform(*np.meshgrid(x, y))
    return scene_of(latitude, longitude, axes={"y": y, "x": x}, crs=crs)


LAMBERT = pyproj.CRS.from_proj4("+proj=lcc +lat_1=50 +lat_2=50 +lat_0=50 +lon_0=10 +R=6371229")
POLAR = pyproj.CRS.from_proj4("+proj=stere +lat_0=90 +lat_ts=60 +lon_0=20 +R=6371229")
GRIDS = {
    "regular": regular(np.arange(50.0, 29.0, -1.0), np.arange(-20.0, 21.0)),
    "irregular rows": regular(np.array([-40.0, -30.5, -20.0, -8.0, 0.0]), np.arange(160.0, 200.0, 2.0)),
    "date line": regular(np.arange(0.0, 11.0), np.r_[170.0:180.0, -180.0:-170.0]),
    "lambert": projected(LAMBERT),
    "polar": projected(POLAR),
    "rotated": rotated(),
}
GRIDS["curvilinear"] = GRIDS["lambert"].drop_vars(["grid_mapping", "x", "y"])
GRIDS["curvilinear at the pole"] = GRIDS["polar"].drop_vars(["grid_mapping", "x", "y"])


@pytest.mark.parametrize("name", GRIDS)
def test_grid_points_find_themselves(name):
    scene = GRIDS[name]
    where = locator(scene)
    assert where.shape == scene["column_valid"].shape and where.between and not where.wraps
    latitude, longitude = scene["latitude"].values, scene["longitude"].values
    row, column, inside = where.locate(latitude, longitude)
    expected = np.indices(latitude.shape).astype(float)
    assert inside.all()
    np.testing.assert_allclose(row, expected[0], atol=1e-6)
    np.testing.assert_allclose(column, expected[1], atol=1e-6)
    again = where.locate(latitude, longitude + 360.0)
    np.testing.assert_allclose(again[1], expected[1], atol=1e-6)


@pytest.mark.parametrize("name", GRIDS)
def test_between_and_outside(name):
    """Midway between diagonal neighbours (in space) lies midway in rows and columns, within what curvature does in
    one grid length; the antipode and a missing place are outside."""
    scene = GRIDS[name]
    where = locator(scene)
    phi, lam = np.radians(scene["latitude"].values), np.radians(scene["longitude"].values)
    points = np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)])
    middle = 0.5 * (points[:, 3, 4] + points[:, 4, 5])
    latitude = np.degrees(np.arctan2(middle[2], np.hypot(*middle[:2])))
    longitude = np.degrees(np.arctan2(middle[1], middle[0]))
    row, column, inside = where.locate(latitude, longitude)
    limit = 0.1 if name == "irregular rows" else 0.03
    assert inside and row == pytest.approx(3.5, abs=limit) and column == pytest.approx(4.5, abs=limit)
    assert not where.locate(-latitude, longitude + 180.0)[2]
    row, column, inside = where.locate(np.array([np.nan, latitude]), np.array([longitude, np.nan]))
    assert not inside.any() and np.isfinite(row).all() and np.isfinite(column).all()


def test_half_a_grid_length_belongs_to_the_grid():
    where = locator(GRIDS["regular"])
    row, column, inside = where.locate(np.array([50.4, 50.6, 40.0, 40.0]), np.array([0.0, 0.0, 20.4, -20.6]))
    assert inside.tolist() == [True, False, True, False]
    assert row[0] == 0.0 and column[2] == 40.0  # clipped to the grid


@pytest.mark.parametrize("start", [0.0, -180.0])
def test_global_grid_goes_round(start):
    """Longitudes 0-360 and -180-180, a place between the last and the first column, the caps beyond the outer rows."""
    scene = regular(np.linspace(-88.5, 88.5, 60), start + np.arange(0.0, 360.0, 3.0))
    where = locator(scene)
    assert where.wraps
    row, column, inside = where.locate(np.array([0.0, 89.9, -89.9]), np.full(3, start - 1.5))
    assert inside.all()
    assert column[0] == pytest.approx(119.5)
    assert row.tolist() == [pytest.approx(29.5), 59.0, 0.0]
    assert not locator(regular(np.arange(0.0, 10.0), np.arange(0.0, 355.0, 3.0))).wraps


def test_cells():
    """Nearest cell of a scattered list, checked by brute force."""
    rng = np.random.default_rng(8)
    latitude, longitude = rng.uniform(30.0, 50.0, 800), rng.uniform(-180.0, -150.0, 800)
    where = locator(scene_of(latitude, longitude, dims=("cell",)))
    assert where.shape == (800, 1) and not where.between
    there = rng.uniform(32.0, 48.0, 50), rng.uniform(-178.0, -152.0, 50)
    row, column, inside = where.locate(*there)
    assert inside.mean() > 0.9 and (column == 0.0).all()
    geod = pyproj.Geod(a=6371e3, b=6371e3)
    for i in range(50):
        far = geod.inv(*(np.full(800, v) for v in (there[1][i], there[0][i])), longitude, latitude)[2]
        assert row[i] == far.argmin()
    assert not where.locate(0.0, 0.0)[2]


def test_single_column_and_broken_axes():
    with pytest.raises(ViewError, match="single column"):
        locator(scene_of([10.0], [20.0], dims=("cell",)))
    with pytest.raises(ViewError, match="neither rise nor fall"):
        locator(regular([10.0, 30.0, 20.0], [0.0, 1.0, 2.0]))
