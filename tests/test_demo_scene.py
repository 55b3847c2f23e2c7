"""The embedded demo scene: physically consistent, small, and made by its script."""

import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

import chansim  # noqa: F401
from chansim.scene.reading import open_scene

ROOT = Path(__file__).parents[1]
FILE = ROOT / "chansim" / "data" / "demo_scene.nc"
sys.path.insert(0, str(ROOT / "demo_scenes"))
import make_demo_scene  # noqa: E402

GAS_CONSTANT_DRY_AIR = 287.05  # J kg-1 K-1, e.g. US Standard Atmosphere 1976
GRAVITY = 9.80665
EARTH_RADIUS = 6.371e6
HEIGHT_STEP = 4.0  # m, what the file rounds to


@pytest.fixture(scope="module")
def demo():
    with xr.open_dataset(FILE) as scene:
        scene = scene.load()
    scene["p"] = scene["pressure"].astype(float) * 100.0
    scene["above_ground"] = scene["p"] <= scene["surface_pressure"]
    return scene


def over_water(temperature):
    """Saturation vapour pressure over water [Pa]: Goff 1957, as in the WMO Technical Regulations (WMO-No. 49)."""
    ratio = 273.16 / temperature
    log10 = (
        10.79574 * (1.0 - ratio)
        - 5.02800 * np.log10(1.0 / ratio)
        + 1.50475e-4 * (1.0 - 10.0 ** (-8.2969 * (1.0 / ratio - 1.0)))
        + 0.42873e-3 * (10.0 ** (4.76955 * (1.0 - ratio)) - 1.0)
        + 0.78614
    )
    return 100.0 * 10.0**log10


def over_ice(temperature):
    """Saturation vapour pressure over ice [Pa]: Goff 1957, as in the WMO Technical Regulations (WMO-No. 49)."""
    ratio = 273.16 / temperature
    log10 = -9.09685 * (ratio - 1.0) - 3.56654 * np.log10(ratio) + 0.87682 * (1.0 - 1.0 / ratio) + 0.78614
    return 100.0 * 10.0**log10


def vapour_pressure(scene):
    q = scene["specific_humidity"].astype(float)
    return q * scene["p"] / (0.622 + 0.378 * q)


def layer_mass(scene):
    """kg m-2 per level above ground, levels standing for the air half way (in ln p) to their neighbours."""
    p = scene["p"].values
    middle = np.sqrt(p[1:] * p[:-1])
    edges = np.concatenate([[p[0]], middle, [p[-1]]])[:, None, None]
    mass = np.diff(np.minimum(edges, scene["surface_pressure"].values), axis=0) / GRAVITY
    return xr.DataArray(np.maximum(mass, 0.0), dims=scene["temperature"].dims)


def path(scene, name):
    return (scene[name].astype(float) * layer_mass(scene)).sum("pressure")


def test_size_of_file_and_grid(demo):
    assert FILE.stat().st_size <= 6e6
    assert dict(demo["temperature"].sizes) == {"pressure": 50, "latitude": 201, "longitude": 241}
    assert np.all(np.diff(demo["pressure"]) > 0) and demo["pressure"][0] <= 10 and demo["pressure"][-1] == 1050


def test_file_comes_from_the_script(demo):
    coarse = make_demo_scene.make_scene(spacing=1.0)
    again = demo.isel(latitude=slice(None, None, 4), longitude=slice(None, None, 4))
    assert coarse.attrs == demo.attrs
    for name in coarse.data_vars:
        expected, found = coarse[name].values.astype(float), again[name].values.astype(float)
        # another processor may round another way now and then
        differ = ~np.isclose(expected, found, rtol=1e-6, atol=1e-12)
        assert differ.mean() < 1e-3, name
        assert np.all(np.abs(expected - found)[differ] <= 0.02 * np.abs(expected[differ]) + HEIGHT_STEP), name


def test_script_is_deterministic(tmp_path):
    files = [make_demo_scene.write(make_demo_scene.make_scene(spacing=5.0), tmp_path / f"{n}.nc") for n in "ab"]
    first, second = (xr.load_dataset(f) for f in files)
    assert first.identical(second)
    assert files[0].read_bytes() == files[1].read_bytes()


def test_every_value_is_there_and_possible(demo):
    for name, variable in demo.data_vars.items():
        assert np.all(np.isfinite(variable.values)), name
    assert 185.0 < demo["temperature"].min() < 195.0 and demo["temperature"].max() < 310.0
    assert demo["specific_humidity"].min() > 1e-6 and demo["specific_humidity"].max() < 0.025
    for name in ("cloud_liquid", "cloud_ice", "rain", "snow"):
        assert demo[name].min() == 0.0 and 1e-4 < demo[name].max() < 0.01, name
    assert demo["cloud_fraction"].min() == 0.0 and demo["cloud_fraction"].max() == 1.0
    assert 0.5 < demo["wind_speed_10m"].max() < 35.0


def test_ordinary_reader_takes_it_whole():
    scene = open_scene(FILE)
    assert scene.attrs["masked_columns"] == 0 and scene.attrs["adjusted"] == ""
    for name in ("height", "ozone_mole_fraction", "cloud_fraction", "cloud_liquid", "cloud_ice", "rain", "snow",
                 "surface_pressure", "skin_temperature", "air_temperature_2m", "wind_speed_10m", "land_fraction",
                 "surface_class", "orography"):  # fmt: skip
        assert name in scene, name
        assert f"{name}:" not in scene.attrs["defaulted"], name


def test_vapour_is_not_above_saturation(demo):
    temperature = demo["temperature"].astype(float)
    air = demo["above_ground"]
    relative = vapour_pressure(demo) / over_water(temperature)
    # the two saturation formulas part by up to 1 % where it is very cold
    assert relative.where(air & (temperature > 233.0)).max() < 1.005
    ice = (vapour_pressure(demo) / over_ice(temperature)).where(air & (temperature < 235.0))
    assert 1.0 < ice.max() < 1.10
    assert ice.where(demo["cloud_fraction"] == 0.0).max() < 1.0


def test_liquid_cloud_is_saturated(demo):
    temperature = demo["temperature"].astype(float)
    relative = vapour_pressure(demo) / over_water(temperature)
    cloud = demo["above_ground"] & (demo["cloud_fraction"] == 1.0) & (demo["cloud_liquid"] > 1e-5)
    warm = relative.where(cloud & (temperature > 273.2))
    assert warm.count() > 5000
    assert warm.min() > 0.985


def test_condensate_lies_in_cloud_and_freezes_by_temperature(demo):
    condensate = demo["cloud_liquid"] + demo["cloud_ice"]
    assert not ((condensate > 0.0) & (demo["cloud_fraction"] == 0.0)).any()
    # homogeneous freezing near 235-238 K, melting at 273.15 K (e.g. Pruppacher and Klett 1997)
    assert demo["cloud_liquid"].where(demo["temperature"] < 238.0).max() == 0.0
    assert demo["cloud_ice"].where(demo["temperature"] > 273.2).max() == 0.0


def test_heights_are_hydrostatic(demo):
    q = demo["specific_humidity"].astype(float)
    virtual = (demo["temperature"].astype(float) * (1.0 + 0.608 * q)).values
    height = demo["height"].values.astype(float)
    geopotential = EARTH_RADIUS * height / (EARTH_RADIUS + height)
    log_ratio = np.log(demo["p"].values[1:] / demo["p"].values[:-1])[:, None, None]
    thickness = GAS_CONSTANT_DRY_AIR / GRAVITY * 0.5 * (virtual[1:] + virtual[:-1]) * log_ratio
    air = demo["above_ground"].values[1:]
    assert np.abs(geopotential[:-1] - geopotential[1:] - thickness)[air].max() < HEIGHT_STEP + 1.0
    whole = np.where(air, thickness, 0.0).sum(axis=0)
    lowest = np.where(demo["above_ground"].values, geopotential, np.inf).min(axis=0)
    assert np.abs((geopotential[0] - lowest) / whole - 1.0).max() < 1e-3


def test_ground_lies_between_the_right_levels(demo):
    height, orography = demo["height"], demo["orography"]
    assert (height.where(demo["above_ground"]).min("pressure") - orography).min() >= -HEIGHT_STEP
    assert (height.where(~demo["above_ground"]).max("pressure") - orography).max() <= HEIGHT_STEP
    assert demo["surface_pressure"].min() < 6e4 and demo["surface_pressure"].max() < 1.05e5


def test_air_is_statically_stable(demo):
    theta = (demo["temperature"].astype(float) * (1e5 / demo["p"]) ** 0.2857).where(demo["above_ground"])
    upward = -theta.diff("pressure")
    assert upward.min() > -0.06  # rounding of temperature to 1/32 K
    over_sea = demo["land_fraction"] == 0.0
    skin_excess = (demo["skin_temperature"] - demo["air_temperature_2m"]).where(over_sea)
    assert 0.0 < skin_excess.mean() < 1.5 and skin_excess.max() < 5.0


def test_stratosphere_is_dry_and_ozone_peaks_there(demo):
    stratosphere = demo["specific_humidity"].sel(pressure=slice(5, 60))
    # about 4-5 parts per million by volume (common knowledge of balloon and satellite soundings)
    assert 2.3e-6 < stratosphere.min() and stratosphere.max() < 3.5e-6
    peak = demo["pressure"][demo["ozone"].mean(("latitude", "longitude")).argmax("pressure")]
    assert 5.0 <= peak <= 15.0


def test_stratocumulus_lies_under_an_inversion(demo):
    deck = demo.sel(latitude=slice(14, 22), longitude=slice(18, 32))
    low = deck["cloud_fraction"].sel(pressure=slice(860, 945))
    solid = (low.max("pressure") > 0.95) & (path(deck, "cloud_ice") == 0.0)
    assert solid.mean() > 0.6
    liquid = 1e3 * path(deck, "cloud_liquid").where(solid)
    assert 45.0 < liquid.quantile(0.01) and liquid.quantile(0.99) < 155.0
    top = low["pressure"].where(low > 0.5).min("pressure")
    in_cloud = deck["temperature"].where(deck["pressure"] == top).max("pressure")
    above = deck["temperature"].where((deck["pressure"] < top) & (deck["pressure"] > 800)).max("pressure")
    assert (above - in_cloud).where(solid).quantile(0.05) > 2.0


def test_tropical_convection_and_thin_cirrus(demo):
    cluster = demo.sel(latitude=slice(-4, 4), longitude=slice(30, 40))
    ice = 1e3 * path(cluster, "cloud_ice")
    assert ice.quantile(0.5) > 100.0 and 1000.0 < ice.max() < 5000.0
    frozen = cluster["cloud_ice"] > 5e-6
    top_temperature = cluster["temperature"].where(frozen & (frozen.cumsum("pressure") == 1)).min("pressure")
    # anvil near 205-215 K, domes colder than 197 K (common practice)
    assert 200.0 < top_temperature.median() < 216.0 and top_temperature.min() < 197.0
    assert cluster["rain"].max() > 1e-4
    cirrus = demo.sel(latitude=slice(5, 9), longitude=slice(52, 62))
    amount = 1e3 * path(cirrus, "cloud_ice")
    assert 3.0 < amount.where(amount > 0.5).median() < 30.0
    assert cirrus["skin_temperature"].mean() > 299.0


def test_plateau_is_colder_than_the_air_above(demo):
    plateau = demo.where((demo["orography"] > 4000.0) & (demo["latitude"] > 33.0))
    assert plateau["orography"].count() > 500
    air = plateau["temperature"].sel(pressure=480)
    assert (air - plateau["skin_temperature"]).median() > 12.0


def test_surface_classes_and_dry_air(demo):
    for flag in (0, 1, 2, 3):
        assert (demo["surface_class"] == flag).sum() > 500, flag
    temperature = demo["temperature"].sel(pressure=400).astype(float)
    moisture = (vapour_pressure(demo) / over_water(demo["temperature"].astype(float))).sel(pressure=400)
    belt = moisture.sel(latitude=slice(18, 23)).median()
    tropics = moisture.sel(latitude=slice(-3, 8)).median()
    assert belt < 0.12 and tropics > 0.35 and temperature.min() > 220.0
