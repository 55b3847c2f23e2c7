"""Reading the absorption atlas: kept wavenumbers with their cross-section tables.

How it is built: chansim/spectra/atlas.py.
"""

import functools
import hashlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from chansim.errors import DataError
from chansim.spectra.continuum import CollisionInduced, WaterContinuum

GASES = ("h2o", "co2", "o3", "n2o", "ch4", "co")
DEFAULT_PATH = Path(__file__).parents[1] / "data" / "atlas.nc"
_NOTHING = np.log(1e-45)


@dataclass(frozen=True)
class Atlas:
    """The atlas in memory.

    wavenumber : (nodes,) [cm-1]
    weights : (nodes, 2) integration weights of the falling and the rising ramp of the interval [cm-1]
    interval : (nodes,) index of the interval
    interval_start : (intervals,) [cm-1]; interval_width [cm-1]
    pressure, temperature : of the tables [Pa], [K]
    tables : {gas: (active nodes, (active, P, T) log cross-sections [cm2 molecule-1])}
    water_self : (active, P, T) relative change of the water cross-section per unit mole fraction
    continuum, collision : smooth absorption at the nodes
    digest : sha256 of the file
    attributes : of the file
    """

    wavenumber: np.ndarray
    weights: np.ndarray
    interval: np.ndarray
    interval_start: np.ndarray
    interval_width: float
    pressure: np.ndarray
    temperature: np.ndarray
    tables: dict
    water_self: np.ndarray
    continuum: WaterContinuum
    collision: CollisionInduced
    digest: str
    attributes: dict

    def log_tables(self, nodes):
        """Log cross-sections of all gases at some nodes: (gases, nodes, P, T)."""
        shape = (len(GASES), nodes.size, self.pressure.size, self.temperature.size)
        out = np.full(shape, _NOTHING)
        for g, gas in enumerate(GASES):
            active, table = self.tables[gas]
            where, found = _positions(active, nodes)
            out[g, found] = table[where[found]]
        return out

    def self_tables(self, nodes):
        """Relative self effect of water at some nodes: (nodes, P, T)."""
        out = np.zeros((nodes.size, self.pressure.size, self.temperature.size))
        where, found = _positions(self.tables["h2o"][0], nodes)
        out[found] = self.water_self[where[found]]
        return out

    def smooth_at(self, nodes):
        """(WaterContinuum, CollisionInduced) at some nodes."""

        def take(part, names):
            return {name: getattr(part, name)[nodes] for name in names}

        water = take(self.continuum, ("wavenumber", "self_coefficient", "foreign_coefficient", "self_exponent"))
        pairs = take(self.collision, ("wavenumber", "nitrogen_warm", "nitrogen_cold", "oxygen", "oxygen_slope"))
        return WaterContinuum(**water), CollisionInduced(**pairs)


def _positions(active, nodes):
    where = np.clip(np.searchsorted(active, nodes), 0, max(active.size - 1, 0))
    return where, (active[where] == nodes) if active.size else np.zeros(nodes.size, dtype=bool)


def _unpack(data, name, prefix):
    scale, offset = (data[f"{prefix}_{part}"].values[:, None, None] for part in ("scale", "offset"))
    return data[name].values * scale.astype(np.float32) + offset.astype(np.float32)


@functools.lru_cache(maxsize=2)
def load_atlas(path=None):
    """Load the atlas (kept in memory after the first call).

    path : another file; None = the one of the package

    Raises
    ------
    DataError : missing or damaged
    """
    path = Path(path or DEFAULT_PATH)
    try:
        digest = hashlib.sha256(path.read_bytes()).hexdigest()
        with xr.open_dataset(path, engine="netcdf4", decode_cf=False) as data:
            data = data.load()
        return _from_dataset(data, digest)
    except FileNotFoundError:
        raise DataError(
            f"{path}: no absorption atlas there; build one with 'python -m chansim.spectra.atlas' "
            "(docs/spectra.md) or reinstall chansim"
        ) from None
    except (OSError, KeyError, ValueError, RuntimeError) as error:
        raise DataError(
            f"{path}: the absorption atlas is damaged ({error}); reinstall chansim or build it again"
        ) from None


def _from_dataset(data, digest):
    tables = {gas: (data[f"{gas}_nodes"].values, _unpack(data, f"{gas}_log", f"{gas}_log")) for gas in GASES}
    v = {name: data[name].values for name in data.variables}
    nu = v["wavenumber"]
    return Atlas(
        nu,
        v["weights"],
        v["interval"],
        v["interval_start"],
        float(data.attrs["interval_width"]),
        v["pressure"],
        v["temperature"],
        tables,
        _unpack(data, "h2o_self", "h2o_self"),
        WaterContinuum(nu, v["self_coefficient"], v["foreign_coefficient"], v["self_exponent"]),
        CollisionInduced(nu, v["nitrogen_warm"], v["nitrogen_cold"], v["oxygen"], v["oxygen_slope"]),
        digest,
        dict(data.attrs),
    )
