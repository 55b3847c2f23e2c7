"""Measures speed and accuracy and rewrites docs/benchmarks.md: `python tests/benchmarks/run.py`."""

import os
import platform
import sys
import time
from pathlib import Path

ROOT = Path(__file__).parents[2]
sys.path.insert(0, str(ROOT / "tests"))

import numpy as np  # noqa: E402
import xarray as xr  # noqa: E402
from transfer_samples import solve_profile  # noqa: E402

import chansim  # noqa: E402

THREE = ["wv063", "ir104", "ir123"]


def accuracy(imager):
    """Rows of the line-by-line comparison."""
    from test_transfer_absorbing import brightness

    with xr.open_dataset(ROOT / "tests" / "data" / "reference_radiances.nc", engine="netcdf4") as data:
        reference = data.load()
    errors = np.zeros(reference["radiance"].shape)
    for a in range(reference.sizes["atmosphere"]):
        one = reference.isel(atmosphere=a)
        got = solve_profile(
            imager.channels,
            one.pressure.values,
            one.temperature.values,
            one.mole_fraction.values,
            reference.zenith.values,
            one.temperature.values[-1] + reference.attrs["skin_excess"],
            reference.attrs["emissivity"],
        )
        for c, channel in enumerate(imager.channels):
            truth = [brightness(channel, r) for r in one.radiance.values[c]]
            errors[a, c] = channel.brightness_temperature(got["radiance"][c]) - truth
    rows = [
        f"| {c.id} | {c.node_wavenumber.size} | {np.sqrt((errors[:, i] ** 2).mean()):.4f} | "
        f"{np.abs(errors[:, i]).max():.4f} |"
        for i, c in enumerate(imager.channels)
    ]
    counts = [c.node_wavenumber.size for c in imager.channels]
    return [
        *rows,
        f"| all | median {np.median(counts):g}, most {max(counts)} | {np.sqrt((errors**2).mean()):.4f} | "
        f"{np.abs(errors).max():.4f} |",
    ]


def clear_scene(columns, levels=60):
    """Clear columns on pressure levels that differ a little from each other."""
    p = np.geomspace(10.0, 101000.0, levels)
    t = np.maximum(210.0, 288.0 * (p / 101325.0) ** 0.19)
    q = np.maximum(3e-6, 0.01 * (p / 101325.0) ** 3.5)
    warmth = np.linspace(-10.0, 10.0, columns)
    dims = ("pressure", "y", "x")
    shape = (levels, columns // 100, 100)
    temperature = np.broadcast_to(t[:, None], (levels, columns)) + warmth
    humidity = np.broadcast_to(q[:, None], (levels, columns)) * np.exp(0.05 * warmth)
    lat, lon = np.meshgrid(np.linspace(0, 40, shape[1]), np.linspace(0, 40, 100), indexing="ij")
    data = xr.Dataset(
        {
            "temperature": (
                dims,
                temperature.reshape(shape).astype("f4"),
                {"units": "K", "standard_name": "air_temperature"},
            ),
            "humidity": (
                dims,
                humidity.reshape(shape).astype("f4"),
                {"units": "1", "standard_name": "specific_humidity"},
            ),
        },
        coords={
            "pressure": ("pressure", p, {"units": "Pa", "standard_name": "air_pressure", "positive": "down"}),
            "latitude": (("y", "x"), lat, {"units": "degrees_north", "standard_name": "latitude"}),
            "longitude": (("y", "x"), lon, {"units": "degrees_east", "standard_name": "longitude"}),
        },
        attrs={"Conventions": "CF-1.11"},
    )
    return chansim.open_scene(data, time="2026-03-21T00")


def cloudy_scene(columns):
    """`clear_scene` with 15 overcast levels in 30 % of the columns: water, ice and both."""
    scene = clear_scene(columns)
    pressure = scene["pressure"].values
    shape = scene["temperature"].shape
    liquid, ice = np.zeros(shape, dtype="f4"), np.zeros(shape, dtype="f4")
    chosen = (np.arange(columns).reshape(shape[1:]) % 10) < 3
    top = shape[0] - 18  # the levels of `clear_scene` lie 20 % apart: 85 to 900 hPa
    for k in range(top, top + 15):
        (liquid if pressure[k] > 55000.0 else ice)[k][chosen] = 4e-5
    return scene.assign(cloud_liquid=(scene["temperature"].dims, liquid), cloud_ice=(scene["temperature"].dims, ice))


def rate(scene, imager, **options):
    """Columns per second, median of five after one warm run."""
    chansim.simulate(scene, imager, **options)
    times = []
    for _ in range(5):
        start = time.perf_counter()
        chansim.simulate(scene, imager, **options)
        times.append(time.perf_counter() - start)
    return scene.column_valid.size / np.median(times)


def main():
    """Measure and write."""
    imager = chansim.load_imager("tarn")
    three = chansim.load_imager(imager, THREE)
    demo = chansim.open_scene(ROOT / "chansim" / "data" / "demo_scene.nc")
    clear = rate(clear_scene(20000), three)
    mixed = cloudy_scene(20000)
    scattering = rate(mixed, three)
    absorbing = rate(mixed, three, settings=chansim.Settings(solver="absorbing"))
    many = rate(cloudy_scene(1000), three, settings=chansim.Settings(streams=8))
    cloudy = rate(demo, three, view=("geostationary", 40.0))
    ten = rate(demo, imager, view=("geostationary", 40.0))
    lines = [
        "# Benchmarks",
        "",
        "Made by `python tests/benchmarks/run.py`; rewrite it with the same command.",
        "",
        f"Machine: {os.cpu_count()} cores, {platform.machine()}, Python {platform.python_version()}, chansim "
        f"{chansim.__version__}.",
        "",
        "## Speed",
        "",
        "| what | columns per second | asked |",
        "| --- | --- | --- |",
        f"| clear, 60 levels, 3 channels ({', '.join(THREE)}), warm | {clear:,.0f} | 10,000 |",
        f"| 60 levels, 3 channels, 30 % of columns with 15 cloudy levels, scattering | {scattering:,.0f} | 4,000 |",
        f"| the same, absorbing | {absorbing:,.0f} | - |",
        f"| the same, 8 streams a half-sphere (reference) | {many:,.0f} | - |",
        f"| demo scene ({demo.column_valid.size} columns, 50 levels, cloud, subcolumns), 3 channels | {cloudy:,.0f} | - |",
        f"| demo scene, 10 channels | {ten:,.0f} | - |",
        "",
        "## Accuracy of atlas and nodes against line by line",
        "",
        "Six AFGL 1986 and five MIPAS 2007 atmospheres, none used in training; zenith 0, 40, 60, 70 degrees; asked: rms "
        "0.03 K, worst 0.15 K, at most 20 nodes, median at most 10.",
        "",
        "| channel | nodes | rms [K] | worst [K] |",
        "| --- | --- | --- | --- |",
        *accuracy(imager),
        "",
    ]
    (ROOT / "docs" / "benchmarks.md").write_text("\n".join(lines))
    print("\n".join(lines))


if __name__ == "__main__":
    main()
