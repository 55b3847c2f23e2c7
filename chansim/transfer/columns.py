"""From model levels to the levels and layers of the column solver, compiled.

A column is built top -> surface from the reference atmosphere above the model
top, the model levels above ground, and the surface. Where a model cell holds
condensate, its half-level boundaries become levels, so that a cloud fills its
own cell and no other. Large steps in ln p are divided.
"""

import math

from numba import njit

from chansim.constants import AVOGADRO, EARTH_RADIUS, GAS_CONSTANT, MOLAR_MASS_DRY_AIR, STANDARD_GRAVITY, WATER_TO_AIR

LARGEST_STEP = 0.17  # in ln p above 100 hPa; what finer levels would change is in docs/solvers.md
LARGEST_STEP_BELOW = 0.12  # where water makes absorption steep
JOIN_SCALE = 1.2  # in ln p: how fast the reference atmosphere forgets the temperature of the model top
_STEEPEST_EXTRAPOLATION = 15.0  # K from the lowest valid level to the surface, at most
_SMALLEST_FRACTION = 1e-12  # mole fraction that stands for none in logarithms


@njit(cache=True)
def mole_fraction(specific_humidity):
    """Water mole fraction of moist air from specific humidity [kg kg-1]."""
    return specific_humidity / (specific_humidity + WATER_TO_AIR * (1.0 - specific_humidity))


@njit(cache=True)
def _between(a, b, weight):
    """Logarithmic between positive values, linear otherwise."""
    if a > _SMALLEST_FRACTION and b > _SMALLEST_FRACTION:
        return a * (b / a) ** weight
    return a + (b - a) * weight


@njit(cache=True)
def _reference_at(ref_pressure, ref_values, pressure):
    """Reference profile at one pressure: linear in ln p, held at the ends."""
    n = ref_pressure.size
    if pressure <= ref_pressure[0]:
        return ref_values[0]
    for i in range(1, n):
        if pressure <= ref_pressure[i]:
            w = math.log(pressure / ref_pressure[i - 1]) / math.log(ref_pressure[i] / ref_pressure[i - 1])
            return ref_values[i - 1] + (ref_values[i] - ref_values[i - 1]) * w
    return ref_values[n - 1]


@njit(cache=True)
def _source_points(
    pressure,
    temperature,
    humidity,
    gases,
    surface_pressure,
    air_temperature,
    air_humidity,
    ref_pressure,
    ref_temperature,
    ref_gases,
    point_p,
    point_t,
    point_x,
    point_cell,
):
    """Reference top, model levels above ground and the surface as one profile.

    Returns the number of points. point_x : (1 + gases, points), water first.
    A missing gas value (NaN) is taken from the reference. point_cell: index of
    the model level, -1 in the reference part; the surface carries the lowest level's.
    """
    n = 0
    top = pressure[0]
    offset = temperature[0] - _reference_at(ref_pressure, ref_temperature, top)
    for i in range(ref_pressure.size):
        if ref_pressure[i] >= top * 0.97:
            break
        point_p[n] = ref_pressure[i]
        point_t[n] = ref_temperature[i] + offset * math.exp(-math.log(top / ref_pressure[i]) / JOIN_SCALE)
        for g in range(ref_gases.shape[0]):
            point_x[g, n] = ref_gases[g, i]
        point_cell[n] = -1
        n += 1
    last = -1
    for k in range(pressure.size):
        if pressure[k] >= surface_pressure * 0.9995:
            break
        point_p[n] = pressure[k]
        point_t[n] = temperature[k]
        point_x[0, n] = mole_fraction(humidity[k])
        for g in range(gases.shape[0]):
            x = gases[g, k]
            point_x[1 + g, n] = x if x == x else _reference_at(ref_pressure, ref_gases[1 + g], pressure[k])
        point_cell[n] = k
        last = k
        n += 1
    point_p[n] = surface_pressure
    point_t[n] = air_temperature
    point_x[0, n] = mole_fraction(air_humidity) if air_humidity == air_humidity else point_x[0, n - 1]
    for g in range(1, ref_gases.shape[0]):
        point_x[g, n] = point_x[g, n - 1]
    if air_temperature != air_temperature:
        rise = 0.0
        if last > 0:
            slope = (point_t[n - 1] - point_t[n - 2]) / math.log(point_p[n - 1] / point_p[n - 2])
            rise = slope * math.log(surface_pressure / point_p[n - 1])
        point_t[n] = point_t[n - 1] + min(max(rise, -_STEEPEST_EXTRAPOLATION), _STEEPEST_EXTRAPOLATION)
    point_cell[n] = last
    return n + 1


@njit(cache=True)
def _emit(point_p, point_t, point_x, i, pressure, level_p, level_t, level_x, n):
    """Write one level between points i and i + 1."""
    w = math.log(pressure / point_p[i]) / math.log(point_p[i + 1] / point_p[i])
    level_p[n] = pressure
    level_t[n] = point_t[i] + (point_t[i + 1] - point_t[i]) * w
    for g in range(point_x.shape[0]):
        level_x[g, n] = _between(point_x[g, i], point_x[g, i + 1], w)


@njit(cache=True)
def _divide(point_p, point_t, point_x, i, start, stop, cell, level_p, level_t, level_x, layer_cell, n):
    """Layers from start to stop [Pa] between points i and i + 1; n levels are there, the last at start."""
    largest = LARGEST_STEP if stop < 1.001e4 else LARGEST_STEP_BELOW
    steps = max(1, int(math.ceil(math.log(stop / start) / largest - 1e-9)))
    for s in range(1, steps + 1):
        pressure = stop if s == steps else start * (stop / start) ** (s / steps)
        _emit(point_p, point_t, point_x, i, pressure, level_p, level_t, level_x, n)
        layer_cell[n - 1] = cell
        n += 1
    return n


@njit(cache=True)
def build_levels(
    pressure,
    temperature,
    humidity,
    gases,
    half_pressure,
    cloudy,
    surface_pressure,
    air_temperature,
    air_humidity,
    ref_pressure,
    ref_temperature,
    ref_gases,
    points,
    level_p,
    level_t,
    level_x,
    layer_cell,
):
    """Levels and layers of one column.

    Parameters
    ----------
    pressure, temperature, humidity : (levels,) top -> surface [Pa, K, kg kg-1]; below ground anything
    gases : (gases, levels) mole fractions other than water, NaN where the reference is to be used
    half_pressure : (levels + 1,) cell boundaries [Pa]
    cloudy : (levels,) bool, cells with condensate
    surface_pressure, air_temperature, air_humidity : of the air at the surface; the last two may be NaN
    ref_pressure, ref_temperature : (r,); ref_gases : (1 + gases, r) with water first
    points : tuple of work arrays (p, t, x, cell), levels + r + 2 long
    level_p, level_t, level_x, layer_cell : results

    Returns
    -------
    number of levels (layers = levels - 1); layer_cell: model level that a layer belongs to, -1 above the model
    """
    point_p, point_t, point_x, point_cell = points
    count = _source_points(
        pressure,
        temperature,
        humidity,
        gases,
        surface_pressure,
        air_temperature,
        air_humidity,
        ref_pressure,
        ref_temperature,
        ref_gases,
        point_p,
        point_t,
        point_x,
        point_cell,
    )
    level_p[0], level_t[0] = point_p[0], point_t[0]
    for g in range(point_x.shape[0]):
        level_x[g, 0] = point_x[g, 0]
    n = 1
    for i in range(count - 1):
        upper, lower = point_cell[i], point_cell[i + 1]
        start, stop = point_p[i], point_p[i + 1]
        if (upper >= 0 and cloudy[upper]) or (lower >= 0 and cloudy[lower]):
            edge = half_pressure[lower] if lower != upper else stop
            if upper == lower:
                n = _divide(point_p, point_t, point_x, i, start, stop, upper, level_p, level_t, level_x, layer_cell, n)
                continue
            edge = min(max(edge, start * (1.0 + 1e-6)), stop * (1.0 - 1e-6))
            n = _divide(point_p, point_t, point_x, i, start, edge, upper, level_p, level_t, level_x, layer_cell, n)
            n = _divide(point_p, point_t, point_x, i, edge, stop, lower, level_p, level_t, level_x, layer_cell, n)
        else:
            n = _divide(point_p, point_t, point_x, i, start, stop, upper, level_p, level_t, level_x, layer_cell, n)
    return n


@njit(cache=True)
def hydrostatic_heights(n, level_p, level_t, level_x, surface_height, level_z):
    """Geometric heights of the levels [m], from the surface upward."""
    level_z[n - 1] = surface_height
    for j in range(n - 2, -1, -1):
        x = 0.5 * (level_x[0, j] + level_x[0, j + 1])
        gas_constant = GAS_CONSTANT / (MOLAR_MASS_DRY_AIR * (1.0 - (1.0 - WATER_TO_AIR) * x))
        gravity = STANDARD_GRAVITY * (EARTH_RADIUS / (EARTH_RADIUS + level_z[j + 1])) ** 2
        thickness = gas_constant * 0.5 * (level_t[j] + level_t[j + 1]) * math.log(level_p[j + 1] / level_p[j])
        level_z[j] = level_z[j + 1] + thickness / gravity


@njit(cache=True)
def _power_integral(p1, p2, x1, x2, power):
    """Integral of p**power x dp with ln x linear in ln p."""
    slope = 0.0
    if x1 > _SMALLEST_FRACTION and x2 > _SMALLEST_FRACTION:
        slope = math.log(x2 / x1) / math.log(p2 / p1)
    else:  # linear in p: enough where there is next to nothing
        return 0.5 * (x1 * p1**power + x2 * p2**power) * (p2 - p1)
    exponent = slope + power + 1.0
    if abs(exponent) < 1e-6:
        return x1 * p1 ** (power + 1.0) * math.log(p2 / p1)
    return (x2 * p2 ** (power + 1.0) - x1 * p1 ** (power + 1.0)) / exponent


@njit(cache=True)
def layer_amounts(n, level_p, level_t, level_x, level_z, amount, effective_p, effective_t):
    """Absorber amounts of the layers and where they sit.

    Parameters
    ----------
    n : number of levels
    level_p, level_t, level_z : [Pa, K, m]; level_x : (1 + gases, levels) mole fractions, water first
    amount : (3 + gases, layers) result [molecules cm-2]: dry air, water, water x its mole fraction, gases
    effective_p, effective_t : (2 + gases, layers) result: weighted by air, by water and by each gas [Pa, K]
    """
    gases = level_x.shape[0] - 1
    for j in range(n - 1):
        p1, p2 = level_p[j], level_p[j + 1]
        x1, x2 = level_x[0, j], level_x[0, j + 1]
        height = 0.5 * (level_z[j] + level_z[j + 1])
        gravity = STANDARD_GRAVITY * (EARTH_RADIUS / (EARTH_RADIUS + height)) ** 2
        x = 0.5 * (x1 + x2)
        per_pascal = AVOGADRO / (gravity * MOLAR_MASS_DRY_AIR * (1.0 - (1.0 - WATER_TO_AIR) * x)) * 1e-4
        water = _power_integral(p1, p2, x1, x2, 0.0)
        amount[0, j] = per_pascal * (p2 - p1 - water)
        amount[1, j] = per_pascal * water
        amount[2, j] = per_pascal * _power_integral(p1, p2, x1 * x1, x2 * x2, 0.0)
        for g in range(gases):
            amount[3 + g, j] = per_pascal * _power_integral(p1, p2, level_x[1 + g, j], level_x[1 + g, j + 1], 0.0)
        for k in range(2 + gases):
            effective_p[k, j] = 0.5 * (p1 + p2)
            if k > 0:
                total = amount[1 if k == 1 else 1 + k, j] / per_pascal
                if total > 0.0:
                    moment = _power_integral(p1, p2, level_x[k - 1, j], level_x[k - 1, j + 1], 1.0)
                    effective_p[k, j] = min(max(moment / total, p1), p2)
            w = math.log(effective_p[k, j] / p1) / math.log(p2 / p1)
            effective_t[k, j] = level_t[j] + (level_t[j + 1] - level_t[j]) * w


@njit(cache=True)
def layer_secants(n, level_z, surface_height, surface_zenith_cosine, secant):
    """Secant of the local zenith angle in each layer, for a straight ray over a spherical Earth.

    sin(zenith at height z) = sin(zenith at the surface) R / (R + z); level_z [m].
    """
    sine = math.sqrt(max(0.0, 1.0 - surface_zenith_cosine * surface_zenith_cosine))
    for j in range(n - 1):
        height = 0.5 * (level_z[j] + level_z[j + 1]) - surface_height
        local = sine * (EARTH_RADIUS + surface_height) / (EARTH_RADIUS + surface_height + max(height, 0.0))
        secant[j] = 1.0 / math.sqrt(1.0 - local * local)
