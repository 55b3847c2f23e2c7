"""Absorption that is not lines: water-vapour continuum, collision-induced N2 and O2."""

import csv
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr
from scipy.interpolate import CubicSpline

from chansim.constants import BOLTZMANN, SECOND_RADIATION
from chansim.errors import DataError

AMAGAT = 2.6867e19  # molecules cm-3 (CODATA: Loschmidt constant at 273.15 K, 101325 Pa)
NITROGEN, OXYGEN = 0.7808, 0.2095  # mole fractions of dry air
_OXYGEN_AS_PARTNER = 0.9  # efficiency of O2 against N2 in N2 absorption (head of the table)


@dataclass(frozen=True)
class WaterContinuum:
    """Coefficients of Mlawer et al. 2012 (doi:10.1098/rsta.2011.0295) at some wavenumbers.

    wavenumber : [cm-1]; self_coefficient, foreign_coefficient : at 296 K [cm2 molecule-1 (cm-1)-1]
    self_exponent : of (296/T) [1]; reference_pressure [Pa]; reference_temperature [K]
    """

    wavenumber: np.ndarray
    self_coefficient: np.ndarray
    foreign_coefficient: np.ndarray
    self_exponent: np.ndarray
    reference_pressure: float = 101300.0
    reference_temperature: float = 296.0

    def at(self, wavenumber):
        """The coefficients interpolated to other wavenumbers (cubic in their logarithm)."""

        def log_cubic(values):
            return np.exp(CubicSpline(self.wavenumber, np.log(values))(wavenumber))

        return WaterContinuum(
            np.asarray(wavenumber, dtype=float),
            log_cubic(self.self_coefficient),
            log_cubic(self.foreign_coefficient),
            CubicSpline(self.wavenumber, self.self_exponent)(wavenumber),
            self.reference_pressure,
            self.reference_temperature,
        )


def read_water_continuum(path):
    """Read the continuum table (netCDF). Raises DataError."""
    try:
        with xr.open_dataset(path, engine="netcdf4") as table:
            inside = (table.wavenumbers >= 400) & (table.wavenumbers <= 3200)
            table = table.isel(wavenumbers=inside.values).load()
    except (OSError, AttributeError) as error:
        raise DataError(f"{path}: not a water-vapour continuum table ({error})") from None
    return WaterContinuum(
        table.wavenumbers.values,
        table.self_absco_ref.values,
        table.for_absco_ref.values,
        table.self_texp.values,
        float(table.ref_press) * 100.0,
        float(table.ref_temp),
    )


def water_continuum_parts(continuum, pressure, temperature):
    """Continuum cross-section of water as (foreign part at x = 0, self part per unit x) [cm2 molecule-1].

    Total = foreign * (1 - x) + self * x with the water mole fraction x.
    pressure [Pa], temperature [K]: scalars or arrays that broadcast with the wavenumbers.
    """
    t0 = continuum.reference_temperature
    density = pressure / continuum.reference_pressure * t0 / temperature
    radiation = continuum.wavenumber * np.tanh(SECOND_RADIATION * continuum.wavenumber / (2.0 * temperature))
    own = continuum.self_coefficient * (t0 / temperature) ** continuum.self_exponent
    return continuum.foreign_coefficient * density * radiation, own * density * radiation


@dataclass(frozen=True)
class CollisionInduced:
    """Collision-induced absorption of N2 and O2 at some wavenumbers (zero outside the table).

    nitrogen_warm, nitrogen_cold : N2 binary coefficient at 272 K and 228 K [cm-1 amagat-2]
    oxygen, oxygen_slope : O2 in air at 296 K [cm-1 amagat-2] and its temperature slope [K]
    """

    wavenumber: np.ndarray
    nitrogen_warm: np.ndarray
    nitrogen_cold: np.ndarray
    oxygen: np.ndarray
    oxygen_slope: np.ndarray

    def at(self, wavenumber):
        """Linear interpolation (logarithmic in the coefficients) to other wavenumbers; zero outside the table."""

        def log_linear(values):
            known = values > 0
            low, high = self.wavenumber[known][[0, -1]]
            inside = (wavenumber >= low) & (wavenumber <= high)
            return np.where(inside, np.exp(np.interp(wavenumber, self.wavenumber[known], np.log(values[known]))), 0.0)

        wavenumber = np.asarray(wavenumber, dtype=float)
        known = self.oxygen > 0
        slope = np.interp(wavenumber, self.wavenumber[known], self.oxygen_slope[known])
        return CollisionInduced(
            wavenumber, log_linear(self.nitrogen_warm), log_linear(self.nitrogen_cold), log_linear(self.oxygen), slope
        )


def read_collision_induced(path):
    """Read the table gas,wavenumber,a,b (comment lines start with #). Raises DataError."""
    rows = {"N2": {}, "O2": {}}
    try:
        for row in csv.reader(line for line in Path(path).read_text().splitlines() if not line.startswith("#")):
            if row[0] in rows:
                rows[row[0]][float(row[1])] = (float(row[2]), float(row[3]))
    except (OSError, ValueError, IndexError) as error:
        raise DataError(f"{path}: not a table of collision-induced absorption ({error})") from None
    wavenumber = np.array(sorted(set(rows["N2"]) | set(rows["O2"])))
    columns = [
        np.array([rows[gas].get(nu, (0.0, 0.0))[i] for nu in wavenumber]) for gas in ("N2", "O2") for i in (0, 1)
    ]
    return CollisionInduced(wavenumber, *columns)


def collision_induced_cross_section(table, pressure, temperature):
    """Collision-induced absorption per molecule of dry air [cm2 molecule-1].

    pressure [Pa], temperature [K]: broadcast with the table's wavenumbers.
    """
    amagat = pressure / (BOLTZMANN * temperature) * 1e-6 / AMAGAT
    fraction = (np.clip(temperature, 200.0, 300.0) - 228.0) / (272.0 - 228.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        nitrogen = np.where(
            table.nitrogen_warm > 0, table.nitrogen_cold * (table.nitrogen_warm / table.nitrogen_cold) ** fraction, 0.0
        )
    oxygen = table.oxygen * np.exp(table.oxygen_slope * (1.0 / 296.0 - 1.0 / temperature))
    pairs = nitrogen * NITROGEN * (NITROGEN + _OXYGEN_AS_PARTNER * OXYGEN) + oxygen * OXYGEN
    # coefficient x amagat [cm-1] of air path, divided by molecules cm-3 of air
    return pairs * amagat / AMAGAT
