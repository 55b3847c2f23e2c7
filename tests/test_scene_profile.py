"""Single columns from arrays: a real radiosonde ascent, and bad profiles."""

from pathlib import Path

import numpy as np
import pytest

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene import humidity
from chansim.scene.profiles import scene_from_profile

SONDE = Path(__file__).parents[2] / "shared" / "real_input" / "radiosonde_20110520_0828z.cdf"
UNITS = {"pressure": "hPa", "temperature": "degC", "relative_humidity": "%", "dew_point": "degC"}
PLACE = {"latitude": 36.6, "longitude": -97.5, "time": "2011-05-20T08:28"}

PRESSURE = np.array([970.0, 900.0, 800.0, 700.0, 600.0, 514.0])
TEMPERATURE = np.array([18.0, 20.0, 14.0, 8.0, -1.0, -9.0])
HUMIDITY = np.array([90.0, 60.0, 50.0, 30.0, 40.0, 50.0])


def profile(**changes):
    arguments = {
        "pressure": PRESSURE, "temperature": TEMPERATURE, "relative_humidity": HUMIDITY, "units": UNITS, **PLACE,
    }  # fmt: skip
    arguments.update(changes)
    return scene_from_profile(**{name: value for name, value in arguments.items() if value is not None})


@pytest.fixture(scope="module")
def sonde():
    if not SONDE.exists():
        pytest.skip("../shared/real_input is not there")
    netcdf = pytest.importorskip("netCDF4")
    with netcdf.Dataset(SONDE) as file:
        return {name: file[name][:] for name in ("pres", "tdry", "rh", "dp", "alt")}


def test_radiosonde(sonde):
    scene = scene_from_profile(sonde["pres"], sonde["tdry"], relative_humidity=sonde["rh"], units=UNITS, **PLACE)
    assert scene["temperature"].dims == ("level", "cell")
    assert float(scene["pressure"][0]) == pytest.approx(51448.0, abs=100.0)  # README of the file: 514 hPa
    assert scene["surface_pressure"].item() == pytest.approx(100.0 * sonde["pres"].max(), rel=1e-6)
    assert "above the top level (514" in scene.attrs["defaulted"]
    assert scene["column_valid"].all()


def test_radiosonde_humidity_agrees_with_its_own_dew_point(sonde):
    by_humidity = scene_from_profile(sonde["pres"], sonde["tdry"], relative_humidity=sonde["rh"], units=UNITS, **PLACE)
    by_dew_point = scene_from_profile(sonde["pres"], sonde["tdry"], dew_point=sonde["dp"], units=UNITS, **PLACE)
    ratio = (by_dew_point["specific_humidity"] / by_humidity["specific_humidity"]).values
    # the sonde's own conversion, rounded to 1 % and 0.1 degC
    assert np.abs(ratio - 1.0).max() < 0.03 and abs(ratio.mean() - 1.0) < 0.005


def test_radiosonde_heights_agree_with_its_own(sonde):
    from chansim.scene.hydrostatic import scene_heights

    scene = scene_from_profile(
        sonde["pres"], sonde["tdry"], relative_humidity=sonde["rh"], units=UNITS, orography=sonde["alt"][0], **PLACE
    )
    ascent = scene_heights(scene).values[:, 0][::-1]
    own = np.interp(scene["pressure"].values[::-1], sonde["pres"][::-1] * 100.0, sonde["alt"][::-1])
    # the file's heights are hydrostatic too, in gpm, 1 m apart
    np.testing.assert_allclose(ascent, own, atol=15.0)


def test_profile_runs_either_way():
    up = profile()
    down = profile(pressure=PRESSURE[::-1], temperature=TEMPERATURE[::-1], relative_humidity=HUMIDITY[::-1])
    np.testing.assert_allclose(up["temperature"], down["temperature"])
    np.testing.assert_allclose(up["temperature"][:, 0], TEMPERATURE[::-1] + 273.15)
    expected = humidity.specific_humidity_from_relative_humidity(0.9, 291.15, 97000.0)
    assert float(up["specific_humidity"][-1, 0]) == pytest.approx(expected, rel=1e-9)


def test_defaults_and_supplied_surface():
    scene = profile(skin_temperature=295.0, surface_pressure=97500.0, cloud_liquid=np.linspace(0, 1e-4, 6))
    assert scene["skin_temperature"].item() == 295.0 and scene["surface_pressure"].item() == 97500.0
    assert float(scene["cloud_liquid"][0, 0]) == pytest.approx(1e-4)
    assert "skin_temperature:" not in scene.attrs["defaulted"]
    assert "skin_temperature: temperature of the lowest level" in profile().attrs["defaulted"]


def test_missing_and_repeated_points_are_left_out_and_counted():
    pressure = np.insert(PRESSURE, 3, [800.0, 795.0])
    temperature = np.insert(TEMPERATURE, 3, [14.0, np.nan])
    moisture = np.ma.masked_values(np.insert(HUMIDITY, 3, [50.0, 50.0]), -9999.0)
    scene = profile(pressure=pressure, temperature=temperature, relative_humidity=moisture)
    np.testing.assert_allclose(scene["pressure"], PRESSURE[::-1] * 100.0)
    assert "2 of 8 points left out" in scene.attrs["adjusted"]


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"relative_humidity": None}, "exactly one of .*; got none"),
        ({"dew_point": TEMPERATURE}, "got relative_humidity and dew_point"),
        ({"temperature": TEMPERATURE[:-1]}, r"temperature has shape \(5,\)"),
        ({"mixture": HUMIDITY}, "'mixture' is not a quantity"),
        ({"units": {**UNITS, "temprature": "K"}}, "'temprature' is not a quantity"),
        ({"units": {**UNITS, "temperature": "K"}}, "temperature.*degC called K"),
        ({"units": {**UNITS, "pressure": "Pa"}}, "hPa called Pa"),
        ({"units": {**UNITS, "pressure": "furlong"}}, "pressure: units 'furlong'"),
        ({"relative_humidity": HUMIDITY * 2}, "relative_humidity.*-1 to 150 %"),
        ({"temperature": np.full(6, np.nan)}, "0 of 6 points"),
        ({"pressure": PRESSURE[[0, 5, 5, 5, 5, 4]]}, "not monotonic"),
        ({"latitude": 100.0}, "latitude"),
    ],
)
def test_bad_profiles(changes, message):
    with pytest.raises(SceneError, match=message):
        profile(**changes)
