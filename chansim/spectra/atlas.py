"""Building the absorption atlas from line lists.

    python -m chansim.spectra.atlas LINE_FOLDER [--out FILE] [--work FOLDER] [--processes N]

The range 650-2850 cm-1 is cut into intervals of 5 cm-1. In each, line-by-line
cross-sections are computed on a fine grid for a table of pressures and
temperatures; training radiances follow from them; then a few wavenumbers are
kept, each with two weights, so that the integrals of radiance against the two
straight lines that fall from one end of the interval to the other come out
right. Any response function that is linear between multiples of 5 cm-1 is
therefore represented by sums over the kept wavenumbers. Finished intervals
are kept in the work folder: a build that was interrupted goes on where it
stopped.
"""

import argparse
import concurrent.futures
import hashlib
import multiprocessing
import os
import sys
import tempfile
from pathlib import Path

import numpy as np
import xarray as xr

from chansim._version import __version__
from chansim.errors import ChansimError, DataError
from chansim.planck import brightness_temperature, planck_temperature_slope
from chansim.spectra import absorption, continuum
from chansim.spectra.lines import read_line_folder
from chansim.spectra.selection import choose_nodes
from chansim.spectra.training import GASES, training_set
from chansim.spectra.training_radiance import training_radiance

LOW, HIGH, INTERVAL = 650.0, 2850.0, 5.0  # cm-1
POINTS_PER_CM = 500
PRESSURES = np.geomspace(5.0, 110000.0, 31)  # Pa
TEMPERATURES = np.linspace(170.0, 330.0, 8)  # K
WATER_FRACTION = 0.04  # mole fraction of the humid table
HUMID_ABOVE = 10000.0  # Pa, self broadening matters at higher pressures only
TRAINING_COLUMNS, TRAINING_SEED = 40, 20260101
TOLERANCE = 0.012  # K, root-mean-square of one half-interval integral
MOST_NODES = 22
SMALLEST = 1e-45  # cm2 molecule-1, stands for zero in a logarithm
CONTINUUM_FILE = "absco-ref_wv-mt-ckd.nc"
COLLISION_FILE = "collision_induced_n2_o2.csv"
# molecules cm-2 of the largest column that occurs, to tell whether a gas matters
_LARGEST_COLUMN = {"h2o": 3e23, "co2": 2.2e22, "o3": 1.6e19, "n2o": 1e19, "ch4": 7e19, "co": 7e18}


def read_sources(folder):
    """Line lists, continuum and collision-induced tables of a folder."""
    folder = Path(folder)
    return {
        "lines": read_line_folder(folder),
        "continuum": continuum.read_water_continuum(folder / CONTINUUM_FILE),
        "collision": continuum.read_collision_induced(folder / COLLISION_FILE),
    }


def fine_tables(lines, start, wings):
    """Line cross-sections of one interval: (log tables (gases, P, T, n), relative self effect (P, T, n))."""
    n = int(INTERVAL * POINTS_PER_CM)
    tables = np.empty((len(GASES), PRESSURES.size, TEMPERATURES.size, n), dtype=np.float32)
    water_self = np.zeros((PRESSURES.size, TEMPERATURES.size, n), dtype=np.float32)
    stop = start + INTERVAL
    for g, gas in enumerate(GASES):
        acting = absorption.lines_acting_on(lines[gas], start, stop, wings)
        if not len(acting):
            tables[g] = np.log(SMALLEST)
            continue
        for t, temperature in enumerate(TEMPERATURES):
            prepared = absorption.PreparedLines(acting, temperature)
            for p, pressure in enumerate(PRESSURES):
                k = absorption.cross_section(prepared, start, stop, POINTS_PER_CM, pressure, 0.0, wings)
                tables[g, p, t] = np.log(np.maximum(k, SMALLEST))
                if gas == "h2o" and pressure >= HUMID_ABOVE:
                    humid = absorption.cross_section(
                        prepared, start, stop, POINTS_PER_CM, pressure, WATER_FRACTION, wings
                    )
                    water_self[p, t] = (humid / np.maximum(k, SMALLEST) - 1.0) / WATER_FRACTION
    return tables, water_self


def smooth_absorption(sources, wavenumber):
    """Functions (pressure, temperature) -> foreign, own, collision-induced cross-sections at wavenumbers."""
    water = sources["continuum"].at(wavenumber)
    pairs = sources["collision"].at(wavenumber)
    return (
        lambda p, t: continuum.water_continuum_parts(water, p, t)[0],
        lambda p, t: continuum.water_continuum_parts(water, p, t)[1],
        lambda p, t: continuum.collision_induced_cross_section(pairs, p, t),
    )


def build_interval(sources, start, wings, training):
    """One interval of the atlas, as a dict of arrays (see `assemble`)."""
    wavenumber = absorption.grid(start, start + INTERVAL, POINTS_PER_CM)
    tables, water_self = fine_tables(sources["lines"], start, wings)
    radiance = training_radiance(
        training, wavenumber, TEMPERATURES, tables, water_self, *smooth_absorption(sources, wavenumber)
    )
    position = (wavenumber - start) / INTERVAL
    ramps = np.stack([1.0 - position, position], axis=1) * (2.0 / wavenumber.size)
    middle = start + 0.5 * INTERVAL
    scene = brightness_temperature(middle, radiance.mean(axis=1))
    scale = 1.0 / planck_temperature_slope(middle, scene)[:, None]
    chosen, weights, error = choose_nodes(radiance * scale, (radiance @ ramps) * scale, TOLERANCE, MOST_NODES)
    order = np.argsort(chosen)
    chosen, weights = chosen[order], weights[order]
    kept = wavenumber[chosen]
    water, pairs = sources["continuum"].at(kept), sources["collision"].at(kept)
    return {
        "start": start,
        "wavenumber": kept,
        "weights": weights * 0.5 * INTERVAL,
        "error": error,
        "tables": np.moveaxis(tables[..., chosen], -1, 1),
        "water_self": np.moveaxis(water_self[..., chosen], -1, 0),
        "self_coefficient": water.self_coefficient,
        "self_exponent": water.self_exponent,
        "foreign_coefficient": water.foreign_coefficient,
        "nitrogen_warm": pairs.nitrogen_warm,
        "nitrogen_cold": pairs.nitrogen_cold,
        "oxygen": pairs.oxygen,
        "oxygen_slope": pairs.oxygen_slope,
    }


_worker_state = {}


def _start_worker(folder, wings):
    _worker_state["sources"] = read_sources(folder)
    _worker_state["wings"] = wings
    _worker_state["training"] = training_set(TRAINING_COLUMNS, PRESSURES, TRAINING_SEED)


def _work(start, path):
    part = build_interval(_worker_state["sources"], start, _worker_state["wings"], _worker_state["training"])
    _write_atomically(path, lambda temporary: np.savez(temporary, **part))
    return part["wavenumber"].size


def _write_atomically(path, write):
    path = Path(path)
    handle, temporary = tempfile.mkstemp(dir=path.parent, suffix=path.suffix)
    os.close(handle)
    try:
        write(temporary)
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise


def fingerprint(folder, wings):
    """Digest of all that a build depends on: input files and settings."""
    digest = hashlib.sha256(
        repr(
            (
                LOW,
                HIGH,
                INTERVAL,
                POINTS_PER_CM,
                PRESSURES.tolist(),
                TEMPERATURES.tolist(),
                WATER_FRACTION,
                HUMID_ABOVE,
                TRAINING_COLUMNS,
                TRAINING_SEED,
                TOLERANCE,
                MOST_NODES,
                wings,
            )
        ).encode()
    )
    for name in [f"{gas}.par" for gas in GASES] + [CONTINUUM_FILE, COLLISION_FILE]:
        try:
            digest.update((Path(folder) / name).read_bytes())
        except OSError as error:
            raise DataError(
                f"{folder}: cannot read {name} ({error.strerror}); the folder must hold <gas>.par for "
                f"{', '.join(GASES)}, {CONTINUUM_FILE} and {COLLISION_FILE}"
            ) from None
    return digest.hexdigest()


def build(folder, out, work, processes=2, wings=absorption.DEFAULT_WINGS, starts=None):
    """Build the atlas; see the module text.

    Parameters
    ----------
    folder : with <gas>.par files, the continuum and the collision-induced table
    out : netCDF file to write
    work : folder for finished intervals
    processes : worker processes
    wings : form of the CO2 far wings near 4.3 um
    starts : interval starts [cm-1]; None = all

    Raises
    ------
    DataError : input missing or not readable
    """
    from tqdm import tqdm

    digest = fingerprint(folder, wings)
    work = Path(work) / digest[:16]
    work.mkdir(parents=True, exist_ok=True)
    if starts is None:
        starts = np.arange(LOW, HIGH, INTERVAL)
    paths = {start: work / f"{start:07.1f}.npz" for start in starts}
    todo = [start for start, path in paths.items() if not path.exists()]
    # "spawn": numba and netCDF are not safe to fork
    context = multiprocessing.get_context("spawn")
    progress = tqdm(total=len(paths), initial=len(paths) - len(todo), desc="atlas", unit="interval", smoothing=0.05)
    with (
        progress,
        concurrent.futures.ProcessPoolExecutor(processes, context, _start_worker, (str(folder), wings)) as pool,
    ):
        try:
            pending = [pool.submit(_work, start, str(paths[start])) for start in todo]
            for done in concurrent.futures.as_completed(pending):
                done.result()
                progress.update()
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            raise
    assemble([paths[start] for start in starts], out, digest, wings)
    return Path(out)


def _quantise(values):
    """(active, P, T) -> 16-bit integers with a scale and an offset for each first index."""
    low, high = values.min(axis=(1, 2)), values.max(axis=(1, 2))
    scale = np.maximum(high - low, 1e-6) / 65000.0
    packed = np.round((values - low[:, None, None]) / scale[:, None, None] - 32500.0).astype(np.int16)
    return packed, scale, low + 32500.0 * scale


def assemble(paths, out, digest, wings):
    """Join finished intervals to one netCDF file (written atomically)."""
    parts = [dict(np.load(path)) for path in paths]
    data = {}
    for name in (
        "wavenumber",
        "self_coefficient",
        "self_exponent",
        "foreign_coefficient",
        "nitrogen_warm",
        "nitrogen_cold",
        "oxygen",
        "oxygen_slope",
    ):
        data[name] = ("node", np.concatenate([part[name] for part in parts]))
    data["weights"] = (("node", "ramp"), np.concatenate([part["weights"] for part in parts]))
    data["interval"] = (
        "node",
        np.concatenate([np.full(part["wavenumber"].size, i, dtype=np.int32) for i, part in enumerate(parts)]),
    )
    data["interval_start"] = ("intervals", np.array([float(part["start"]) for part in parts]))
    data["interval_error"] = (("intervals", "ramp"), np.stack([part["error"] for part in parts]))
    data["pressure"] = ("pressure", PRESSURES)
    data["temperature"] = ("temperature", TEMPERATURES)
    for g, gas in enumerate(GASES):
        tables = np.concatenate([part["tables"][g] for part in parts])
        depth = np.exp(tables.max(axis=(1, 2)).astype(float)) * _LARGEST_COLUMN[gas]
        active = np.flatnonzero(depth > 1e-5)
        floor = tables[active].max(axis=(1, 2), keepdims=True) - 25.0  # keeps the steps of the integers small
        packed, scale, offset = _quantise(np.maximum(tables[active], floor))
        data[f"{gas}_nodes"] = (f"{gas}_active", active.astype(np.int32))
        data[f"{gas}_log"] = ((f"{gas}_active", "pressure", "temperature"), packed)
        data[f"{gas}_log_scale"] = (f"{gas}_active", scale.astype(float))
        data[f"{gas}_log_offset"] = (f"{gas}_active", offset.astype(float))
        if gas == "h2o":
            humid = np.concatenate([part["water_self"] for part in parts])[active]
            packed, scale, offset = _quantise(humid)
            data["h2o_self"] = (("h2o_active", "pressure", "temperature"), packed)
            data["h2o_self_scale"] = ("h2o_active", scale.astype(float))
            data["h2o_self_offset"] = ("h2o_active", offset.astype(float))
    atlas = xr.Dataset(
        data,
        attrs={
            "title": "Absorption atlas of chansim",
            "software": f"chansim {__version__}",
            "input_digest": digest,
            "co2_wings": wings,
            "interval_width": INTERVAL,
            "water_fraction": WATER_FRACTION,
            "reference": "line-by-line, 25 cm-1 cut-off; water-vapour continuum of Mlawer et al. 2012; see docs/notices.md",
        },
    )
    encoding = {name: {"zlib": True, "complevel": 7, "shuffle": True} for name in atlas.data_vars}
    Path(out).parent.mkdir(parents=True, exist_ok=True)
    _write_atomically(out, lambda temporary: atlas.to_netcdf(temporary, encoding=encoding, engine="netcdf4"))


def main(arguments=None):
    """Command line of the builder."""
    parser = argparse.ArgumentParser(
        prog="python -m chansim.spectra.atlas",
        description=__doc__,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("folder", help="folder with <gas>.par line lists, the continuum and collision-induced tables")
    parser.add_argument("--out", default=str(Path(__file__).parents[1] / "data" / "atlas.nc"))
    parser.add_argument(
        "--work",
        default=str(Path(tempfile.gettempdir()) / "chansim-atlas"),
        help="finished intervals are kept here; the build resumes from them (default: %(default)s)",
    )
    parser.add_argument("--processes", type=int, default=os.cpu_count())
    parser.add_argument("--co2-wings", default=absorption.DEFAULT_WINGS, choices=list(absorption.WING_FORMS))
    options = parser.parse_args(arguments)
    try:
        print(f"wrote {build(options.folder, options.out, options.work, options.processes, options.co2_wings)}")
    except KeyboardInterrupt:
        print("interrupted; the finished intervals are kept, run the same command to go on", file=sys.stderr)
        return 130
    except ChansimError as error:
        print(f"error: {error}", file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
