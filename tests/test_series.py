"""Series of times and members: one result, restartable."""

import numpy as np
import pytest
import xarray as xr
import zarr
from cf_checks import complaints
from satellite_samples import FAST
from scene_samples import isobaric_messages, pressure_level_file, write_grib

import chansim
from chansim.errors import OutputError, SceneError
from chansim.imaging.maps import draw_channel
from chansim.scene.reading import scene_times
from chansim.series import Frame, frames_of, simulate_series

HOURS = [np.datetime64(f"2020-07-15T{h:02d}:00", "ns") for h in (12, 15, 18)]


def model_file(hours=HOURS, members=None):
    """A model file in which every time, and member, is 2 K, and 0.5 K, warmer than the one before."""
    steps = []
    for step in range(len(hours)):
        one = pressure_level_file().drop_vars("time")
        steps.append(one.assign(T=one["T"] + np.float32(2.0 * step)).assign_coords(PS=one["PS"]))
    whole = xr.concat(steps, xr.DataArray(hours, dims="time", attrs={"standard_name": "time"}, name="time"))
    whole = whole.reset_coords("PS")
    for name in ("T", "Q", "PS"):
        whole[name].attrs = pressure_level_file()[name].attrs
    if members is None:
        return whole
    run = xr.concat([whole.assign(T=whole["T"] + np.float32(0.5 * m)) for m in members], "number")
    for name in ("T", "Q", "PS"):
        run[name].attrs = pressure_level_file()[name].attrs
    return run.assign_coords(number=list(members))


def picture(scene, zenith=0.0, settings=FAST):
    return chansim.simulate(scene, "tarn", channels=["ir104", "wv063"], view=zenith, settings=settings)


class Interrupting:
    """A picture function that is interrupted at one call."""

    def __init__(self, at):
        self.calls, self.at = 0, at

    def __call__(self, scene):
        self.calls += 1
        if self.calls == self.at:
            raise KeyboardInterrupt
        return picture(scene)


def opened(path):
    kind = {"engine": "zarr", "consolidated": False} if path.suffix == ".zarr" else {"engine": "netcdf4"}
    return xr.load_dataset(path, **kind)


@pytest.mark.parametrize("suffix", [".zarr", ".nc"])
def test_series_is_the_single_times_one_after_the_other(tmp_path, suffix):
    frames = frames_of(model_file())
    path = simulate_series(frames, tmp_path / f"a{suffix}", picture)
    result = opened(path)
    assert result.brightness_temperature.dims == ("time", "channel", "lat", "lon")
    np.testing.assert_array_equal(result.time, HOURS)
    for n, hour in enumerate(HOURS):
        alone = picture(chansim.open_scene(model_file(), time=hour))
        for name in ("brightness_temperature", "radiance", "weighting_function_peak"):
            np.testing.assert_array_equal(result[name].isel(time=n), alone[name])
    assert result.view_zenith_angle.dims == ("lat", "lon") and (result.simulated == 1).all()
    assert result.brightness_temperature.attrs["grid_mapping"] == "grid_mapping"
    assert result.attrs["time_coverage_end"] == "2020-07-15T18:00:00Z" and "not an observation" in result.summary
    assert [p.name for p in tmp_path.iterdir()] == [path.name]  # no working store is left
    draw_channel(result.isel(time=1), "ir104")


@pytest.mark.parametrize("suffix", [".zarr", ".nc"])
def test_an_interrupt_loses_the_time_in_work_only(tmp_path, suffix):
    path, frames = tmp_path / f"a{suffix}", frames_of(model_file())
    with pytest.raises(KeyboardInterrupt, match="1 of 3 pictures .* --continue"):
        simulate_series(frames, path, Interrupting(2))
    if suffix == ".zarr":
        begun = opened(path)
        assert begun.simulated.values.tolist() == [1, 0, 0]
        assert np.isfinite(begun.brightness_temperature[0]).all() and begun.brightness_temperature[1:].isnull().all()
    else:
        assert not path.exists()
    again = Interrupting(0)
    simulate_series(frames, path, again, existing="continue")
    assert again.calls == 2
    whole = simulate_series(frames, tmp_path / f"b{suffix}", picture)
    xr.testing.assert_identical(opened(path).drop_attrs(), opened(whole).drop_attrs())
    again = Interrupting(0)
    simulate_series(frames, path, again, existing="continue")
    assert again.calls == 0  # nothing is left to do


def test_a_time_that_was_half_written_is_made_again(tmp_path):
    """As after a loss of power: values are there, but the time is not marked as done."""
    path, frames = tmp_path / "a.zarr", frames_of(model_file())
    with pytest.raises(KeyboardInterrupt):
        simulate_series(frames, path, Interrupting(2))
    zarr.open_group(path, mode="r+")["brightness_temperature"][1] = 7.0
    simulate_series(frames, path, picture, existing="continue")
    whole = simulate_series(frames, tmp_path / "b.zarr", picture)
    xr.testing.assert_equal(opened(path), opened(whole))


def test_cf_checker_has_nothing_to_say_of_a_series(tmp_path):
    frames = frames_of(model_file(HOURS[:2], [3, 5]), members=("number", [3, 5]))
    assert not complaints(simulate_series(frames, tmp_path / "a.nc", picture))


def test_continuing_without_a_beginning_begins(tmp_path):
    simulate_series(frames_of(model_file(), HOURS[:1]), tmp_path / "a.zarr", picture, existing="continue")
    assert opened(tmp_path / "a.zarr").sizes["time"] == 1


@pytest.mark.parametrize(
    "times, work, words",
    [
        (HOURS[:2], picture, "begun with 3 times .* now 2 times"),
        (HOURS, lambda s: picture(s, 30.0), "begun with view 'nadir'"),
        (HOURS, lambda s: picture(s, settings=chansim.Settings()), "begun with solver 'absorbing'"),
        (HOURS, lambda s: picture(s).isel(channel=[0]), "other values of channel"),
        (HOURS, lambda s: picture(s).isel(lon=[0, 1]), "other values of lon"),
    ],
)
def test_another_request_does_not_continue(tmp_path, times, work, words):
    path, model = tmp_path / "a.zarr", model_file()
    with pytest.raises(KeyboardInterrupt):
        simulate_series(frames_of(model), path, Interrupting(2))
    before = opened(path)
    with pytest.raises(OutputError, match=words):
        simulate_series(frames_of(model, times), path, work, existing="continue")
    xr.testing.assert_identical(opened(path), before)


def test_existing_series_is_kept_or_replaced(tmp_path):
    path, frames = tmp_path / "a.zarr", frames_of(model_file())
    simulate_series(frames, path, picture)
    with pytest.raises(OutputError, match="exists and is kept"):
        simulate_series(frames, path, picture)
    simulate_series(frames[:1], path, picture, existing="replace")
    assert opened(path).sizes["time"] == 1
    (tmp_path / "b.zarr").mkdir()
    with pytest.raises(OutputError, match="not a series that can be continued"):
        simulate_series(frames, tmp_path / "b.zarr", picture, existing="continue")


def test_a_time_that_fails_keeps_those_before(tmp_path):
    def fail():
        raise SceneError("damaged message")

    frames = frames_of(model_file())
    frames[1] = Frame(frames[1].time, fail)
    with pytest.raises(SceneError, match="2020-07-15T15:00:00: damaged message; 1 of 3 pictures"):
        simulate_series(frames, tmp_path / "a.zarr", picture)
    assert opened(tmp_path / "a.zarr").simulated.values.tolist() == [1, 0, 0]


@pytest.mark.parametrize("how", ["dimension", "files"])
def test_ensemble(tmp_path, how):
    if how == "dimension":
        frames = frames_of(model_file(HOURS[:2], [3, 5]), members=("number", [3, 5]))
    else:
        frames = frames_of([model_file(HOURS[:2], [m]).isel(number=0, drop=True) for m in (3, 5)], members="files")
    seen = []
    simulate_series(frames, tmp_path / "a.zarr", picture, progress=lambda *a: seen.append(a[:2]))
    result = opened(tmp_path / "a.zarr")
    assert result.brightness_temperature.dims[:2] == ("time", "member")
    assert result.member.values.tolist() == ([3, 5] if how == "dimension" else [0, 1])
    assert seen == [(0, 4), (1, 4), (2, 4), (3, 4), (4, 4)]
    bt = result.brightness_temperature.sel(channel="ir104")
    spread = bt.isel(member=1) - bt.isel(member=0)
    np.testing.assert_allclose(spread, 1.0, atol=0.2)  # members differ by 1 K
    np.testing.assert_allclose(bt.isel(time=1) - bt.isel(time=0), 2.0, atol=0.4)


def test_files_in_any_order_and_their_times(tmp_path):
    names = []
    for n in (2, 0, 1):
        model_file(HOURS[n : n + 1]).to_netcdf(tmp_path / f"{n}.nc")
        names.append(tmp_path / f"{n}.nc")
    frames = frames_of(names)
    assert [f.time for f in frames] == HOURS
    assert frames_of(names, [str(HOURS[1])])[0].time == HOURS[1]
    simulate_series(frames, tmp_path / "a.zarr", picture)
    text = opened(tmp_path / "a.zarr").attrs["source_file"]
    assert [line.rsplit("/", 1)[1] for line in text.splitlines()] == ["0.nc", "1.nc", "2.nc"]


def test_times_of_grib(tmp_path):
    messages = [
        message
        for hour in (1200, 1800)
        for message in isobaric_messages("t", {1000: 288.0, 300: 230.0}, dataTime=hour)
    ]  # fmt: skip
    write_grib(tmp_path / "a.grib2", messages)
    assert [str(t) for t in scene_times(tmp_path / "a.grib2")] == ["2020-07-15T12:00:00", "2020-07-15T18:00:00"]
    assert scene_times(model_file(HOURS, [0, 1])) == HOURS
    assert scene_times(pressure_level_file()) == HOURS[:1]


@pytest.mark.parametrize(
    "sources, times, words",
    [
        (lambda: model_file(), ["2020-07-16"], "nothing is valid at 2020-07-16T00:00:00; the source has"),
        (lambda: model_file(), ["noon"], "2026-06-21T12"),
        (lambda: [model_file(), model_file(HOURS[1:])], "all", "is valid in Dataset and in Dataset"),
        (lambda: pressure_level_file().drop_vars("time"), "all", "tells no valid time"),
    ],
)
def test_impossible_series(sources, times, words):
    with pytest.raises(SceneError, match=words):
        frames_of(sources(), times)
    with pytest.raises(SceneError, match="at least one"):
        simulate_series([], "a.zarr", picture)
