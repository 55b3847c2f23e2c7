"""Recognised fields to canonical columns: everything that works on the values themselves.

`canonical_columns` takes and returns plain arrays for one block of columns, so the same code serves a whole
scene in memory and the chunks of a lazy one. Levels are axis 0, top to surface; below ground anything goes.
"""

from dataclasses import dataclass, field

import numpy as np

from chansim.constants import MOLAR_MASS_DRY_AIR, STANDARD_GRAVITY
from chansim.errors import SceneError
from chansim.scene import humidity, hydrostatic
from chansim.scene.checks import Place, Tally, check_half_pressure, check_pressure, check_relative_humidity, checked
from chansim.scene.land import land_fraction
from chansim.scene.recognition import QUANTITIES
from chansim.scene.reference_atmosphere import reference_at_pressure
from chansim.scene.units import linear_conversion
from chansim.scene.variables import VARIABLES

DEFAULT_WIND_SPEED = 7.0  # m s-1, scene/variables.py
# relative humidity is packed too coarsely for the dry air above this
RELATIVE_HUMIDITY_TOP = 5000.0  # Pa
# factor of pressure over which a filled top part relaxes to the reference atmosphere
_RELAXATION = np.log(3.0)
_MOLAR_MASS = {  # kg mol-1
    "ozone": 47.9982e-3, "carbon_dioxide": 44.0095e-3, "nitrous_oxide": 44.0128e-3, "methane": 16.0425e-3,
    "carbon_monoxide": 28.0101e-3,
}  # fmt: skip
CONDENSATES = ("cloud_liquid", "cloud_ice", "rain", "snow", "graupel")
_AS_THEY_ARE = ("effective_radius_liquid", "effective_radius_ice", "number_liquid", "number_ice")
_HEIGHT_ROUTES = ("height", "geopotential_height", "geopotential")
HUMIDITY_ROUTES = ("specific_humidity", "humidity_mixing_ratio", "dew_point", "relative_humidity")


@dataclass
class Plan:
    """What is made of which quantity; decided from names alone, before any value is read.

    routes : {canonical name: quantity it comes from}
    relative_humidity_over : see `humidity.SATURATION`
    day_of_year : number, None for the mean of the year
    sources : {quantity: field of the file}, for messages
    conversions : {quantity: (slope, offset)} from the units of the source
    outputs : {canonical name: "level" or "surface"} that `canonical_columns` returns
    """

    routes: dict
    relative_humidity_over: str = "water"
    day_of_year: float | None = None
    sources: dict = field(default_factory=dict)
    conversions: dict = field(default_factory=dict)
    outputs: dict = field(default_factory=dict)


def make_plan(recognised, *, relative_humidity_over="water", day_of_year=None):
    """The plan for the recognised quantities.

    Parameters
    ----------
    recognised : Recognised; what the user mapped goes before what was found
    relative_humidity_over, day_of_year : see `Plan`

    Returns
    -------
    Plan
    """
    plan = Plan({}, relative_humidity_over, day_of_year)
    have = recognised.fields
    plan.sources = {name: f.name for name, f in have.items()}
    plan.conversions = {name: _conversion(name, f, recognised.units[name]) for name, f in have.items()}

    def choose(canonical, *quantities):
        found = [q for q in quantities if q in have]
        found.sort(key=lambda q: q not in recognised.mapped)
        if found:
            plan.routes[canonical] = found[0]
            plan.sources.setdefault(canonical, have[found[0]].name)

    choose("temperature", "temperature", "potential_temperature")
    choose("specific_humidity", *HUMIDITY_ROUTES)
    choose("height", *_HEIGHT_ROUTES)
    for gas in _MOLAR_MASS:
        choose(f"{gas}_mole_fraction", f"{gas}_mole_fraction", f"{gas}_mass_fraction")
    for name in CONDENSATES:
        choose(name, name, f"{name}_mixing_ratio")
    for name in ("cloud_fraction", *_AS_THEY_ARE, "land_fraction", "surface_class", "air_temperature_2m"):
        choose(name, name)
    choose("surface_pressure", "surface_pressure", "log_surface_pressure")
    choose("skin_temperature", "skin_temperature", "sea_surface_temperature")
    choose(
        "specific_humidity_2m", "specific_humidity_2m", "humidity_mixing_ratio_2m", "dew_point_2m",
        "relative_humidity_2m",
    )  # fmt: skip
    choose("orography", "orography", "surface_geopotential")
    if "wind_speed_10m" in have or {"eastward_wind_10m", "northward_wind_10m"} <= set(have):
        choose("wind_speed_10m", "wind_speed_10m", "eastward_wind_10m")
    plan.outputs = _outputs(plan)
    return plan


def _conversion(name, f, units):
    try:
        return linear_conversion(units, QUANTITIES[name].units, f.name)
    except SceneError as error:  # which quantity it is for makes the advice complete
        raise SceneError(str(error).replace("QUANTITY", name)) from error


def _outputs(plan):
    always = ("surface_pressure", "skin_temperature", "wind_speed_10m", "land_fraction")
    names = [n for n in VARIABLES if n in plan.routes or n in always]
    if plan.routes.get("specific_humidity_2m") == "relative_humidity_2m" and "air_temperature_2m" not in plan.routes:
        names.remove("specific_humidity_2m")
    return {name: VARIABLES[name].kind for name in names}


def canonical_columns(raw, pressure, latitude, longitude, plan, tally=None, half_pressure=None):
    """Canonical arrays of one block of columns.

    Parameters
    ----------
    raw : {quantity: array (level, ...) or (...)} in the units of the source
    pressure : array (level,) or (level, ...), top to surface [Pa]
    latitude, longitude : arrays (...) [degrees]
    plan : Plan
    tally : Tally that receives the counts, or None
    half_pressure : array with one level more, top to surface, checked against `pressure`, or None [Pa]

    Returns
    -------
    dict of `pressure`, the arrays named in `plan.outputs` in the precision of the temperature, and `column_valid` (...)
    of bool

    Raises
    ------
    SceneError : impossible values; see `checks`
    """
    tally = Tally() if tally is None else tally
    precision = _temperature_precision(raw)
    raw = {name: _converted(values, *plan.conversions[name]) for name, values in raw.items()}
    pressure = _continued_under_ground(pressure, raw, plan, tally)
    place = Place(latitude, longitude, pressure, plan.sources)
    check_pressure(pressure, place)
    if half_pressure is not None:
        check_half_pressure(half_pressure, pressure, place)
    levels = pressure.reshape((-1,) + (1,) * latitude.ndim) if pressure.ndim == 1 else pressure
    column = _Column(raw, levels, latitude, longitude, plan, place, tally)
    column.read_surface_pressure()
    column.read_temperature()
    column.read_humidity()
    column.read_optional_levels()
    column.read_surface()
    column.read_height()
    columns = {name: column.out[name].astype(precision, copy=False) for name in plan.outputs}
    return {"pressure": pressure, **columns, "column_valid": column.valid()}


def _continued_under_ground(pressure, raw, plan, tally):
    """Pressure with missing values at the bottom of columns put just under the surface pressure.

    Isentropic levels that lie under the ground come without pressure; nothing there counts.
    """
    quantity = plan.routes.get("surface_pressure")
    if pressure.ndim == 1 or quantity is None or not np.isnan(pressure[-1]).any():
        return pressure
    surface = raw[quantity] if quantity == "surface_pressure" else np.exp(raw[quantity].astype(float))
    filled = pressure.copy()
    for k in range(1, len(pressure)):
        to_fill = np.isnan(pressure[k:]).all(axis=0) & np.isfinite(filled[k - 1])
        filled[k] = np.where(to_fill, np.maximum(filled[k - 1], surface * 1.0001) * 1.0001, filled[k])
    tally.add("pressure: missing under the ground, put there", np.count_nonzero(np.isnan(pressure) & ~np.isnan(filled)))
    return filled


def _temperature_precision(raw):
    values = raw.get("temperature", raw.get("potential_temperature"))
    return values.dtype if values.dtype.kind == "f" else np.dtype("float64")


def _converted(values, slope, offset):
    if values.dtype.kind != "f":
        values = values.astype(np.float64)
    if slope == 1.0 and offset == 0.0:
        return values
    # Python floats keep float32 fields in float32
    return values * slope + offset


class _Column:
    """The state that one block passes through; `out` fills up in the order of `canonical_columns`."""

    def __init__(self, raw, levels, latitude, longitude, plan, place, tally):
        self.raw, self.levels = raw, levels
        self.latitude, self.longitude = latitude, longitude
        self.plan, self.place, self.tally = plan, place, tally
        self.out = {}
        self.above_ground = None

    def route(self, canonical):
        """Quantity a canonical variable comes from, and its values; (None, None) when there is none."""
        quantity = self.plan.routes.get(canonical)
        return quantity, self.raw.get(quantity)

    def keep(self, name, values):
        """Range-checks a variable and keeps it; on levels only what is above ground counts."""
        counted = self.above_ground if VARIABLES[name].kind == "level" else None
        self.out[name] = checked(name, values, self.place, self.tally, counted)

    def read_surface_pressure(self):
        quantity, values = self.route("surface_pressure")
        if quantity is None:
            values = self._surface_pressure_default()
        elif quantity == "log_surface_pressure":
            values = np.exp(values.astype(float))
        self.keep("surface_pressure", values)
        # packing in the file may put the lowest level a hair below the surface
        self.above_ground = np.broadcast_to(
            self.levels <= self.out["surface_pressure"] * (1.0 + 1e-5), self._full_shape()
        )

    def _full_shape(self):
        return (self.levels.shape[0], *self.latitude.shape)

    def _surface_pressure_default(self):
        _, temperature = self.route("temperature")
        height, surface_height = self._geopotential_height(), self._surface_height()
        if height is not None and surface_height is not None:
            reliable = np.isfinite(height) & np.isfinite(temperature)
            if np.all(reliable):
                return hydrostatic.surface_pressure_from_heights(self.levels, height, temperature, surface_height)
        full = np.broadcast_to(self.levels, self._full_shape())
        lowest = np.nanmax(np.where(np.isfinite(temperature), full, -np.inf), axis=0)
        # a column without any temperature is masked later; its surface only has to be a number
        return np.where(np.isfinite(lowest), lowest, np.nan)

    def read_temperature(self):
        quantity, values = self.route("temperature")
        if quantity == "potential_temperature":
            values = hydrostatic.temperature_from_potential(values, self.levels)
        self.keep("temperature", values)

    def read_humidity(self):
        quantity, values = self.route("specific_humidity")
        temperature = self.out["temperature"]
        if quantity == "humidity_mixing_ratio":
            values = humidity.specific_humidity_from_mixing_ratio(values)
        elif quantity == "dew_point":
            values = humidity.specific_humidity_from_dew_point(values, self.levels)
        elif quantity == "relative_humidity":
            values = self._from_relative_humidity(values, temperature)
        values = self._fill_end(values, "water_mole_fraction", "specific_humidity", "top")
        self.keep("specific_humidity", values)

    def _from_relative_humidity(self, values, temperature):
        values = check_relative_humidity(values, self.levels, self.place, self.tally, self.above_ground)
        with np.errstate(all="ignore"):  # below ground the temperature may be anything
            vapour_pressure = values * humidity.SATURATION[self.plan.relative_humidity_over](temperature)
            limit = humidity.saturation_vapour_pressure_water(temperature)
            too_much = self.above_ground & (vapour_pressure > limit * (1.0 + 1e-6))
            self.tally.add("relative_humidity: reduced to saturation over water", np.count_nonzero(too_much))
            vapour_pressure = np.where(too_much, limit, vapour_pressure)
            result = humidity.specific_humidity_from_vapour_pressure(vapour_pressure, self.levels)
        return np.where(self.levels < RELATIVE_HUMIDITY_TOP, np.nan, result).astype(values.dtype, copy=False)

    def _fill_end(self, values, reference_name, name, end):
        """Fills what lies beyond the last value at one end of each column from the reference atmosphere.

        The ratio to the reference at the last value fades out over a factor of three in pressure.
        """
        if end == "bottom":
            flipped = self._fill_end(values[::-1], reference_name, name, "flipped")
            return flipped[::-1]
        from_top = slice(None, None, -1 if end == "flipped" else 1)
        missing = np.logical_and.accumulate(np.isnan(values), axis=0)
        missing &= ~missing[-1]  # a column without any value stays empty
        missing &= np.isfinite(self.out["temperature"][from_top])
        if end == "flipped":
            missing &= self.above_ground[from_top]
        if not missing.any():
            return values
        side = "above its topmost" if end == "top" else "below its lowest"
        self.tally.add(f"{name}: filled {side} value from the reference atmosphere", missing.sum())
        levels = np.broadcast_to(self.levels[from_top], values.shape)
        reference = reference_at_pressure(reference_name, levels, self.latitude, self.plan.day_of_year)
        if reference_name == "water_mole_fraction":
            reference = humidity.specific_humidity_from_mole_fraction(reference)
        last = np.argmax(~np.isnan(values), axis=0)[None]
        distance = np.abs(np.log(np.take_along_axis(levels, last, axis=0) / levels))
        ratio = np.take_along_axis(values, last, axis=0) / np.take_along_axis(reference, last, axis=0)
        fade = np.clip(1.0 - distance / _RELAXATION, 0.0, 1.0)
        filled = reference * np.clip(ratio, 0.1, 10.0) ** fade
        return np.where(missing, filled, values).astype(values.dtype, copy=False)

    def read_optional_levels(self):
        for gas, molar_mass in _MOLAR_MASS.items():
            name = f"{gas}_mole_fraction"
            quantity, values = self.route(name)
            if quantity is None:
                continue
            if quantity != name:
                values = values * (MOLAR_MASS_DRY_AIR / molar_mass)
            for end in ("top", "bottom"):
                values = self._fill_end(values, name, name, end)
            self.keep(name, values)
        for name in CONDENSATES:
            quantity, values = self.route(name)
            if quantity is None:
                continue
            if quantity != name:
                # per mass of dry air to per mass of moist air
                values = values * (1.0 - self.out["specific_humidity"])
            self.keep(name, values)
        for name in ("cloud_fraction", *_AS_THEY_ARE):
            quantity, values = self.route(name)
            if quantity is not None:
                self.keep(name, values)

    def read_surface(self):
        if "air_temperature_2m" in self.plan.outputs:
            self.keep("air_temperature_2m", self.raw["air_temperature_2m"])
        if "specific_humidity_2m" in self.plan.outputs:
            self.keep("specific_humidity_2m", self._humidity_2m())
        self.keep("skin_temperature", self._skin_temperature())
        self.keep("wind_speed_10m", self._wind_speed())
        quantity, values = self.route("land_fraction")
        if quantity is None:
            values = land_fraction(self.latitude, self.longitude)
        self.keep("land_fraction", values)
        if "surface_class" in self.plan.outputs:
            self.keep("surface_class", self.raw["surface_class"])
        if "orography" in self.plan.outputs:
            self.keep("orography", self._surface_height())

    def _humidity_2m(self):
        quantity, values = self.route("specific_humidity_2m")
        pressure = self.out["surface_pressure"]
        if quantity == "humidity_mixing_ratio_2m":
            return humidity.specific_humidity_from_mixing_ratio(values)
        if quantity == "dew_point_2m":
            return humidity.specific_humidity_from_dew_point(values, pressure)
        if quantity == "relative_humidity_2m":
            temperature, over = self.out["air_temperature_2m"], self.plan.relative_humidity_over
            return humidity.specific_humidity_from_relative_humidity(values, temperature, pressure, over)
        return values

    def _skin_temperature(self):
        quantity, values = self.route("skin_temperature")
        if quantity == "skin_temperature":
            return values
        default = self.out.get("air_temperature_2m")
        if default is None:
            usable = self.above_ground & np.isfinite(self.out["temperature"])
            lowest = usable.shape[0] - 1 - np.argmax(usable[::-1], axis=0)[None]
            default = np.take_along_axis(self.out["temperature"], lowest, axis=0)[0]
        if quantity == "sea_surface_temperature":
            over_land = np.isnan(values)
            self.tally.add("skin_temperature: no sea surface temperature, default taken", over_land.sum())
            return np.where(over_land, default, values)
        return default

    def _wind_speed(self):
        quantity, values = self.route("wind_speed_10m")
        if quantity is None:
            return np.full(self.latitude.shape, DEFAULT_WIND_SPEED, dtype=np.float32)
        if quantity == "eastward_wind_10m":
            return np.hypot(values, self.raw["northward_wind_10m"])
        return values

    def _surface_height(self):
        quantity, values = self.route("orography")
        return values / STANDARD_GRAVITY if quantity == "surface_geopotential" else values

    def _geopotential_height(self):
        quantity, values = self.route("height")
        if quantity == "geopotential":
            return values / STANDARD_GRAVITY
        if quantity == "height":
            return hydrostatic.geopotential_height(values)
        return values

    def read_height(self):
        if "height" in self.plan.outputs:
            quantity, values = self.route("height")
            if quantity != "height":
                values = hydrostatic.geometric_height(self._geopotential_height())
            self.keep("height", values)

    def valid(self):
        """True where no value that is needed is missing."""
        valid = np.ones(self.latitude.shape, dtype=bool)
        for name, kind in self.plan.outputs.items():
            if name in _AS_THEY_ARE or name in ("specific_humidity_2m", "air_temperature_2m"):
                continue  # radii and numbers are missing where there is no cloud
            missing = np.isnan(self.out[name])
            if kind == "level":
                missing = np.any(missing & self.above_ground, axis=0)
            valid &= ~missing
        valid &= np.any(self.above_ground, axis=0) & np.all(np.isfinite(self.levels), axis=0)
        return valid


def require(recognised, source_name, names_of_fields):
    """SceneError, listing what the file has, when temperature or humidity is missing."""
    needs = {"temperature": ("temperature", "potential_temperature"), "humidity": HUMIDITY_ROUTES}
    for what, routes in needs.items():
        if not set(routes) & set(recognised.fields):
            raise SceneError(
                f"{source_name}: no {what} on levels found ({', '.join(routes)}). The source has: {names_of_fields}. "
                f'If one of them is it, say mapping={{"{routes[0]}": "its name"}}'
            )
