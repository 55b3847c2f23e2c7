"""Optical properties of all condensate, ready for the compiled solvers."""

import functools

import netCDF4
import numpy as np
import xarray as xr

from chansim.errors import DataError, OpticsError
from chansim.optics.particle_size import (
    ICE_DENSITY,
    ICE_RADIUS,
    LIQUID_RADIUS,
    PRECIPITATION,
    WATER_DENSITY,
    exponential_radius,
    hexagonal_radius_ratio,
    volume_radius,
)
from chansim.optics.refractive_index import verified_bytes

SPECIES = ("cloud_liquid", "cloud_ice", "rain", "snow", "graupel")
# ice as spheres of equal volume-to-area ratio (Grenfell & Warren 1999, J. Geophys. Res. 104, 31697): the route
# makes the optics a function of the effective radius alone. The habit decides what radius a crystal of known mass
# has, i.e. only where the model gives the number of crystals: radius of equal V/A over that of equal volume.
# Aspect ratios of columns and plates some 100 um wide: Auer & Veal 1970, J. Atmos. Sci. 27, 919, from memory
_RADIUS_RATIO = {
    "equal-volume-to-area": 1.0,  # compact crystals
    "hexagonal-column": hexagonal_radius_ratio(2.5),
    "hexagonal-plate": hexagonal_radius_ratio(0.2),
}
HABITS = tuple(_RADIUS_RATIO)
CLAMPED, PARAMETRISED = 1, 2  # flags of `effective_radii`
_DRY_AIR = 287.05  # J kg-1 K-1
_NUMBER_TO_RADIUS = np.cbrt(1.0 / 0.8)  # effective over volume radius of a spectrum given by its number (as over sea)


@functools.cache
def load_tables():
    """The packaged tables as an xarray.Dataset. Raises DataError."""
    content = verified_bytes("cloud_optics.nc")
    try:
        with netCDF4.Dataset("cloud_optics.nc", memory=content) as file:
            return xr.open_dataset(xr.backends.NetCDF4DataStore(file)).load()
    except (OSError, ValueError) as error:
        raise DataError(f"cloud_optics.nc cannot be read ({error}); reinstall chansim") from None


def _check_habit(habit):
    if habit not in HABITS:
        raise OpticsError(f"unknown ice habit {habit!r}; there is {', '.join(HABITS)}")


def radius_axis(species):
    """(ln of the first radius [m], step, count) of the radius axis of a species."""
    radius = load_tables()[f"{species}_radius"].values
    return np.log(radius[0]), np.log(radius[1] / radius[0]), radius.size


def condensate_optics(wavenumber, ice_habit=HABITS[0]):
    """Extinction, albedo and asymmetry of every species at some wavenumbers.

    Parameters
    ----------
    wavenumber : (nodes,) [cm-1]
    ice_habit : one of `HABITS`

    Returns
    -------
    axis : (species, 3) ln first radius [m], ln step, number of radii
    extinction : (species, radii, nodes) [m2 kg-1]
    albedo, asymmetry : (species, radii, nodes) [1]; shorter radius axes repeat their last entry

    Raises
    ------
    OpticsError : unknown habit, or a wavenumber outside the tables; DataError : tables missing or damaged
    """
    _check_habit(ice_habit)
    axis = np.array([radius_axis(species) for species in SPECIES])
    out = [
        np.stack([at_nodes(f"{species}_{name}", wavenumber) for species in SPECIES])
        for name in ("extinction", "albedo", "asymmetry")
    ]
    return (axis, *out)


def condensate_moments(wavenumber, ice_habit=HABITS[0], count=65):
    """Legendre moments chi_l (chi_0 = 1, chi_1 = asymmetry), l = 0 .. count - 1: (species, radii, nodes, count).

    Raises OpticsError as `condensate_optics` does.
    """
    _check_habit(ice_habit)
    return np.stack([at_nodes(f"{species}_moments", wavenumber)[..., :count] for species in SPECIES])


def at_nodes(name, wavenumber, axis="wavenumber"):
    """One table, linear in wavenumber, padded to the longest radius axis. OpticsError outside the tables.

    axis : coordinate with the wavenumbers of the table
    """
    tables = load_tables()
    grid = tables[axis].values
    most = max(int(radius_axis(species)[2]) for species in SPECIES)
    wavenumber = np.asarray(wavenumber, dtype=float)
    outside = ~((wavenumber >= grid[0]) & (wavenumber <= grid[-1]))
    if outside.any():
        raise OpticsError(
            f"wavenumber {wavenumber[outside][0]:g} cm-1 is outside the tables of condensate optics "
            f"({grid[0]:g}-{grid[-1]:g} cm-1); use a channel inside, or extend WAVENUMBERS in "
            "chansim/optics/build_tables.py and rebuild them"
        )
    values = tables[name].values.astype(float)  # (radii, wavenumber, ...)
    i = np.clip(np.searchsorted(grid, wavenumber) - 1, 0, grid.size - 2)
    w = ((wavenumber - grid[i]) / (grid[i + 1] - grid[i])).reshape(-1, *[1] * (values.ndim - 2))
    at = values[:, i] * (1.0 - w) + values[:, i + 1] * w
    padding = [(0, most - at.shape[0])] + [(0, 0)] * (at.ndim - 1)
    return np.ascontiguousarray(np.pad(at, padding, mode="edge"))


def effective_radii(mixing, fraction, pressure, temperature, land_fraction, latitude, fields, liquid_radius, ice_radius,
                    counts, flags=None, ice_habit=HABITS[0]):  # fmt: skip
    """Effective radius of every species in every cell; liquid and ice of a mixed cell each have their own.

    Parameters
    ----------
    mixing : (species, columns, levels) grid-mean mass mixing ratio [kg kg-1]
    fraction : (columns, levels) cloud fraction [1]
    pressure : (1 or columns, levels) [Pa]; temperature : (columns, levels) [K]
    land_fraction, latitude : (columns,)
    fields : effective_radius_liquid, effective_radius_ice [m], number_liquid, number_ice [kg-1]: (columns, levels)
        or None; they are used where they are positive
    liquid_radius, ice_radius : names, see particle_size.LIQUID_RADIUS and ICE_RADIUS
    counts : dict, how many cells were clamped is added to it
    flags : None, or (species, columns, levels) uint8 that receives, for every cell, the sum of
        `CLAMPED` (the radius was outside the tables) and `PARAMETRISED` (it is not the model's own radius or number)
    ice_habit : one of `HABITS`; it matters where the radius of ice comes from number_ice

    Returns
    -------
    (species, columns, levels) [m], inside the tables; 1e-5 where there is no condensate

    Raises
    ------
    OpticsError : unknown parametrisation or habit
    """
    _check_habit(ice_habit)
    for name, known in ((liquid_radius, LIQUID_RADIUS), (ice_radius, ICE_RADIUS)):
        if name not in known:
            raise OpticsError(f"unknown effective radius {name!r}; there is {', '.join(known)}")
    radius = np.full(mixing.shape, 1e-5)
    if flags is not None:
        flags[...] = 0
    density = np.broadcast_to(pressure / (_DRY_AIR * temperature), temperature.shape)
    land = np.broadcast_to(np.asarray(land_fraction)[:, None], temperature.shape)
    for s, species in enumerate(SPECIES):
        there = (mixing[s] > 0.0) & (fraction > 0.0)
        if not there.any():
            continue
        air = density[there]
        content = mixing[s][there] / fraction[there] * air
        if species == "cloud_liquid":
            value = LIQUID_RADIUS[liquid_radius](content, land[there])
            value, own = _from_fields(value, content, there, air, fields, "liquid", WATER_DENSITY, fraction, 1.0)
        elif species == "cloud_ice":
            value = ICE_RADIUS[ice_radius](content, temperature[there])
            ratio = _RADIUS_RATIO[ice_habit]
            value, own = _from_fields(value, content, there, air, fields, "ice", ICE_DENSITY, fraction, ratio)
        else:
            value, own = exponential_radius(content, *PRECIPITATION[species]), np.zeros(content.shape, dtype=bool)
        radius[s][there], clamped = _clamped(species, value, counts)
        if flags is not None:
            flags[s][there] = CLAMPED * clamped + PARAMETRISED * ~own
    return radius


def _clamped(species, value, counts):
    """Radii [m] inside the table of a species and which were not; their number is added to `counts`."""
    first, step, size = radius_axis(species)
    low, high = np.exp(first), np.exp(first + step * (size - 1))
    outside = (value < low * 0.999) | (value > high * 1.001)
    name = f"cells with effective radius of {species} clamped to {low * 1e6:.0f}-{high * 1e6:.0f} um"
    counts[name] = counts.get(name, 0) + int(outside.sum())
    return np.clip(value, low, high), outside


def _from_fields(value, content, there, air, fields, phase, density, fraction, ratio):
    """The model's own radius, else its number, where they are given; and where that is.

    ratio : of the radius of equal volume-to-area ratio to that of equal volume, for a radius from the number
    """
    own = np.zeros(np.shape(value), dtype=bool)
    number = fields.get(f"number_{phase}")
    if number is not None:
        per_volume = number[there] * air / fraction[there]
        known = per_volume > 0.0
        counted = volume_radius(content, np.where(known, per_volume, 1.0), density) * (_NUMBER_TO_RADIUS * ratio)
        value = np.where(known, counted, value)
        own |= known
    given = fields.get(f"effective_radius_{phase}")
    if given is not None:
        known = given[there] > 0.0
        value = np.where(known, given[there], value)
        own |= known
    return value, own
