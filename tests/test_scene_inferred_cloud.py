"""Cloud inferred from cloud-top and cloud-base pressure."""

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scene_samples import LATITUDE, LONGITUDE, basic_grib_messages, pressure_level_file, write_grib

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene.inferred_cloud import cloud_boundaries, ice_mass_share, with_inferred_cloud
from chansim.scene.reading import open_scene

REAL = Path(__file__).parents[2] / "shared" / "real_input" / "nam_20180917_00z.grib2"
needs_real = pytest.mark.skipif(not REAL.exists(), reason="../shared/real_input is not there")
NAN = np.nan


@pytest.fixture
def scene():
    """3 x 4 columns on 50, 100, 200, 300, 500, 700, 850, 925, 1000 hPa; surface at 1010 hPa."""
    return open_scene(pressure_level_file())


def boundaries(top_hpa, base_hpa):
    """The same top and base everywhere [Pa]."""
    return np.full((3, 4), top_hpa * 100.0), np.full((3, 4), base_hpa * 100.0)


def levels_of(cloudy):
    """Pressure [hPa] of the levels with condensate in the first column."""
    there = (cloudy["cloud_liquid"] + cloudy["cloud_ice"]).values[:, 0, 0] > 0.0
    return list(cloudy["pressure"].values[there] / 100.0)


def test_analytic_column(scene):
    # base 960, top 650 hPa: levels 925, 850, 700. Cells (geometric middles): sqrt(500 x 700) = 591.61 to
    # sqrt(925 x 1000) = 961.77 hPa, i.e. 37016 Pa = 3774.6 kg m-2 of air. All warmer than 233 K, 700 hPa is 268.5 K
    cloudy = with_inferred_cloud(scene, *boundaries(650.0, 960.0), optical_thickness=8.0)
    assert levels_of(cloudy) == [700.0, 850.0, 925.0]
    column = cloudy.isel(lat=0, lon=0)
    k = {p: int(np.argmin(np.abs(column["pressure"].values - p * 100.0))) for p in (700.0, 850.0, 925.0)}
    # all liquid at 925 and 850 hPa: W / tau = 2/3 x 1000 kg m-3 x 10 um = 6.6667 g m-2, and 8 / 3774.6 kg of air
    assert float(column["temperature"][k[850.0]]) > 273.0
    for p in (850.0, 925.0):
        assert float(column["cloud_liquid"][k[p]]) == pytest.approx(6.66667e-3 * 8.0 / 3774.6, rel=1e-4)
        assert float(column["cloud_ice"][k[p]]) == 0.0
    warmth = float(column["temperature"][k[700.0]])
    liquid, ice = float(column["cloud_liquid"][k[700.0]]), float(column["cloud_ice"][k[700.0]])
    assert ice / (liquid + ice) == pytest.approx((273.0 - warmth) / 40.0, rel=1e-4) and 0.05 < ice / liquid < 0.3


@pytest.mark.parametrize("tau", [0.3, 5.0, "opaque"])
@pytest.mark.parametrize("top, base", [(150.0, 960.0), (410.0, 490.0), (250.0, 350.0), (980.0, 1005.0)])
def test_optical_thickness_by_the_sum_over_cells(scene, tau, top, base):
    cloudy = with_inferred_cloud(scene, *boundaries(top, base), optical_thickness=tau).isel(lat=1, lon=2)
    pressure = scene["pressure"].values
    edges = np.concatenate([[0.0], np.sqrt(pressure[1:] * pressure[:-1]), [101000.0]])
    air = np.diff(edges) / 9.80665
    tau_liquid = 1.5 * (cloudy["cloud_liquid"].values * air).sum() / (1000.0 * 10e-6)
    tau_ice = 1.5 * (cloudy["cloud_ice"].values * air).sum() / (917.0 * 30e-6)
    assert tau_liquid + tau_ice == pytest.approx(100.0 if tau == "opaque" else tau, rel=1e-5)


def test_chosen_radii_keep_the_optical_thickness_and_become_fields(scene):
    small, large = (
        with_inferred_cloud(
            scene, *boundaries(250.0, 960.0), optical_thickness=3.0, liquid_radius=r, ice_radius=2.0 * r
        )
        for r in (8e-6, 16e-6)
    )
    for name in ("cloud_liquid", "cloud_ice"):
        np.testing.assert_allclose(large[name], 2.0 * small[name], rtol=1e-5)
    np.testing.assert_allclose(small["effective_radius_liquid"], 8e-6)
    np.testing.assert_allclose(small["effective_radius_ice"], 16e-6)


def test_phase():
    # typed in: pure liquid from 273 K, pure ice up to 233 K, 30 % ice at 261 K
    np.testing.assert_allclose(ice_mass_share(np.array([300.0, 273.0, 261.0, 253.0, 233.0, 200.0])),
                               [0.0, 0.0, 0.3, 0.5, 1.0, 1.0])  # fmt: skip


@pytest.mark.parametrize(
    "top, base, expected",
    [
        (599.0, 601.0, [700.0]),  # between 500 and 700 hPa: ln 700/600 = 0.154 is less than ln 600/500 = 0.182
        (550.0, 560.0, [500.0]),
        (300.0, 300.0, [300.0]),  # exactly on a level, no depth
        (500.0, 700.0, [500.0, 700.0]),  # the ends belong to it
        (1003.0, 1020.0, [1000.0]),  # fog between the lowest level and the ground
    ],
)
def test_at_least_the_nearest_level(scene, top, base, expected):
    assert levels_of(with_inferred_cloud(scene, *boundaries(top, base))) == expected


def test_levels_below_ground_stay_empty():
    file = pressure_level_file()
    file["PS"][:] = 80000.0
    cloudy = with_inferred_cloud(open_scene(file), *boundaries(650.0, 960.0), optical_thickness=4.0)
    assert levels_of(cloudy) == [700.0]
    # its cell reaches down to the ground: (800 - 591.61) hPa of air = 2125.0 kg m-2
    column = cloudy.isel(lat=0, lon=0, level=5)
    tau = 150.0 * float(column["cloud_liquid"]) + 1.5 / (917.0 * 30e-6) * float(column["cloud_ice"])
    assert tau * 2125.0 == pytest.approx(4.0, rel=1e-4)


def test_negative_missing_and_half_known_boundaries_are_clear(scene):
    top, base = boundaries(400.0, 800.0)
    top[0], base[0] = -50000.0, -50000.0
    top[1], base[1] = NAN, NAN
    top[2, 0], base[2, 1], top[2, 2] = NAN, -1.0, 2000.0
    cloudy = with_inferred_cloud(scene, top, base)
    water = (cloudy["cloud_liquid"] + cloudy["cloud_ice"]).sum("level").values
    np.testing.assert_array_equal(water > 0.0, [[False] * 4, [False] * 4, [False, False, False, True]])
    adjusted = cloudy.attrs["adjusted"]
    for line in ("only one of cloud top and base given, left clear: 2", "above 50 hPa, left clear: 1",
                 "columns filled between cloud base and cloud top: 1"):  # fmt: skip
        assert line in adjusted


def test_record(scene):
    cloudy = with_inferred_cloud(scene, *boundaries(400.0, 800.0), optical_thickness=7.5)
    defaulted = cloudy.attrs["defaulted"].splitlines()
    (line,) = [x for x in defaulted if x.startswith("cloud_liquid")]
    assert "optical thickness 7.5" in line and "10 um (liquid)" in line and "30 um (ice)" in line
    assert not any(x.startswith(("cloud_ice: none", "effective_radius")) for x in defaulted)
    assert "rain: none" in defaulted and "skin_temperature" in cloudy.attrs["defaulted"]
    # the scene that was given is as before
    assert "cloud_liquid" not in scene and "cloud_liquid: none" in scene.attrs["defaulted"]


def test_cloud_fraction_of_the_file_is_full_inside(scene):
    scene["cloud_fraction"] = xr.full_like(scene["temperature"], 0.25)
    cloudy = with_inferred_cloud(scene, *boundaries(650.0, 960.0))
    fraction = cloudy["cloud_fraction"].values[:, 0, 0]
    np.testing.assert_array_equal(fraction, [0.25, 0.25, 0.25, 0.25, 0.25, 1.0, 1.0, 1.0, 0.25])


def test_top_below_base(scene):
    top, base = boundaries(400.0, 800.0)
    top[1, 2], base[1, 2] = 90000.0, 30000.0
    with pytest.raises(SceneError, match=r"1 of 12 cloudy columns.*latitude 40.*longitude 0.*upside_down"):
        with_inferred_cloud(scene, top, base)
    with pytest.raises(SceneError, match="swapped"):
        with_inferred_cloud(scene, *boundaries(800.0, 400.0))
    cloudy = with_inferred_cloud(scene, top, base, upside_down="clear")
    assert "cloud top below its base, left clear: 1" in cloudy.attrs["adjusted"]
    assert not (cloudy["cloud_liquid"] + cloudy["cloud_ice"])[:, 1, 2].any()


@pytest.mark.parametrize(
    "change, message",
    [
        ({"optical_thickness": 0.0}, "optical_thickness"),
        ({"optical_thickness": "thick"}, "opaque"),
        ({"optical_thickness": NAN}, "optical_thickness"),
        ({"liquid_radius": 10.0}, "liquid_radius.*metres"),
        ({"ice_radius": 0.0}, "ice_radius"),
        ({"upside_down": "swap"}, "upside_down"),
        ({"top_pressure": np.full((4, 3), 4e4)}, r"shape \(4, 3\)"),
        ({"top_pressure": np.full((3, 4), 400.0), "base_pressure": np.full((3, 4), 800.0)}, "hPa called Pa"),
        ({"base_pressure": np.full((3, 4), 9.999e20)}, "undeclared fill value"),
        ({"top_pressure": xr.DataArray(np.full((3, 4), 4e4), dims=("y", "x"))}, "on the grid"),
    ],
)
def test_impossible_requests(scene, change, message):
    top, base = boundaries(400.0, 800.0)
    with pytest.raises(SceneError, match=message):
        with_inferred_cloud(scene, **{"top_pressure": top, "base_pressure": base, **change})


def test_cloud_of_its_own_is_not_replaced(scene):
    scene["cloud_ice"] = xr.zeros_like(scene["temperature"])
    with_inferred_cloud(scene, *boundaries(400.0, 800.0))  # zeros are no cloud
    scene["cloud_ice"][3, 1, 1] = 1e-6
    with pytest.raises(SceneError, match="cloud_ice: the scene has cloud of its own.*drop_vars"):
        with_inferred_cloud(scene, *boundaries(400.0, 800.0))


def test_fields_with_units_order_and_place(scene):
    coords = {"lat": LATITUDE, "lon": LONGITUDE}
    latitude, longitude = np.meshgrid(LATITUDE, LONGITUDE, indexing="ij")
    top = xr.DataArray(np.full((3, 4), 400.0), coords, ("lat", "lon"), attrs={"units": "hPa"})
    top = top.assign_coords(latitude=(("lat", "lon"), latitude), longitude=(("lat", "lon"), longitude + 360.0))
    base = (2.0 * top).assign_attrs(units="hPa")
    expected = with_inferred_cloud(scene, *boundaries(400.0, 800.0))
    found = with_inferred_cloud(scene, top.transpose(), base)
    xr.testing.assert_allclose(found["cloud_liquid"], expected["cloud_liquid"])
    with pytest.raises(SceneError, match="longitude is up to 5 degrees"):
        with_inferred_cloud(scene, top.assign_coords(longitude=(("lat", "lon"), longitude + 5.0)), base)


def test_temperature_at_cloud_top_tells_smeared_fields(scene):
    # a file interpolated across its fill value: top pressure and temperature are both mixtures
    top, base = boundaries(400.0, 800.0)
    profile = scene["temperature"].values[:, 0, 0]
    at_top = np.interp(np.log(400.0), np.log(scene["pressure"].values / 100.0), profile)
    known = np.full((3, 4), at_top + 9.0)
    known[1, 1], known[2, 2] = at_top - 11.0, -60.0
    top = xr.DataArray(top, dims=("lat", "lon")).assign_coords(air_temperature_at_cloud_top=(("lat", "lon"), known))
    cloudy = with_inferred_cloud(scene, top, base)
    clear = (cloudy["cloud_liquid"] + cloudy["cloud_ice"]).sum("level").values == 0.0
    assert clear[1, 1] and clear[2, 2] and clear.sum() == 2
    assert "10 K from the scene's (interpolated across fill values?), left clear: 2" in cloudy.attrs["adjusted"]


def test_pressure_that_differs_between_columns():
    file = pressure_level_file()
    shift = np.linspace(0.9, 1.0, 12).reshape(3, 4)
    pressure = file["plev"].values[:, None, None] * shift
    file["P"] = (("plev", "lat", "lon"), pressure, {"standard_name": "air_pressure", "units": "hPa"})
    file = file.rename(plev="level").drop_vars("level")
    cloudy = with_inferred_cloud(open_scene(file), *boundaries(640.0, 680.0))
    there = (cloudy["cloud_liquid"] + cloudy["cloud_ice"]).values > 0.0
    inside = (cloudy["pressure"].values >= 64000.0) & (cloudy["pressure"].values <= 68000.0)
    assert inside.any(axis=0).sum() < 12  # in some columns the nearest level is taken
    np.testing.assert_array_equal(there[:, inside.any(axis=0)], inside[:, inside.any(axis=0)])
    assert (there.sum(axis=0) >= 1).all()


def cloud_messages(extra=()):
    """A GRIB file on 2 x 3 points with cloud in four of them."""
    return [
        *basic_grib_messages(),
        ({"typeOfLevel": "cloudTop", "shortName": "pres"}, [25000.0, -50000.0, 60000.0, 30000.0, -50000.0, 65000.0]),
        ({"typeOfLevel": "cloudBase", "shortName": "pcdb"}, [75000.0, -50000.0, 80000.0, 30000.0, -50000.0, 90000.0]),
        *extra,
    ]


def test_grib_round_trip(tmp_path):
    file = tmp_path / "cloud.grb"
    write_grib(file, cloud_messages())
    top, base = cloud_boundaries(file)
    np.testing.assert_allclose(top, [[25000.0, NAN, 60000.0], [30000.0, NAN, 65000.0]], rtol=1e-4)
    np.testing.assert_allclose(base, [[75000.0, NAN, 80000.0], [30000.0, NAN, 90000.0]], rtol=1e-4)
    scene = open_scene(file)
    assert top.dims == scene["column_valid"].dims == ("y", "x")
    np.testing.assert_allclose(top["latitude"], scene["latitude"])
    cloudy = with_inferred_cloud(scene, top, base)
    there = (cloudy["cloud_liquid"] + cloudy["cloud_ice"]).values > 0.0  # on 100, 300, 700, 1000 hPa
    np.testing.assert_array_equal(there[:, 0, 0], [False, True, True, False])
    np.testing.assert_array_equal(there[:, 0, 2], [False, False, True, False])
    np.testing.assert_array_equal(there[:, 1, 0], [False, True, False, False])
    assert not there[:, :, 1].any()
    # 230 K at 300 hPa is all ice, 273 K at 700 hPa all liquid
    assert not cloudy["cloud_liquid"][1].any() and not cloudy["cloud_ice"][2].any()


def test_temperature_at_cloud_top_is_read(tmp_path):
    file = tmp_path / "cloud.grb"
    warmth = ({"typeOfLevel": "cloudTop", "shortName": "t"}, [222.0, 0.0, 150.0, 230.0, 0.0, 271.0])
    write_grib(file, cloud_messages([warmth]))
    top, base = cloud_boundaries(file)
    np.testing.assert_allclose(top["air_temperature_at_cloud_top"][0], [222.0, 0.0, 150.0], atol=1e-3)
    cloudy = with_inferred_cloud(open_scene(file), top, base)
    assert "fill values?), left clear: 1" in cloudy.attrs["adjusted"]


def test_netcdf_by_standard_name(tmp_path):
    file = pressure_level_file()
    for name, value in (("top", 300.0), ("base", 700.0)):
        attributes = {"standard_name": f"air_pressure_at_cloud_{name}", "units": "hPa"}
        file[f"p_{name}"] = (("lat", "lon"), np.full((3, 4), value), attributes)
    file["p_top"][0, 0] = -999.0
    file.to_netcdf(tmp_path / "cloud.nc")
    top, base = cloud_boundaries(tmp_path / "cloud.nc")
    assert np.isnan(top[0, 0]) and float(top[1, 1]) == 30000.0 and float(base[1, 1]) == 70000.0
    cloudy = with_inferred_cloud(open_scene(tmp_path / "cloud.nc"), top, base)
    assert (
        "left clear: 1" in cloudy.attrs["adjusted"]
        and "filled between cloud base and cloud top: 11" in (cloudy.attrs["adjusted"])
    )


def test_files_without_or_with_too_many_such_fields(tmp_path):
    write_grib(tmp_path / "none.grb", basic_grib_messages())
    with pytest.raises(SceneError, match="no pressure at cloud top.*cloudTop.*air_pressure_at_cloud_top.*t@isobaric"):
        cloud_boundaries(tmp_path / "none.grb")
    file = pressure_level_file()
    for name in ("a", "b"):
        attributes = {"standard_name": "air_pressure_at_cloud_top", "units": "Pa"}
        file[name] = (("lat", "lon"), np.full((3, 4), 3e4), attributes)
    file.to_netcdf(tmp_path / "two.nc")
    with pytest.raises(SceneError, match="2 fields could be the pressure at cloud top"):
        cloud_boundaries(tmp_path / "two.nc")


def test_the_solver_sees_the_same_optical_thickness_and_temperature(scene):
    # mean extinction of the packaged tables over the channel, in units of efficiency 2: droplets of 10 um, ice of 30 um
    liquid, ice = _extinction_in_ir104(0, 10e-6, 1000.0), _extinction_in_ir104(1, 30e-6, 917.0)
    assert 0.9 < liquid < 1.1 and 0.95 < ice < 1.15
    top, base = boundaries(290.0, 310.0)
    top[0], base[0] = 84000.0, 86000.0
    top[1], base[1] = NAN, NAN
    thin = chansim.simulate(with_inferred_cloud(scene, top, base, optical_thickness=2.0), "tarn", channels=["ir104"])
    thickness = thin["cloud_optical_thickness"].values[0, :, 0]
    assert thickness[0] == pytest.approx(2.0 * liquid, rel=5e-3)
    assert thickness[1] == 0.0
    assert thickness[2] == pytest.approx(2.0 * ice, rel=5e-3)
    opaque = chansim.simulate(with_inferred_cloud(scene, top, base), "tarn", channels=["ir104"])
    picture, clear = (opaque[n].values[0, :, 0] for n in ("brightness_temperature", "brightness_temperature_clear"))
    assert picture[1] == pytest.approx(clear[1], abs=1e-3)
    # the cell of 300 hPa begins at 245 hPa, the air there is colder than at the level itself, 229 K
    at_level = float(scene["temperature"][3, 2, 0])
    assert at_level - 12.0 < picture[2] < at_level < clear[2] - 30.0


def _extinction_in_ir104(species, radius, density):
    """Extinction of the tables over 1.5 / (density x radius), mean over the nodes of the channel [1]."""
    from chansim.optics.condensate import condensate_optics

    channel = chansim.load_imager("tarn", ["ir104"]).channels[0]
    axis, extinction, _, _ = condensate_optics(channel.node_wavenumber)
    position = (np.log(radius) - axis[species, 0]) / axis[species, 1]
    at = [np.interp(position, np.arange(len(row)), row) for row in extinction[species].T]
    return np.average(at, weights=channel.node_weight) / (1.5 / (density * radius))


@needs_real
def test_real_file():
    top, base = cloud_boundaries(REAL)
    # README of the file: missing cloud is coded as negative pressure; counted with ecCodes alone
    assert top.shape == (65, 93) and int(top.notnull().sum()) == 3697 and int(base.notnull().sum()) == 3700
    scene = open_scene(REAL)
    with pytest.raises(SceneError, match="upside_down"):
        with_inferred_cloud(scene, top, base)
    cloudy = with_inferred_cloud(scene, top, base, upside_down="clear")
    water = (cloudy["cloud_liquid"] + cloudy["cloud_ice"]).values
    assert 0.5 < (water.sum(axis=0) > 0.0).mean() < 0.6 and water.max() < 0.02
    # the topmost level with cloud is the first below the top, or the nearest one
    first = cloudy["pressure"].values[np.argmax(water > 0.0, axis=0)]
    there = (water.sum(axis=0) > 0.0) & (top.values > 1e4)
    assert np.abs(first - top.values)[there].max() < 5001.0


def test_lazy_scene_gives_the_same():
    lazy = with_inferred_cloud(open_scene(pressure_level_file().chunk({"lat": 1})), *boundaries(400.0, 800.0))
    assert lazy["specific_humidity"].chunks
    eager = with_inferred_cloud(open_scene(pressure_level_file()), *boundaries(400.0, 800.0))
    for name in ("cloud_liquid", "cloud_ice", "specific_humidity"):
        np.testing.assert_allclose(lazy[name].values, eager[name].values, rtol=1e-6)


def test_half_levels_of_the_scene_are_used(scene):
    pressure = scene["pressure"].values
    half = np.concatenate([[4000.0], 0.5 * (pressure[1:] + pressure[:-1]), [101000.0]])
    scene["half_pressure"] = ("half_level", half)
    cloudy = with_inferred_cloud(scene, *boundaries(480.0, 520.0), optical_thickness=6.0).isel(lat=0, lon=0)
    # 500 hPa: 400 to 600 hPa of air, 2039.43 kg m-2
    tau = 150.0 * float(cloudy["cloud_liquid"].sum()) + 1.5 / (917.0 * 30e-6) * float(cloudy["cloud_ice"].sum())
    assert tau * 2039.43 == pytest.approx(6.0, rel=1e-5)
