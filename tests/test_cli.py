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
    for command in ([], ["demo"], ["simulate"], ["draw"], ["channel"], ["scene"]):
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
        assert result.attrs["view"] == "zenith angle 20 degrees everywhere"


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
