"""Times, members and several files; sources far larger than the memory; values that cannot be."""

import json
import resource
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scene_atmosphere import VERTICALS, model_file
from scene_samples import TIME, basic_grib_messages, pressure_level_file, write_grib

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene import reading
from chansim.scene.reading import describe_scene, open_scene, scene_members, scene_times

HOURS = TIME + np.arange(3) * np.timedelta64(6, "h")


def at_hours(data=None, warmer=1.0):
    """The sample file at three times, 1 K warmer at each."""
    data = (data or pressure_level_file()).drop_vars("time")
    times = xr.DataArray(HOURS, dims="time", attrs={"standard_name": "time"})
    series = xr.concat([data.assign(T=data["T"] + k * warmer) for k in range(3)], dim="time").assign_coords(time=times)
    for name in ("T", "Q", "PS"):
        series[name].attrs = pressure_level_file()[name].attrs
    return series


# --- times --------------------------------------------------------------------------------------------


def test_times_of_one_file(tmp_path):
    at_hours().to_netcdf(tmp_path / "series.nc")
    at_hours().to_zarr(tmp_path / "series.zarr", consolidated=False)
    expected = list(HOURS.astype("datetime64[s]"))
    for source in (tmp_path / "series.nc", str(tmp_path / "series.zarr"), at_hours()):
        assert scene_times(source) == expected
    assert scene_times(pressure_level_file()) == [TIME.astype("datetime64[s]")]
    assert scene_times(pressure_level_file().drop_vars("time")) == []


def test_times_spread_over_files(tmp_path):
    for k in range(3):
        at_hours().isel(time=[k]).to_netcdf(tmp_path / f"hour{k}.nc")
    pattern = str(tmp_path / "hour*.nc")
    paths = [tmp_path / f"hour{k}.nc" for k in (2, 0, 1)]
    assert scene_times(pattern) == scene_times(paths) == list(HOURS.astype("datetime64[s]"))
    with pytest.raises(SceneError, match="hour2.nc and 2 more: holds 3 times .*say which"):
        open_scene(paths)
    for source in (pattern, paths):
        scene = open_scene(source, time=HOURS[1])
        expected = open_scene(at_hours(), time=HOURS[1])
        xr.testing.assert_allclose(scene.drop_attrs(), expected.drop_attrs())
    with pytest.raises(SceneError, match="nothing is valid at 2021"):
        open_scene(paths, time="2021-01-01")
    assert "Valid times: 3" in describe_scene(pattern)


def test_times_written_as_characters():
    data = at_hours().rename(time="Time").drop_vars("Time")
    stamps = np.array([str(t)[:19].replace("T", "_").encode() for t in HOURS])
    data["Times"] = ("Time", stamps)
    assert scene_times(data) == list(HOURS.astype("datetime64[s]"))
    assert open_scene(data, time=HOURS[2])["temperature"][-1, 0, 0] == pytest.approx(float(data["T"][2, 0, 0, 0]))


def test_times_of_another_calendar(tmp_path):
    data = at_hours()
    data["time"] = ("time", [59.5, 59.75, 60.0], {"units": "days since 2001-01-01", "calendar": "noleap"})
    data.to_netcdf(tmp_path / "noleap.nc")
    # 59 days after 1 January in a year without leap day: 1 March
    assert scene_times(tmp_path / "noleap.nc")[0] == np.datetime64("2001-03-01T12:00")


def test_times_of_grib_files(tmp_path):
    for k, hour in enumerate((1200, 1800)):
        messages = [({**keys, "dataTime": hour}, value + (keys["shortName"] == "t") * k)
                    for keys, value in basic_grib_messages()]  # fmt: skip
        write_grib(tmp_path / f"{hour}.grb", messages)
    pattern = str(tmp_path / "*.grb")
    assert scene_times(pattern) == [np.datetime64("2020-07-15T12:00"), np.datetime64("2020-07-15T18:00")]
    later = open_scene(pattern, time="2020-07-15T18:00")
    np.testing.assert_allclose(later["temperature"][-1], 289.0, atol=1e-3)


# --- variables spread over files ----------------------------------------------------------------------


def split(data, tmp_path):
    """Temperature, humidity and surface pressure in one file each."""
    paths = []
    for name in ("T", "Q", "PS"):
        paths.append(tmp_path / f"{name}.nc")
        data[[name]].to_netcdf(paths[-1])
    return paths


def test_variables_spread_over_files(tmp_path):
    paths = split(at_hours(), tmp_path)
    scene = open_scene(paths, time=HOURS[1])
    expected = open_scene(at_hours(), time=HOURS[1])
    xr.testing.assert_allclose(scene.drop_attrs(), expected.drop_attrs())
    lazy = open_scene(paths, time=HOURS[1], chunks={"lat": 1})
    assert lazy["temperature"].chunks
    np.testing.assert_allclose(lazy["temperature"], expected["temperature"])


def test_files_with_longitudes_and_levels_in_another_order(tmp_path):
    data = pressure_level_file()
    data["T"] = data["T"] + xr.DataArray(np.arange(4.0), dims="lon").astype("f4")
    data["T"].attrs = pressure_level_file()["T"].attrs
    data["Q"] = data["Q"] * xr.DataArray([1.0, 0.9, 0.8, 0.7], dims="lon").astype("f4")
    data["Q"].attrs = pressure_level_file()["Q"].attrs
    expected = open_scene(data)
    data[["T", "PS"]].to_netcdf(tmp_path / "a.nc")
    other = data[["Q"]].assign_coords(lon=("lon", data["lon"].values % 360.0, data["lon"].attrs)).sortby("lon")
    other.isel(plev=slice(None, None, -1), lat=slice(None, None, -1)).to_netcdf(tmp_path / "b.nc")
    scene = open_scene([tmp_path / "a.nc", tmp_path / "b.nc"])
    xr.testing.assert_allclose(scene.drop_attrs(), expected.drop_attrs())


def test_files_without_time_belong_to_every_time(tmp_path):
    at_hours().to_netcdf(tmp_path / "air.nc")
    ground = xr.full_like(pressure_level_file()["PS"], 120.0).drop_vars("time")
    ground.attrs = {"standard_name": "surface_altitude", "units": "m"}
    ground.to_dataset(name="zs").to_netcdf(tmp_path / "ground.nc")
    scene = open_scene([tmp_path / "air.nc", tmp_path / "ground.nc"], time=HOURS[2])
    np.testing.assert_allclose(scene["orography"], 120.0)


def test_files_with_other_levels_under_the_same_name(tmp_path):
    soil = pressure_level_file()[["T"]].isel(plev=slice(0, 2)).rename(T="soil")
    soil["soil"].attrs = {"standard_name": "soil_temperature", "units": "K"}
    soil["plev"] = ("plev", [0.1, 0.5], {"units": "m", "standard_name": "depth"})
    soil.to_netcdf(tmp_path / "soil.nc")
    pressure_level_file().to_netcdf(tmp_path / "air.nc")
    assert open_scene([tmp_path / "air.nc", tmp_path / "soil.nc"]).sizes["level"] == 9


def test_scalar_heights_of_two_files_stay_with_their_fields(tmp_path):
    data = pressure_level_file()
    data.to_netcdf(tmp_path / "air.nc")
    for name, height, value, standard_name, units in (
        ("tas", 2.0, 291.0, "air_temperature", "K"), ("wind", 10.0, 6.0, "wind_speed", "m s-1"),
    ):  # fmt: skip
        field = xr.full_like(data["PS"], value).assign_attrs(standard_name=standard_name, units=units)
        field = field.assign_coords(height=((), height, {"standard_name": "height", "units": "m"}))
        field.to_dataset(name=name).to_netcdf(tmp_path / f"{name}.nc")
    scene = open_scene([tmp_path / "air.nc", tmp_path / "tas.nc", tmp_path / "wind.nc"])
    np.testing.assert_allclose(scene["air_temperature_2m"], 291.0)
    np.testing.assert_allclose(scene["wind_speed_10m"], 6.0)


def test_files_on_two_grids(tmp_path):
    data = pressure_level_file()
    data[["T"]].to_netcdf(tmp_path / "a.nc")
    data[["Q"]].isel(lat=slice(0, 2)).to_netcdf(tmp_path / "b.nc")
    with pytest.raises(SceneError, match="b.nc has 2 values of lat and .*a.nc 3; .*one grid"):
        open_scene([tmp_path / "a.nc", tmp_path / "b.nc"])
    shifted = data[["Q"]].assign_coords(lat=("lat", data["lat"].values + 1.0, data["lat"].attrs))
    shifted.to_netcdf(tmp_path / "c.nc")
    with pytest.raises(SceneError, match="c.nc: lat runs from 51 to 31, in .*a.nc from 50 to 30"):
        open_scene([tmp_path / "a.nc", tmp_path / "c.nc"])


def test_the_same_variable_twice_at_one_time(tmp_path):
    data = pressure_level_file()
    data.to_netcdf(tmp_path / "one.nc")
    data.assign(T=data["T"] + 1.0).to_netcdf(tmp_path / "two.nc")
    with pytest.raises(SceneError, match="T is in .*one.nc and in .*two.nc, both valid at the same time"):
        open_scene([tmp_path / "one.nc", tmp_path / "two.nc"])


def test_grib_levels_spread_over_files(tmp_path):
    messages = basic_grib_messages()
    write_grib(tmp_path / "low.grb", [m for m in messages if m[0].get("level", 0) in (0, 1000, 700)])
    write_grib(tmp_path / "high.grb", [m for m in messages if m[0].get("level", 0) in (300, 100)])
    write_grib(tmp_path / "all.grb", messages)
    scene, expected = open_scene([tmp_path / "low.grb", tmp_path / "high.grb"]), open_scene(tmp_path / "all.grb")
    xr.testing.assert_allclose(scene.drop_attrs(), expected.drop_attrs())


def test_lists_that_cannot_be(tmp_path):
    pressure_level_file().to_netcdf(tmp_path / "a.nc")
    write_grib(tmp_path / "b.grb", basic_grib_messages())
    with pytest.raises(SceneError, match="several kinds cannot be joined.*a.nc is netCDF.*b.grb is GRIB"):
        open_scene([tmp_path / "a.nc", tmp_path / "b.grb"])
    with pytest.raises(SceneError, match="no file fits this pattern"):
        open_scene(str(tmp_path / "*.zarr"))
    with pytest.raises(SceneError, match="empty list"):
        open_scene([])
    with pytest.raises(SceneError, match="missing.nc: no such file"):
        open_scene([tmp_path / "a.nc", tmp_path / "missing.nc"])
    with pytest.raises(SceneError, match="a list may hold paths only"):
        open_scene([pressure_level_file()])


# --- members ------------------------------------------------------------------------------------------


def test_members_of_netcdf(tmp_path):
    data = pressure_level_file()
    ensemble = xr.concat([data.assign(T=data["T"] + k) for k in range(3)], dim="number")
    for name in ("T", "Q", "PS"):
        ensemble[name].attrs = data[name].attrs
    ensemble = ensemble.assign_coords(number=("number", [1, 2, 5]))
    ensemble.to_netcdf(tmp_path / "members.nc")
    assert scene_members(tmp_path / "members.nc") == {"number": [1, 2, 5]}
    scene = open_scene(tmp_path / "members.nc", select={"number": 5})
    np.testing.assert_allclose(scene["temperature"][-1], data["T"][0] + 2.0)
    text = describe_scene(tmp_path / "members.nc")
    assert "number = 1, 2, 5; shown here: 1" in text and 'select={"number": 1}' in text and "can be used" in text
    assert scene_members(data) == {}


def test_members_of_grib(tmp_path):
    messages = []
    for number in (3, 7):
        extra = {"productDefinitionTemplateNumber": 1, "numberOfForecastsInEnsemble": 2, "number": number}
        messages += [({**extra, **keys}, value) for keys, value in basic_grib_messages()]
    write_grib(tmp_path / "members.grb", messages)
    assert scene_members(tmp_path / "members.grb") == {"number": [3, 7]}
    assert "shown here: 3" in describe_scene(tmp_path / "members.grb")


# --- larger than the memory ---------------------------------------------------------------------------

BIG = {"time": 72, "lev": 137, "cell": 260_000}  # two fields of 4 bytes: 20.5 GB


def write_big_zarr(path, cells=BIG["cell"], times=BIG["time"]):
    """A Zarr store of 20 GB of which nothing is written but the description: every chunk is its fill value."""
    import zarr

    root = zarr.create_group(path, zarr_format=3)
    shape = (times, BIG["lev"], cells)
    fields = {
        "t": (shape, (1, 20, 65_000), 260.0, "air_temperature", "K"),
        "q": (shape, (1, 20, 65_000), 1e-4, "specific_humidity", "kg kg-1"),
        "ps": ((times, cells), (1, 65_000), 1e5, "surface_air_pressure", "Pa"),
    }
    for name, (size, chunks, fill, standard_name, units) in fields.items():
        array = root.create_array(
            name, shape=size, chunks=chunks, dtype="f4", fill_value=fill, dimension_names=_names(size)
        )
        array.attrs.update({"standard_name": standard_name, "units": units})
    small = {
        "time": (np.arange(times, dtype="i8"), {"units": "hours since 2020-01-01", "standard_name": "time"}),
        "ap": (np.linspace(100.0, 0.0, BIG["lev"]), {"units": "Pa"}),
        "b": (np.linspace(0.0, 0.99, BIG["lev"]) + 1e-3, {"units": "1"}),
        "lat": (np.linspace(-60.0, 60.0, cells), {"units": "degrees_north"}),
        "lon": (np.linspace(0.0, 300.0, cells), {"units": "degrees_east"}),
        "lev": (np.arange(1.0, BIG["lev"] + 1), {
            "standard_name": "atmosphere_hybrid_sigma_pressure_coordinate", "positive": "down",
            "formula_terms": "ap: ap b: b ps: ps"}),
    }  # fmt: skip
    for name, (values, attrs) in small.items():
        dim = {"lat": "cell", "lon": "cell", "time": "time"}.get(name, "lev")
        array = root.create_array(name, data=values, dimension_names=[dim])
        array.attrs.update(attrs)


def _names(size):
    return list(BIG) if len(size) == 3 else ["time", "cell"]


OPEN_ONE_TIME = """
import json, resource, sys
import chansim
from chansim.scene.reading import open_scene, scene_times
times = scene_times(sys.argv[1])
scene = open_scene(sys.argv[1], time=times[-2])
lazy = bool(scene["temperature"].chunks)
scene = scene.isel(cell=slice(0, 1000)).load() if len(sys.argv) > 2 else scene.load()
print(json.dumps({
    "times": len(times), "lowest": float(scene["pressure"][-1, 0]), "warm": float(scene["temperature"][60, 17]),
    "lazy": lazy, "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024,
}))
"""


def open_one_time(*arguments):
    """Runs OPEN_ONE_TIME in a process of its own."""
    command, root = [sys.executable, "-c", OPEN_ONE_TIME, *map(str, arguments)], str(Path(__file__).parents[1])
    run = subprocess.run(command, capture_output=True, text=True, cwd=root, timeout=300)
    assert run.returncode == 0, run.stderr
    return json.loads(run.stdout)


def test_one_time_of_twenty_gigabytes(tmp_path):
    path = tmp_path / "big.zarr"
    write_big_zarr(path)
    logical = sum(v.nbytes for v in xr.open_zarr(path, consolidated=False).values())
    real = sum(file.stat().st_size for file in path.rglob("*") if file.is_file())
    assert logical > 20e9 and real < 20e6
    found = open_one_time(path)
    assert found["times"] == 72 and found["warm"] == 260.0
    assert found["lowest"] == pytest.approx(0.991 * 1e5)
    assert found["peak"] < 2e9 and not found["lazy"]
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024 < 20e9  # nor was it built in memory


def test_one_time_larger_than_what_is_read_at_once_stays_lazy(tmp_path):
    path = tmp_path / "wide.zarr"
    write_big_zarr(path, cells=1_600_000, times=3)
    found = open_one_time(path, "part")
    assert found["lazy"] and found["warm"] == 260.0
    assert found["peak"] < 2e9


@pytest.mark.parametrize("vertical", VERTICALS)
def test_lazy_equals_eager_in_every_vertical_coordinate(vertical, monkeypatch):
    eager = open_scene(model_file(vertical, "regular"))
    monkeypatch.setattr(reading, "_EAGER_BYTES", 1000.0)
    lazy = open_scene(model_file(vertical, "regular"))
    for name in ("pressure", "temperature", "specific_humidity", "cloud_liquid"):
        assert lazy[name].chunks, name
        np.testing.assert_allclose(lazy[name].values, eager[name].values, rtol=1e-12)
    assert "This source can be used" in describe_scene(model_file(vertical, "regular"))


# --- values that cannot be ----------------------------------------------------------------------------


def with_field(values, standard_name, units="1"):
    data = pressure_level_file()
    field = xr.full_like(data["Q"], 0.0).assign_attrs(standard_name=standard_name, units=units)
    field[4, 1, 1] = values
    return data.assign(extra=field)


FRACTION, LIQUID = "cloud_area_fraction_in_atmosphere_layer", "mass_fraction_of_cloud_liquid_water_in_air"


@pytest.mark.parametrize(("value", "kept"), [(1.0009, 1.0), (-0.0009, 0.0), (0.5, 0.5)])
def test_cloud_fraction_a_hair_outside_is_clipped_and_counted(value, kept):
    scene = open_scene(with_field(value, FRACTION))
    assert scene["cloud_fraction"].max() == kept or kept == 0.0
    assert 0.0 <= scene["cloud_fraction"].min()
    assert ("cloud_fraction: tiny excursions clipped to 0..1: 1 values" in scene.attrs["adjusted"]) == (value != 0.5)


@pytest.mark.parametrize("value", [1.002, -0.002, 60.0])
def test_cloud_fraction_far_outside_stops_and_suggests_per_cent(value):
    with pytest.raises(
        SceneError, match=r"cloud_fraction .from extra.: 1 of 108 values outside.*worst.*latitude 40"
    ) as error:
        open_scene(with_field(value, FRACTION))
    assert ("per cent" in str(error.value) or "percent" in str(error.value)) == (value > 1.0)
    assert '"units": "%"' in str(error.value) or value < 1.0


def test_tiny_negative_condensate_is_clipped_and_counted():
    scene = open_scene(with_field(-0.9e-6, LIQUID, "kg kg-1"))
    assert scene["cloud_liquid"].min() == 0.0
    assert "cloud_liquid: tiny excursions clipped to 0..0.02: 1 values" in scene.attrs["adjusted"]


def test_negative_condensate():
    with pytest.raises(SceneError, match="cloud_liquid .from extra.*worst -2e-06.*negative values of a quantity"):
        open_scene(with_field(-2e-6, LIQUID, "kg kg-1"))


def test_condensate_without_fraction_is_kept():
    data = with_field(1e-4, LIQUID, "kg kg-1")
    data["cover"] = xr.zeros_like(data["Q"]).assign_attrs(standard_name=FRACTION, units="1")
    scene = open_scene(data)
    assert scene["cloud_liquid"].max() == pytest.approx(1e-4) and scene["cloud_fraction"].max() == 0.0
