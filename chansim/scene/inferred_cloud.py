"""Cloud for scenes whose file holds no condensate, only the pressure at cloud top and cloud base.

    top, base = cloud_boundaries("forecast.grib2")
    scene = with_inferred_cloud(open_scene("forecast.grib2"), top, base)

Nothing is inferred unless it is asked for: how much condensate such a cloud holds is an assumption, not a forecast.
"""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from chansim.constants import STANDARD_GRAVITY
from chansim.errors import SceneError
from chansim.scene.checks import Tally, likely_cause
from chansim.scene.grids import find_grid
from chansim.scene.sources import open_source, refusing_damage
from chansim.scene.units import convert, is_convertible

OPAQUE = 100.0  # visible optical thickness of an "opaque" cloud: its emissivity in the infrared window is 1
WATER_DENSITY, ICE_DENSITY = 1000.0, 917.0  # kg m-3
ALL_LIQUID, ALL_ICE = 273.0, 233.0  # K; common practice: droplets freeze by themselves near 233 K
HIGHEST_CLOUD = 5000.0  # Pa; above 50 hPa there is no weather
TOP_TEMPERATURE_TOLERANCE = 10.0  # K
TOP_TEMPERATURE = "air_temperature_at_cloud_top"  # CF standard name, and the coordinate it goes by here
_SAME_PLACE = 0.01  # degrees
_LOWEST_CELL = 0.9995  # levels below this share of the surface pressure are not used by the solver
_LARGEST = (1200.0, 1.2e5)  # Pa, between which the largest value of a field must lie
_RADII = (1e-6, 5e-4)  # m, between which an effective radius of cloud is believed
_PREFERRED_IDS = (54, 231045)  # GRIB: pressure; pressure at cloud base


@dataclass(frozen=True)
class _Boundary:
    """How a boundary is known: kind of level in GRIB, standard name in CF."""

    words: str
    kind: str
    standard_name: str


_TOP = _Boundary("cloud top", "cloudTop", "air_pressure_at_cloud_top")
_BASE = _Boundary("cloud base", "cloudBase", "air_pressure_at_cloud_base")


def cloud_boundaries(path, time=None, select=None):
    """Pressure at cloud top and at cloud base of a model file.

    Parameters
    ----------
    path, time, select : as for `open_scene`

    Returns
    -------
    top, base : DataArrays on the horizontal grid that `open_scene` gives the same file [Pa], NaN where there is no
        cloud (missing or negative in the file). `top` has the coordinate `air_temperature_at_cloud_top` [K] where
        the file holds that, against which `with_inferred_cloud` checks.

    Raises
    ------
    SceneError : the file cannot be read, has no such field, or several
    """
    opened = open_source(path, time=time, select=select)
    with refusing_damage(opened.name):
        top, base = (_pressure_at(boundary, opened) for boundary in (_TOP, _BASE))
        warmth = _fields_at(_TOP, "K", TOP_TEMPERATURE, opened.fields)
        if len(warmth) == 1:
            top.coords[TOP_TEMPERATURE] = _on_scene_grid(warmth[0], "K", opened)
    return top, base


def _fields_at(boundary, units, standard_name, fields):
    found = [f for f in fields if f.evidence.get("standard_name") == standard_name or f.place == boundary.kind]
    found = [f for f in found if f.units is not None and is_convertible(f.units, units)]
    instantaneous = [f for f in found if f.evidence.get("over_time", "instant") == "instant"]
    return instantaneous or found


def _pressure_at(boundary, opened):
    found = _fields_at(boundary, "Pa", boundary.standard_name, opened.fields)
    preferred = [f for f in found if f.evidence.get("param_id") in _PREFERRED_IDS]
    found = preferred if len(found) > 1 and preferred else found
    if not found:
        raise SceneError(
            f"{opened.name}: no pressure at {boundary.words} (GRIB: a pressure on level type {boundary.kind}; CF: "
            f"standard_name {boundary.standard_name}). The source has: {'; '.join(str(f) for f in opened.fields)}"
        )
    if len(found) > 1:
        raise SceneError(
            f"{opened.name}: {len(found)} fields could be the pressure at {boundary.words}: "
            f"{' and '.join(str(f) for f in found)}; keep one in the file, or give the array you mean"
        )
    data = _on_scene_grid(found[0], "Pa", opened).rename(boundary.standard_name)
    data = data.where(data > 0.0)
    data.attrs = {"units": "Pa", "standard_name": boundary.standard_name, "source_field": found[0].name}
    return data


def _on_scene_grid(f, units, opened):
    """A field without levels as `open_scene` would lay it out, read, in the units wanted."""
    grid = find_grid(f.data, opened.dataset)
    data = f.data.drop_vars(list(f.data.coords))
    data = data.rename({d: short for d, short in grid.renamed.items() if d in data.dims})
    if "cell" in grid.dims and "cell" not in data.dims:
        data = data.expand_dims("cell", axis=-1)
    data = convert(data.transpose(*grid.dims).astype(float), f.units, units, f.name)
    return data.assign_coords(latitude=grid.latitude, longitude=grid.longitude).load()


def with_inferred_cloud(
    scene, top_pressure, base_pressure, *, optical_thickness="opaque", liquid_radius=10e-6, ice_radius=30e-6,
    upside_down="error",
):  # fmt: skip
    """A scene with cloud between a cloud-base and a cloud-top pressure.

    Every level between the two is filled, and at least the nearest one. The extinction per mass of air is the same
    in the whole cloud and sums up to the optical thickness, tau = 3 W / (2 rho r_e) for liquid and ice together
    (Stephens 1978, J. Atmos. Sci. 35, 2123: extinction efficiency 2). The mass is liquid above 273 K, ice
    below 233 K, linear in between.

    Parameters
    ----------
    scene : canonical Dataset without cloud liquid and ice of its own; pressure and temperature of a lazy one are read
    top_pressure, base_pressure : DataArrays or arrays on the horizontal grid of the scene [Pa, or the `units`
        attribute]; NaN, zero or negative is no cloud. See `cloud_boundaries`
    optical_thickness : extinction optical thickness in the visible, where the extinction efficiency is 2 [1]. With
        the default radii the tables of chansim give 0.89 (liquid) and 1.02 (ice) times it at 10.8 um, of which 0.43
        and 0.54 are absorption. "opaque" is 100
    liquid_radius, ice_radius : effective radii, which become fields of the scene [m]
    upside_down : "error", or "clear" to leave columns without cloud whose top lies below their base

    Returns
    -------
    xarray.Dataset : a copy of the scene with cloud_liquid, cloud_ice, effective_radius_liquid, effective_radius_ice;
        cloud_fraction, where the scene has it, is 1 in the cloud. The attributes `defaulted` and `adjusted` say
        what was inferred and how many columns were left clear because their boundaries made no sense: one of the
        two is missing, the top is above 50 hPa, or (with the coordinate `air_temperature_at_cloud_top`) the scene
        is more than 10 K away from the temperature at the top, as where a field was interpolated across fill values.

    Raises
    ------
    SceneError : the scene has cloud of its own; fields on another grid; a top below its base; impossible numbers
    """
    tau = _checked_numbers(optical_thickness, liquid_radius, ice_radius, upside_down)
    _refuse_own_cloud(scene)
    dims = scene["column_valid"].dims
    warmth = getattr(top_pressure, "coords", {}).get(TOP_TEMPERATURE)
    warmth = None if warmth is None else warmth.transpose(*dims).values
    top = _on_columns(top_pressure, scene, dims, "top_pressure")
    base = _on_columns(base_pressure, scene, dims, "base_pressure")
    column = _Columns(scene, dims)
    tally = Tally()
    cloudy = _usable(top, base, warmth, column, tally)
    cloudy = _right_way_up(cloudy, top, base, scene, upside_down, tally)
    filled = _filled_levels(cloudy, top, base, column)
    liquid, ice = _condensate(filled, tau, liquid_radius, ice_radius, column)
    return _add(scene, dims, filled, liquid, ice, (tau, liquid_radius, ice_radius), tally)


def _checked_numbers(optical_thickness, liquid_radius, ice_radius, upside_down):
    if upside_down not in ("error", "clear"):
        raise SceneError(f'upside_down: {upside_down!r} is not "error" or "clear"')
    for name, radius in (("liquid_radius", liquid_radius), ("ice_radius", ice_radius)):
        if not _RADII[0] <= radius <= _RADII[1]:
            raise SceneError(f"{name}: {radius:g} m is not an effective radius of cloud; give metres, e.g. 10e-6")
    if optical_thickness == "opaque":
        return OPAQUE
    if isinstance(optical_thickness, str) or not 0.0 < optical_thickness <= 1000.0:
        raise SceneError(f'optical_thickness: {optical_thickness!r} is not "opaque" or a number above 0, up to 1000')
    return float(optical_thickness)


def _refuse_own_cloud(scene):
    for name in ("cloud_liquid", "cloud_ice"):
        if name in scene and bool((scene[name] > 0.0).any()):
            raise SceneError(
                f"{name}: the scene has cloud of its own, nothing is to be inferred; to replace it, pass "
                'scene.drop_vars(["cloud_liquid", "cloud_ice"], errors="ignore")'
            )


def _on_columns(values, scene, dims, name):
    """A boundary as an array in the order of `dims` [Pa], NaN for no cloud; SceneError on another grid."""
    shape = tuple(scene.sizes[d] for d in dims)
    if isinstance(values, xr.DataArray):
        _check_grid(values, scene, dims, name)
        values = values.transpose(*dims)
        values = convert(values.values.astype(float), values.attrs.get("units", "Pa"), "Pa", name)
    values = np.array(values, dtype=float)
    if values.shape != shape:
        raise SceneError(f"{name}: shape {values.shape}, but the scene has {dict(zip(dims, shape))}")
    values = np.where(values > 0.0, values, np.nan)
    _check_pressure(values[np.isfinite(values)], name)
    return values


def _check_pressure(values, name):
    """SceneError when the highest pressure of any cloud is not one in Pa."""
    if values.size and not _LARGEST[0] <= values.max() <= _LARGEST[1]:
        cause = likely_cause("Pa", values.min(), values.max(), 1.0, _LARGEST[1])
        raise SceneError(
            f"{name}: largest value {values.max():g} Pa, which is no pressure of cloud. Likely cause: {cause}. Give "
            "Pa, or a DataArray with its true attribute units"
        )


def _check_grid(values, scene, dims, name):
    sizes = {d: scene.sizes[d] for d in dims}
    if dict(values.sizes) != sizes:
        raise SceneError(f"{name}: on the grid {dict(values.sizes)}, but the scene has {sizes}; give it on the same")
    for coordinate in ("latitude", "longitude"):
        if coordinate in values.coords:
            apart = np.abs(values[coordinate].transpose(*dims).values - scene[coordinate].transpose(*dims).values)
            apart = np.minimum(apart, np.abs(apart - 360.0)) if coordinate == "longitude" else apart
            if apart.max() > _SAME_PLACE:
                raise SceneError(f"{name}: its {coordinate} is up to {apart.max():.3g} degrees from that of the scene")


class _Columns:
    """Plain arrays (level, ...) of a scene: pressure [Pa], temperature [K], above ground, mass of cells [kg m-2]."""

    def __init__(self, scene, dims):
        self.temperature = scene["temperature"].transpose("level", *dims).values.astype(float)
        pressure = scene["pressure"]
        pressure = pressure.transpose("level", *dims) if pressure.ndim > 1 else pressure
        pressure = pressure.values.astype(float)
        pressure = pressure.reshape(-1, *[1] * len(dims)) if pressure.ndim == 1 else pressure
        self.pressure = np.broadcast_to(pressure, self.temperature.shape)
        surface = scene["surface_pressure"].transpose(*dims).values.astype(float)
        self.valid = scene["column_valid"].transpose(*dims).values
        self.above_ground = (self.pressure < _LOWEST_CELL * surface) & self.valid & np.isfinite(self.temperature)
        self.mass = self._cell_mass(scene, dims, surface)

    def _cell_mass(self, scene, dims, surface):
        """Mass of air that the solver gives each level: to the half levels, the lowest one to the surface."""
        if "half_pressure" in scene:
            half = scene["half_pressure"]
            (vertical,) = [d for d in half.dims if d not in dims]
            half = half.transpose(vertical, ...).values.astype(float)
            half = half.reshape(-1, *[1] * len(dims)) if half.ndim == 1 else half
            upper, lower = (np.broadcast_to(h, self.pressure.shape) for h in (half[:-1], half[1:]))
        else:
            middle = np.sqrt(self.pressure[:-1] * self.pressure[1:])
            upper = np.concatenate([self.pressure[:1] ** 2 / middle[:1], middle])
            lower = np.concatenate([middle, np.full_like(middle[:1], np.inf)])
        lowest = self.above_ground & ~np.concatenate([self.above_ground[1:], np.zeros_like(self.above_ground[:1])])
        lower = np.where(lowest, surface, np.minimum(lower, surface))
        return np.where(self.above_ground, lower - upper, 0.0) / STANDARD_GRAVITY


def _usable(top, base, warmth, column, tally):
    """Columns whose boundaries can be believed; the others are counted."""
    has_top, has_base = np.isfinite(top), np.isfinite(base)
    both = has_top & has_base & column.valid
    tally.add("inferred cloud: only one of cloud top and base given, left clear", (has_top ^ has_base).sum())
    too_high = both & (top < HIGHEST_CLOUD)
    tally.add("inferred cloud: cloud top above 50 hPa, left clear", too_high.sum())
    cloudy = both & ~too_high
    if warmth is not None:
        away = np.abs(_temperature_at(top, column) - warmth)
        wrong = cloudy & (away > TOP_TEMPERATURE_TOLERANCE)
        words = "temperature at cloud top more than 10 K from the scene's (interpolated across fill values?)"
        tally.add(f"inferred cloud: {words}, left clear", wrong.sum())
        cloudy &= ~wrong
    return cloudy


def _temperature_at(pressure, column):
    """Temperature of the scene at a pressure (...), linear in ln p, held beyond the levels [K]."""
    result = np.where(pressure <= column.pressure[0], column.temperature[0], np.nan)
    for k in range(len(column.pressure)):
        here, warmth = column.pressure[k], column.temperature[k]
        result = np.where(column.above_ground[k] & (pressure > here), warmth, result)
        if k + 1 < len(column.pressure):
            below, warmth_below = column.pressure[k + 1], column.temperature[k + 1]
            weight = np.log(pressure / here) / np.log(below / here)
            inside = column.above_ground[k + 1] & (pressure > here) & (pressure <= below)
            result = np.where(inside, warmth + (warmth_below - warmth) * weight, result)
    return result


def _right_way_up(cloudy, top, base, scene, upside_down, tally):
    wrong = cloudy & (top > base)
    if not wrong.any():
        return cloudy
    if upside_down == "clear":
        tally.add("inferred cloud: cloud top below its base, left clear", wrong.sum())
        return cloudy & ~wrong
    worst = np.unravel_index(np.argmax(np.where(wrong, top - base, -np.inf)), top.shape)
    dims = scene["column_valid"].dims
    latitude, longitude = (float(scene[n].transpose(*dims).values[worst]) for n in ("latitude", "longitude"))
    remedy = (
        "the two arguments are swapped"
        if wrong.sum() > 0.9 * cloudy.sum()
        else 'correct the fields, or leave these columns clear with upside_down="clear"'
    )
    raise SceneError(
        f"cloud top below cloud base (pressure at the top is higher) in {wrong.sum()} of {cloudy.sum()} cloudy "
        f"columns, worst top {top[worst]:g} Pa, base {base[worst]:g} Pa at latitude {latitude:.3f}, longitude "
        f"{longitude:.3f}; {remedy}"
    )


def _filled_levels(cloudy, top, base, column):
    """(level, ...) True in the cloud: every level between top and base, the nearest where there is none."""
    with np.errstate(invalid="ignore"):
        filled = cloudy & column.above_ground & (column.pressure >= top) & (column.pressure <= base)
        thin = cloudy & ~filled.any(axis=0) & column.above_ground.any(axis=0)
        away = np.abs(np.log(column.pressure / np.sqrt(top * base)))
    nearest = np.argmin(np.where(column.above_ground & thin, away, np.inf), axis=0)
    chosen = np.arange(len(filled)).reshape(-1, *[1] * top.ndim) == nearest
    return filled | (chosen & thin)


def _condensate(filled, tau, liquid_radius, ice_radius, column):
    """Mixing ratios of liquid and ice (level, ...) [kg kg-1], of optical thickness `tau` in every cloudy column."""
    ice_share = np.where(filled, ice_mass_share(column.temperature), 0.0)
    per_mass = 1.5 * ((1.0 - ice_share) / (WATER_DENSITY * liquid_radius) + ice_share / (ICE_DENSITY * ice_radius))
    air = np.sum(column.mass * filled, axis=0)  # kg m-2 in the cloud
    total = np.where(filled, tau / np.where(air > 0.0, air, np.inf) / per_mass, 0.0)
    return total * (1.0 - ice_share), total * ice_share


def ice_mass_share(temperature):
    """Share of ice in the mass of a cloud [1]: 0 above 273 K, 1 below 233 K, linear between; temperature [K]."""
    return np.clip((ALL_LIQUID - temperature) / (ALL_LIQUID - ALL_ICE), 0.0, 1.0)


def _add(scene, dims, filled, liquid, ice, numbers, tally):
    tau, liquid_radius, ice_radius = numbers
    order = ("level", *dims)
    precision = scene["temperature"].dtype
    mapping = {"grid_mapping": "grid_mapping"} if "grid_mapping" in scene else {}
    fields = {
        "cloud_liquid": (liquid, "kg kg-1", "mass_fraction_of_cloud_liquid_water_in_air"),
        "cloud_ice": (ice, "kg kg-1", "mass_fraction_of_cloud_ice_in_air"),
        # everywhere, so that slanted columns may interpolate them
        "effective_radius_liquid": (np.full(filled.shape, liquid_radius), "m", _radius_name("liquid_water")),
        "effective_radius_ice": (np.full(filled.shape, ice_radius), "m", _radius_name("ice")),
    }
    result = scene.copy()
    for name, (values, units, standard_name) in fields.items():
        attributes = {"units": units, "standard_name": standard_name, **mapping}
        result[name] = (order, values.astype(precision), attributes)
    if "cloud_fraction" in scene:
        inside = xr.DataArray(filled, dims=order)
        result["cloud_fraction"] = (
            scene["cloud_fraction"].where(~inside, 1.0).assign_attrs(scene["cloud_fraction"].attrs)
        )
    tally.add("inferred cloud: columns filled between cloud base and cloud top", filled.any(axis=0).sum())
    _record(result, tau, liquid_radius, ice_radius, tally)
    return result


def _radius_name(phase):
    return f"effective_radius_of_cloud_{phase}_particles"


def _record(result, tau, liquid_radius, ice_radius, tally):
    """What was inferred, in `defaulted`; the counts, in `adjusted`. What no longer holds is taken out."""
    replaced = ("cloud_liquid: ", "cloud_ice: ", "effective_radius_liquid: ", "effective_radius_ice: ")
    lines = [x for x in str(result.attrs.get("defaulted", "")).splitlines() if not x.startswith(replaced)]
    lines.append(
        "cloud_liquid, cloud_ice: inferred from the pressure at cloud top and base, visible optical thickness "
        f"{tau:g}, effective radius {liquid_radius * 1e6:g} um (liquid) and {ice_radius * 1e6:g} um (ice), "
        f"liquid above {ALL_LIQUID:g} K, ice below {ALL_ICE:g} K"
    )
    adjusted = [x for x in str(result.attrs.get("adjusted", "")).splitlines() if x]
    counts = [f"{sentence}: {number}" for sentence, number in tally.counts.items()]
    result.attrs = {**result.attrs, "defaulted": "\n".join(lines), "adjusted": "\n".join(adjusted + counts)}
