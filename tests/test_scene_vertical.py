"""Vertical coordinates: CF appendix D worked by hand, coefficients in GRIB headers, heights, density, errors."""

import numpy as np
import pytest
import xarray as xr
from scene_atmosphere import GRAVITY, columns, humidity_at, model_file, native_history, temperature_at
from scene_samples import write_any_grib

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene import hydrostatic
from chansim.scene.reading import describe_scene, open_scene

CF = "atmosphere_{}_coordinate"


def two_columns(levels=3, dim="lev", **coordinate):
    """Temperature and humidity on levels without pressure, from the top down, two columns: p_s 1000 and 600 hPa."""
    shape = (levels, 2)
    warm, moist = np.linspace(220.0, 285.0, levels), np.geomspace(1e-5, 8e-3, levels)
    return xr.Dataset(
        {
            "t": ((dim, "cell"), np.broadcast_to(warm[:, None], shape).copy(), {
                "standard_name": "air_temperature", "units": "K"}),
            "q": ((dim, "cell"), np.broadcast_to(moist[:, None], shape).copy(), {
                "standard_name": "specific_humidity", "units": "1"}),
            "PS": ("cell", [100000.0, 60000.0], {"units": "Pa"}),
        },
        coords={
            dim: (dim, np.arange(1.0, levels + 1.0), {"positive": "down", **coordinate}),
            "lat": ("cell", [0.0, 30.0], {"units": "degrees_north"}),
            "lon": ("cell", [0.0, 90.0], {"units": "degrees_east"}),
            "time": ((), np.datetime64("2020-07-15T12:00", "ns")),
        },
    )  # fmt: skip


def pressure_of(data, **options):
    return open_scene(data, **options)["pressure"].values


# --- hybrid sigma-pressure: CF appendix D, p(n,k,j,i) = ap(k) + b(k) ps(n,j,i) -------------------------


BY_HAND = [[1000.0, 1000.0], [18000.0 + 0.0, 12000.0 + 0.0], [69000.0, 42200.0]]
# ap = 1000, 3000, 2000 Pa; b = 0, 0.15, 0.67: 3000 + 0.15 x 100000 = 18000; 2000 + 0.67 x 60000 = 42200


def hybrid(formula_terms="ap: ap b: b ps: PS", **more):
    data = two_columns(standard_name=CF.format("hybrid_sigma_pressure"), formula_terms=formula_terms)
    data["ap"] = ("lev", [1000.0, 3000.0, 2000.0], {"units": "Pa"})
    data["b"] = ("lev", [0.0, 0.15, 0.67])
    return data.assign(**more)


def test_hybrid_with_ap():
    scene = open_scene(hybrid("ap: ap b: b ps: ground").rename(PS="ground"))
    np.testing.assert_allclose(scene["pressure"], BY_HAND)
    np.testing.assert_allclose(scene["surface_pressure"], [100000.0, 60000.0])  # named by the formula alone
    assert "surface_pressure <- ground, by the formula terms" in "\n".join(scene.attrs["recognised"])
    assert "half_pressure" not in scene


def test_hybrid_with_a_and_p0():
    data = hybrid("a: a b: b ps: PS p0: p0").drop_vars("ap")
    data["a"] = ("lev", [0.01, 0.03, 0.02])
    data["p0"] = ((), 1000.0, {"units": "hPa"})
    np.testing.assert_allclose(pressure_of(data), BY_HAND)


@pytest.mark.parametrize("form", ["float64", "float32"])
def test_hybrid_with_the_logarithm_of_the_surface_pressure(form):
    data = hybrid("ap: ap b: b ps: lnsp").drop_vars("PS")
    data["lnsp"] = ("cell", np.log([100000.0, 60000.0]).astype(form), {
        "long_name": "logarithm of surface pressure"})  # fmt: skip
    scene = open_scene(data)
    np.testing.assert_allclose(scene["pressure"], BY_HAND, rtol=1e-6)
    np.testing.assert_allclose(scene["surface_pressure"], [100000.0, 60000.0], rtol=1e-6)


def test_hybrid_upward_levels():
    np.testing.assert_allclose(pressure_of(hybrid().isel(lev=[2, 1, 0])), BY_HAND)


def test_hybrid_lazy_equals_eager():
    lazy = open_scene(hybrid().chunk({"cell": 1}))
    assert lazy["pressure"].chunks and lazy["temperature"].chunks
    np.testing.assert_allclose(lazy["pressure"].values, BY_HAND)


HALF_AP, HALF_B = np.array([0.0, 2000.0, 4000.0, 0.0]), np.array([0.0, 0.0, 0.3, 1.0])
# half levels, p_s 1000 hPa: 0, 2000, 4000 + 30000 = 34000, 100000; means 1000, 18000, 67000
HALF_BY_HAND = [[0.0, 0.0], [2000.0, 2000.0], [34000.0, 22000.0], [100000.0, 60000.0]]
MEANS_BY_HAND = [[1000.0, 1000.0], [18000.0, 12000.0], [67000.0, 41000.0]]


def test_half_levels_from_the_bounds():
    data = two_columns(
        standard_name=CF.format("hybrid_sigma_pressure"), formula_terms="ap: ap b: b ps: PS", bounds="lev_bnds"
    )
    edges = np.stack([np.arange(3.0), np.arange(1.0, 4.0)], axis=1)
    data["lev_bnds"] = (("lev", "bnds"), edges, {"formula_terms": "ap: ap_bnds b: b_bnds ps: PS"})
    for name, half, units in (("ap", HALF_AP, "Pa"), ("b", HALF_B, "1")):
        data[name] = ("lev", 0.5 * (half[1:] + half[:-1]), {"units": units})
        data[f"{name}_bnds"] = (("lev", "bnds"), np.stack([half[:-1], half[1:]], axis=1), {"units": units})
    for turned in (data, data.isel(lev=slice(None, None, -1))):
        scene = open_scene(turned)
        np.testing.assert_allclose(scene["pressure"], MEANS_BY_HAND)
        np.testing.assert_allclose(scene["half_pressure"], HALF_BY_HAND)
        assert scene["half_pressure"].dims == ("half_level", "cell") and scene["half_pressure"].attrs["units"] == "Pa"


def test_half_levels_from_bounds_with_a_and_p0():
    attrs = {"formula_terms": "p0: p0 a: a b: b ps: PS", "bounds": "lev_bnds"}
    data = two_columns(standard_name=CF.format("hybrid_sigma_pressure"), **attrs)
    data["p0"] = ((), 1e5, {"units": "Pa"})
    data["lev_bnds"] = (("lev", "bnds"), np.zeros((3, 2)), {"formula_terms": "p0: p0 a: a_bnds b: b_bnds ps: PS"})
    for name, half in (("a", HALF_AP / 1e5), ("b", HALF_B)):
        data[name] = ("lev", 0.5 * (half[1:] + half[:-1]))
        data[f"{name}_bnds"] = (("lev", "bnds"), np.stack([half[:-1], half[1:]], axis=1))
    np.testing.assert_allclose(open_scene(data)["half_pressure"], HALF_BY_HAND)


def test_converted_grib_with_surface_pressure_on_a_level_of_its_own():
    terms = "ap: hyam b: hybm ps: lnsp"
    data = two_columns(standard_name="hybrid_sigma_pressure", formula_terms=terms).drop_vars("PS")
    logarithm = {"long_name": "Logarithm of surface pressure"}
    data["lnsp"] = (("lev_2", "cell"), np.log([[1e5, 6e4]]), logarithm)
    data["lev_2"] = ("lev_2", [1.0], {"axis": "Z", "positive": "down"})
    for name, half, units in (("hya", HALF_AP, "Pa"), ("hyb", HALF_B, "1")):
        data[f"{name}m"] = ("nhym", 0.5 * (half[1:] + half[:-1]), {"units": units})
        data[f"{name}i"] = ("nhyi", half, {"units": units})
    scene = open_scene(data)
    np.testing.assert_allclose(scene["pressure"], MEANS_BY_HAND)
    np.testing.assert_allclose(scene["half_pressure"], HALF_BY_HAND, atol=1e-6)
    without = open_scene(data.drop_vars("hyai"))
    np.testing.assert_allclose(without["pressure"], MEANS_BY_HAND)
    assert "half_pressure" not in without


@pytest.mark.parametrize("given", ["both", "between", "one for all columns"])
def test_pressure_fields_on_and_between_the_levels(given):
    data = two_columns()
    data["PS"].attrs["standard_name"] = "surface_air_pressure"
    attrs = {"standard_name": "air_pressure", "units": "Pa"}
    if given == "one for all columns":
        scene = open_scene(data.assign(p=("lev", [1000.0, 18000.0, 67000.0], attrs)))
        np.testing.assert_allclose(scene["pressure"], [1000.0, 18000.0, 67000.0])
        return
    data["p_half"] = (("lev_half", "cell"), HALF_BY_HAND, attrs)
    if given == "both":
        data["p_full"] = (("lev", "cell"), np.array(MEANS_BY_HAND) * 0.99, attrs)  # not quite the means
    scene = open_scene(data)
    np.testing.assert_allclose(scene["pressure"], np.array(MEANS_BY_HAND) * (0.99 if given == "both" else 1.0))
    np.testing.assert_allclose(scene["half_pressure"], HALF_BY_HAND)


def test_half_levels_that_do_not_fit_their_levels():
    data = two_columns()
    data["PS"].attrs["standard_name"] = "surface_air_pressure"
    attrs = {"standard_name": "air_pressure", "units": "Pa"}
    data["p_full"] = (("lev", "cell"), [[1000.0, 1000.0], [40000.0, 12000.0], [67000.0, 41000.0]], attrs)
    data["p_half"] = (("lev_half", "cell"), HALF_BY_HAND, attrs)
    with pytest.raises(SceneError, match="half_pressure: 1 levels do not lie between their half levels.*level 2"):
        open_scene(data)


def test_a_single_column_on_hybrid_levels():
    scene = open_scene(hybrid().isel(cell=0))
    assert scene["temperature"].dims == ("level", "cell") and scene.sizes["cell"] == 1
    np.testing.assert_allclose(scene["pressure"], np.array(BY_HAND)[:, 0])


@pytest.mark.parametrize("full", [True, False])
def test_half_levels_under_the_names_of_converters(full):
    data = two_columns(standard_name=CF.format("hybrid_sigma_pressure"))
    data = data.assign(PS=data["PS"].assign_attrs(standard_name="surface_air_pressure"))
    data["hyai"], data["hybi"] = ("nhyi", HALF_AP, {"units": "Pa"}), ("nhyi", HALF_B, {"units": "1"})
    if full:
        data["hyam"] = ("nhym", 0.5 * (HALF_AP[1:] + HALF_AP[:-1]), {"units": "Pa"})
        data["hybm"] = ("nhym", 0.5 * (HALF_B[1:] + HALF_B[:-1]), {"units": "1"})
    scene = open_scene(data)
    np.testing.assert_allclose(scene["pressure"], MEANS_BY_HAND)
    np.testing.assert_allclose(scene["half_pressure"], HALF_BY_HAND)


def test_half_levels_of_some_of_the_levels():
    data = two_columns(levels=2, standard_name=CF.format("hybrid_sigma_pressure"))
    data["lev"] = ("lev", [2.0, 3.0], data["lev"].attrs)
    data["PS"].attrs["standard_name"] = "surface_air_pressure"
    data["hyai"], data["hybi"] = ("nhyi", HALF_AP, {"units": "Pa"}), ("nhyi", HALF_B, {"units": "1"})
    scene = open_scene(data)
    np.testing.assert_allclose(scene["half_pressure"], HALF_BY_HAND[1:])
    np.testing.assert_allclose(scene["pressure"], MEANS_BY_HAND[1:])


def test_dimensionless_coefficients_need_a_base_pressure():
    data = two_columns()
    data = data.assign(PS=data["PS"].assign_attrs(standard_name="surface_air_pressure"))
    data["hyam"], data["hybm"] = ("lev", [0.01, 0.03, 0.02], {"units": "1"}), ("lev", [0.0, 0.15, 0.67])
    with pytest.raises(SceneError, match="hyam is dimensionless.*reference pressure.*p0 = 100000"):
        open_scene(data)
    np.testing.assert_allclose(pressure_of(data.assign(P0=((), 1e5, {"units": "Pa"}))), BY_HAND)


def test_a_scene_with_half_levels_reads_back_as_itself(tmp_path):
    data = two_columns(standard_name=CF.format("hybrid_sigma_pressure"))
    data = data.assign(PS=data["PS"].assign_attrs(standard_name="surface_air_pressure"))
    data["hyai"], data["hybi"] = ("nhyi", HALF_AP, {"units": "Pa"}), ("nhyi", HALF_B, {"units": "1"})
    scene = open_scene(data)
    scene.to_netcdf(tmp_path / "scene.nc")
    again = open_scene(tmp_path / "scene.nc")
    xr.testing.assert_allclose(again.drop_attrs(), scene.drop_attrs())
    assert "half_pressure" in again


def test_some_of_the_levels_are_picked_by_number():
    data = hybrid().isel(lev=[1, 2])
    data["lev"] = ("lev", [2.0, 3.0], data["lev"].attrs)
    data["ap"], data["b"] = ("all", [1000.0, 3000.0, 2000.0], {"units": "Pa"}), ("all", [0.0, 0.15, 0.67])
    np.testing.assert_allclose(pressure_of(data), BY_HAND[1:])


def test_wrong_number_of_coefficients():
    data = hybrid().drop_vars("ap")
    data["ap"] = ("other", [1000.0, 3000.0], {"units": "Pa"})
    with pytest.raises(SceneError, match="ap has 2 coefficients, but t has 3 levels"):
        open_scene(data)


def test_missing_terms_say_which_and_how_to_give_them():
    with pytest.raises(SceneError, match=r"(?s)but b .sought as 'b'. is missing.*\[vertical\]\s+coordinate.*\n  b ="):
        open_scene(hybrid().drop_vars("b"))
    with pytest.raises(
        SceneError, match=r"(?s)ps \(surface pressure.* is missing.*\[vertical\]\s+coordinate = \"hybrid_sigma"
    ):
        open_scene(hybrid("ap: ap b: b").rename(PS="unlabelled"))
    with pytest.raises(SceneError, match="formula_terms 'ap ap b' cannot be read; it is written"):
        open_scene(hybrid("ap ap b"))
    assert "Problems:" in describe_scene(hybrid().drop_vars("b"))


@pytest.mark.parametrize("units", [None, "furlongs", "m"])
def test_units_of_a_term(units):
    data = hybrid()
    data["ap"].attrs = {} if units is None else {"units": units}
    with pytest.raises(SceneError, match=f"term ap = ap has units '{units}', but Pa is needed"):
        open_scene(data)


def test_the_fix_in_the_message_is_toml_that_works(tmp_path):
    data = hybrid("ap: ap ps: PS").assign(share=("lev", [0.0, 0.15, 0.67])).drop_vars("b")
    with pytest.raises(SceneError) as error:
        open_scene(data)
    snippet = str(error.value).split("mapping file:")[1].replace('b = "NAME"', 'b = "share"')
    (tmp_path / "fix.toml").write_text(snippet)
    np.testing.assert_allclose(pressure_of(data, mapping=tmp_path / "fix.toml"), BY_HAND)
    assert snippet.splitlines()[1].strip() in describe_scene(data)


def test_terms_by_mapping_file(tmp_path):
    data = two_columns().assign(A=("lev", [10.0, 30.0, 20.0], {"units": "hPa"}), B=("lev", [0.0, 0.15, 0.67]))
    with pytest.raises(
        SceneError, match=r"(?s)give no pressure.*\[vertical\]\s+coordinate = \"hybrid_sigma_pressure\""
    ):
        open_scene(data)
    file = tmp_path / "model.toml"
    file.write_text('[vertical]\ncoordinate = "hybrid_sigma_pressure"\nap = "A"\nb = "B"\nps = "PS"\n')
    np.testing.assert_allclose(pressure_of(data, mapping=file), BY_HAND)
    numbers = {"coordinate": "hybrid_sigma_pressure", "ap": [1e3, 3e3, 2e3], "b": [0.0, 0.15, 0.67], "ps": "PS"}
    np.testing.assert_allclose(pressure_of(data, mapping={"vertical": numbers}), BY_HAND)


def test_half_level_terms_by_mapping():
    table = {"coordinate": "hybrid_sigma_pressure", "ap_half": list(HALF_AP), "b_half": list(HALF_B), "ps": "PS"}
    scene = open_scene(two_columns(), mapping={"vertical": table})
    np.testing.assert_allclose(scene["pressure"], MEANS_BY_HAND)
    np.testing.assert_allclose(scene["half_pressure"], HALF_BY_HAND)
    with pytest.raises(SceneError, match="3 half-level coefficients, but t has 3 levels, which need 4"):
        open_scene(two_columns(), mapping={"vertical": table | {"ap_half": [0.0, 1.0, 2.0]}})


@pytest.mark.parametrize(
    ("table", "message"),
    [
        ({"coordinate": "eta"}, "coordinate 'eta' is not one of height, hybrid_sigma_pressure"),
        ({"ap": "A"}, 'needs a line coordinate = "..."'),
        ({"coordinate": "sigma", "b": "B"}, "'b' is no term of sigma; it has sigma, ps, ptop"),
        (
            {"coordinate": "sigma", "sigma": "nowhere", "ps": "PS", "ptop": 0.0},
            "sigma .sought as 'nowhere'. is missing",
        ),
        ({"coordinate": "sigma", "sigma": "lev"}, "(?s)ptop .*missing"),
    ],
)
def test_wrong_mapping_of_the_vertical(table, message):
    with pytest.raises(SceneError, match=message):
        open_scene(two_columns(), mapping={"vertical": table})


# --- the other coordinates of CF appendix D -----------------------------------------------------------


def test_sigma():
    data = two_columns(standard_name=CF.format("sigma"), formula_terms="sigma: lev ps: PS ptop: ptop")
    data["lev"] = ("lev", [0.1, 0.5, 0.9], data["lev"].attrs)
    data["ptop"] = ((), 50.0, {"units": "hPa"})
    # p = ptop + sigma (ps - ptop): 5000 + 0.1 x 95000 = 14500; 5000 + 0.9 x 55000 = 54500
    np.testing.assert_allclose(pressure_of(data), [[14500.0, 10500.0], [52500.0, 32500.0], [90500.0, 54500.0]])


def test_log_pressure():
    data = two_columns(standard_name=CF.format("ln_pressure"), formula_terms="p0: p0 lev: lev")
    data["lev"] = ("lev", [2.0, 1.0, 0.5], data["lev"].attrs)
    data["p0"] = ((), 100000.0, {"units": "Pa"})
    data = data.assign(PS=data["PS"].assign_attrs(standard_name="surface_air_pressure"))
    # 1e5 exp(-2), exp(-1), exp(-0.5)
    np.testing.assert_allclose(pressure_of(data), [13533.528, 36787.944, 60653.066], rtol=1e-7)


def test_hybrid_height_and_sleve():
    attrs = {"standard_name": CF.format("hybrid_height"), "units": "m", "formula_terms": "a: lev b: bz orog: zs"}
    data = two_columns(**attrs).assign(bz=("lev", [0.0, 0.4, 0.9]), zs=("cell", [0.0, 2000.0], {"units": "m"}))
    data["lev"] = ("lev", [12000.0, 5000.0, 100.0], attrs)
    data = data.assign(PS=data["PS"].assign_attrs(standard_name="surface_air_pressure"))
    scene = open_scene(data)
    # z = a + b orog: 5000 + 0.4 x 2000 = 5800; 100 + 0.9 x 2000 = 1900 lies 100 m under the ground
    np.testing.assert_allclose(scene["height"], [[12000.0, 12000.0], [5000.0, 5800.0], [100.0, 1900.0]])
    np.testing.assert_allclose(scene["orography"], [0.0, 2000.0])
    sleve = {
        "standard_name": CF.format("sleve"),
        "formula_terms": "a: a b1: b1 b2: b2 ztop: ztop zsurf1: z1 zsurf2: z2",
    }
    other = data.drop_vars("lev").assign_coords(lev=("lev", [1.0, 2.0, 3.0], sleve | {"positive": "down"}))
    other["a"] = ("lev", [0.6, 0.25, 0.005], {"units": "1"})
    other["ztop"] = ((), 20.0, {"units": "km"})
    other["b1"], other["b2"] = ("lev", [0.0, 0.5, 0.9]), ("lev", [0.0, 0.2, 0.7])
    other["z1"], other["z2"] = (("cell", [0.0, z], {"units": "m"}) for z in (1500.0, 500.0))
    other["zs"].attrs["standard_name"] = "surface_altitude"
    # z = a ztop + b1 z1 + b2 z2: 5000 + 750 + 100; 100 + 1350 + 350
    np.testing.assert_allclose(open_scene(other)["height"][:, 1], [12000.0, 5850.0, 1800.0])


# --- pressure from heights: hydrostatic, against an independent fine integration and MetPy ------------


def test_hydrostatic_pressure_of_an_isothermal_dry_column_by_hand():
    # H = R T / g = 287.055 x 250 / 9.80665 = 7317.9 m: one scale height up, p = p_s / e
    scale = 8.314462618 / 28.9647e-3 * 250.0 / GRAVITY
    height = np.array([2.0, 1.0, 0.5])[:, None] * scale
    found = hydrostatic.pressure_from_heights(height, np.full((3, 1), 250.0), np.array([1e5]), np.array([0.5 * scale]))
    np.testing.assert_allclose(found[:, 0], 1e5 * np.exp([-1.5, -0.5, 0.0]), rtol=1e-9)


def test_hydrostatic_pressure_far_above_the_ground_by_table():
    # US Standard Atmosphere 1976, table I, geopotential heights: 281.65 K and 898.75 hPa at 1000 m, 255.65 K and
    # 540.20 hPa at 5000 m, from 1013.25 hPa at the ground; the lowest level stands 1 km above it
    height, warm = np.array([[5000.0], [1000.0]]), np.array([[255.65], [281.65]])
    found = hydrostatic.pressure_from_heights(height, warm, np.array([101325.0]), 0.0)
    np.testing.assert_allclose(found[:, 0], [54020.0, 89875.0], rtol=3e-5)


def test_exner_integration_of_an_isentropic_column_by_hand():
    # theta constant: T falls by g / c_p = 9.80665 / (3.5 x 287.0550) = 9.76085 K km-1
    height = np.array([[5000.0], [1000.0]])
    found = hydrostatic.pressure_from_heights_and_potential(height, np.full((2, 1), 300.0), np.array([1e5]), 0.0)
    expected = 1e5 * (1.0 - 9.76085e-3 * height[:, 0] / 300.0) ** 3.5
    np.testing.assert_allclose(found[:, 0], expected, rtol=1e-6)


def test_hydrostatic_pressure_agrees_with_metpy():
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    air = columns()
    height, warm, moist = (air[n][:, 0] for n in ("height", "temperature", "humidity"))
    geopotential = 6371008.8 * height / (6371008.8 + height)
    virtual = calc.virtual_temperature(warm * units.K, moist / (1 - moist) * units.dimensionless).magnitude
    found = hydrostatic.pressure_from_heights(geopotential[:, None], virtual[:, None], np.array([101325.0]), 0.0)[:, 0]
    # MetPy the other way: the thickness between the pressures found is the height difference put in
    thickness = calc.thickness_hydrostatic(found[::-1] * units.Pa, virtual[::-1] * units.K).magnitude
    assert thickness == pytest.approx(geopotential[0] - geopotential[-1], rel=5e-4)


@pytest.fixture
def high_levels():
    """Hybrid height levels and the pressure they should have."""
    return model_file("hybrid height", "cells"), columns()["pressure"][:, np.arange(6) % 2]


@pytest.mark.parametrize("humidity", ["specific", "mixing ratio", "dew point", "relative"])
def test_hydrostatic_pressure_with_any_humidity(high_levels, humidity):
    data, expected = high_levels
    vapour = data["hus"].values * expected / (0.62198 + 0.37802 * data["hus"].values)
    warm = data["t"].values
    if humidity == "mixing ratio":
        data["hus"] = (data["hus"].dims, data["hus"].values / (1 - data["hus"].values), {
            "standard_name": "humidity_mixing_ratio", "units": "1"})  # fmt: skip
    elif humidity == "dew point":
        # Magnus over water (WMO guide 8), good to 0.5 % of the vapour pressure where it counts
        log = np.log(vapour / 611.2)
        data["hus"] = (data["hus"].dims, 243.12 * log / (17.62 - log) + 273.15, {
            "standard_name": "dew_point_temperature", "units": "K"})  # fmt: skip
    elif humidity == "relative":
        saturation = 611.2 * np.exp(17.62 * (warm - 273.15) / (warm - 30.03))
        data["hus"] = (data["hus"].dims, np.minimum(100.0 * vapour / saturation, 140.0), {
            "standard_name": "relative_humidity", "units": "%"})  # fmt: skip
    found = open_scene(data)["pressure"].values
    np.testing.assert_allclose(found, expected, rtol=3e-4)


def test_hydrostatic_pressure_from_potential_temperature(high_levels):
    data, expected = high_levels
    data["t"] = (data["t"].dims, data["t"].values * (1e5 / expected) ** (2.0 / 7.0), {
        "standard_name": "air_potential_temperature", "units": "K"})  # fmt: skip
    scene = open_scene(data)
    np.testing.assert_allclose(scene["pressure"], expected, rtol=5e-4)
    np.testing.assert_allclose(scene["temperature"], temperature_at(expected), atol=0.05)


def test_hydrostatic_pressure_from_a_known_level(high_levels):
    data, expected = high_levels
    data = data.drop_vars("ps").assign(top=("ncells", expected[10], {"units": "Pa"}))
    heights = columns()["height"][10, np.arange(6) % 2]
    with pytest.raises(SceneError, match=r"(?s)surface pressure .* is missing.*known_pressure"):
        open_scene(data)
    data["level_height"] = ("ncells", heights, {"units": "m"})
    mapping = {"vertical": {"known_pressure": "top", "known_height": "level_height"}}
    scene = open_scene(data, mapping=mapping)
    np.testing.assert_allclose(scene["pressure"], expected, rtol=3e-4)
    number = {"vertical": {"known_pressure": float(expected[10, 0]), "known_height": float(heights[0])}}
    np.testing.assert_allclose(open_scene(data, mapping=number)["pressure"][:, 0], expected[:, 0], rtol=3e-4)


@pytest.mark.parametrize("kind", ["altitude", "height", "geopotential_height", "geopotential field"])
def test_hydrostatic_pressure_on_height_levels(kind):
    """The column over the sea; upward levels, lazy and not."""
    air = columns()
    height, expected = air["height"][:, 0], air["pressure"][:, 0]
    geopotential = 6371008.8 * height / (6371008.8 + height)
    data = model_file("pressure field").drop_vars(["pfull", "lev", "clw", "cli"]).isel(ncells=[0, 2, 4])
    if kind == "geopotential field":
        field = np.repeat(GRAVITY * geopotential[:, None], 3, axis=1)
        data["phi"] = (("lev", "ncells"), field, {"standard_name": "geopotential", "units": "m2 s-2"})
    else:
        values = geopotential if kind.startswith("geopotential") else height
        data["lev"] = ("lev", values / 1000.0, {"standard_name": kind, "units": "km", "positive": "up"})
    upward = data.isel(lev=slice(None, None, -1))
    for given in (data, upward, upward.chunk({"ncells": 1}), data.chunk({"lev": 7})):
        np.testing.assert_allclose(open_scene(given)["pressure"].values, np.repeat(expected[:, None], 3, 1), rtol=3e-4)


def test_heights_instead_of_a_pressure_field_by_mapping(high_levels):
    data, expected = high_levels
    data["wrong"] = (("lev", "ncells"), expected * 1.1, {"standard_name": "air_pressure", "units": "Pa"})
    np.testing.assert_allclose(open_scene(data)["pressure"], expected * 1.1)
    found = open_scene(data, mapping={"vertical": {"coordinate": "height"}})
    np.testing.assert_allclose(found["pressure"], expected, rtol=3e-4)


def test_height_above_ground_needs_no_orography():
    data = model_file("pressure field").isel(ncells=[1, 3]).drop_vars(["pfull", "lev", "clw", "cli", "orog"])
    above = columns()["height"][:, 1] - 1500.0
    data["lev"] = ("lev", above, {"standard_name": "height", "units": "m", "positive": "up"})
    found = open_scene(data)
    # without orography geopotential height starts at the ground: 2 x 1500 m / Earth radius less gravity
    np.testing.assert_allclose(found["pressure"], columns()["pressure"][:, [1, 1]], rtol=3e-3)
    assert "height" not in found


def test_levels_under_the_ground_of_a_height_file():
    air = columns()
    height = np.sort(np.append(air["height"][:, 0], [20.0, 400.0]))[::-1]
    pressure = np.exp(np.interp(-height, -air["height"][:, 0], np.log(air["pressure"][:, 0])))
    data = model_file("pressure field").isel(ncells=[1, 3])[["ps", "orog", "ts"]]
    for name, profile, standard_name, units in (
        ("t", temperature_at, "air_temperature", "K"), ("q", humidity_at, "specific_humidity", "1"),
    ):  # fmt: skip
        values = np.repeat(profile(pressure)[:, None], 2, axis=1)
        values[height < 1500.0] = np.nan
        data[name] = (("z", "ncells"), values, {"standard_name": standard_name, "units": units})
    data["z"] = ("z", height, {"standard_name": "altitude", "units": "m", "positive": "up"})
    scene = open_scene(data)
    assert scene.attrs["masked_columns"] == 0
    found = scene["pressure"].values
    assert np.all(np.diff(found, axis=0) > 0) and np.all(found[height < 1500.0] > 84500.0)


def test_half_level_heights_are_averaged_and_a_cut_is_noticed():
    data = model_file("native", "cells").drop_vars(["P", "PB"])
    scene = open_scene(data)  # the pressure is then integrated over them
    # the mean height of a layer is not quite the height of its mean pressure, most where layers are thick in ln p
    np.testing.assert_allclose(scene["pressure"], columns()["pressure"][:, np.arange(6) % 2], rtol=8e-3)
    cut = data.isel(bottom_top_stag=slice(None, -2))
    with pytest.raises(SceneError, match="staggered along bottom_top_stag, which has 59 values; bottom_top has 60"):
        open_scene(cut)


def test_heights_without_orography():
    data = model_file("pressure field").drop_vars(["pfull", "orog"])
    data["lev"] = ("lev", columns()["height"][:, 0], {"standard_name": "altitude", "units": "m"})
    with pytest.raises(SceneError, match=r"(?s)height of the ground .*is missing.*orography = \"NAME\""):
        open_scene(data)


# --- density, Exner function, isentropic levels -------------------------------------------------------


def test_pressure_from_density_by_hand():
    # 1.2 kg m-3 x 287.0550 J kg-1 K-1 x 290 K = 99895.1 Pa
    assert hydrostatic.pressure_from_density(1.2, 290.0) == pytest.approx(99895.1, rel=2e-6)
    # the same air has theta = 290 (1e5 / 99895.1)**(2/7) = 290.08693 K
    assert hydrostatic.pressure_from_density_and_potential(1.2, 290.08693) == pytest.approx(99895.1, rel=2e-6)


@pytest.mark.parametrize("dry", [False, True])
@pytest.mark.parametrize("potential", [False, True])
def test_pressure_from_density_in_a_file(potential, dry):
    data, pressure = model_file("pressure field").drop_vars("pfull"), columns()["pressure"][:, np.arange(6) % 2]
    calc = pytest.importorskip("metpy.calc", reason="MetPy is not installed")
    from metpy.units import units

    ratio = humidity_at(pressure) / (1.0 - humidity_at(pressure))
    density = calc.density(pressure * units.Pa, temperature_at(pressure) * units.K, ratio * units.dimensionless)
    density = density.to("kg/m^3").magnitude
    if dry:
        data["rho_d"] = (
            ("lev", "ncells"),
            density / (1.0 + ratio),
            {"long_name": "dry air density", "units": "kg m-3"},
        )
    else:
        data["rho"] = (("lev", "ncells"), density, {"standard_name": "air_density", "units": "kg m-3"})
    if potential:
        data["t"] = (data["t"].dims, data["t"].values * (1e5 / pressure) ** (2.0 / 7.0), {
            "standard_name": "air_potential_temperature", "units": "K"})  # fmt: skip
    scene = open_scene(data)
    np.testing.assert_allclose(scene["pressure"], pressure, rtol=2e-4)  # MetPy's own gas constant
    assert "ideal gas law, from the density rho" in "\n".join(scene.attrs["recognised"])


def test_pressure_from_the_exner_function():
    data, pressure = model_file("pressure field").drop_vars("pfull"), columns()["pressure"][:, np.arange(6) % 2]
    exner = (pressure / 1e5) ** (2.0 / 7.0)
    data["pi"] = (("lev", "ncells"), exner, {"standard_name": "dimensionless_exner_function", "units": "1"})
    np.testing.assert_allclose(open_scene(data)["pressure"], pressure, rtol=1e-9)


def test_isentropic_levels():
    data = two_columns(standard_name="air_potential_temperature", units="K").drop_vars("t")
    data["lev"] = ("lev", [400.0, 330.0, 300.0], data["lev"].attrs)
    data["pres"] = (("lev", "cell"), [[1e4, 9e3], [3e4, 2.8e4], [8e4, 5.5e4]], {
        "standard_name": "air_pressure", "units": "Pa"})  # fmt: skip
    scene = open_scene(data)
    # T = theta (p / p0)**(2/7): 400 x 0.1**0.285714 = 207.179; 300 x 0.8**0.285714 = 281.470
    np.testing.assert_allclose(scene["temperature"][:, 0], [207.179, 233.948, 281.470], atol=1e-3)
    np.testing.assert_allclose(scene["pressure"][:, 1], [9e3, 2.8e4, 5.5e4])


def test_isentropic_levels_under_the_ground():
    data = two_columns(standard_name="air_potential_temperature", units="K").drop_vars("t")
    data["lev"] = ("lev", [400.0, 330.0, 285.0], data["lev"].attrs)
    data["PS"].attrs["standard_name"] = "surface_air_pressure"
    data["pres"] = (("lev", "cell"), [[1e4, 9e3], [3e4, 2.8e4], [9e4, np.nan]], {
        "standard_name": "air_pressure", "units": "Pa"})  # fmt: skip
    scene = open_scene(data)
    assert scene["column_valid"].all() and scene["pressure"][2, 1] > 60000.0
    assert "pressure: missing under the ground, put there: 1 values" in scene.attrs["adjusted"]
    np.testing.assert_allclose(scene["skin_temperature"][1], 330.0 * 0.28 ** (2.0 / 7.0), rtol=1e-6)


# --- base state and perturbation ----------------------------------------------------------------------


def test_two_candidates_for_the_temperature_are_named():
    data = hybrid().assign(ta=hybrid()["t"])
    with pytest.raises(SceneError, match=r"temperature: 2 fields fit equally well: t .* and ta .*mapping="):
        open_scene(data)
    assert pressure_of(data, mapping={"temperature": "ta"}).shape == (3, 2)


def test_sums_and_constants_by_mapping_file(tmp_path):
    data = model_file("native", "cells")
    for name in ("P", "PB", "T", "PH", "PHB"):
        data[name].attrs = {"units": data[name].attrs["units"]}  # nothing tells what they are
    file = tmp_path / "native.toml"
    file.write_text(
        '[variables]\npressure = {sum = ["P", "PB"]}\npotential_temperature = {name = "T", add = 300.0, units = "K"}\n'
        'geopotential = {sum = ["PH", "PHB"], staggered = "bottom_top_stag"}\n'
    )
    found, expected = open_scene(data, mapping=file), open_scene(model_file("native", "cells"))
    for name in ("pressure", "temperature", "height"):
        np.testing.assert_allclose(found[name], expected[name], rtol=1e-12)


def test_history_file_of_a_mesoscale_model(tmp_path):
    native_history().to_netcdf(tmp_path / "history")
    scene = open_scene(tmp_path / "history", time="2020-07-15T13")
    air = columns()
    kinds = np.arange(6).reshape(2, 3) % 2
    for name, key in (("pressure", "pressure"), ("temperature", "temperature"), ("specific_humidity", "humidity")):
        np.testing.assert_allclose(scene[name], air[key][:, kinds], rtol=1e-6)
    np.testing.assert_allclose(scene["wind_speed_10m"], 5.0)  # 3, 4, 5
    np.testing.assert_allclose(scene["air_temperature_2m"], 290.0)
    np.testing.assert_allclose(scene["specific_humidity_2m"], 0.008 / 1.008)
    np.testing.assert_allclose(scene["skin_temperature"], np.array([292.0, 281.0])[kinds])
    np.testing.assert_allclose(scene["cloud_fraction"], 0.5)
    np.testing.assert_allclose(scene["land_fraction"], 0.0)
    np.testing.assert_allclose(scene["latitude"][:, 0], [40.05, 39.95])
    assert scene["time"].values == np.datetime64("2020-07-15T13:00")


def test_the_perturbation_alone_is_no_pressure():
    with pytest.raises(SceneError, match="heights PHB . PH: .* the surface pressure .* is missing"):
        open_scene(model_file("native", "cells").drop_vars(["PB", "ps"]))


def test_the_assumed_constant_is_recorded():
    defaulted = open_scene(model_file("native")).attrs["defaulted"]
    assert "difference from a constant, taken to be 300 K" in defaulted and "add = 300.0" in defaulted


@pytest.mark.parametrize(
    ("entry", "message"),
    [
        ({"sum": ["P", "nowhere"]}, "'nowhere' is not in the file"),
        ({"sum": "P"}, r"sum is a list of names"),
        ({"sum": ["P", "PHB"]}, "cannot be added: their dimensions differ; are they staggered"),
        ({"name": "P", "add": "300"}, "add is a number"),
        ({"name": "P", "staggered": "west"}, "staggered = 'west' is no dimension of P"),
    ],
)
def test_wrong_sums(entry, message):
    with pytest.raises(SceneError, match=message):
        open_scene(model_file("native", "cells"), mapping={"pressure": entry})


def test_a_field_between_the_columns_is_averaged_onto_them():
    data = model_file("native", "regular")
    west = np.stack([np.full(4, 0.2), np.array([0.0, 0.2, 0.4, 0.6])])
    data["sea"] = (("lat", "lon_stag"), west, data["sea"].attrs)
    np.testing.assert_allclose(open_scene(data)["land_fraction"], [[0.2, 0.2, 0.2], [0.1, 0.3, 0.5]])
    data["sea"] = (("lat", "lon_stag"), west[:, :3], data["sea"].attrs)
    with pytest.raises(SceneError, match="land_fraction .from sea.: staggered along lon_stag, which has 3 values; lon"):
        open_scene(data)


# --- GRIB: coefficients in the header -----------------------------------------------------------------


def hybrid_messages(pv, levels=(1, 2, 3), surface="lnsp"):
    """Temperature, humidity and surface pressure on hybrid levels, 1000 hPa at the ground."""
    messages = []
    for short_name, profile in (("t", [220.0, 250.0, 285.0]), ("q", [1e-5, 1e-3, 8e-3])):
        for level, value in zip(levels, profile):
            messages.append(({"shortName": short_name, "typeOfLevel": "hybrid", "level": level, "pv": pv}, value))
    if surface == "lnsp":
        messages.append(({"shortName": "lnsp", "typeOfLevel": "hybrid", "level": 1, "pv": pv}, np.log(1e5)))
    else:
        messages.append(({"shortName": "sp", "typeOfLevel": "surface"}, 1e5))
    return messages


@pytest.mark.parametrize("surface", ["lnsp", "sp"])
@pytest.mark.parametrize("edition", [1, 2])
def test_grib_half_level_coefficients(tmp_path, surface, edition):
    file = tmp_path / "hybrid.grb"
    pv = [*HALF_AP, *HALF_B]
    write_any_grib(file, f"regular_ll_pl_grib{edition}", hybrid_messages(pv, surface=surface))
    scene = open_scene(file)
    for name, expected in (("pressure", MEANS_BY_HAND), ("half_pressure", HALF_BY_HAND)):
        found = scene[name].values.reshape(len(scene[name]), -1)
        # ecCodes keeps coefficients in 24 or 32 bits
        np.testing.assert_allclose(found, np.array(expected)[:, :1] * np.ones(found.shape), rtol=2e-6, atol=0.2)


def test_grib_some_of_the_hybrid_levels(tmp_path):
    file = tmp_path / "hybrid.grb"
    pv = [0.0, 100.0, *HALF_AP[1:], 0.0, 0.0, *HALF_B[1:]]  # levels 2, 3 and 4 of four
    write_any_grib(file, "regular_ll_pl_grib2", hybrid_messages(pv, levels=(2, 3, 4)))
    scene = open_scene(file)
    np.testing.assert_allclose(scene["pressure"].values[:, 0, 0], [1050.0, 18000.0, 67000.0], rtol=2e-6)
    np.testing.assert_allclose(scene["half_pressure"].values[:, 0, 0], [100.0, 2000.0, 34000.0, 1e5], rtol=2e-6)


def test_grib_coefficients_at_the_levels(tmp_path):
    file = tmp_path / "hybrid.grb"
    write_any_grib(file, "regular_ll_pl_grib2", hybrid_messages([1000.0, 3000.0, 2000.0, 0.0, 0.15, 0.67]))
    scene = open_scene(file)
    np.testing.assert_allclose(scene["pressure"].values[:, 0, 0], np.array(BY_HAND)[:, 0], rtol=2e-6)
    assert "half_pressure" not in scene


def test_grib_coefficients_of_wrong_length(tmp_path):
    file = tmp_path / "hybrid.grb"
    write_any_grib(file, "regular_ll_pl_grib2", hybrid_messages([0.0, 2000.0, 0.0, 1.0]))
    with pytest.raises(SceneError, match=r"4 coefficients .pv., which do not fit levels numbered up to 3"):
        open_scene(file)


def test_grib_hybrid_levels_without_coefficients(tmp_path):
    file = tmp_path / "hybrid.grb"
    write_any_grib(file, "regular_ll_pl_grib2", hybrid_messages(None))
    with pytest.raises(SceneError, match=r"(?s)ap .or a and p0., b are missing.*\[vertical\]"):
        open_scene(file)
    table = {"coordinate": "hybrid_sigma_pressure", "ap_half": list(HALF_AP), "b_half": list(HALF_B)}
    found = open_scene(file, mapping={"vertical": table})["pressure"].values[:, 0, 0]
    np.testing.assert_allclose(found, np.array(MEANS_BY_HAND)[:, 0], rtol=1e-5)


@pytest.mark.parametrize("edition", [1, 2])
def test_grib_sigma_levels(tmp_path, edition):
    file = tmp_path / "sigma.grb"
    messages = [({"shortName": "sp", "typeOfLevel": "surface"}, 1e5)]
    for sigma, warm, moist in ((0.2, 220.0, 1e-5), (0.5, 250.0, 1e-3), (0.9, 285.0, 8e-3)):
        level = {"typeOfLevel": "sigma", "level": int(sigma * 1e4) if edition == 1 else sigma}
        messages += [({"shortName": "t", **level}, warm), ({"shortName": "q", **level}, moist)]
    write_any_grib(file, f"regular_ll_pl_grib{edition}", messages)
    np.testing.assert_allclose(open_scene(file)["pressure"].values[:, 0, 0], [2e4, 5e4, 9e4], rtol=1e-5)


def test_grib_isentropic_levels(tmp_path):
    file = tmp_path / "theta.grb"
    messages = [({"shortName": "sp", "typeOfLevel": "surface"}, 1e5)]
    for theta, pressure, moist in ((300, 8e4, 8e-3), (330, 3e4, 1e-3), (400, 1e4, 1e-5)):
        level = {"typeOfLevel": "theta", "level": theta}
        messages += [({"shortName": "pres", **level}, pressure), ({"shortName": "q", **level}, moist)]
    write_any_grib(file, "regular_ll_pl_grib2", messages)
    scene = open_scene(file)
    np.testing.assert_allclose(scene["temperature"].values[:, 0, 0], [207.179, 233.948, 281.470], atol=2e-3)


def test_grib_height_levels(tmp_path):
    file = tmp_path / "heights.grb"
    messages = [({"shortName": "sp", "typeOfLevel": "surface"}, 101325.0),
                ({"shortName": "orog", "typeOfLevel": "surface"}, 0.0)]  # fmt: skip
    for height, warm in ((1000, 281.65), (5000, 255.65), (10000, 223.15)):
        level = {"typeOfLevel": "heightAboveSea", "level": height}
        messages += [({"shortName": "t", **level}, warm), ({"shortName": "q", **level}, 0.0)]
    write_any_grib(file, "regular_ll_pl_grib2", messages)
    # US Standard Atmosphere 1976, table I, geometric heights: 264.99, 540.48 and 898.76 hPa. Its temperatures at
    # these heights are 223.252, 255.676 and 281.651 K
    np.testing.assert_allclose(open_scene(file)["pressure"].values[:, 0, 0], [26499.0, 54048.0, 89876.0], rtol=4e-4)
