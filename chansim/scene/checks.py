"""Range checks: an impossible value stops the reading and says where it is and why it may be."""

from dataclasses import dataclass, field

import numpy as np

from chansim.errors import SceneError
from chansim.scene.variables import VARIABLES

# condensate below this is no rounding error
NEGATIVE_CONDENSATE = -1e-6  # kg kg-1
_CONDENSATES = ("cloud_liquid", "cloud_ice", "rain", "snow", "graupel")
# share of the valid maximum by which a quantity that cannot be negative may stray, and is clipped
TOLERANCE = 1e-3
RELATIVE_HUMIDITY_MIN, RELATIVE_HUMIDITY_MAX = -0.01, 1.5  # [1]
# the lowest level of a column with a real surface; less means hPa called Pa
LOWEST_LEVEL_MIN = 3e4  # Pa
_FILL_VALUES = (-999.0, -9999.0, -99999.0, -32768.0, 9999.0, 99999.0)

# what a wrongly labelled field would need: (slope, offset, in words)
_MISLABELS = {
    "K": ((1.0, 273.15, "degC called K"), (1.0, -273.15, "K called degC"), (5 / 9, 255.372, "degF called K")),
    "Pa": ((100.0, 0.0, "hPa called Pa"), (0.01, 0.0, "Pa called hPa"), (1e3, 0.0, "kPa called Pa")),
    "kg kg-1": ((1e-3, 0.0, "g/kg called kg/kg"), (1e-6, 0.0, "mg/kg called kg/kg")),
    "1": ((0.01, 0.0, "percent called 1"), (1e-6, 0.0, "ppm called 1"), (1e-9, 0.0, "ppb called 1")),
    "m": ((1e3, 0.0, "km called m"), (1e-6, 0.0, "um called m"), (1 / 9.80665, 0.0, "geopotential called height")),
    "m s-1": ((0.514444, 0.0, "knots called m s-1"),),
}


@dataclass
class Place:
    """Where values lie, to say it in errors.

    latitude, longitude : arrays of the horizontal shape [degrees]
    pressure : array (level, ...) or None [Pa]
    sources : {canonical name: field in the file}
    """

    latitude: np.ndarray
    longitude: np.ndarray
    pressure: np.ndarray | None = None
    sources: dict = field(default_factory=dict)

    def describe(self, index, shape, on_levels):
        """A readable place for a flat index into an array of `shape`, whose axis 0 may be the levels."""
        position = np.unravel_index(index, shape)
        words = []
        if on_levels:
            words.append(f"level {position[0] + 1} from the top")
            if self.pressure is not None:
                level_pressure = np.broadcast_to(_as_levels(self.pressure, shape), shape)[position]
                words.append(f"pressure {level_pressure:.6g} Pa")
            position = position[1:]
        if position:
            words.append(f"latitude {self.latitude[position]:.3f}, longitude {self.longitude[position]:.3f}")
        return ", ".join(words)


def _as_levels(pressure, shape):
    return pressure.reshape((-1,) + (1,) * (len(shape) - 1)) if pressure.ndim == 1 else pressure


@dataclass
class Tally:
    """Counts of values clipped or filled, {sentence: number}."""

    counts: dict = field(default_factory=dict)

    def add(self, sentence, number):
        """Adds to a count; nothing is kept when the number is zero."""
        if number:
            self.counts[sentence] = self.counts.get(sentence, 0) + int(number)

    def lines(self):
        """Readable lines."""
        return [f"{sentence}: {number} values" for sentence, number in self.counts.items()]


def checked(name, values, place, tally, counted=None):
    """Values of a canonical variable, clipped when a hair outside its range.

    Parameters
    ----------
    name : canonical name
    values : array (level, ...) or (...) [canonical units]
    place : Place
    tally : Tally, receives the clipped values
    counted : boolean array of the same shape: which values matter (above ground); None for all

    Returns
    -------
    array like `values`; NaN passes

    Raises
    ------
    SceneError : a value that counts lies outside the valid range
    """
    variable = VARIABLES[name]
    low, high = variable.valid_min, variable.valid_max
    slack = TOLERANCE * high if low == 0.0 else 0.0
    if name in _CONDENSATES:
        slack = -NEGATIVE_CONDENSATE
    slack_above = TOLERANCE if high == 1.0 else 0.0
    outside = (values < low - slack) | (values > high + slack_above)
    if counted is not None:
        outside &= counted
    if np.any(outside):
        raise SceneError(_out_of_range(variable, values, outside, counted, place))
    if low == 0.0:
        clipped = (values < low) | ((values > high) & bool(slack_above))
        clipped = clipped & counted if counted is not None else clipped
        tally.add(f"{name}: tiny excursions clipped to {low:g}..{high:g}", np.count_nonzero(clipped))
        values = np.where(clipped, np.clip(values, low, high), values)
    return values


def _out_of_range(variable, values, outside, counted, place):
    considered = values[counted] if counted is not None else values
    considered = considered[np.isfinite(considered)]
    seen_min, seen_max = considered.min(), considered.max()
    middle = 0.5 * (variable.valid_min + variable.valid_max)
    distance = np.where(outside, np.abs(np.where(np.isfinite(values), values, np.inf) - middle), -1.0)
    worst = int(np.argmax(distance))
    where = place.describe(worst, values.shape, on_levels=variable.kind == "level")
    source = place.sources.get(variable.name, "")
    cause = likely_cause(variable.units, seen_min, seen_max, variable.valid_min, variable.valid_max)
    return (
        f"{variable.name}{f' (from {source})' if source else ''}: {np.count_nonzero(outside)} of {values.size} values "
        f"outside the possible {variable.valid_min:g} to {variable.valid_max:g} {variable.units}; range seen "
        f"{seen_min:g} to {seen_max:g}, worst {values.flat[worst]:g} at {where}. "
        f"Likely cause: {cause}. " + _fix(variable.name, source, seen_min, seen_max)
    )


def _fix(name, source, seen_min, seen_max):
    """What to do about values out of range, in words."""
    if name == "cloud_fraction" and seen_max > 1.0 and seen_min >= 0.0:
        return (
            f'If these are per cent, say mapping={{"{name}": {{"name": "{source}", "units": "%"}}}}; if not, limit '
            "the field to 0..1 in the file"
        )
    if name in _CONDENSATES and seen_min < 0.0:
        return (
            "Less than nothing cannot be simulated; set negative values to zero in the file when they come from "
            "interpolation or packing, or leave the field out with "
            f'mapping={{"{name}": ""}}'
        )
    return unit_fix(name, source)


def unit_fix(name, source):
    """How to correct the units of a field, in words."""
    return (
        "Correct the file, or state the true units with "
        f'mapping={{"{name}": {{"name": "{source or "..."}", "units": "..."}}}}'
    )


def likely_cause(units, seen_min, seen_max, valid_min, valid_max):
    """Why a range of values may be impossible, in words."""
    if abs(seen_min) > 1e9 or abs(seen_max) > 1e9:
        return "an undeclared fill value; set the _FillValue attribute"
    for slope, offset, words in _MISLABELS.get(units, ()):
        if valid_min <= slope * seen_min + offset and slope * seen_max + offset <= valid_max:
            return words
    if any(np.isclose(value, fill) for fill in _FILL_VALUES for value in (seen_min, seen_max)):
        return "an undeclared fill value; set the _FillValue attribute"
    if valid_min == 0.0 and seen_min < 0.0 and seen_max <= valid_max:
        return "negative values of a quantity that has none, as interpolation and packing leave"
    return "wrong units, a damaged field or another variable"


def check_relative_humidity(values, pressure, place, tally, counted):
    """Relative humidity within -1 % and 150 %, tiny negatives clipped.

    Parameters
    ----------
    values : array (level, ...) [1]
    pressure : array that broadcasts with it [Pa]
    place, tally, counted : see `checked`

    Returns
    -------
    array [1]

    Raises
    ------
    SceneError : outside that range, or never above 1.5 % in the lower air (a fraction called percent)
    """
    source = place.sources.get("relative_humidity", "")
    outside = counted & ((values < RELATIVE_HUMIDITY_MIN) | (values > RELATIVE_HUMIDITY_MAX))
    if np.any(outside):
        seen = values[counted & np.isfinite(values)]
        worst = int(np.argmax(np.where(outside, np.abs(np.where(np.isfinite(values), values, np.inf) - 0.5), -1.0)))
        cause = likely_cause("1", seen.min(), seen.max(), RELATIVE_HUMIDITY_MIN, RELATIVE_HUMIDITY_MAX)
        raise SceneError(
            f"relative_humidity (from {source}): {np.count_nonzero(outside)} of {values.size} values outside the "
            f"possible -1 to 150 %; range seen {100 * seen.min():.6g} to {100 * seen.max():.6g} %, worst "
            f"{100 * values.flat[worst]:.6g} % at {place.describe(worst, values.shape, on_levels=True)}. "
            f"Likely cause: {cause}. " + unit_fix("relative_humidity", source)
        )
    low_air = values[counted & np.isfinite(values) & (pressure > 5e4)]
    if low_air.size and 0.0 < low_air.max() <= 0.015:
        raise SceneError(
            f"relative_humidity (from {source}): never above {100 * low_air.max():.3g} % below 500 hPa. Likely cause: "
            "a fraction called percent. " + unit_fix("relative_humidity", source)
        )
    negative = counted & (values < 0.0)
    tally.add("relative_humidity: negatives down to -1 % set to 0", np.count_nonzero(negative))
    return np.where(negative, 0.0, values)


def check_pressure(pressure, place):
    """Pressure increasing downward everywhere, within its range, and not hPa called Pa.

    Parameters
    ----------
    pressure : array (level,) or (level, ...) [Pa]
    place : Place

    Raises
    ------
    SceneError : see above
    """
    source = place.sources.get("pressure", "the vertical coordinate")
    finite = pressure[np.isfinite(pressure)]
    if not finite.size:
        raise SceneError(f"pressure (from {source}): no value at all; the vertical coordinate is empty")
    lowest = np.nanmax(pressure[-1])
    if finite.min() > 0.0 and lowest < LOWEST_LEVEL_MIN and finite.max() * 100.0 <= 1.2e5:
        raise SceneError(
            f"pressure (from {source}): the lowest level is at {lowest:g} Pa, high in the air. Likely cause: hPa "
            "called Pa. " + unit_fix("pressure", source)
        )
    checked("pressure", pressure, place, Tally())
    wrong = np.diff(pressure, axis=0) <= 0.0
    if np.any(wrong):
        first = int(np.argmax(wrong))
        without_pressure = Place(place.latitude, place.longitude)
        where = without_pressure.describe(first, wrong.shape, on_levels=True)
        raise SceneError(
            f"pressure (from {source}): not monotonic, {np.count_nonzero(wrong)} steps between levels go the wrong "
            f"way, the first below {where}; sort the levels of the file and leave out repeated ones"
        )


def check_half_pressure(half, pressure, place):
    """Half levels one more than levels, each between its neighbours.

    Parameters
    ----------
    half, pressure : arrays (level + 1, ...) and (level, ...) [Pa]
    place : Place

    Raises
    ------
    SceneError : see above
    """
    if half.shape[0] != pressure.shape[0] + 1:
        raise SceneError(
            f"half_pressure: {half.shape[0]} half levels for {pressure.shape[0]} levels; there must be one more"
        )
    pressure = pressure.reshape(pressure.shape + (1,) * (half.ndim - pressure.ndim))
    wrong = ~((half[:-1] <= pressure * (1.0 + 1e-9)) & (half[1:] >= pressure * (1.0 - 1e-9)))
    wrong &= np.isfinite(pressure)
    if np.any(wrong):
        where = Place(place.latitude, place.longitude).describe(int(np.argmax(wrong)), wrong.shape, on_levels=True)
        raise SceneError(
            f"half_pressure: {np.count_nonzero(wrong)} levels do not lie between their half levels, the first at "
            f"{where}; coefficients of levels and half levels do not belong together"
        )
