"""CF netCDF, Zarr and in-memory Datasets as canonical scenes; every bad input."""

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scene_samples import LATITUDE, LONGITUDE, PRESSURE, TIME, pressure_level_file

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene import humidity
from chansim.scene.reading import describe_scene, open_scene
from chansim.scene.recognition import QUANTITIES
from chansim.scene.variables import VARIABLES

SHARED = Path(__file__).parents[2] / "shared" / "real_input"


@pytest.fixture
def source():
    return pressure_level_file()


def with_units(source, name, units, factor=1.0, offset=0.0):
    source[name] = source[name].copy(data=source[name].values * factor + offset)
    source[name].attrs = {**pressure_level_file()[name].attrs, "units": units}
    return source


# --- what comes out -----------------------------------------------------------------------------------


def test_canonical_form(source):
    scene = open_scene(source)
    assert scene["temperature"].dims == ("level", "lat", "lon")
    np.testing.assert_allclose(scene["pressure"], PRESSURE[::-1] * 100.0)
    np.testing.assert_allclose(scene["temperature"][-1], source["T"][0])
    np.testing.assert_allclose(scene["specific_humidity"][0], source["Q"][-1])
    np.testing.assert_allclose(scene["latitude"], np.broadcast_to(LATITUDE[:, None], (3, 4)))
    np.testing.assert_allclose(scene["longitude"], np.broadcast_to(LONGITUDE, (3, 4)))
    assert scene["time"].values == TIME
    for name in scene.data_vars:
        if name in VARIABLES:
            assert scene[name].attrs["units"] == VARIABLES[name].units
    assert scene["column_valid"].all() and scene.attrs["masked_columns"] == 0


@pytest.mark.parametrize("suffix", [".nc", ".zarr", ".data"])
def test_files_equal_the_dataset_in_memory(source, tmp_path, suffix):
    path = tmp_path / f"model{suffix}"
    if suffix == ".zarr":
        source.to_zarr(path, consolidated=False)
    else:
        source.to_netcdf(path, format="NETCDF3_64BIT" if suffix == ".data" else "NETCDF4")
    scene, expected = open_scene(path), open_scene(source)
    xr.testing.assert_allclose(scene.drop_attrs(), expected.drop_attrs())
    assert scene.attrs["source"] == str(path)


def test_lazy_equals_eager(source):
    source["R"] = (("plev", "lat", "lon"), np.full(source["T"].shape, 60.0, "f4"), {
        "standard_name": "relative_humidity", "units": "%"})  # fmt: skip
    source["CLW"] = xr.zeros_like(source["Q"]).assign_attrs(
        standard_name="mass_fraction_of_cloud_liquid_water_in_air", units="kg kg-1"
    )
    mapping = {"relative_humidity": "R"}
    lazy = open_scene(source.chunk({"lat": 2, "lon": 3, "plev": 4}), mapping=mapping)
    assert all(lazy[name].chunks for name in lazy.data_vars if name not in ("grid_mapping", "pressure"))
    eager = open_scene(source, mapping=mapping)
    for name in eager.data_vars:
        np.testing.assert_allclose(lazy[name].values, eager[name].values, rtol=1e-6)
        assert lazy[name].dtype == eager[name].dtype


def test_lazy_values_are_checked_when_asked_for(source):
    source["T"][3, 1, 1] = 20.0
    lazy = open_scene(source.chunk({"lat": 1}))
    with pytest.raises(SceneError, match="temperature.*20"):
        lazy["temperature"].load()


def test_a_scene_reads_back_as_itself(source, tmp_path):
    scene = open_scene(source)
    scene.to_netcdf(tmp_path / "scene.nc")
    again = open_scene(tmp_path / "scene.nc")
    xr.testing.assert_allclose(again.drop_attrs(), scene.drop_attrs())


def test_order_of_dimensions_and_levels_does_not_matter(source):
    expected = open_scene(source).drop_attrs()
    turned = source.transpose("lon", "plev", "lat").isel(plev=slice(None, None, -1))
    xr.testing.assert_allclose(open_scene(turned).drop_attrs(), expected)


@pytest.mark.parametrize(
    ("name", "units", "factor", "offset"),
    [("T", "degC", 1.0, -273.15), ("Q", "g kg-1", 1e3, 0.0), ("PS", "hPa", 0.01, 0.0)],
)
def test_other_units_give_the_same_scene(source, name, units, factor, offset):
    expected = open_scene(source).drop_attrs()
    found = open_scene(with_units(source, name, units, factor, offset)).drop_attrs()
    xr.testing.assert_allclose(found, expected, rtol=1e-6)


@pytest.mark.parametrize("quantity", ["relative_humidity", "dew_point", "humidity_mixing_ratio"])
def test_any_humidity_gives_the_same_specific_humidity(source, quantity):
    expected = open_scene(source)["specific_humidity"]
    specific = source["Q"].values.astype(float)
    pressure = PRESSURE[:, None, None] * 100.0
    vapour = humidity.vapour_pressure_from_specific_humidity(specific, pressure)
    if quantity == "relative_humidity":
        values = 100.0 * vapour / humidity.saturation_vapour_pressure_water(source["T"].values.astype(float))
        attrs = {"standard_name": "relative_humidity", "units": "%"}
    elif quantity == "dew_point":
        grid = np.linspace(150.0, 320.0, 20000)
        values = np.interp(vapour, humidity.saturation_vapour_pressure_water(grid), grid)
        attrs = {"standard_name": "dew_point_temperature", "units": "K"}
    else:
        values = specific / (1.0 - specific)
        attrs = {"standard_name": "humidity_mixing_ratio", "units": "kg kg-1"}
    source["Q"] = (("plev", "lat", "lon"), values, attrs)
    found = open_scene(source)["specific_humidity"]
    np.testing.assert_allclose(found[1:], expected[1:], rtol=2e-3)
    np.testing.assert_allclose(found[0], expected[0], rtol=2e-3)


def test_potential_temperature(source):
    theta = source["T"].values * (1000.0 / PRESSURE[:, None, None]) ** (2.0 / 7.0)
    expected = open_scene(source)["temperature"]
    source["T"] = (source["T"].dims, theta, {"standard_name": "air_potential_temperature", "units": "K"})
    np.testing.assert_allclose(open_scene(source)["temperature"], expected, rtol=1e-6)


def test_pressure_as_a_field(source):
    sigma = np.linspace(0.995, 0.05, 9)
    pressure = sigma[:, None, None] * source["PS"].values.astype(float)
    source = source.drop_vars("plev").rename(plev="lev")
    source["P"] = (("lev", "lat", "lon"), pressure / 100.0, {"standard_name": "air_pressure", "units": "hPa"})
    scene = open_scene(source)
    assert scene["pressure"].dims == ("level", "lat", "lon")
    np.testing.assert_allclose(scene["pressure"], pressure[::-1])
    lazy = open_scene(source.chunk({"lat": 1}))
    np.testing.assert_allclose(lazy["pressure"], pressure[::-1])
    np.testing.assert_allclose(lazy["temperature"], scene["temperature"])


# --- recognition --------------------------------------------------------------------------------------


def test_recognised_without_standard_names(source):
    for name in ("T", "Q", "PS"):
        del source[name].attrs["standard_name"]
    source = source.rename(T="t", Q="q", PS="sp")
    log = "\n".join(open_scene(source).attrs["recognised"])
    assert "temperature <- t [K], by short name" in log


def test_recognised_by_long_name(source):
    source["T"].attrs = {"long_name": "Air temperature", "units": "K"}
    source = source.rename(T="variable_11")
    assert "temperature <- variable_11 [K], by long name" in "\n".join(open_scene(source).attrs["recognised"])


def test_two_metre_temperature_is_not_the_columns(source):
    source["tas"] = (
        source["PS"].copy(data=np.full((3, 4), 291.0)).assign_attrs(standard_name="air_temperature", units="K")
    )
    source["tas"] = source["tas"].assign_coords(height=((), 2.0, {"units": "m", "standard_name": "height"}))
    scene = open_scene(source)
    np.testing.assert_allclose(scene["air_temperature_2m"], 291.0)
    np.testing.assert_allclose(scene["skin_temperature"], 291.0)
    assert "skin_temperature: 2 m temperature" in scene.attrs["defaulted"]


def test_a_single_level_in_the_air_is_not_used(source):
    aloft = source["T"].isel(plev=4).rename("T500")
    source = source.assign(T500=aloft.reset_coords("plev", drop=True).assign_coords(
        level500=((), 500.0, {"units": "hPa", "standard_name": "air_pressure"})))  # fmt: skip
    scene = open_scene(source)
    assert "T500" not in "\n".join(scene.attrs["recognised"])


def test_ambiguity_names_both(source):
    source["T_other"] = source["T"]
    with pytest.raises(SceneError, match=r"temperature: 2 fields.*T \(.*T_other.*mapping=") as caught:
        open_scene(source)
    assert "Problems" in describe_scene(source) and str(caught.value) in describe_scene(source)
    scene = open_scene(source, mapping={"temperature": "T_other"})
    assert scene["temperature"].shape == (9, 3, 4)


def test_mean_over_time_gives_way_to_the_instantaneous_field(source):
    source["T_mean"] = source["T"].assign_attrs(cell_methods="time: mean")
    assert "temperature <- T [K]" in "\n".join(open_scene(source).attrs["recognised"])


def test_mapping_file(source, tmp_path):
    for name in ("T", "Q"):
        source[name].attrs = {}
    source = source.rename(T="field_a", Q="field_b")
    source["field_b"] = source["field_b"] * 1e3
    file = tmp_path / "mapping.toml"
    file.write_text(
        '[variables]\ntemperature = {name = "field_a", units = "K"}\n'
        'specific_humidity = {name = "field_b", units = "g kg-1"}\n'
    )
    scene = open_scene(source, mapping=file)
    np.testing.assert_allclose(scene["specific_humidity"][-1], 0.01, rtol=1e-6)
    assert "temperature <- field_a [K], by mapping" in scene.attrs["recognised"][0]


def test_mapping_goes_before_what_is_found(source):
    ratio = source["Q"] * 2.0
    ratio.attrs = {"units": "kg kg-1"}
    scene = open_scene(source.assign(wet=ratio), mapping={"humidity_mixing_ratio": "wet"})
    np.testing.assert_allclose(scene["specific_humidity"][-1], 0.02 / 1.02, rtol=1e-6)


@pytest.mark.parametrize(
    ("mapping", "message"),
    [
        ({"temprature": "T"}, "'temprature' is not a quantity"),
        ({"temperature": "TT"}, "'TT' is not in the file, which has: T, Q, PS"),
        ({"temperature": "PS"}, "lies on levels"),
    ],
)
def test_mapping_errors(source, mapping, message):
    with pytest.raises(SceneError, match=message):
        open_scene(source, mapping=mapping)


@pytest.mark.parametrize("text", ["[variables", "[other]\na = 1\n"])
def test_mapping_file_errors(source, tmp_path, text):
    file = tmp_path / "mapping.toml"
    file.write_text(text)
    with pytest.raises(SceneError, match="mapping file"):
        open_scene(source, mapping=file)


def test_quantities_lead_to_canonical_variables():
    for quantity in QUANTITIES.values():
        assert (quantity.serves or quantity.name) in VARIABLES


# --- defaults and masks -------------------------------------------------------------------------------


def test_defaults_are_recorded(source):
    scene = open_scene(source.drop_vars("PS"))
    lines = scene.attrs["defaulted"].splitlines()
    for name in ("surface_pressure", "skin_temperature", "ozone_mole_fraction", "cloud_liquid", "land_fraction"):
        assert sum(line.startswith(f"{name}: ") for line in lines) == 1
    np.testing.assert_allclose(scene["surface_pressure"], 1e5)
    np.testing.assert_allclose(scene["skin_temperature"], scene["temperature"][-1])
    np.testing.assert_allclose(scene["wind_speed_10m"], 7.0)
    assert "ozone_mole_fraction" not in scene and "cloud_liquid" not in scene
    assert "above the top level (50 hPa): the reference atmosphere" in lines


def test_surface_pressure_from_heights_and_orography(source):
    # isothermal column: z = H ln(p0 / p), H = R T / g = 8 km at 273.3 K; ground at 800 m -> p0 exp(-0.1)
    scale = 287.053 * 273.3 / 9.80665
    source["T"][:] = 273.3
    height = scale * np.log(1013.25 / PRESSURE)
    source["Z"] = (("plev", "lat", "lon"), np.broadcast_to(height[:, None, None], (9, 3, 4)).copy(), {
        "standard_name": "geopotential_height", "units": "m"})  # fmt: skip
    source["oro"] = (("lat", "lon"), np.full((3, 4), 0.1 * scale), {"standard_name": "surface_altitude", "units": "m"})
    scene = open_scene(source.drop_vars("PS"))
    np.testing.assert_allclose(scene["surface_pressure"], 101325.0 * np.exp(-0.1), rtol=1e-5)
    assert "from the heights of the levels" in scene.attrs["defaulted"]


def test_below_ground_anything_goes(source):
    source["PS"][0, 0] = 80000.0
    source["T"][:3, 0, 0] = np.nan  # 1000, 925, 850 hPa
    source["Q"][:3, 0, 0] = -9999.0
    scene = open_scene(source)
    assert scene["column_valid"].all()


def test_missing_values_mask_their_columns(source):
    source["T"][4, 1, 2] = np.nan
    source["PS"][2, 3] = np.nan
    scene = open_scene(source)
    assert scene.attrs["masked_columns"] == 2
    expected = np.ones((3, 4), bool)
    expected[1, 2] = expected[2, 3] = False
    np.testing.assert_array_equal(scene["column_valid"], expected)
    assert "masked for missing values: 2" in describe_scene(source)


def test_declared_fill_values_are_missing(source, tmp_path):
    source["T"][4, 1, 2] = np.nan
    source.to_netcdf(tmp_path / "model.nc", encoding={"T": {"_FillValue": -9999.0}})
    assert open_scene(tmp_path / "model.nc").attrs["masked_columns"] == 1


def test_sea_surface_temperature_only_over_sea(source):
    values = np.full((3, 4), 300.0, "f4")
    values[0] = np.nan
    source["sst"] = (("lat", "lon"), values, {"standard_name": "sea_surface_temperature", "units": "K"})
    scene = open_scene(source)
    np.testing.assert_allclose(scene["skin_temperature"][1:], 300.0)
    np.testing.assert_allclose(scene["skin_temperature"][0], scene["temperature"][-1, 0])
    assert scene["column_valid"].all() and "no sea surface temperature" in scene.attrs["adjusted"]


def test_small_excursions_are_clipped_and_counted(source):
    source["Q"][8, 0, 0] = -1e-7
    scene = open_scene(source)
    assert scene["specific_humidity"].values.min() == 0.0
    assert "specific_humidity: tiny excursions clipped to 0..0.06: 1 values" in scene.attrs["adjusted"]


def relative(source, percent):
    values = np.broadcast_to(np.asarray(percent, dtype="f4"), source["T"].shape).copy()
    source["Q"] = (source["T"].dims, values, {"standard_name": "relative_humidity", "units": "%"})
    return source


def test_supersaturation_is_reduced_and_counted(source):
    relative(source, 50.0)["Q"][2, 1, 1] = 130.0
    source["Q"][3, 1, 1] = -0.5
    scene = open_scene(source)
    found = humidity.relative_humidity_from_specific_humidity(
        scene["specific_humidity"], scene["temperature"], scene["pressure"]
    ).values[:, 1, 1]
    assert found[-3] == pytest.approx(1.0, rel=1e-5) and found[-4] == 0.0
    assert "reduced to saturation over water: 1 values" in scene.attrs["adjusted"]
    assert "negatives down to -1 % set to 0: 1 values" in scene.attrs["adjusted"]


# --- grids --------------------------------------------------------------------------------------------


def test_coordinates_named_as_their_dimensions(source):
    scene = open_scene(source.rename(lat="latitude", lon="longitude"))
    assert scene["latitude"].dims == ("y", "x")
    np.testing.assert_allclose(scene["latitude"][:, 0], LATITUDE)


def test_cell_list(source):
    stacked = source.stack(cell=("lat", "lon")).reset_index("cell").reset_coords(drop=False)
    stacked = stacked.set_coords(["lat", "lon"])
    scene = open_scene(stacked)
    assert scene["temperature"].dims == ("level", "cell") and scene["latitude"].dims == ("cell",)
    assert "grid_mapping" not in scene


def test_single_column(source):
    scene = open_scene(source.isel(lat=1, lon=2))
    assert scene["temperature"].dims == ("level", "cell") and scene["latitude"].values == [40.0]


def projected(source, keep):
    import pyproj

    crs = pyproj.CRS.from_cf(
        {
            "grid_mapping_name": "polar_stereographic", "latitude_of_projection_origin": 90.0,
            "straight_vertical_longitude_from_pole": 10.0, "standard_parallel": 60.0, "earth_radius": 6371229.0,
        }
    )  # fmt: skip
    x, y = np.arange(4) * 50.0, -2000.0 + np.arange(3) * 50.0  # km
    longitude, latitude = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform(
        *np.meshgrid(x * 1e3, y * 1e3)
    )
    source = source.drop_vars(["lat", "lon"]).rename(lat="y", lon="x")
    source["crs"] = ((), 0, crs.to_cf())
    for name in ("T", "Q", "PS"):
        source[name].attrs["grid_mapping"] = "crs"
    if keep != "positions":
        source["x"] = ("x", x, {"standard_name": "projection_x_coordinate", "units": "km"})
        source["y"] = ("y", y, {"standard_name": "projection_y_coordinate", "units": "km"})
    if keep != "projection":
        source["lat"] = (("y", "x"), latitude, {"standard_name": "latitude", "units": "degrees_north"})
        source["lon"] = (("y", "x"), longitude, {"standard_name": "longitude", "units": "degrees_east"})
        source = source.set_coords(["lat", "lon"])
    return source, latitude, longitude, x * 1e3, y * 1e3


@pytest.mark.parametrize("keep", ["both", "positions", "projection"])
def test_projected_grid(source, keep):
    source, latitude, longitude, x, y = projected(source, keep)
    scene = open_scene(source)
    np.testing.assert_allclose(scene["latitude"], latitude, atol=1e-6)
    np.testing.assert_allclose(scene["longitude"], longitude, atol=1e-6)
    np.testing.assert_allclose(scene["x"], x, atol=0.1)
    np.testing.assert_allclose(scene["y"], y, atol=0.1)
    assert scene["x"].attrs["units"] == "m"
    assert scene["grid_mapping"].attrs["grid_mapping_name"] == "polar_stereographic"
    assert "crs_wkt" in scene["grid_mapping"].attrs


def test_wrong_projection_is_not_kept(source):
    source, *_ = projected(source, "positions")
    source["crs"].attrs = {"grid_mapping_name": "mercator", "standard_parallel": 0.0,
                           "longitude_of_projection_origin": 0.0}  # fmt: skip
    scene = open_scene(source)
    assert "grid_mapping" not in scene and "projection is not kept" in "\n".join(scene.attrs["recognised"])


def test_rotated_pole(source):
    import pyproj

    attrs = {"grid_mapping_name": "rotated_latitude_longitude", "grid_north_pole_latitude": 39.25,
             "grid_north_pole_longitude": -162.0}  # fmt: skip
    source = source.rename(lat="rlat", lon="rlon")
    source["rlat"] = ("rlat", [5.0, 0.0, -5.0], {"standard_name": "grid_latitude", "units": "degrees"})
    source["rlon"] = ("rlon", [-5.0, 0.0, 5.0, 10.0], {"standard_name": "grid_longitude", "units": "degrees"})
    source["pole"] = ((), 0, attrs)
    for name in ("T", "Q", "PS"):
        source[name].attrs["grid_mapping"] = "pole"
    scene = open_scene(source)
    # by hand: the origin of the rotated grid lies 90 degrees from the rotated pole, on its meridian + 180
    assert float(scene["latitude"][1, 1]) == pytest.approx(90.0 - 39.25, abs=1e-6)
    assert float(scene["longitude"][1, 1]) == pytest.approx(18.0, abs=1e-6)
    assert scene["rlat"].attrs["standard_name"] == "grid_latitude"
    pyproj.CRS.from_cf(scene["grid_mapping"].attrs)


@pytest.mark.skipif(not SHARED.exists(), reason="../shared/real_input is not there")
def test_grid_of_a_real_image():
    from chansim.scene.grids import find_grid

    image = xr.open_dataset(SHARED / "toa_brightness_stereographic.nc")
    grid = find_grid(image["data"], image)
    assert grid.latitude.shape == (160, 256) and grid.crs is not None
    np.testing.assert_allclose(grid.axes["x"], image["x"], atol=500.0)


# --- time ---------------------------------------------------------------------------------------------


def test_times(source):
    stamps = TIME + np.arange(3) * np.timedelta64(6, "h")
    series = xr.concat([source.assign(T=source["T"] + k) for k in range(3)], dim="time", data_vars=["T"])
    series = series.assign_coords(time=("time", stamps, {"standard_name": "time"}))
    with pytest.raises(SceneError, match="3 times.*time="):
        open_scene(series)
    scene = open_scene(series, time="2020-07-15T18:00")
    np.testing.assert_allclose(scene["temperature"], open_scene(source)["temperature"] + 1.0)
    with pytest.raises(SceneError, match="nothing is valid"):
        open_scene(series, time="2021-01-01")
    with pytest.raises(SceneError, match="not a date"):
        open_scene(series, time="yesterday")
    assert "Valid times: 3" in describe_scene(series)


def test_time_unknown(source):
    scene = open_scene(source.drop_vars("time"))
    assert np.isnat(scene["time"].values) and "time: not given" in scene.attrs["defaulted"]
    scene = open_scene(source.drop_vars("time"), time="2020-01-01")
    assert scene["time"].values == np.datetime64("2020-01-01")


def test_members(source):
    ensemble = xr.concat([source, source.assign(T=source["T"] + 1)], dim="member", data_vars=["T"])
    with pytest.raises(SceneError, match="member holds 2"):
        open_scene(ensemble)
    scene = open_scene(ensemble, select={"member": 1})
    np.testing.assert_allclose(scene["temperature"], open_scene(source)["temperature"] + 1.0)


# --- bad input ----------------------------------------------------------------------------------------


def test_no_temperature(source):
    with pytest.raises(SceneError, match="no temperature on levels.*Q .*PS .*mapping="):
        open_scene(source.drop_vars("T"))


def test_no_humidity(source):
    with pytest.raises(SceneError, match="no humidity on levels.*T .*PS "):
        open_scene(source.drop_vars("Q"))


@pytest.mark.parametrize(
    ("name", "factor", "offset", "words"),
    [
        ("T", 1.0, -273.15, "degC called K"),
        ("Q", 1e3, 0.0, "g/kg called kg/kg"),
        ("PS", 0.01, 0.0, "hPa called Pa"),
        ("PS", 100.0, 0.0, "Pa called hPa"),
    ],
)
def test_wrong_units_say_their_likely_cause(source, name, factor, offset, words):
    units = source[name].attrs["units"]
    with pytest.raises(SceneError, match=words) as caught:
        open_scene(with_units(source, name, units, factor, offset))
    for piece in (f"from {name}", "range seen", "latitude", "mapping="):
        assert piece in str(caught.value)


def test_levels_in_hectopascal_called_pascal(source):
    source["plev"].attrs["units"] = "Pa"
    with pytest.raises(SceneError, match="pressure.*hPa called Pa"):
        open_scene(source)


def test_levels_in_pascal_called_hectopascal(source):
    source = source.assign_coords(plev=("plev", PRESSURE * 100.0, {"units": "hPa", "axis": "Z"}))
    with pytest.raises(SceneError, match="pressure.*Pa called hPa"):
        open_scene(source)


def test_undeclared_fill_value(source):
    source["T"][2, 0, 1] = 9.96921e36
    with pytest.raises(SceneError, match="1 of 108 values.*latitude 50.000, longitude -10.000.*fill value"):
        open_scene(source)
    source["T"][2, 0, 1] = -9999.0
    with pytest.raises(SceneError, match="fill value"):
        open_scene(source)


@pytest.mark.parametrize("bad", [200.0, -5.0])
def test_impossible_relative_humidity(source, bad):
    relative(source, 50.0)["Q"][3, 1, 0] = bad
    with pytest.raises(SceneError, match=r"relative_humidity \(from Q\): 1 of 108.*level 6.*latitude 40"):
        open_scene(source)


def test_relative_humidity_as_a_fraction_called_percent(source):
    with pytest.raises(SceneError, match="a fraction called percent"):
        open_scene(relative(source, 0.5))


def test_relative_humidity_in_percent_called_fraction(source):
    relative(source, 50.0)["Q"].attrs["units"] = "1"
    with pytest.raises(SceneError, match="percent called 1"):
        open_scene(source)


@pytest.mark.parametrize("bad", [-0.01, 0.08])
def test_impossible_specific_humidity(source, bad):
    source["Q"][1, 2, 2] = bad
    with pytest.raises(SceneError, match="specific_humidity.*1 of 108"):
        open_scene(source)


def test_pressure_not_monotonic(source):
    levels = PRESSURE.copy()
    levels[[3, 4]] = levels[[4, 3]]
    source = source.assign_coords(plev=("plev", levels, source["plev"].attrs))
    with pytest.raises(SceneError, match="not monotonic"):
        open_scene(source)


def test_pressure_field_not_monotonic(source):
    source = source.drop_vars("plev").rename(plev="lev")
    pressure = np.broadcast_to(PRESSURE[:, None, None] * 100.0, (9, 3, 4)).copy()
    pressure[5, 2, 1] = pressure[4, 2, 1]
    source["P"] = (("lev", "lat", "lon"), pressure, {"standard_name": "air_pressure", "units": "Pa"})
    with pytest.raises(SceneError, match="not monotonic.*latitude 30.000, longitude -10.000"):
        open_scene(source)


def test_levels_without_pressure(source):
    source = source.assign_coords(plev=("plev", np.arange(9.0), {"units": "1", "axis": "Z"}))
    with pytest.raises(SceneError, match="give no pressure.*air_pressure"):
        open_scene(source)


def test_nominal_pressure_of_a_hybrid_coordinate_is_not_pressure(source):
    source["plev"].attrs["standard_name"] = "atmosphere_hybrid_sigma_pressure_coordinate"
    with pytest.raises(SceneError, match="atmosphere_hybrid_sigma_pressure_coordinate.*give no pressure"):
        open_scene(source)


def test_no_positions(source):
    with pytest.raises(SceneError, match="no latitude and longitude.*standard_name"):
        open_scene(source.drop_vars(["lat", "lon"]))


@pytest.mark.parametrize("bad", [95.0, np.nan])
def test_impossible_positions(source, bad):
    latitude = LATITUDE.copy()
    latitude[0] = bad
    source = source.assign_coords(lat=("lat", latitude, source["lat"].attrs))
    with pytest.raises(SceneError, match="latitude"):
        open_scene(source)


def test_unknown_units_name_variable_and_unit(source):
    source["T"].attrs["units"] = "degrees of warmth"
    with pytest.raises(
        SceneError, match='T: unknown units \'degrees of warmth\'.*mapping=."temperature": ."name": "T", "units": "K"'
    ):
        open_scene(source)


def test_units_of_something_else(source):
    source["T"].attrs["units"] = "kg"
    with pytest.raises(SceneError, match="T: units 'kg' cannot be turned into 'K'"):
        open_scene(source)


def test_a_field_can_be_left_out(source):
    bad = xr.zeros_like(source["Q"]).assign_attrs(
        standard_name="cloud_area_fraction_in_atmosphere_layer", units="oktas"
    )
    source = source.assign(cc=bad)
    with pytest.raises(SceneError, match="cc: unknown units 'oktas'"):
        open_scene(source)
    scene = open_scene(source, mapping={"cloud_fraction": ""})
    assert "cloud_fraction" not in scene and "cloud_fraction: left out" in scene.attrs["recognised"][0]


def test_missing_units(source):
    del source["T"].attrs["units"]
    with pytest.raises(SceneError, match="T: the file gives no units"):
        open_scene(source)


def test_impossible_cloud_fraction(source):
    cloud = xr.full_like(source["Q"], 50.0).assign_attrs(
        standard_name="cloud_area_fraction_in_atmosphere_layer", units="1"
    )
    with pytest.raises(SceneError, match="cloud_fraction.*percent called 1"):
        open_scene(source.assign(cc=cloud))
    cloud.attrs["units"] = "%"
    np.testing.assert_allclose(open_scene(source.assign(cc=cloud))["cloud_fraction"], 0.5)


def test_no_such_file():
    with pytest.raises(SceneError, match="no such file"):
        open_scene("/nowhere/model.nc")


@pytest.mark.parametrize("content", [b"", b"hello world", b"PK\x03\x04" + bytes(100)])
def test_other_files(tmp_path, content):
    file = tmp_path / "model.nc"
    file.write_bytes(content)
    with pytest.raises(SceneError, match="neither GRIB nor netCDF"):
        open_scene(file)


def test_folder_that_is_no_zarr(tmp_path):
    with pytest.raises(SceneError, match="not a Zarr store"):
        open_scene(tmp_path)


@pytest.mark.parametrize("form", ["NETCDF4", "NETCDF3_64BIT"])
@pytest.mark.parametrize("share", [0.1, 0.5, 0.9])
def test_netcdf_cut_short(source, tmp_path, form, share):
    whole = tmp_path / "whole.nc"
    source.to_netcdf(whole, format=form)
    cut = tmp_path / "cut.nc"
    cut.write_bytes(whole.read_bytes()[: int(share * whole.stat().st_size)])
    with pytest.raises(SceneError, match="cut.nc"):
        open_scene(cut)


def test_damaged_values_in_netcdf(source, tmp_path):
    whole = tmp_path / "whole.nc"
    generator = np.random.default_rng(1)
    source["T"] = source["T"] + generator.normal(size=source["T"].shape).astype("f4")
    source.to_netcdf(whole, encoding={"T": {"zlib": True, "chunksizes": (9, 3, 4)}})
    content = bytearray(whole.read_bytes())
    packed = content.rfind(b"\x78\x5e") if b"\x78\x5e" in content else content.rfind(b"\x78\x01")
    assert packed > 0
    content[packed + 10 : packed + 60] = bytes(50)
    (tmp_path / "cut.nc").write_bytes(content)
    with pytest.raises(SceneError, match="damaged file"):
        open_scene(tmp_path / "cut.nc")


def test_damaged_zarr(source, tmp_path):
    source.to_zarr(tmp_path / "model.zarr", consolidated=False)
    (tmp_path / "model.zarr" / "T" / "c" / "0" / "0" / "0").write_bytes(b"nonsense")
    with pytest.raises(SceneError, match="damaged file"):
        open_scene(tmp_path / "model.zarr")
    (tmp_path / "model.zarr" / "zarr.json").write_text("{")
    with pytest.raises(SceneError, match="damaged file"):
        open_scene(tmp_path / "model.zarr")


def test_description(source, tmp_path):
    text = describe_scene(source)
    for piece in (
        "Valid time: 2020-07-15T12:00",
        "3 x 4 (latitude_longitude)",
        "9 levels, 50 to 1000 hPa",
        "temperature <- T [K], by standard name air_temperature",
        "skin_temperature: temperature of the lowest level",
        "This source can be used.",
    ):
        assert piece in text
    bad = with_units(source, "T", "K", 1.0, -273.15)
    assert "degC called K" in describe_scene(bad)


def test_a_scalar_height_belongs_to_its_own_field_only(tmp_path):
    """CF: `height` of a 2 m field is a scalar coordinate of that field; the surface pressure beside it has none."""
    data = pressure_level_file()
    surface = data["PS"]
    near = (surface * 0.0 + 281.5).assign_attrs(standard_name="air_temperature", units="K")
    data = data.assign(tas=near).assign_coords(height=((), 2.0, {"standard_name": "height", "units": "m"}))
    data["tas"].encoding["coordinates"] = "height"
    for name in data.data_vars:
        if name != "tas":
            data[name].encoding["coordinates"] = "time"
    data.to_netcdf(tmp_path / "scalar.nc")
    scene = open_scene(tmp_path / "scalar.nc")
    assert any(line.startswith("surface_pressure <-") for line in scene.attrs["recognised"])
    assert any(line.startswith("air_temperature_2m <-") for line in scene.attrs["recognised"])


def test_description_offers_a_mapping_to_fill_in(source, tmp_path):
    source["SKIN"] = xr.full_like(source["PS"], 290.0).assign_attrs(units="K", standard_name="odd")
    del source["SKIN"].attrs["standard_name"]
    text = describe_scene(source)
    assert 'skin_temperature = "NAME"   # perhaps SKIN' in text and "can be used" in text
    lines = [line for line in text.splitlines() if line.startswith("  skin_temperature =")]
    (tmp_path / "my.toml").write_text("[variables]\n" + lines[0].replace("NAME", "SKIN"))
    np.testing.assert_allclose(open_scene(source, mapping=tmp_path / "my.toml")["skin_temperature"], 290.0)
    source["T"].attrs = {"units": "K"}
    source = source.rename(T="warmth")
    text = describe_scene(source)
    assert 'temperature = "NAME"   # perhaps warmth' in text and "no temperature on levels found" in text
