"""GRIB files: a real one beside its direct decoding, and small ones written with ecCodes."""

from pathlib import Path

import numpy as np
import pytest
from scene_samples import basic_grib_messages, isobaric_messages, write_grib

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene.humidity import specific_humidity_from_relative_humidity
from chansim.scene.reading import describe_scene, open_scene

REAL = Path(__file__).parents[2] / "shared" / "real_input" / "nam_20180917_00z.grib2"
needs_real = pytest.mark.skipif(not REAL.exists(), reason="../shared/real_input is not there")


@pytest.fixture(scope="module")
def real_scene():
    return open_scene(REAL)


@pytest.fixture(scope="module")
def decoded():
    """Fields by (short name, kind of level), decoded with ecCodes alone; levels rise with the pressure."""
    import eccodes

    found = {}
    eccodes.codes_grib_multi_support_on()
    with REAL.open("rb") as file:
        while (handle := eccodes.codes_grib_new_from_file(file)) is not None:
            key = eccodes.codes_get(handle, "shortName"), eccodes.codes_get(handle, "typeOfLevel")
            values = eccodes.codes_get_values(handle).reshape(65, 93)
            found.setdefault(key, {})[eccodes.codes_get(handle, "level")] = values
            eccodes.codes_release(handle)
    eccodes.codes_grib_multi_support_off()
    return {key: np.stack([levels[k] for k in sorted(levels)]) for key, levels in found.items()}


@needs_real
def test_real_fields_equal_their_direct_decoding(real_scene, decoded):
    assert real_scene["temperature"].dims == ("level", "y", "x")
    np.testing.assert_array_equal(real_scene["pressure"], np.arange(100, 1001, 50) * 100.0)
    np.testing.assert_allclose(real_scene["temperature"], decoded["t", "isobaricInhPa"], rtol=1e-6)
    np.testing.assert_allclose(real_scene["surface_pressure"], decoded["sp", "surface"][0], rtol=1e-6)
    np.testing.assert_allclose(real_scene["air_temperature_2m"], decoded["2t", "heightAboveGround"][0], rtol=1e-6)
    np.testing.assert_allclose(real_scene["orography"], decoded["orog", "surface"][0], atol=1e-3)
    wind = np.hypot(decoded["10u", "heightAboveGround"][0], decoded["10v", "heightAboveGround"][0])
    np.testing.assert_allclose(real_scene["wind_speed_10m"], wind, rtol=1e-5)
    np.testing.assert_allclose(real_scene["skin_temperature"], real_scene["air_temperature_2m"])


@needs_real
def test_real_humidity_agrees_with_metpy(real_scene, decoded):
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    pressure = real_scene["pressure"].values[:, None, None] * units.Pa
    temperature, relative = decoded["t", "isobaricInhPa"] * units.K, decoded["r", "isobaricInhPa"] / 100.0
    ratio = calc.mixing_ratio_from_relative_humidity(pressure, temperature, relative * units.dimensionless)
    expected = calc.specific_humidity_from_mixing_ratio(ratio).magnitude
    found = real_scene["specific_humidity"].values
    warm = decoded["t", "isobaricInhPa"] > 250.0
    np.testing.assert_allclose(found[warm], expected[warm], rtol=1e-2, atol=1e-7)
    # colder than that MetPy's constant heat capacities drift from Murphy and Koop 2005
    np.testing.assert_allclose(found, expected, rtol=0.1, atol=1e-7)


@needs_real
def test_real_column_water_agrees_with_the_files_own(real_scene, decoded):
    # precipitable water as the model itself integrates it, W = integral of q dp / g
    pressure, surface = real_scene["pressure"].values, real_scene["surface_pressure"].values
    water = np.zeros_like(surface)
    humidity = real_scene["specific_humidity"].values
    for k in range(len(pressure) - 1):
        lower = np.minimum(pressure[k + 1], surface)
        water += 0.5 * (humidity[k] + humidity[k + 1]) * np.clip(lower - pressure[k], 0.0, None) / 9.80665
    water += humidity[-1] * np.clip(surface - pressure[-1], 0.0, None) / 9.80665
    own = decoded["pwat", "atmosphereSingleLayer"][0]
    assert np.corrcoef(water.ravel(), own.ravel())[0, 1] > 0.995
    assert abs(np.mean(water - own)) < 0.05 * own.mean()


@needs_real
def test_real_heights_are_hydrostatic(real_scene):
    from chansim.scene.hydrostatic import scene_heights

    own = real_scene["height"].values
    found = scene_heights(real_scene.drop_vars("height")).values
    high = real_scene["pressure"].values[:, None, None] < 0.9 * real_scene["surface_pressure"].values
    difference = (found - own)[high]
    # 50 hPa between levels: the integration is good to some tens of metres (common practice)
    assert np.abs(difference).mean() < 20.0 and np.abs(difference).max() < 120.0


@needs_real
def test_real_grid_is_placed(real_scene):
    import pyproj

    crs = pyproj.CRS.from_cf(real_scene["grid_mapping"].attrs)
    # README of the file: Lambert conformal, 93 x 65 points, 81 km
    assert real_scene["grid_mapping"].attrs["grid_mapping_name"] == "lambert_conformal_conic"
    np.testing.assert_allclose(np.diff(real_scene["x"]), 81271.0, rtol=1e-4)
    np.testing.assert_allclose(np.diff(real_scene["y"]), 81271.0, rtol=1e-4)
    back = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True)
    x, y = np.meshgrid(real_scene["x"], real_scene["y"])
    longitude, latitude = back.transform(x, y)
    np.testing.assert_allclose(latitude, real_scene["latitude"], atol=1e-4)
    np.testing.assert_allclose((longitude - real_scene["longitude"] + 180) % 360 - 180, 0.0, atol=1e-4)
    assert real_scene["temperature"].attrs["grid_mapping"] == "grid_mapping"


@needs_real
def test_real_record_of_assumptions(real_scene):
    recognised = "\n".join(real_scene.attrs["recognised"])
    assert "relative_humidity <- r@isobaric" in recognised and "over water" in recognised
    defaulted = real_scene.attrs["defaulted"]
    for line in ("skin_temperature: 2 m temperature", "land_fraction: from the built-in coastline", "cloud_ice: none"):
        assert line in defaulted
    assert "surface_pressure" not in defaulted
    assert real_scene.attrs["masked_columns"] == 0
    assert real_scene["time"].values == np.datetime64("2018-09-17T00:00")


@needs_real
def test_no_index_file_is_left(tmp_path):
    copy = tmp_path / "copy"  # no extension: the content tells
    copy.write_bytes(REAL.read_bytes())
    open_scene(copy)
    assert [p.name for p in tmp_path.iterdir()] == ["copy"]


@needs_real
def test_description_of_the_real_file():
    text = describe_scene(REAL)
    for piece in ("GRIB", "65 x 93", "19 levels, 100 to 1000 hPa", "can be used", "t@cloudTop", "mapping="):
        assert piece in text


@needs_real
@pytest.mark.parametrize("share", [0.3, 0.71, 0.999])
def test_cut_short_file(tmp_path, share):
    content = REAL.read_bytes()
    file = tmp_path / "cut.grib2"
    file.write_bytes(content[: int(share * len(content))])
    with pytest.raises(SceneError, match="damaged GRIB"):
        open_scene(file)


def test_small_file(tmp_path):
    file = tmp_path / "small.grb"
    write_grib(file, basic_grib_messages())
    scene = open_scene(file)
    np.testing.assert_allclose(scene["pressure"], [10000.0, 30000.0, 70000.0, 100000.0])
    np.testing.assert_allclose(scene["temperature"][:, 0, 0], [205.0, 230.0, 273.0, 288.0], atol=1e-3)
    expected = specific_humidity_from_relative_humidity(0.8, 288.0, 1e5)
    np.testing.assert_allclose(scene["specific_humidity"][-1], expected, rtol=1e-4)
    assert scene["latitude"].dims == ("y", "x") and scene["latitude"].shape == (2, 3)
    np.testing.assert_allclose(scene["latitude"][:, 0], [50.0, 40.0])


def test_what_relative_humidity_is_relative_to(tmp_path):
    file = tmp_path / "small.grb"
    # the samples of ecCodes are of centre ecmf, which means "mixed"
    write_grib(file, [(keys, 240.0 if value == 230.0 else value) for keys, value in basic_grib_messages()])
    scene = open_scene(file)
    assert "saturation over mixed" in scene.attrs["recognised"][-1]
    over_water = open_scene(file, relative_humidity_over="water")
    ratio = (over_water["specific_humidity"] / scene["specific_humidity"]).values[:, 0, 0]
    # Murphy and Koop 2005, table C1 (from memory): 37.667 Pa over water, 27.272 Pa over ice at 240 K
    assert ratio[1] == pytest.approx(37.667 / 27.272, rel=1e-3) and ratio[3] == pytest.approx(1.0)
    with pytest.raises(SceneError, match="relative_humidity_over.*water, ice_below_freezing, mixed"):
        open_scene(file, relative_humidity_over="fog")


def test_lazy_equals_eager(tmp_path):
    file = tmp_path / "small.grb"
    write_grib(file, basic_grib_messages())
    lazy = open_scene(file, chunks={})
    assert lazy["temperature"].chunks and "masked_columns" not in lazy.attrs
    eager = open_scene(file)
    for name in eager.data_vars:
        np.testing.assert_allclose(lazy[name].values, eager[name].values, rtol=1e-6)


def test_levels_in_pascal_join_those_in_hectopascal(tmp_path):
    file = tmp_path / "high.grb"
    profile = {1000: 288.0, 500: 255.0, 100: 205.0, 10: 225.0, 1: 265.0, 0.4: 260.0}
    write_grib(
        file,
        [
            *isobaric_messages("t", profile),
            *isobaric_messages("q", {p: 3e-6 if p < 200 else 5e-3 for p in profile}),
            ({"shortName": "sp", "typeOfLevel": "surface"}, 101000.0),
        ],
    )
    scene = open_scene(file)
    np.testing.assert_allclose(scene["pressure"], [40.0, 100.0, 1000.0, 1e4, 5e4, 1e5])
    np.testing.assert_allclose(scene["temperature"][:, 1, 1], [260.0, 265.0, 225.0, 205.0, 255.0, 288.0], atol=1e-3)


def test_humidity_that_stops_below_the_top(tmp_path):
    file = tmp_path / "stops.grb"
    temperature = {1000: 288.0, 500: 255.0, 300: 230.0, 100: 205.0, 50: 208.0, 10: 225.0}
    write_grib(
        file,
        [
            *isobaric_messages("t", temperature),
            *isobaric_messages("r", {1000: 80.0, 500: 50.0, 300: 40.0, 100: 5.0}),
            ({"shortName": "sp", "typeOfLevel": "surface"}, 101000.0),
        ],
    )
    scene = open_scene(file)
    assert "specific_humidity: reference" in scene.attrs["defaulted"].replace("relative_humidity", "specific_humidity")
    humidity = scene["specific_humidity"].values[:, 0, 0]
    # the stratosphere holds 2 to 5 ppm by mass (common practice); the join keeps the value at 100 hPa
    assert 1.5e-6 < humidity[0] < 5e-6 and 1e-7 < humidity[1] < 1e-5
    expected = specific_humidity_from_relative_humidity(0.05, 205.0, 1e4, over="mixed")
    assert humidity[2] == pytest.approx(expected, rel=1e-3)
    assert scene.attrs["masked_columns"] == 0


def test_humidity_missing_between_levels_is_interpolated(tmp_path):
    file = tmp_path / "gap.grb"
    write_grib(
        file,
        [
            *isobaric_messages("t", {1000: 288.0, 850: 281.0, 700: 273.0, 300: 230.0}),
            *isobaric_messages("r", {1000: 80.0, 700: 40.0, 300: 40.0}),
            ({"shortName": "sp", "typeOfLevel": "surface"}, 101000.0),
        ],
    )
    scene = open_scene(file)
    share = np.log(1000 / 850) / np.log(1000 / 700)
    expected = specific_humidity_from_relative_humidity(0.8 - 0.4 * share, 281.0, 85000.0)
    np.testing.assert_allclose(scene["specific_humidity"][2], expected, rtol=1e-4)
    assert "interpolated linearly in ln p to 850 hPa" in scene.attrs["defaulted"]


def test_humidity_missing_at_the_lowest_levels(tmp_path):
    file = tmp_path / "low.grb"
    messages = [m for m in basic_grib_messages() if not (m[0]["shortName"] == "r" and m[0]["level"] == 1000)]
    write_grib(file, messages)
    with pytest.raises(SceneError, match="humidity is missing on the lowest levels"):
        open_scene(file)


def test_condensate_and_ozone_by_mass(tmp_path):
    file = tmp_path / "cloud.grb"
    write_grib(
        file,
        [
            *basic_grib_messages(),
            *isobaric_messages("clwmr", {1000: 0.0, 700: 1e-4}),
            *isobaric_messages("ciwc", {700: 0.0, 300: 2e-5}),
            *isobaric_messages("o3", {1000: 5e-8, 700: 6e-8, 300: 1e-7, 100: 1e-6}),
            *isobaric_messages("cc", {1000: 0.0, 700: 0.5, 300: 1.0, 100: 0.0}),
        ],
    )
    scene = open_scene(file)
    humidity = scene["specific_humidity"].values[2, 0, 0]
    # per mass of dry air to per mass of moist air
    assert scene["cloud_liquid"].values[2, 0, 0] == pytest.approx(1e-4 * (1 - humidity), rel=1e-4)
    np.testing.assert_allclose(scene["cloud_liquid"].values[:2], 0.0)
    assert scene["cloud_ice"].values[1, 0, 0] == pytest.approx(2e-5, rel=1e-4)
    # molar masses 28.9647 and 47.9982 g/mol
    assert scene["ozone_mole_fraction"].values[0, 0, 0] == pytest.approx(1e-6 * 28.9647 / 47.9982, rel=1e-4)
    np.testing.assert_allclose(scene["cloud_fraction"][:, 0, 0], [0.0, 1.0, 0.5, 0.0], atol=1e-4)


def test_surface_temperature_of_the_surface_kind(tmp_path):
    file = tmp_path / "skin.grb"
    extra = [
        ({"shortName": "t", "typeOfLevel": "surface"}, 295.0),
        ({"shortName": "2t", "typeOfLevel": "heightAboveGround", "level": 2}, 290.0),
        ({"shortName": "lsm", "typeOfLevel": "surface"}, [1, 1, 1, 0, 0, 0]),
    ]
    write_grib(file, [*basic_grib_messages(), *extra])
    scene = open_scene(file)
    np.testing.assert_allclose(scene["skin_temperature"], 295.0, atol=1e-3)
    np.testing.assert_allclose(scene["air_temperature_2m"], 290.0, atol=1e-3)
    np.testing.assert_allclose(scene["land_fraction"], [[1, 1, 1], [0, 0, 0]])


def test_logarithm_of_surface_pressure(tmp_path):
    file = tmp_path / "lnsp.grb"
    messages = [m for m in basic_grib_messages() if m[0]["shortName"] != "sp"]
    messages.append(({"shortName": "lnsp", "typeOfLevel": "hybrid", "level": 1}, np.log(98765.0)))
    write_grib(file, messages)
    np.testing.assert_allclose(open_scene(file)["surface_pressure"], 98765.0, rtol=1e-5)


def test_two_times_and_one_asked_for(tmp_path):
    file = tmp_path / "times.grb"
    later = [({**keys, "dataTime": 1800}, value) for keys, value in basic_grib_messages()]
    write_grib(file, [*basic_grib_messages(), *later])
    with pytest.raises(SceneError, match="2 times.*2020-07-15T12:00.*time="):
        open_scene(file)
    scene = open_scene(file, time="2020-07-15T18:00")
    assert scene["time"].values == np.datetime64("2020-07-15T18:00")
    with pytest.raises(SceneError, match="nothing is valid at 2020-07-16"):
        open_scene(file, time="2020-07-16")
    assert "Valid times: 2" in describe_scene(file)


def test_two_kinds_of_levels_are_ambiguous(tmp_path):
    file = tmp_path / "both.grb"
    hybrid = [({"shortName": "t", "typeOfLevel": "hybrid", "level": k}, 280.0) for k in (1, 2)]
    write_grib(file, [*basic_grib_messages(), *hybrid])
    with pytest.raises(SceneError, match="temperature: 2 fields.*t@isobaric.*t@hybrid.*mapping="):
        open_scene(file)
    scene = open_scene(file, mapping={"temperature": "t@isobaric"})
    assert scene.sizes["level"] == 4


def test_ensemble_members(tmp_path):
    file = tmp_path / "members.grb"
    members = []
    for number in (1, 2):
        extra = {"productDefinitionTemplateNumber": 1, "numberOfForecastsInEnsemble": 2, "number": number}
        for keys, value in basic_grib_messages():
            warmth = number if keys["shortName"] == "t" else 0.0
            members.append(({**extra, **keys}, value + warmth))
    write_grib(file, members)
    with pytest.raises(SceneError, match="ensemble members .1, 2.*select="):
        open_scene(file)
    np.testing.assert_allclose(open_scene(file, select={"number": 2})["temperature"][-1], 290.0, atol=1e-3)


def test_garbage(tmp_path):
    file = tmp_path / "bad.grib2"
    file.write_bytes(b"GRIB" + bytes(range(256)) * 20)
    with pytest.raises(SceneError, match="damaged GRIB"):
        open_scene(file)


def test_missing_temperature_lists_what_the_file_has(tmp_path):
    file = tmp_path / "wind.grb"
    write_grib(file, isobaric_messages("u", {500: 20.0, 300: 30.0}))
    with pytest.raises(SceneError, match="no temperature.*u@isobaric"):
        open_scene(file)
    assert "u@isobaric" in describe_scene(file) and "Problems" in describe_scene(file)
