"""Horizontal grids of GRIB and netCDF files against pyproj and ecCodes."""

import numpy as np
import pyproj
import pytest
import xarray as xr
from scene_samples import pressure_level_file, write_any_grib

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene.reading import describe_scene, open_scene

SPHERE = 6371229.0  # m, shape of the earth 6 of GRIB 2, code table 3.2


def isobaric(temperature=None):
    """Messages of temperature and humidity on three levels, surface pressure; `temperature` is that at 500 hPa."""
    messages = [({"shortName": "sp", "typeOfLevel": "surface", "level": 0}, 1e5)]
    for hpa, warm, moist in ((900, 285.0, 8e-3), (500, 255.0, 1e-3), (200, 220.0, 1e-5)):
        level = {"typeOfLevel": "isobaricInhPa", "level": hpa}
        warm = temperature if temperature is not None and hpa == 500 else warm
        messages += [({"shortName": "t", **level}, warm), ({"shortName": "q", **level}, moist)]
    return messages


def decoded_positions(path):
    """Latitude and longitude of every value, from ecCodes' own iterator."""
    import eccodes

    with open(path, "rb") as file:
        handle = eccodes.codes_grib_new_from_file(file)
        latitude, longitude = (eccodes.codes_get_array(handle, name) for name in ("latitudes", "longitudes"))
        eccodes.codes_release(handle)
    return latitude, longitude


def assert_same_places(scene, latitude, longitude, atol=1e-4):
    np.testing.assert_allclose(scene["latitude"].values.ravel(), latitude, atol=atol)
    turn = (scene["longitude"].values.ravel() - longitude + 180.0) % 360.0 - 180.0
    np.testing.assert_allclose(turn * np.cos(np.radians(latitude)), 0.0, atol=atol)


def test_reduced_gaussian_grib_is_a_list_of_cells(tmp_path):
    file = tmp_path / "reduced.grb"
    write_any_grib(file, "reduced_gg_pl_32_grib2", isobaric())
    latitude, longitude = decoded_positions(file)
    write_any_grib(file, "reduced_gg_pl_32_grib2", isobaric(temperature=250.0 + 0.1 * latitude))
    scene = open_scene(file)
    assert scene["temperature"].dims == ("level", "cell") and scene.sizes["cell"] == 6114
    assert_same_places(scene, latitude, longitude)
    np.testing.assert_allclose(scene["temperature"][1], 250.0 + 0.1 * latitude, atol=1e-3)
    # N32: the rows nearest to the poles stand at 87.8638 degrees and have 20 points (ECMWF's list of this grid)
    assert scene["latitude"].values.max() == pytest.approx(87.8638, abs=1e-4)
    assert np.count_nonzero(scene["latitude"] > 87.0) == 20
    assert "6114 (no grid mapping)" in describe_scene(file)


def test_regular_gaussian_grib(tmp_path):
    file = tmp_path / "gaussian.grb"
    write_any_grib(file, "regular_gg_pl_grib2", isobaric())
    scene = open_scene(file)
    assert scene["temperature"].shape == (3, 64, 128)
    # Gaussian latitudes are the zeros of the Legendre polynomial of degree 64
    zeros = np.degrees(np.arcsin(np.polynomial.legendre.leggauss(64)[0]))[::-1]
    np.testing.assert_allclose(scene["latitude"][:, 0], zeros, atol=1e-5)
    np.testing.assert_allclose(scene["longitude"][0], np.arange(128) * 360.0 / 128.0, atol=1e-5)


def test_rotated_grib(tmp_path):
    file = tmp_path / "rotated.grb"
    grid = {
        "numberOfDataPoints": 20, "Ni": 5, "Nj": 4,
        "latitudeOfFirstGridPointInDegrees": 3.0, "longitudeOfFirstGridPointInDegrees": 358.0,
        "latitudeOfLastGridPointInDegrees": 0.0, "longitudeOfLastGridPointInDegrees": 2.0,
        "iDirectionIncrementInDegrees": 1.0, "jDirectionIncrementInDegrees": 1.0,
        "latitudeOfSouthernPoleInDegrees": -40.0, "longitudeOfSouthernPoleInDegrees": 10.0,
    }  # fmt: skip
    write_any_grib(file, "rotated_ll_pl_grib2", isobaric(), grid)
    scene = open_scene(file)
    # spherical trigonometry: the rotated equator's middle stands at 50 N, 10 E
    east, north = np.radians(np.meshgrid([-2.0, -1.0, 0.0, 1.0, 2.0], [3.0, 2.0, 1.0, 0.0]))
    tilt = np.radians(50.0)
    toward, up = np.cos(north) * np.cos(east), np.sin(north)
    latitude = np.degrees(np.arcsin(toward * np.sin(tilt) + up * np.cos(tilt)))
    longitude = 10.0 + np.degrees(np.arctan2(np.cos(north) * np.sin(east), toward * np.cos(tilt) - up * np.sin(tilt)))
    assert_same_places(scene, latitude.ravel(), longitude.ravel(), atol=2e-4)
    assert scene["grid_mapping"].attrs["grid_mapping_name"] == "rotated_latitude_longitude"
    np.testing.assert_allclose(scene["x"], [-2.0, -1.0, 0.0, 1.0, 2.0], atol=1e-4)
    # the middle of the rotated equator lies at 50 N, 10 E: 90 degrees from the rotated pole
    np.testing.assert_allclose(scene["latitude"][3, 2], 50.0, atol=1e-4)


PROJECTED = {
    "lambert": (
        {"gridType": "lambert", "LaDInDegrees": 45.0, "LoVInDegrees": 10.0, "Latin1InDegrees": 35.0,
         "Latin2InDegrees": 55.0, "Nx": 4, "Ny": 3, "DxInMetres": 50000, "DyInMetres": 50000},
        "+proj=lcc +lat_0=45 +lon_0=10 +lat_1=35 +lat_2=55",
    ),
    "polar_stereographic": (
        {"gridType": "polar_stereographic", "LaDInDegrees": 60.0, "orientationOfTheGridInDegrees": 10.0, "Nx": 4,
         "Ny": 3, "DxInMetres": 50000, "DyInMetres": 50000},
        "+proj=stere +lat_0=90 +lat_ts=60 +lon_0=10",
    ),
    "mercator": (
        {"gridType": "mercator", "LaDInDegrees": 20.0, "Ni": 4, "Nj": 3, "DiInMetres": 50000, "DjInMetres": 50000},
        "+proj=merc +lat_ts=20 +lon_0=0",
    ),
}  # fmt: skip


@pytest.mark.parametrize("kind", sorted(PROJECTED))
def test_projected_grib(tmp_path, kind):
    grid, proj4 = PROJECTED[kind]
    file = tmp_path / "projected.grb"
    first = {"latitudeOfFirstGridPointInDegrees": 47.0, "longitudeOfFirstGridPointInDegrees": 8.0}
    first["numberOfDataPoints"] = 12
    proj = pyproj.Proj(f"{proj4} +R={SPHERE}")
    x0, y0 = proj(8.0, 47.0)
    x, y = np.meshgrid(x0 + 50000.0 * np.arange(4), y0 + 50000.0 * np.arange(3))
    longitude, latitude = proj(x, y, inverse=True)
    if kind == "mercator":
        last = longitude[-1, -1], latitude[-1, -1]
        first |= {"longitudeOfLastGridPointInDegrees": last[0], "latitudeOfLastGridPointInDegrees": last[1]}
    messages = [({**grid, **first, "jScansPositively": 1, **keys}, value) for keys, value in isobaric()]
    write_any_grib(file, "GRIB2", messages, {"shapeOfTheEarth": 6})
    scene = open_scene(file)
    assert scene["temperature"].shape == (3, 3, 4)
    assert_same_places(scene, latitude.ravel(), longitude.ravel(), atol=2e-4)
    crs = pyproj.CRS.from_cf(scene["grid_mapping"].attrs)
    again = pyproj.Proj(crs)(*np.meshgrid(scene["x"], scene["y"]), inverse=True)
    np.testing.assert_allclose(again[1], latitude, atol=2e-4)
    np.testing.assert_allclose(np.diff(scene["x"]), 50000.0, rtol=1e-3)


def test_grib_cells_whose_positions_are_fields(tmp_path):
    file = tmp_path / "cells.grb"
    messages = [
        *isobaric(),
        ({"shortName": "tlat", "typeOfLevel": "surface", "level": 0}, [10.0, 20.0, 30.0, 40.0]),
        ({"shortName": "tlon", "typeOfLevel": "surface", "level": 0}, [100.0, 110.0, 190.0, 350.0]),
    ]
    messages = [({"gridType": "unstructured_grid", "numberOfDataPoints": 4, **k}, v) for k, v in messages]
    write_any_grib(file, "GRIB2", messages)
    scene = open_scene(file)
    np.testing.assert_allclose(scene["latitude"], [10.0, 20.0, 30.0, 40.0], atol=1e-4)
    np.testing.assert_allclose(scene["longitude"], [100.0, 110.0, 190.0, 350.0], atol=1e-3)
    without = tmp_path / "without.grb"
    write_any_grib(without, "GRIB2", messages[:-2])
    with pytest.raises(SceneError, match="no latitude and longitude found for t"):
        open_scene(without)
    positions = tmp_path / "positions.grb"
    write_any_grib(positions, "GRIB2", messages[-2:])
    np.testing.assert_allclose(open_scene([without, positions])["latitude"], scene["latitude"])


# --- netCDF -------------------------------------------------------------------------------------------


def cells(data, latitude, longitude, units=("degrees_north", "degrees_east")):
    """The sample file as a list of cells with these positions."""
    flat = data.stack(ncells=("lat", "lon")).reset_index("ncells", drop=True)
    flat = flat.drop_vars(["lat", "lon"], errors="ignore")
    for name, values, unit, standard_name in zip(
        ("clat", "clon"), (latitude, longitude), units, ("latitude", "longitude")
    ):
        flat[name] = ("ncells", values, {"units": unit, "standard_name": standard_name})
    return flat


def test_cells_in_radians():
    data = pressure_level_file()
    latitude, longitude = np.linspace(-80.0, 80.0, 12), np.linspace(0.0, 300.0, 12)
    scene = open_scene(cells(data, np.radians(latitude), np.radians(longitude), ("radian", "radian")))
    np.testing.assert_allclose(scene["latitude"], latitude)
    np.testing.assert_allclose(scene["longitude"], longitude)


def test_cells_of_another_number_than_the_values():
    data = cells(pressure_level_file(), np.zeros(12), np.zeros(12)).drop_vars(["clat", "clon"])
    for name, standard_name in (("clat", "latitude"), ("clon", "longitude")):
        data[name] = ("other", np.zeros(5), {"standard_name": standard_name, "units": "degrees"})
    with pytest.raises(
        SceneError, match="T .air_temperature; extra dimension ncells, while the places lie along other"
    ):
        open_scene(data)


@pytest.mark.parametrize("first", [0.0, -180.0])
def test_global_fields_that_wrap(first):
    """Longitudes 0 to 360 and -180 to 180: every column keeps its place, nothing is moved."""
    longitude = first + np.arange(0.0, 360.0, 30.0)
    data = pressure_level_file().isel(lon=np.arange(12) % 4).assign_coords(
        lon=("lon", longitude, {"units": "degrees_east", "standard_name": "longitude"})
    )  # fmt: skip
    data["T"] = data["T"] + xr.DataArray(np.cos(np.radians(longitude)), dims="lon").astype("f4")
    scene = open_scene(data.assign(T=data["T"].assign_attrs(standard_name="air_temperature", units="K")))
    places = scene["longitude"].values
    assert places.min() >= -180.0 and places.max() <= 360.0
    lowest = scene["temperature"].values[-1]
    expected = data["T"].values[0] - np.cos(np.radians(longitude)) + np.cos(np.radians(places))
    np.testing.assert_allclose(lowest, expected, atol=1e-4)


def test_longitudes_beyond_both_ranges_are_turned():
    data = pressure_level_file()
    data = data.assign_coords(lon=("lon", [350.0, 360.0, 370.0, 380.0], data["lon"].attrs))
    np.testing.assert_allclose(open_scene(data)["longitude"][0] % 360.0, [350.0, 0.0, 10.0, 20.0])


def test_projection_from_the_attributes_of_mesoscale_models():
    proj = pyproj.Proj("+proj=lcc +lat_1=30 +lat_2=60 +lat_0=40 +lon_0=5 +R=6370000")
    x, y = np.meshgrid(12000.0 * np.arange(4), 12000.0 * np.arange(3))
    longitude, latitude = proj(x, y, inverse=True)
    data = pressure_level_file().drop_vars(["lat", "lon"]).rename(lat="south_north", lon="west_east")
    dims = ("south_north", "west_east")
    data["XLAT"] = (dims, latitude, {"units": "degree_north", "description": "LATITUDE, SOUTH IS NEGATIVE"})
    data["XLONG"] = (dims, longitude, {"units": "degree_east", "description": "LONGITUDE, WEST IS NEGATIVE"})
    data.attrs = {"MAP_PROJ": np.int32(1), "TRUELAT1": np.float32(30.0), "TRUELAT2": np.float32(60.0),
                  "STAND_LON": np.float32(5.0), "MOAD_CEN_LAT": np.float32(40.0)}  # fmt: skip
    scene = open_scene(data)
    assert scene["grid_mapping"].attrs["grid_mapping_name"] == "lambert_conformal_conic"
    np.testing.assert_allclose(np.diff(scene["west_east"]), 12000.0, rtol=1e-3)
    data.attrs["STAND_LON"] = np.float32(50.0)  # not the projection of these positions
    other = open_scene(data)
    assert "grid_mapping" not in other and "projection is not kept" in "\n".join(other.attrs["recognised"])
