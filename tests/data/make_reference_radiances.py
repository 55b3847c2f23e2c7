"""Makes tests/data/reference_radiances.nc: line-by-line channel radiances of published atmospheres.

    python tests/data/make_reference_radiances.py LINE_FOLDER

Atmospheres: the six of AFGL 1986 and the five of MIPAS 2007 that the `joseki`
package ships, none of which is used to train anything. Every layer's
cross-sections are computed line by line at its own pressure and temperature;
no table, no node. Needs the extra `build`; about half an hour on 2 cores.
Finished atmospheres are kept in the temporary folder, so that an interrupted
run goes on.
"""

import argparse
import concurrent.futures
import multiprocessing
import tempfile
from pathlib import Path

import numpy as np
import xarray as xr

import chansim  # noqa: F401
from chansim.channels.response import read_response
from chansim.planck import planck
from chansim.spectra import absorption, continuum
from chansim.spectra.atlas import read_sources
from chansim.transfer.columns import hydrostatic_heights, layer_amounts, layer_secants

NAMES = (
    "afgl_1986-tropical",
    "afgl_1986-midlatitude_summer",
    "afgl_1986-midlatitude_winter",
    "afgl_1986-subarctic_summer",
    "afgl_1986-subarctic_winter",
    "afgl_1986-us_standard",
    "mipas_2007-midlatitude_day",
    "mipas_2007-midlatitude_night",
    "mipas_2007-polar_summer",
    "mipas_2007-polar_winter",
    "mipas_2007-tropical",
)
GASES = ("h2o", "co2", "o3", "n2o", "ch4", "co")
ZENITH = np.array([0.0, 40.0, 60.0, 70.0])
LEVELS = 68  # 45 above 100 hPa, finer below
TOP = 6.0  # Pa
RESPONSES = Path(__file__).parents[2] / "srf" / "tarn"
CHANNELS = ("sw038", "wv063", "wv069", "wv073", "ir085", "oz097", "ir104", "ir112", "ir123", "co133")
SKIN_EXCESS, EMISSIVITY = 1.0, 0.98


def column(name):
    """Levels of one atmosphere: pressure [Pa], temperature [K], mole fractions (gases, levels)."""
    import joseki

    profile = joseki.make(name)
    p = profile.p.values
    order = np.argsort(p)
    p, t = p[order], profile.t.values[order]
    level_p = np.concatenate([np.geomspace(TOP, 10000.0, 46)[:-1], np.geomspace(10000.0, p[-1], LEVELS - 45)])
    x = np.stack(
        [
            np.exp(
                np.interp(
                    np.log(level_p), np.log(p), np.log(np.maximum(profile[f"x_{gas.upper()}"].values[order], 1e-14))
                )
            )
            for gas in GASES
        ]
    )
    return level_p, np.interp(np.log(level_p), np.log(p), t), x


def layers(level_p, level_t, level_x):
    """Amounts, effective pressures and temperatures, and slant factors (angles, layers)."""
    n = level_p.size
    z = np.empty(n)
    hydrostatic_heights(n, level_p, level_t, level_x, 0.0, z)
    amount = np.zeros((3 + len(GASES) - 1, n - 1))
    p, t = np.zeros((1 + len(GASES), n - 1)), np.zeros((1 + len(GASES), n - 1))
    layer_amounts(n, level_p, level_t, level_x, z, amount, p, t)
    secants = np.zeros((ZENITH.size, n - 1))
    for i, zenith in enumerate(ZENITH):
        layer_secants(n, z, 0.0, np.cos(np.radians(zenith)), secants[i])
    return amount, p, t, secants


def source_bend(density, j, above, below, nu, t_above, t_below):
    """Bend of the source of layer j: temperature is linear in ln p, not in optical depth (see docs/solvers.md)."""
    here = density[1]
    slope = 2.0 * (density[2] - density[0]) / np.maximum(density[0] + 2.0 * here + density[2], 1e-300)
    if j in (0, LEVELS - 2):
        slope = 2.0 * slope  # one-sided: the neighbour is one layer away, not two
    slope = np.clip(slope, -1.8, 1.8)
    convex = 0.5 * (above + below) - planck(nu, 0.5 * (t_above + t_below))
    half = 0.5 * slope
    offset = 0.5 * half / (1.0 + np.sqrt(1.0 - half**2))
    return offset / (0.25 - offset**2) * (below - above) - 4.0 * convex


def layer_optical_depth(lines, water, pairs, j, start, stop, amount, p, t, points_per_cm, wings):
    """Vertical optical depth of layer j on the fine grid, line by line."""
    tau = amount[0, j] * continuum.collision_induced_cross_section(pairs, p[0, j], t[0, j])
    for g, gas in enumerate(GASES):
        if not len(lines[gas]):
            continue
        k = 1 + g  # row 0 is weighted by air, row 1 by water, then the other gases
        x = amount[2, j] / amount[1, j] if gas == "h2o" else 0.0
        prepared = absorption.PreparedLines(lines[gas], t[k, j])
        sigma = absorption.cross_section(prepared, start, stop, points_per_cm, p[k, j], x, wings)
        if gas == "h2o":
            foreign, own = continuum.water_continuum_parts(water, p[1, j], t[1, j])
            sigma = sigma + foreign * (1.0 - x) + own * x
        tau = tau + sigma * (amount[1, j] if gas == "h2o" else amount[2 + g, j])
    return tau


def monochromatic(sources, start, stop, level_t, amount, p, t, secants, points_per_cm, wings):
    """Radiances (angles, wavenumbers) on the fine grid of one piece of spectrum."""
    nu = absorption.grid(start, stop, points_per_cm)
    lines = {gas: absorption.lines_acting_on(sources["lines"][gas], start, stop, wings) for gas in GASES}
    water, pairs = sources["continuum"].at(nu), sources["collision"].at(nu)
    tau = np.stack(
        [
            layer_optical_depth(lines, water, pairs, j, start, stop, amount, p, t, points_per_cm, wings)
            for j in range(amount.shape[1])
        ]
    )
    up, down = np.zeros((2, ZENITH.size, nu.size))
    through = np.ones((ZENITH.size, nu.size))
    last = amount.shape[1] - 1
    for j in range(last + 1):
        above, below = planck(nu, level_t[j]), planck(nu, level_t[j + 1])
        bend = source_bend(tau[[max(j - 1, 0), j, min(j + 1, last)]], j, above, below, nu, level_t[j], level_t[j + 1])
        path = tau[j] * secants[:, j : j + 1]
        absorbed = -np.expm1(-path)
        safe = np.maximum(path, 1e-3)
        far = np.where(path < 1e-3, 0.5 - path / 12.0, 1.0 / safe + 1.0 / np.expm1(-safe) + 1.0)
        bent = bend * np.where(path < 1e-3, path / 6.0, (safe - 2.0 + (safe + 2.0) * np.exp(-safe)) / safe**2)
        up += through * (absorbed * (above + (below - above) * far) + bent)
        down = down * (1.0 - absorbed) + absorbed * (below + (above - below) * far) + bent
        through *= 1.0 - absorbed
    surface = planck(nu, level_t[-1] + SKIN_EXCESS)
    return nu, up + through * (EMISSIVITY * surface + (1.0 - EMISSIVITY) * down)


def channel_radiances(sources, name, channel, points_per_cm=240, wings=absorption.DEFAULT_WINGS):
    """Line-by-line channel radiance at each angle [mW m-2 sr-1 (cm-1)-1]."""
    response = read_response(RESPONSES / f"{channel}.txt")
    low, high = response.wavenumber[[0, -1]]
    level_p, level_t, level_x = column(name)
    parts = [
        monochromatic(sources, start, start + 2.5, level_t, *layers(level_p, level_t, level_x), points_per_cm, wings)
        for start in np.arange(np.floor(low / 2.5) * 2.5, high, 2.5)
    ]
    nu = np.concatenate([part[0] for part in parts])
    radiance = np.concatenate([part[1] for part in parts], axis=1)
    r = np.interp(nu, response.wavenumber, response.response, left=0.0, right=0.0)
    return radiance @ r / r.sum()


def _task(folder, name, channel, path):
    if not Path(path).exists():
        np.save(path, channel_radiances(read_sources(folder), name, channel))
    return name, channel


def main():
    """Command line."""
    from tqdm import tqdm

    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder")
    options = parser.parse_args()
    work = Path(tempfile.gettempdir()) / "chansim-reference-radiances"
    work.mkdir(exist_ok=True)
    tasks = [
        (options.folder, name, channel, str(work / f"{name}-{channel}.npy")) for channel in CHANNELS for name in NAMES
    ]
    with concurrent.futures.ProcessPoolExecutor(2, multiprocessing.get_context("spawn")) as pool:
        pending = [pool.submit(_task, *task) for task in tasks]
        for done in tqdm(concurrent.futures.as_completed(pending), total=len(pending)):
            done.result()
    radiance = np.array([[np.load(work / f"{name}-{channel}.npy") for channel in CHANNELS] for name in NAMES])
    columns = [column(name) for name in NAMES]
    xr.Dataset(
        {
            "pressure": (("atmosphere", "level"), np.stack([c[0] for c in columns]), {"units": "Pa"}),
            "temperature": (("atmosphere", "level"), np.stack([c[1] for c in columns]), {"units": "K"}),
            "mole_fraction": (("atmosphere", "gas", "level"), np.stack([c[2] for c in columns]), {"units": "1"}),
            "radiance": (("atmosphere", "channel", "zenith"), radiance, {"units": "mW m-2 sr-1 (cm-1)-1"}),
        },
        coords={"atmosphere": list(NAMES), "channel": list(CHANNELS), "gas": list(GASES), "zenith": ZENITH},
        attrs={
            "skin_excess": SKIN_EXCESS,
            "emissivity": EMISSIVITY,
            "recipe": "tests/data/make_reference_radiances.py",
            "source": "AFGL 1986 (Anderson et al., AFGL-TR-86-0110) and MIPAS 2007 (Remedios et al.) profiles through joseki",
        },
    ).to_netcdf(Path(__file__).parent / "reference_radiances.nc", engine="netcdf4")


if __name__ == "__main__":
    main()
