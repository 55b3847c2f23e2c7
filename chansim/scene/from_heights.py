"""Pressure where the file has none: from heights in hydrostatic balance, or from the density of the air."""

import functools
import re

import numpy as np
import xarray as xr

from chansim.constants import STANDARD_GRAVITY
from chansim.errors import SceneError
from chansim.scene import humidity, hydrostatic
from chansim.scene.columns import HUMIDITY_ROUTES
from chansim.scene.formula_terms import orography_of, surface_pressure_of
from chansim.scene.native import on_full_levels
from chansim.scene.recognition import QUANTITIES
from chansim.scene.units import convert, is_convertible

_ABOVE_SEA = ("altitude", "height_above_mean_sea_level", "geopotential_height")
_TIMES = 4  # the humidity that comes from relative humidity needs the pressure; each round gains two digits
_FIRST_GUESS = 7500.0  # m, scale height


def hydrostatic_pressure(temperature, recognised, opened, vertical=None):
    """Pressure by integration over the heights of the levels.

    Parameters
    ----------
    temperature : Field of temperature or potential temperature
    recognised : Recognised
    opened : Source
    vertical : table [vertical] of a mapping: `known_pressure` [Pa] at `known_height` [m], names or numbers, take
        the place of the surface pressure and orography

    Returns
    -------
    DataArray on the levels and columns [Pa]; None when the levels have no heights

    Raises
    ------
    SceneError : heights without a pressure to start from, or without the height of the ground
    """
    heights, above_ground, name = _heights(temperature, recognised)
    if heights is None:
        return None
    pressure, height, ground, words = _start(recognised, opened, vertical or {}, above_ground, name)
    if above_ground and ground is not None:
        heights, height = heights + ground, height + ground if words == "surface pressure" else height
    arguments = [heights, pressure, height, -np.inf if ground is None else ground]
    recognised.log.append(f"pressure <- hydrostatic, from {words} over the heights {name}")
    return _in_columns(_integrate, temperature, recognised, arguments, grows="upward")


def pressure_by_density(temperature, recognised):
    """Pressure by the ideal gas law where the file gives the density of the air; None where it does not."""
    density = recognised.fields.get("air_density")
    if density is None or density.level_dim != temperature.level_dim:
        return None
    values = convert(density.data.astype(float), recognised.units["air_density"], "kg m-3", density.name)
    label = f"{density.name} {density.evidence.get('long_name', '')}".lower()
    of_dry_air = re.search(r"\bdry\b|rho_?d(ry)?\b", label) is not None
    words = f"the density {density.name}{', of dry air by its name' if of_dry_air else ''}"
    recognised.log.append(f"pressure <- ideal gas law, from {words}")
    work = functools.partial(_ideal_gas, of_dry_air=of_dry_air)
    return _in_columns(work, temperature, recognised, [values], grows="downward")


def _heights(temperature, recognised):
    """Heights of the levels [m], whether above ground, and what they are called; geopotential ones are turned."""
    dim, count = temperature.level_dim, temperature.data.sizes[temperature.level_dim]
    routes = (("height", "m"), ("geopotential_height", "m"), ("geopotential", "m2 s-2"), ("height_above_ground", "m"))
    for quantity, units in routes:
        f = recognised.fields.get(quantity)
        if f is None:
            continue
        values = convert(f.data.astype(float), recognised.units[quantity], units, f.name)
        if f.level_dim != dim or values.sizes[dim] != count:
            values = on_full_levels(f, values, dim, count, quantity)
        if values is None:
            continue
        if quantity == "geopotential":
            values = values / STANDARD_GRAVITY
        if quantity.startswith("geopotential"):
            values = hydrostatic.geometric_height(values)
        return _bare(values), quantity == "height_above_ground", f.name
    coord = temperature.data.coords.get(dim)
    kind = str(coord.attrs.get("standard_name", "")) if coord is not None else ""
    if kind in (*_ABOVE_SEA, "height") and is_convertible(coord.attrs.get("units", "?"), "m"):
        values = _bare(convert(coord.astype(float), coord.attrs["units"], "m", str(dim)))
        values = hydrostatic.geometric_height(values) if kind == "geopotential_height" else values
        return values, kind == "height", f"of the coordinate {dim}"
    return None, False, ""


def _bare(data):
    return data.drop_vars(list(data.coords))


def _start(recognised, opened, table, above_ground, name):
    """Pressure and height to start from, height of the ground (None when unknown), and the words for them."""
    ground = orography_of(recognised)[0]
    if "known_pressure" in table:
        if "known_height" not in table:
            raise SceneError("mapping [vertical]: known_pressure needs known_height, where it holds [m]")
        pressure = _named(table["known_pressure"], opened, "Pa")
        return pressure, _named(table["known_height"], opened, "m"), ground, "the pressure known at one height"
    pressure = surface_pressure_of(recognised)[0]
    missing = [] if pressure is not None else ["surface pressure (standard_name surface_air_pressure)"]
    if ground is None and not above_ground:
        missing.append("height of the ground (standard_name surface_altitude, or surface geopotential)")
    if missing:
        raise SceneError(
            f"heights {name}: pressure can be integrated over them, but the {' and the '.join(missing)} is missing. "
            "Add it, or name it in the mapping file:\n"
            '  [variables]\n  surface_pressure = "NAME"\n  orography = "NAME"\n'
            "or say where pressure is known [Pa, m]:\n  [vertical]\n  known_pressure = 5500.0\n  known_height = 20000.0"
        )
    return pressure, 0.0 if above_ground else ground, ground, "surface pressure"


def _named(value, opened, units):
    """A number as it is, or a field by its name [units]."""
    if isinstance(value, (int, float)):
        return float(value)
    for f in opened.fields:
        if f.name == value:
            return _bare(convert(f.data.astype(float), f.units, units, f.name))
    names = ", ".join(f.name for f in opened.fields)
    raise SceneError(f"mapping [vertical]: '{value}' is not in the file, which has: {names}")


def _in_columns(work, temperature, recognised, arguments, *, grows):
    """Applies a function of plain arrays (level first) to temperature, humidity and arguments, lazily if they are.

    The first of the arguments lies on the levels, and grows "upward" or "downward".
    """
    dim = temperature.level_dim
    name = next(name for name, f in recognised.fields.items() if f is temperature)
    potential = name == "potential_temperature"
    kelvin = convert(temperature.data.astype(float), recognised.units[name], "K", temperature.name)
    moisture, kind = _moisture(temperature, recognised)
    inputs = [_bare(kelvin), moisture, *arguments]
    chunks = {d: n for d, n in kelvin.chunksizes.items()} if kelvin.chunks else {}
    inputs = [_chunked(a, chunks, dim) for a in inputs]
    core = [[dim] if isinstance(a, xr.DataArray) and dim in a.dims else [] for a in inputs]

    def on_arrays(*arrays):
        # apply_ufunc puts the levels last; they come first here
        shape = np.broadcast_shapes(*(np.shape(a)[:-1] if c else np.shape(a) for a, c in zip(arrays, core)))
        turned = [_level_first(a, shape) if c else np.broadcast_to(a, shape) for a, c in zip(arrays, core)]
        flip = _runs_upward(turned[2], grows)
        turned = [a[::-1] if c and flip else a for a, c in zip(turned, core)]
        result = work(*turned, kind=kind, potential=potential)
        return np.moveaxis(result[::-1] if flip else result, 0, -1)

    found = xr.apply_ufunc(
        on_arrays, *inputs, input_core_dims=core, output_core_dims=[[dim]], dask="parallelized", output_dtypes=[float]
    )
    return found.transpose(*[d for d in kelvin.dims if d in found.dims])


def _chunked(array, chunks, dim):
    if not isinstance(array, xr.DataArray) or not chunks:
        return array
    sizes = {d: chunks[d] for d in array.dims if d in chunks and d != dim}
    return array.chunk(sizes | ({dim: -1} if dim in array.dims else {}))


def _level_first(array, shape):
    array = np.moveaxis(array, -1, 0)
    array = array.reshape(array.shape[0], *(1,) * (len(shape) + 1 - array.ndim), *array.shape[1:])
    return np.broadcast_to(array, (array.shape[0], *shape))


def _runs_upward(values, grows):
    """True when the first level is the lowest, told by a quantity that grows "upward" or "downward"."""
    middle = tuple(n // 2 for n in values.shape[1:])
    first, last = values[(0, *middle)], values[(-1, *middle)]
    return bool(first < last if grows == "upward" else first > last)


def _moisture(temperature, recognised):
    """A humidity on the levels of the temperature in SI units, and which one it is; dry air when there is none."""
    dim = temperature.level_dim
    for name in sorted(HUMIDITY_ROUTES, key=lambda n: n not in recognised.mapped):
        f = recognised.fields.get(name)
        if f is not None and f.level_dim == dim and dict(f.data.sizes) == dict(temperature.data.sizes):
            units = QUANTITIES[name].units
            return _bare(convert(f.data.astype(float), recognised.units[name], units, f.name)), name
    return 0.0, "dry"


def _specific_humidity(values, kind, temperature, pressure):
    """Specific humidity from any kind of humidity; missing values count as dry air here."""
    with np.errstate(all="ignore"):
        if kind == "humidity_mixing_ratio":
            values = humidity.specific_humidity_from_mixing_ratio(values)
        elif kind == "dew_point":
            values = humidity.specific_humidity_from_dew_point(values, pressure)
        elif kind == "relative_humidity":
            values = humidity.specific_humidity_from_relative_humidity(values, temperature, pressure)
    return np.clip(np.nan_to_num(values, nan=0.0), 0.0, 0.1)


def _integrate(warmth, moisture, heights, known_pressure, known_height, ground, *, kind, potential):
    heights, known_height = (hydrostatic.geopotential_height(h) for h in (heights, known_height))
    ground = np.where(np.isfinite(ground), hydrostatic.geopotential_height(np.nan_to_num(ground, neginf=0.0)), -np.inf)
    where = known_pressure, known_height, ground
    if potential:
        pressure = hydrostatic.pressure_from_heights_and_potential(heights, warmth, *where)
    else:
        pressure = known_pressure * np.exp((known_height - heights) / _FIRST_GUESS)
    # potential temperature bends between the levels where temperature hardly does, so temperature is integrated;
    # it depends on the pressure, as the humidity may
    for _ in range(_rounds(kind, potential)):
        temperature = hydrostatic.temperature_from_potential(warmth, pressure) if potential else warmth
        moist = _specific_humidity(moisture, kind, temperature, pressure)
        virtual = humidity.virtual_temperature(temperature, moist)
        pressure = hydrostatic.pressure_from_heights(heights, virtual, *where)
    return pressure


def _rounds(kind, potential):
    if potential:
        return 2 * _TIMES
    return 1 if kind in ("specific_humidity", "humidity_mixing_ratio", "dry") else _TIMES


def _ideal_gas(warmth, moisture, density, *, kind, potential, of_dry_air):
    law = hydrostatic.pressure_from_density_and_potential if potential else hydrostatic.pressure_from_density
    pressure = law(density, warmth)
    for _ in range(_TIMES):
        temperature = hydrostatic.temperature_from_potential(warmth, pressure) if potential else warmth
        moist = _specific_humidity(moisture, kind, temperature, pressure)
        whole = density / (1.0 - moist) if of_dry_air else density
        pressure = law(whole, humidity.virtual_temperature(warmth, moist))
    return pressure
