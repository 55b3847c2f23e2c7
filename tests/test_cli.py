"""The command line, as real processes."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scene_samples import pressure_level_file

ROOT = Path(__file__).parents[1]
PNG = b"\x89PNG"


def run(*arguments, cwd, timeout=600):
    return subprocess.run(
        [sys.executable, "-m", "chansim", *map(str, arguments)],
        cwd=cwd,
        capture_output=True,
        text=True,
        timeout=timeout,
    )


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("cli")
    pressure_level_file().to_netcdf(folder / "model.nc")
    return folder


@pytest.fixture(scope="module")
def simulated(folder):
    done = run("simulate", "model.nc", "-o", "result.nc", "--channels", "wv063,ir104,ir123", "--zenith", 20, cwd=folder)
    assert done.returncode == 0, done.stderr
    return done


def test_help_teaches():
    for command in ([], ["demo"], ["simulate"], ["draw"], ["animate"], ["geotiff"], ["channel"], ["scene"]):
        done = run(*command, "--help", cwd=ROOT)
        assert done.returncode == 0 and "chansim" in done.stdout and "exit codes" in done.stdout
        assert "official warnings" in done.stdout


def test_wrong_call_is_told_from_wrong_input(folder):
    assert run("fly", cwd=folder).returncode == 2
    assert run("simulate", "model.nc", cwd=folder).returncode == 2


def test_simulation_prints_what_it_assumed(simulated, folder):
    assert "ozone_mole_fraction: reference atmosphere" in simulated.stdout
    assert "skin_temperature" in simulated.stdout and "not an observation" in simulated.stdout
    with xr.open_dataset(folder / "result.nc", engine="netcdf4") as result:
        assert result.channel.values.tolist() == ["wv063", "ir104", "ir123"]
        assert result.attrs["view"] == "zenith angle 20 degrees everywhere, imager at azimuth 0 degrees"


def test_output_that_exists_is_kept(simulated, folder):
    before = (folder / "result.nc").read_bytes()
    done = run("simulate", "model.nc", "-o", "result.nc", cwd=folder)
    assert (
        done.returncode == 3 and "exists and is kept" in done.stderr and (folder / "result.nc").read_bytes() == before
    )


def test_pictures(simulated, folder):
    done = run("draw", "result.nc", "--channels", "ir104", "--folder", "maps", cwd=folder)
    assert done.returncode == 0, done.stderr
    assert (folder / "maps" / "ir104.png").read_bytes()[:4] == PNG
    assert run("draw", "result.nc", "--channels", "ir104", "--folder", "maps", cwd=folder).returncode == 3
    for extra, name in (("--sheet", "sheet.png"), ("--difference=ir104,ir123", "ir104-ir123.png")):
        done = run("draw", "result.nc", extra, "--folder", "maps", "--projection", "latlon", cwd=folder)
        assert done.returncode == 0, done.stderr
        assert (folder / "maps" / name).read_bytes()[:4] == PNG


@pytest.mark.parametrize(
    "arguments, words",
    [
        (["draw", "result.nc", "--channels", "ir999"], "wv063, ir104"),
        (["draw", "model.nc"], "not a result"),
        (["draw", "none.nc"], "cannot be read"),
        (["draw", "result.nc", "--difference", "ir104"], "two channels"),
        (["simulate", "none.grib2", "-o", "a.nc"], "none.grib2"),
        (["simulate", "model.nc", "-o", "a.nc", "--channels", "zz"], "ir104"),
        (["simulate", "model.nc", "-o", "a.nc", "--imager", "zz"], "tarn"),
        (["simulate", "model.nc", "-o", "a.txt"], ".nc"),
        (["simulate", "model.nc", "-o", "no/such/folder/a.nc"], "does not exist"),
        (["simulate", "model.nc", "-o", "a.nc", "--zenith", "95"], "0 to 85"),
        (["simulate", "model.nc", "-o", "a.nc", "--geostationary", "180", "--channels", "ir104"], "sees no column"),
        (["channel", "model.nc"], "response"),
        (["draw", "result.nc", "--projection", "orthografic"], "orthographic"),
        (["draw", "result.nc", "--time", "2031-01-01"], "nothing is valid at 2031-01-01"),
        (["draw", "result.nc", "--member", "1"], "has no members"),
        (["animate", "result.nc", "--channel", "ir104", "-o", "a.gif"], "several times"),
        (["geotiff", "result.nc", "-o", "no/such/a.tif"], "does not exist or is not writable"),
        (["simulate", "model.nc", "-o", "a.nc", "--full-disk", "180", "--resolution", "200"], "sees no part"),
        (["simulate", "model.nc", "-o", "a.nc", "--sector", "0"], "--resolution 3 (km)"),
        (["simulate", "model.nc", "-o", "a.nc", "--sector", "0", "--resolution", "99", "--bounds", "-10,20"], "four"),
        (
            ["simulate", "model.nc", "-o", "a.nc", "--sector", "0", "--resolution", "99", "--bounds", "150,170,0,9"],
            "outside the disk",
        ),
        (["simulate", "model.nc", "-o", "a.nc", "--zenith", "9", "--footprint", "2"], "--footprint: only for"),
        (["simulate", "model.nc", "-o", "a.nc", "--like", "model.nc"], "grid_mapping_name"),
        (["simulate", "model.nc", "-o", "a.nc", "--like", "none.nc"], "cannot be read as an image"),
        (["simulate", "model.nc", "-o", "a.nc", "--sector", "0", "--resolution", "99", "--noise", "much"], "--noise"),
        (["simulate", "model.nc", "-o", "a.nc", "--times", "2031-01-01"], "nothing is valid at 2031-01-01"),
        (["simulate", "model.nc", "model.nc", "-o", "a.nc"], "is valid in model.nc and in model.nc"),
        (["simulate", "model.nc", "-o", "a.nc", "--members", "number"], "DIMENSION=A,B"),
        (["scene", "result.txt"], "result.txt"),
    ],
)
def test_bad_input_is_explained(simulated, folder, arguments, words):
    done = run(*arguments, cwd=folder)
    assert done.returncode == 1, done.stdout + done.stderr
    assert words in done.stderr and "Traceback" not in done.stderr
    assert not (folder / "a.nc").exists()


def test_corrupt_files(folder):
    (folder / "broken.grib2").write_bytes(b"GRIB" + b"\x00" * 100)
    (folder / "broken.nc").write_bytes((folder / "model.nc").read_bytes()[:700])
    for name in ("broken.grib2", "broken.nc"):
        done = run("simulate", name, "-o", "b.nc", cwd=folder)
        assert done.returncode == 1 and name in done.stderr and "Traceback" not in done.stderr
    assert not (folder / "b.nc").exists()


def test_channel_and_response_descriptions(folder):
    done = run("channel", "tarn", "--channels", "wv063", cwd=folder)
    assert done.returncode == 0 and "nodes" in done.stdout and "band correction" in done.stdout
    wavelength = np.linspace(10.9, 11.3, 21)
    (folder / "mail.txt").write_text("\n".join(f"{a} {b}" for a, b in zip(wavelength, np.hanning(21) + 1e-3)))
    done = run("channel", "mail.txt", cwd=folder)
    assert done.returncode == 0 and "11.099 um" in done.stdout and "told from the magnitude" in done.stdout
    done = run("simulate", "model.nc", "-o", "mail.nc", "--imager", "mail.txt", cwd=folder)
    assert done.returncode == 0 and (folder / "mail.nc").exists(), done.stderr


def test_scene_description(folder):
    done = run("scene", "model.nc", cwd=folder)
    assert done.returncode == 0 and "air_temperature" in done.stdout


def test_interrupt_leaves_nothing_behind(tmp_path):
    """The demo scene, interrupted while it runs."""
    process = subprocess.Popen(
        [sys.executable, "-m", "chansim", "simulate", str(ROOT / "chansim/data/demo_scene.nc"), "-o", "demo.nc"],
        cwd=tmp_path,
        stderr=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONUNBUFFERED": "1"},
    )
    seen = ""
    start = time.time()
    while "columns" not in seen and time.time() - start < 300:
        seen += process.stderr.read(1)
    process.send_signal(signal.SIGINT)
    _, error = process.communicate(timeout=300)
    assert process.returncode == 130, error
    assert "interrupted" in error and list(tmp_path.iterdir()) == []


@pytest.fixture(scope="module")
def series(folder):
    """A series of three times on a fixed grid, made from one file."""
    hours = [np.datetime64(f"2020-07-15T{h}:00", "ns") for h in (12, 15, 18)]
    steps = [pressure_level_file().drop_vars("time") for _ in hours]
    steps = [step.assign(T=step["T"] + np.float32(n)) for n, step in enumerate(steps)]
    whole = xr.concat(steps, xr.DataArray(hours, dims="time", name="time"), data_vars="all")
    for name in ("T", "Q", "PS"):
        whole[name].attrs = pressure_level_file()[name].attrs
    whole.to_netcdf(folder / "run.nc")
    done = run(
        "simulate", "run.nc", "--times", "all", "-o", "loop.zarr", "--channels", "ir104", "--sector", 0,
        "--resolution", 150, "--sweep", "x", "--footprint", 2, cwd=folder,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    return done


def test_series_on_a_fixed_grid(series, folder):
    assert "3 of 3: 2020-07-15T18:00:00" in series.stderr and "times: 3, 2020-07-15T12" in series.stdout
    result = xr.open_dataset(folder / "loop.zarr", engine="zarr", consolidated=False)
    assert result.grid_mapping.attrs["sweep_angle_axis"] == "x" and result.sizes["time"] == 3
    assert result.attrs["footprint"] == "2 x 2 sub-pixels, box"
    assert run("simulate", "run.nc", "--times", "all", "-o", "loop.zarr", cwd=folder).returncode == 3
    again = ["simulate", "run.nc", "--times", "all", "-o", "loop.zarr", "--continue"]
    done = run(*again, "--channels", "ir104", "--sector", 0, "--resolution", 150, cwd=folder)
    assert done.returncode == 0 and "1 of 3" not in done.stderr, done.stderr


def test_pictures_of_a_series(series, folder):
    done = run("draw", "loop.zarr", "--folder", "maps2", cwd=folder)
    assert done.returncode == 1 and "choose one with --time" in done.stderr
    done = run(
        "draw", "loop.zarr", "--time", "2020-07-15T15", "--folder", "maps2", "--projection", "mercator", cwd=folder
    )
    assert done.returncode == 0 and (folder / "maps2" / "ir104.png").exists(), done.stderr
    done = run("animate", "loop.zarr", "--channel", "ir104", "-o", "loop.gif", cwd=folder)
    assert done.returncode == 0 and (folder / "loop.gif").read_bytes()[:6] == b"GIF89a", done.stderr
    assert run("animate", "loop.zarr", "--channel", "ir104", "-o", "loop.gif", cwd=folder).returncode == 3


def test_pixels_of_an_image_and_geotiff(series, folder):
    pytest.importorskip("rasterio", reason="needs rasterio, the extra 'geotiff'")
    done = run(
        "simulate", "model.nc", "-o", "like.nc", "--like", "loop.zarr", "--channels", "ir104,wv063",
        "--vertical-columns", "--noise", "ir104=0.5,wv063=0.1", "--bits", 10, cwd=folder,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    with xr.open_dataset(folder / "like.nc", engine="netcdf4") as result:
        assert "ir104 0.5 K" in result.attrs["noise"] and "vertical columns" in result.attrs["view"]
        loop = xr.open_dataset(folder / "loop.zarr", engine="zarr", consolidated=False)
        np.testing.assert_array_equal(result.x, loop.x)
    done = run("geotiff", "like.nc", "-o", "like.tif", "--channels", "ir104", cwd=folder)
    assert done.returncode == 0 and "not an observation" in done.stdout, done.stderr
    assert (folder / "like.tif").exists()


def test_interrupted_series_continues(folder):
    """As a user would: control-C, then the same call with --continue."""
    call = [sys.executable, "-m", "chansim", "simulate", "run.nc", "--times", "all", "-o", "broken.zarr"]
    process = subprocess.Popen(call, cwd=folder, stderr=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
    seen, start = "", time.time()
    while "2 of 3" not in seen and time.time() - start < 300:
        seen += process.stderr.read(1)
    process.send_signal(signal.SIGINT)
    _, error = process.communicate(timeout=300)
    assert process.returncode == 130, error
    assert "interrupted; 1 of 3 pictures of broken.zarr are done and kept" in error and "--continue" in error
    done = run("simulate", "run.nc", "--times", "all", "-o", "broken.zarr", "--continue", cwd=folder)
    assert done.returncode == 0 and "1 of 3" not in done.stderr and "3 of 3" in done.stderr, done.stderr
    result = xr.open_dataset(folder / "broken.zarr", engine="zarr", consolidated=False)
    assert np.isfinite(result.brightness_temperature).all()


def test_demo(tmp_path):
    done = run("demo", "--channels", "wv063,ir104", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    names = sorted(p.name for p in (tmp_path / "chansim-demo").iterdir())
    assert names == ["demo.nc", "ir104.png", "sheet.png", "wv063.png"]
    with xr.open_dataset(tmp_path / "chansim-demo" / "demo.nc", engine="netcdf4") as result:
        bt = result.brightness_temperature
        assert np.isfinite(bt).all()
        assert float(bt.sel(channel="ir104").min()) < 200.0 < 285.0 < float(bt.sel(channel="ir104").max())
        # common practice: over the highest tops the water-vapour channel is not colder than the window
        cold = bt.sel(channel="ir104") < 200.0
        assert float((bt.sel(channel="wv063") - bt.sel(channel="ir104")).where(cold).max()) > 0.0
