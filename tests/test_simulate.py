"""The joining function: shapes, records, options, bad input."""

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scene_samples import pressure_level_file

import chansim
from chansim.errors import OpticsError, OutputError, ResponseError, SceneError, ViewError
from chansim.output import check_target, write_dataset
from chansim.view.lines_of_sight import as_view, geostationary_zenith

SHARED = Path(__file__).parents[2] / "shared" / "real_input"
TWO = ["wv063", "ir104"]


@pytest.fixture(scope="module")
def scene():
    return chansim.open_scene(pressure_level_file())


@pytest.fixture(scope="module")
def result(scene, tarn):
    return chansim.simulate(scene, tarn, channels=TWO)


def test_shape_and_record(scene, result):
    assert result.brightness_temperature.dims == ("channel", *scene.column_valid.dims)
    assert result.channel.values.tolist() == TWO
    for name in (
        "atlas_sha256",
        "software",
        "imager",
        "view",
        "defaulted",
        "recognised",
        "cloud_overlap",
        "source_file",
        "effective_radius_ice",
        "summary",
        "counted",
        "masked_columns",
    ):
        assert name in result.attrs, name
    assert "not an observation" in result.attrs["summary"]
    assert "ozone_mole_fraction" in result.attrs["defaulted"]
    assert (result.node_fit_error > 0).all()
    finite = result.brightness_temperature.values
    assert np.isfinite(finite).all() and 180 < finite.min() and finite.max() < 330


def test_clear_scene_has_no_cloud_effect(result):
    np.testing.assert_array_equal(result.brightness_temperature, result.brightness_temperature_clear)
    assert float(result.cloud_optical_thickness.max()) == 0.0
    assert (result.weighting_function_peak.sel(channel="wv063") < 65000).all()


def test_pieces_do_not_change_the_result(scene, tarn, result, monkeypatch):
    import importlib

    module = importlib.import_module("chansim.simulate")
    monkeypatch.setattr(module, "_COLUMNS_AT_ONCE", 4)
    steps = []
    again = chansim.simulate(
        scene, tarn, channels=TWO, progress=lambda done, everything: steps.append((done, everything))
    )
    np.testing.assert_array_equal(again.radiance, result.radiance)
    assert len(steps) == 3 and steps[-1][0] == steps[-1][1]


def test_lazy_scene_gives_the_same(tarn, result):
    lazy = chansim.open_scene(pressure_level_file(), chunks={})
    np.testing.assert_allclose(chansim.simulate(lazy, tarn, channels=TWO).radiance, result.radiance, rtol=1e-6)


def test_masked_in_masked_out(tarn):
    data = pressure_level_file()
    name = next(
        n for n, v in data.data_vars.items() if v.attrs.get("standard_name") == "air_temperature" and v.ndim >= 3
    )
    data[name] = data[name].copy(data=data[name].values.copy())
    data[name].values[..., 4, 1, 2] = np.nan
    data[name].values[..., 5, 1, 2] = np.nan
    masked = chansim.open_scene(data)
    got = chansim.simulate(masked, tarn, channels=TWO)
    hole = ~masked["column_valid"].values
    np.testing.assert_array_equal(np.isnan(got.brightness_temperature.sel(channel="ir104").values), hole)
    assert got.attrs["masked_columns"] == hole.sum()


def test_views(scene, tarn):
    nadir = chansim.simulate(scene, tarn, channels=["ir104"])
    given = xr.Dataset({"view_zenith_angle": xr.full_like(scene["latitude"], 50.0)})
    slanted, same = (chansim.simulate(scene, tarn, channels=["ir104"], view=v) for v in (50.0, given))
    np.testing.assert_allclose(slanted.radiance, same.radiance, rtol=1e-6)
    assert (slanted.radiance < nadir.radiance).all()
    geo = chansim.simulate(scene, tarn, channels=["ir104"], view=("geostationary", 0.0))
    expected = geostationary_zenith(scene.latitude.values, scene.longitude.values, 0.0)
    np.testing.assert_allclose(geo.view_zenith_angle, expected, rtol=1e-5)


def test_geostationary_zenith_by_hand():
    # 0 below the satellite; on a sphere tan(zenith) = sin(b) / (cos(b) - R / r), b the geocentric angle (common practice)
    assert geostationary_zenith(np.array([0.0]), np.array([40.0]), 40.0)[0] == pytest.approx(0.0, abs=1e-6)
    b = np.radians(50.0)
    sphere = np.degrees(np.arctan2(np.sin(b), np.cos(b) - 6378.137 / 42164.0))
    assert geostationary_zenith(np.array([0.0]), np.array([90.0]), 40.0)[0] == pytest.approx(sphere, abs=1e-3)
    assert geostationary_zenith(np.array([0.0]), np.array([140.0]), 40.0)[0] > 90.0


@pytest.mark.parametrize(
    "view, words",
    [
        ("sideways", "nadir"),
        (89.0, "0 to 85"),
        (-1.0, "0 to 85"),
        (("geostationary", 999.0), "360"),
        (xr.Dataset(), "view_zenith_angle"),
        (None, "nadir"),
    ],
)
def test_impossible_views(view, words):
    with pytest.raises(ViewError, match=words):
        as_view(view)


def test_a_satellite_that_sees_nothing(scene, tarn):
    with pytest.raises(ViewError, match="sees no column"):
        chansim.simulate(scene, tarn, channels=["ir104"], view=("geostationary", 180.0))


@pytest.mark.parametrize(
    "options, error, words",
    [
        ({"channels": ["ir999"]}, ResponseError, "ir104"),
        ({"imager": "nobody"}, ResponseError, "tarn"),
        ({"settings": chansim.Settings(overlap="lucky")}, SceneError, "maximum-random"),
        ({"settings": chansim.Settings(ice_radius="guess")}, OpticsError, "sun-2001"),
        ({"settings": chansim.Settings(gases={"xenon": 1e-6})}, SceneError, "co2"),
        ({"settings": chansim.Settings(subcolumns=0)}, SceneError, "subcolumns"),
        ({"emissivity": np.full(2, 1.4), "channels": TWO}, SceneError, "within 0 and 1"),
        ({"emissivity": np.full(3, 0.9), "channels": TWO}, SceneError, "2 channel"),
    ],
)
def test_impossible_options(scene, options, error, words):
    options = {"imager": "tarn", **options}
    with pytest.raises(error, match=words):
        chansim.simulate(scene, options.pop("imager"), **options)


def test_not_a_scene():
    with pytest.raises(SceneError):
        chansim.simulate(xr.Dataset({"a": ("x", [1.0])}), "tarn", channels=["ir104"])


def test_given_emissivity_wins(scene, tarn):
    dark, bright = (chansim.simulate(scene, tarn, channels=["ir104"], emissivity=[e]) for e in (0.8, 1.0))
    assert (bright.radiance > dark.radiance).all()


@pytest.mark.parametrize("suffix", [".nc", ".zarr"])
def test_written_and_read_again(tmp_path, result, suffix):
    path = write_dataset(result, tmp_path / f"result{suffix}")
    with xr.open_dataset(path, engine="netcdf4" if suffix == ".nc" else "zarr") as back:
        np.testing.assert_array_equal(back.brightness_temperature, result.brightness_temperature)
        assert back.attrs["Conventions"].startswith("CF-1.11")
        assert back.brightness_temperature.attrs["units"] == "K"
    assert sorted(p.name for p in tmp_path.iterdir()) == [path.name]  # no temporary left
    with pytest.raises(OutputError, match="exists and is kept"):
        write_dataset(result, path)
    write_dataset(result, path, existing="replace")


@pytest.mark.parametrize("name, words", [("a.txt", "ends in"), ("missing/a.nc", "does not exist")])
def test_impossible_targets(tmp_path, name, words):
    with pytest.raises(OutputError, match=words):
        check_target(tmp_path / name)


def test_a_failed_write_leaves_nothing(tmp_path, result):
    broken = result.assign(bad=("x_y", np.array([{}], dtype=object)))
    with pytest.raises(Exception):  # noqa: B017  (whatever netCDF says)
        write_dataset(broken, tmp_path / "a.nc")
    assert list(tmp_path.iterdir()) == []


def test_real_model_output(tarn):
    """The water-vapour channel follows the file's own humidity, the window its 2 m temperature."""
    path = SHARED / "nam_20180917_00z.grib2"
    if not path.exists():
        pytest.skip("needs ../shared/real_input/nam_20180917_00z.grib2, which is not part of the repository")
    scene = chansim.open_scene(path)
    got = chansim.simulate(scene, tarn, channels=TWO).brightness_temperature
    p, q = scene.pressure.values, scene.specific_humidity.values
    layer = (p >= 30000) & (p <= 50000)
    # upper-tropospheric humidity against brightness temperature: ln RH falls with it (Soden & Bretherton 1993,
    # J. Geophys. Res. 98, 16669)
    from metpy.calc import relative_humidity_from_specific_humidity
    from metpy.units import units

    relative = np.mean(
        [
            relative_humidity_from_specific_humidity(a * units.Pa, t * units.K, x).magnitude
            for a, t, x in zip(p[layer], scene.temperature.values[layer], q[layer])
        ],
        axis=0,
    )
    assert np.corrcoef(np.log(relative).ravel(), got.sel(channel="wv063").values.ravel())[0, 1] < -0.6
    assert np.corrcoef(scene.air_temperature_2m.values.ravel(), got.sel(channel="ir104").values.ravel())[0, 1] > 0.9


def test_real_radiosonde(tarn):
    path = SHARED / "radiosonde_20110520_0828z.cdf"
    if not path.exists():
        pytest.skip("needs ../shared/real_input/radiosonde_20110520_0828z.cdf, which is not part of the repository")
    with xr.open_dataset(path) as sonde:
        scene = chansim.scene_from_profile(
            sonde["pres"].values,
            sonde["tdry"].values,
            dew_point=sonde["dp"].values,
            latitude=36.6,
            longitude=-97.5,
            time="2011-05-20T08:28",
            units={"pressure": "hPa", "temperature": "degC", "dew_point": "degC"},
        )
    assert "514" in scene.attrs["defaulted"]  # the reference atmosphere above is told
    got = chansim.simulate(scene, tarn)
    bt = {str(c): float(v) for c, v in zip(got.channel.values, got.brightness_temperature.values.ravel())}
    assert 225.0 < bt["wv063"] < 255.0 and 280.0 < bt["ir104"] < 300.0
