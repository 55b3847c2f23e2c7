"""Units of model files, as udunits and GRIB write them, to the canonical units.

A unit string is put into the notation pint reads (exponents marked, spaces turned into products, the
meteorological names spelt out); pint then does the arithmetic. Every conversion here is linear, so it is
kept as a slope and an offset that apply to lazy arrays too.
"""

import functools
import re

import pint

from chansim.errors import SceneError

# names of the trade that pint does not know, or knows as something else (`gpm` as gallons per minute)
_TRADE_NAMES = {
    "gpm": "metre", "mb": "hPa", "mbar": "hPa", "millibars": "hPa", "millibar": "hPa",
    "degk": "kelvin", "deg_k": "kelvin", "degreek": "kelvin", "degree_kelvin": "kelvin",
    "degrees_kelvin": "kelvin", "kelvins": "kelvin",
    "degc": "degC", "deg_c": "degC", "degreec": "degC", "celsius": "degC", "degree_celsius": "degC",
    "degrees_celsius": "degC", "degree_c": "degC", "degrees_c": "degC", "centigrade": "degC",
    "degf": "degF", "fahrenheit": "degF", "degree_fahrenheit": "degF", "degrees_fahrenheit": "degF",
    "micron": "um", "microns": "um", "ppmv": "ppm", "ppbv": "(1e-9)", "ppb": "(1e-9)",
    "pptv": "(1e-12)", "ppt": "(1e-12)", "knots": "knot", "kt": "knot", "kts": "knot",
    "proportion": "(1)", "fraction": "(1)", "numeric": "(1)", "dimensionless": "(1)", "unitless": "(1)",
    "degrees_north": "degree", "degree_north": "degree", "degree_n": "degree", "degrees_n": "degree",
    "degreen": "degree", "degreesn": "degree", "degrees_east": "degree", "degree_east": "degree",
    "degree_e": "degree", "degrees_e": "degree", "degreee": "degree", "degreese": "degree",
    "degrees": "degree", "deg": "degree",
}  # fmt: skip
# whole strings that carry no arithmetic
_WHOLE_NAMES = {
    "": "1", "~": "1", "-": "1", "none": "1", "(0 - 1)": "1", "0 - 1": "1", "0-1": "1", "%": "percent",
    "deg k": "kelvin", "deg c": "degC", "degrees c": "degC", "degrees k": "kelvin",
}  # fmt: skip

_EXPONENT = re.compile(r"(?<![\w.])([A-Za-zµμ_]+)\s*(?:\*\*|\^)?\s*\(?([+-]?\d+)\)?(?![\w.])")
_NAME = re.compile(r"(?<![\w.])[A-Za-zµμ_]+")


@functools.cache
def _registry():
    # built on first use: it costs a third of a second
    return pint.UnitRegistry(autoconvert_offset_to_baseunit=True, cache_folder=None)


def pint_notation(units):
    """A udunits or GRIB unit string in the notation of pint.

    `"kg kg-1"` becomes `"kg*kg**-1"`, `"m s**-1"` becomes `"m*s**-1"`.
    """
    text = str(units).strip()
    if text.lower() in _WHOLE_NAMES:
        return _WHOLE_NAMES[text.lower()]
    text = text.replace("%", "percent").replace("·", " ").replace("#", "1 ")
    text = re.sub(r"(?<=[A-Za-z0-9])\.(?=[A-Za-z])", " ", text)  # udunits writes a product as kg.m-2
    text = _EXPONENT.sub(r"\1**\2", text)
    text = re.sub(r"(?<=[\w)])\s+(?=[\w(])", "*", text)
    return _NAME.sub(lambda match: _pint_name(match.group()), text)


def _pint_name(name):
    if name.lower() in _TRADE_NAMES:
        return _TRADE_NAMES[name.lower()]
    # names in full are case-free in udunits ("Kelvin", "Meters"), symbols are not ("Pa", "hPa")
    return name.lower() if len(name) > 4 and name[1:].islower() else name


@functools.cache
def linear_conversion(units, target, variable="variable"):
    """Slope and offset from one unit to another: `target value = slope * value + offset`.

    Parameters
    ----------
    units : udunits-style unit string of the source; None when the file gives none
    target : unit string wanted
    variable : name used in the error

    Returns
    -------
    slope, offset : float

    Raises
    ------
    SceneError : the unit is unknown, missing, or measures something else
    """
    if units is None:
        if target == "1":
            return 1.0, 0.0
        raise SceneError(
            f"{variable}: the file gives no units and '{target}' is needed; set its units attribute or say "
            f'mapping={{"QUANTITY": {{"name": "{variable}", "units": "..."}}}}'
        )
    notation = pint_notation(units)
    if notation == "C" and target == "K":
        notation = "degC"  # a coulomb in udunits, but model and sonde files mean Celsius
    registry = _registry()
    wanted = registry.parse_units(pint_notation(target)) if target not in ("1", "") else registry.dimensionless
    try:
        at_zero, at_one = (_convert(value, notation, wanted) for value in (0.0, 1.0))
    except pint.DimensionalityError as error:
        raise SceneError(
            f"{variable}: units '{units}' cannot be turned into '{target}'; this variable measures something "
            "else, or its units attribute is wrong"
        ) from error
    except Exception as error:  # pint raises many kinds for a string it cannot parse
        raise SceneError(
            f"{variable}: unknown units '{units}' ('{target}' is needed); correct its units attribute or say "
            f'mapping={{"QUANTITY": {{"name": "{variable}", "units": "{target}"}}}}'
        ) from error
    return at_one - at_zero, at_zero


def _convert(value, notation, wanted):
    registry = _registry()
    unit = registry.parse_expression(notation)
    if not isinstance(unit, pint.Quantity):
        unit = registry.Quantity(float(unit))
    if unit.magnitude == 1 and not unit._is_multiplicative:
        return registry.Quantity(value, unit.units).to(wanted).magnitude
    return (value * unit).to(wanted).magnitude


def is_convertible(units, target):
    """True when `units` can be turned into `target`."""
    try:
        linear_conversion(units, target)
    except SceneError:
        return False
    return True


def convert(values, units, target, variable="variable"):
    """Values in the target units.

    Parameters
    ----------
    values : float, array or DataArray (lazy ones stay lazy) [units]
    units, target : udunits-style unit strings
    variable : name used in the error

    Returns
    -------
    values of the same kind and shape [target]

    Raises
    ------
    SceneError : see `linear_conversion`
    """
    slope, offset = linear_conversion(units, target, variable)
    if slope == 1.0 and offset == 0.0:
        return values
    # a Python float keeps a float32 field in float32
    converted = values * slope
    return converted + offset if offset else converted
