"""Day, night and what an output says about itself (common practice, unless a source is named)."""

import numpy as np
import pytest
import xarray as xr
from test_simulate_facts import P, layer, profile, scene

import chansim
from chansim.errors import SceneError, ViewError
from chansim.quality import FLAGS

NOON, MIDNIGHT = np.datetime64("2026-03-20T12:00", "ns"), np.datetime64("2026-03-20T00:00", "ns")  # at 0 E


@pytest.fixture(scope="module")
def two():
    return chansim.load_imager("tarn", ["sw038", "ir104"])


def at(time, **more):
    return scene(**more).assign_coords(time=time)


def value(result, name="brightness_temperature", channel="sw038"):
    return float(result[name].sel(channel=channel).values.reshape(-1)[0])


def flags(result, channel="sw038"):
    bits = int(result.quality_flag.sel(channel=channel).values.reshape(-1)[0])
    return {name for bit, (name, _) in FLAGS.items() if bits & bit}


WATER = {"cloud_liquid": layer(850.0, 900.0, 2e-4), "cloud_fraction": layer(850.0, 900.0, 1.0)}
ICE = {"cloud_ice": layer(200.0, 300.0, 2e-4), "cloud_fraction": layer(200.0, 300.0, 1.0)}


def test_by_day_water_cloud_is_bright_and_ice_cloud_is_dark(two):
    water, ice = (chansim.simulate(at(NOON, **cloud), two, view=30.0) for cloud in (WATER, ICE))
    share = [value(r, "radiance_solar") / value(r, "radiance") for r in (water, ice)]
    assert value(water) - value(water, channel="ir104") > 10.0
    assert value(water, "radiance_solar") > 3.0 * value(ice, "radiance_solar")
    assert min(share) > 0.3
    assert value(water, "radiance_solar", "ir104") == 0.0


def test_sunlight_adds_to_the_night(two):
    day, night = (chansim.simulate(at(t, **WATER), two, view=30.0) for t in (NOON, MIDNIGHT))
    left_out = chansim.simulate(at(NOON, **WATER), two, view=30.0, settings=chansim.Settings(sunlight="none"))
    np.testing.assert_allclose(night.radiance.values, left_out.radiance.values, rtol=1e-6)
    assert value(day, "radiance") - value(day, "radiance_solar") == pytest.approx(value(night, "radiance"), rel=1e-5)
    assert value(night, "radiance_solar") == 0.0
    assert float(day.solar_zenith_angle.values.ravel()[0]) < 3.0  # equinox, equator, noon
    assert "ASTM E490" in day.attrs["sunlight"] and "request" in left_out.attrs["sunlight"]


def test_a_scene_without_time_is_a_night_and_says_so(two):
    timeless = scene(**WATER)
    timeless = timeless.drop_vars("time") if "time" in timeless.coords else timeless
    result = chansim.simulate(timeless, two)
    assert "no valid time" in result.attrs["sunlight"]
    assert value(result, "radiance_solar") == 0.0


def test_glint_brightens_the_sea_where_imager_and_sun_face_each_other(two):
    """Sun 30 degrees in the west, imager 30 degrees in the east or on the same side."""
    afternoon = np.datetime64("2026-03-20T14:07", "ns")
    results = {}
    for name, azimuth in (("facing", 90.0), ("same side", 270.0)):
        a_scene = at(afternoon, kind="tropical")
        angle = a_scene["latitude"] * 0.0
        view = xr.Dataset({"view_zenith_angle": angle + 30.0, "view_azimuth_angle": angle + azimuth})
        results[name] = value(chansim.simulate(a_scene, two, view=view))
    assert results["facing"] > results["same side"] + 10.0


def test_sunlight_needs_the_azimuth_of_the_imager(two):
    a_scene = at(NOON, **WATER)
    view = xr.Dataset({"view_zenith_angle": a_scene["latitude"] * 0.0 + 30.0})
    with pytest.raises(ViewError, match="view_azimuth_angle"):
        chansim.simulate(a_scene, two, view=view)
    chansim.simulate(a_scene, two, view=view, settings=chansim.Settings(sunlight="none"))


def test_given_solar_angles_win(two):
    a_scene = at(MIDNIGHT, **WATER)
    angle = a_scene["latitude"] * 0.0
    view = xr.Dataset({"view_zenith_angle": angle, "view_azimuth_angle": angle, "solar_zenith_angle": angle + 40.0,
                       "solar_azimuth_angle": angle + 100.0})  # fmt: skip
    result = chansim.simulate(a_scene, two, view=view)
    assert value(result, "radiance_solar") > 0.0
    assert float(result.solar_zenith_angle.values.ravel()[0]) == pytest.approx(40.0)


def test_no_step_at_the_terminator(two):
    """Sunset on the equator at the equinox is near 18:07 UTC: brightness falls to the night value without a jump."""
    minutes = np.arange(0, 21, 2)
    times = [np.datetime64("2026-03-20T17:56", "ns") + np.timedelta64(int(m), "m") for m in minutes]
    temperatures = np.array([value(chansim.simulate(at(t, **ICE), two)) for t in times])
    night = value(chansim.simulate(at(MIDNIGHT, **ICE), two))
    assert (np.diff(temperatures) <= 1e-6).all()
    assert temperatures[-1] == pytest.approx(night, abs=1e-4)
    assert np.abs(np.diff(temperatures)).max() < 4.0
    assert temperatures[0] > night + 0.5


def test_flags_tell_what_to_be_careful_about(two):
    high = chansim.simulate(at(NOON, **WATER), two, view=75.0)
    assert flags(high) == {"high_view_zenith", "particle_size_parametrised"}
    low_sun = chansim.simulate(at(np.datetime64("2026-03-20T17:40", "ns")), two)
    assert flags(low_sun) == {"low_sun"} and flags(low_sun, "ir104") == set()
    broken = {**ICE, "cloud_fraction": layer(200.0, 300.0, 0.5)}
    assert "large_subcolumn_spread" in flags(chansim.simulate(at(MIDNIGHT, **broken), two), "ir104")
    own = chansim.simulate(at(NOON, **WATER, effective_radius_liquid=layer(850.0, 900.0, 9e-6)), two)
    assert flags(own) == set()
    large = chansim.simulate(at(NOON, **WATER, effective_radius_liquid=layer(850.0, 900.0, 90e-6)), two)
    assert flags(large) == {"particle_size_outside_tables"}


def test_emission_level_is_the_top_of_thick_cloud(two):
    result = chansim.simulate(at(MIDNIGHT, **ICE), two)
    assert 19000.0 < value(result, "effective_emission_pressure", "ir104") < 25000.0
    assert value(result, "cloud_effect", "ir104") < -60.0
    temperature = profile()[0]
    there = np.interp(np.log(value(result, "effective_emission_pressure", "ir104")), np.log(P), temperature)
    assert there == pytest.approx(value(result, channel="ir104"), abs=0.3)
    clear = chansim.simulate(at(MIDNIGHT), two)
    assert value(clear, "cloud_effect") == 0.0
    peak = value(clear, "weighting_function_peak", "ir104"), value(clear, "weighting_function_peak_height", "ir104")
    assert peak[0] > 80000.0 and peak[1] < 2500.0


@pytest.mark.parametrize(
    "settings, words",
    [({"sunlight": "always"}, "unknown sunlight"), ({"solar_streams": 0}, "solar_streams 0"),
     ({"solar_streams": 40}, "1 to 16")],
)  # fmt: skip
def test_impossible_settings(two, settings, words):
    with pytest.raises(SceneError, match=words):
        chansim.simulate(scene(), two, settings=chansim.Settings(**settings))
