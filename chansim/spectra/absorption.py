"""Line-by-line absorption cross-sections on a uniform wavenumber grid.

Far from its centre a line is smooth, so its contribution is computed at a few
Chebyshev points of a block and interpolated: two nested block sizes, then the
grid itself close to the centre. `cross_section_direct` is the plain twin that
sums the profile at every point; both agree to 1e-5 (tests/test_spectra_absorption.py).
"""

import math

import numpy as np
from numba import njit

from chansim.constants import AVOGADRO, BOLTZMANN, LIGHT_SPEED, SECOND_RADIATION
from chansim.spectra.lines import MOLECULES, REFERENCE_TEMPERATURE, molar_mass, partition_sum_ratio
from chansim.spectra.lineshape import WING_FORMS, voigt, wing_factor

CUT_OFF = 25.0  # cm-1, what the continuum table assumes
WING_REACH = 300.0  # cm-1, of CO2 lines with a wing form other than "cut"
WING_BAND = (2000.0, 2600.0)  # cm-1, the CO2 lines near 4.3 um that get far wings
_WING_WEAKEST = 1e-24  # cm-1/(molecule cm-2): weaker CO2 lines add less than 0.1 % beyond the cut-off
DEFAULT_WINGS = "perrin-hartmann"
STANDARD_PRESSURE = 101325.0  # Pa, the atm of the line records

_BLOCK, _SUBBLOCKS, _FAR, _NEAR = 2.5, 10, 2.0, 0.2
_BLOCK_NODES, _SUBBLOCK_NODES = 10, 8


class PreparedLines:
    """A line list with all that depends on temperature alone, for one temperature.

    lines : LineList
    temperature : [K]
    """

    def __init__(self, lines, temperature):
        self.lines = lines
        self.temperature = float(temperature)
        ratio = np.empty(len(lines))
        mass = np.empty(len(lines))
        for number in np.unique(lines.isotopologue):
            chosen = lines.isotopologue == number
            ratio[chosen] = partition_sum_ratio(lines.molecule, number, temperature)
            mass[chosen] = molar_mass(lines.molecule, number)
        self.strength = line_strength(lines.intensity, lines.wavenumber, lines.lower_energy, ratio, temperature)
        self.doppler_width = doppler_half_width(lines.wavenumber, mass, temperature)


def line_strength(intensity, wavenumber, lower_energy, partition_ratio, temperature):
    """Line intensity at a temperature (Rothman et al. 1998, JQSRT 60, eq. A11) [cm-1/(molecule cm-2)]."""
    c2, t0 = SECOND_RADIATION, REFERENCE_TEMPERATURE
    boltzmann = np.exp(-c2 * lower_energy * (1.0 / temperature - 1.0 / t0))
    emission = np.expm1(-c2 * wavenumber / temperature) / np.expm1(-c2 * wavenumber / t0)
    return intensity * partition_ratio * boltzmann * emission


def doppler_half_width(wavenumber, mass, temperature):
    """Doppler half-width at half maximum; mass [g mol-1] -> [cm-1]."""
    return wavenumber * np.sqrt(2.0 * math.log(2.0) * BOLTZMANN * temperature * AVOGADRO / (mass * 1e-3)) / LIGHT_SPEED


def lorentz_half_width(lines, pressure, temperature, mole_fraction):
    """Pressure-broadened half-width at half maximum [cm-1]; pressure [Pa]."""
    width = (1.0 - mole_fraction) * lines.air_width + mole_fraction * lines.self_width
    return width * (pressure / STANDARD_PRESSURE) * (REFERENCE_TEMPERATURE / temperature) ** lines.width_exponent


def _chebyshev_points(n):
    return np.cos((2 * np.arange(n) + 1) * math.pi / (2 * n))


def _interpolation_matrix(nodes, points):
    """Barycentric interpolation from Chebyshev nodes to points, both in [-1, 1]."""
    n = nodes.size
    weights = (-1.0) ** np.arange(n) * np.sin((2 * np.arange(n) + 1) * math.pi / (2 * n))
    difference = points[:, None] - nodes[None, :]
    exact = np.abs(difference) < 1e-14
    difference[exact] = 1.0
    terms = weights / difference
    matrix = terms / terms.sum(axis=1, keepdims=True)
    matrix[exact.any(axis=1)] = 0.0
    matrix[exact] = 1.0
    return matrix


def _matrices(points_per_subblock):
    outer, inner = _chebyshev_points(_BLOCK_NODES), _chebyshev_points(_SUBBLOCK_NODES)
    centres = (np.arange(_SUBBLOCKS) + 0.5) / _SUBBLOCKS * 2.0 - 1.0
    to_inner = np.stack([_interpolation_matrix(outer, c + inner / _SUBBLOCKS) for c in centres])
    fine = (np.arange(points_per_subblock) + 0.5) / points_per_subblock * 2.0 - 1.0
    return outer, inner, to_inner, _interpolation_matrix(inner, fine)


@njit(cache=True)
def _line_value(distance, doppler, lorentz, pedestal, form, temperature):
    value = voigt(distance, doppler, lorentz)
    if form > 1:
        value *= wing_factor(form, abs(distance), temperature)
    return value - pedestal


@njit(cache=True)
def _sum_block(
    start,
    spacing,
    per_subblock,
    centre,
    strength,
    doppler,
    lorentz,
    pedestal,
    form,
    reach,
    temperature,
    outer,
    inner,
    to_inner,
    to_fine,
    listed,
    out,
):
    """Add all lines to one block of the grid (out: the block's points)."""
    half = 0.5 * _BLOCK
    middle = start + half
    coarse = np.zeros(outer.size)
    n_listed = 0
    for i in range(centre.size):
        away = abs(centre[i] - middle)
        if away - half > reach[i]:
            continue
        if away > half + _FAR and away + half <= reach[i]:
            factor = strength[i] / math.pi
            square = lorentz[i] * lorentz[i]
            for k in range(outer.size):
                d = middle + half * outer[k] - centre[i]
                shape = factor * lorentz[i] / (d * d + square)
                if form[i] > 1:
                    shape *= wing_factor(form[i], abs(d), temperature)
                coarse[k] += shape - strength[i] * pedestal[i]
        else:
            listed[n_listed] = i
            n_listed += 1
    sub = _BLOCK / _SUBBLOCKS
    half_sub = 0.5 * sub
    medium = np.empty(inner.size)
    for b in range(_SUBBLOCKS):
        middle_sub = start + (b + 0.5) * sub
        for k in range(inner.size):
            total = 0.0
            for m in range(outer.size):
                total += to_inner[b, k, m] * coarse[m]
            medium[k] = total
        first = b * per_subblock
        for n in range(n_listed):
            i = listed[n]
            away = abs(centre[i] - middle_sub)
            if away - half_sub > reach[i]:
                continue
            if away > half_sub + _NEAR and away + half_sub <= reach[i]:
                for k in range(inner.size):
                    d = middle_sub + half_sub * inner[k] - centre[i]
                    medium[k] += strength[i] * _line_value(d, doppler[i], lorentz[i], pedestal[i], form[i], temperature)
            else:
                for j in range(per_subblock):
                    d = start + (first + j + 0.5) * spacing - centre[i]
                    if abs(d) <= reach[i]:
                        out[first + j] += strength[i] * _line_value(
                            d, doppler[i], lorentz[i], pedestal[i], form[i], temperature
                        )
        for j in range(per_subblock):
            total = 0.0
            for k in range(inner.size):
                total += to_fine[j, k] * medium[k]
            out[first + j] += total


@njit(cache=True)
def _sum_direct(wavenumber, centre, strength, doppler, lorentz, pedestal, form, reach, temperature):
    out = np.zeros(wavenumber.size)
    for i in range(centre.size):
        for j in range(wavenumber.size):
            d = wavenumber[j] - centre[i]
            if abs(d) <= reach[i]:
                out[j] += strength[i] * _line_value(d, doppler[i], lorentz[i], pedestal[i], form[i], temperature)
    return out


def _profile_parameters(prepared, pressure, mole_fraction, wings):
    lines = prepared.lines
    centre = lines.wavenumber + lines.air_shift * (pressure / STANDARD_PRESSURE)
    lorentz = lorentz_half_width(lines, pressure, prepared.temperature, mole_fraction)
    pedestal = np.zeros(len(lines))
    if lines.molecule == MOLECULES["h2o"]:  # the continuum holds what is under the cut-off value
        pedestal = lorentz / math.pi / (CUT_OFF**2 + lorentz**2)
    form = np.zeros(len(lines), dtype=np.int64)
    reach = np.full(len(lines), CUT_OFF)
    if lines.molecule == MOLECULES["co2"] and WING_FORMS[wings]:
        winged = _has_wings(lines)
        form[winged] = WING_FORMS[wings]
        reach[winged] = WING_REACH
    return centre, prepared.strength, prepared.doppler_width, lorentz, pedestal, form, reach


def lines_acting_on(lines, start, stop, wings=DEFAULT_WINGS):
    """The lines that reach into [start, stop] [cm-1], with 1 cm-1 to spare for pressure shifts."""
    distance = np.maximum(np.maximum(start - lines.wavenumber, lines.wavenumber - stop), 0.0) - 1.0
    keep = distance <= CUT_OFF
    if lines.molecule == MOLECULES["co2"] and WING_FORMS[wings]:
        keep |= (distance <= WING_REACH) & _has_wings(lines)
    return lines.chosen(keep)


def _has_wings(lines):
    return (lines.wavenumber > WING_BAND[0]) & (lines.wavenumber < WING_BAND[1]) & (lines.intensity > _WING_WEAKEST)


def cross_section(prepared, start, stop, points_per_cm, pressure, mole_fraction=0.0, wings=DEFAULT_WINGS):
    """Absorption cross-section of one gas at the cell centres of a uniform grid.

    Parameters
    ----------
    prepared : PreparedLines, of `lines_acting_on` the grid
    start, stop : ends of the grid [cm-1]; a whole number of 2.5 cm-1 blocks
    points_per_cm : grid points per cm-1; a multiple of 4
    pressure : [Pa]
    mole_fraction : of the gas itself, for self broadening [1]
    wings : far-wing form of CO2 near 4.3 um, a key of `WING_FORMS`

    Returns
    -------
    array ((stop - start) * points_per_cm,) : [cm2 molecule-1]
    """
    blocks = int(round((stop - start) / _BLOCK))
    per_subblock = int(round(points_per_cm * _BLOCK / _SUBBLOCKS))
    per_block = per_subblock * _SUBBLOCKS
    if abs(blocks * _BLOCK - (stop - start)) > 1e-9 or per_block != points_per_cm * _BLOCK:
        raise ValueError("the grid must be whole 2.5 cm-1 blocks with a multiple of 4 points per cm-1")
    parameters = _profile_parameters(prepared, pressure, mole_fraction, wings)
    matrices = _matrices(per_subblock)
    listed = np.empty(len(prepared.lines), dtype=np.int64)
    out = np.zeros(blocks * per_block)
    for b in range(blocks):
        _sum_block(
            start + b * _BLOCK,
            1.0 / points_per_cm,
            per_subblock,
            *parameters,
            prepared.temperature,
            *matrices,
            listed,
            out[b * per_block : (b + 1) * per_block],
        )
    return out


def cross_section_direct(prepared, wavenumber, pressure, mole_fraction=0.0, wings=DEFAULT_WINGS):
    """The same at any wavenumbers [cm-1], line by line and point by point (slow, the reference)."""
    parameters = _profile_parameters(prepared, pressure, mole_fraction, wings)
    return _sum_direct(np.ascontiguousarray(wavenumber, dtype=float), *parameters, prepared.temperature)


def grid(start, stop, points_per_cm):
    """Wavenumbers of `cross_section`: the cell centres [cm-1]."""
    n = int(round((stop - start) * points_per_cm))
    return start + (np.arange(n) + 0.5) / points_per_cm
