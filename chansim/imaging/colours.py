"""Colour tables for brightness temperature, each a list of (temperature, lightness, chroma, hue) in CIELAB.

Greys follow the trade: cold is white, in the infrared as in water vapour. The coloured tables keep to blue
and brown-yellow, which stay apart for people with any of the common colour deficiencies, and lightness
rises steadily as it gets colder within each coloured part.
"""

from dataclasses import dataclass

import numpy as np

from chansim.errors import ChansimError

# brightness temperature shown, by kind of channel [K]
RANGES = {"window": (190.0, 310.0), "water_vapour": (200.0, 280.0), "shortwave": (200.0, 330.0)}
_KINDS_FROM_UM = ((5.0, "shortwave"), (5.3, "window"), (7.8, "water_vapour"), (np.inf, "window"))
_STEPS = 512


@dataclass(frozen=True)
class ColourTable:
    """Colours over temperature.

    name, words : what it is called, what it shows
    stops : ((temperature [K] or None, lightness, chroma, hue [degrees]), ...) from cold to warm; a
        temperature of None stands for the cold and the warm end of whatever range is drawn
    """

    name: str
    words: str
    stops: tuple


TABLES = {
    table.name: table
    for table in (
        ColourTable("grey", "grey, cold white", ((None, 99, 0, 0), (None, 3, 0, 0))),
        ColourTable(
            "cold-tops",
            "grey; cloud tops below 240 K in blue, below 215 K in brown to yellow",
            ((None, 96, 28, 100), (207.0, 60, 58, 75), (215.0, 25, 30, 45),
             (215.0, 90, 12, 225), (228.0, 55, 40, 270), (240.0, 24, 45, 290),
             (240.0, 86, 0, 0), (None, 4, 0, 0)),
        ),
        ColourTable(
            "dry-to-moist",
            "water vapour: dry brown, moist blue to white",
            ((None, 98, 2, 240), (220.0, 80, 20, 247), (236.0, 65, 30, 257), (244.0, 54, 4, 255),
             (246.0, 51, 4, 70), (254.0, 40, 40, 65), (None, 14, 18, 45)),
        ),
        ColourTable(
            "colder-warmer",
            "difference: blue where negative, brown where positive",
            ((None, 28, 42, 285), (-0.5, 62, 32, 260), (0.0, 97, 0, 0), (0.5, 62, 48, 75), (None, 28, 38, 45)),
        ),
    )
}  # fmt: skip
DIFFERENCE_TABLE = "colder-warmer"


def channel_kind(wavelength_um):
    """ "shortwave", "water_vapour" or "window": how a picture at a wavelength [um] is scaled."""
    return next(kind for limit, kind in _KINDS_FROM_UM if wavelength_um < limit)


def temperature_range(kind):
    """Coldest and warmest brightness temperature shown for a kind of channel [K]; ChansimError if unknown."""
    try:
        return RANGES[kind]
    except KeyError:
        raise ChansimError(f"kind of channel {kind!r}: use one of {', '.join(RANGES)}") from None


def table_for(colours):
    """A ColourTable by its name; "auto" is the grey convention. ChansimError lists the names."""
    name = "grey" if colours == "auto" else colours
    if name not in TABLES:
        raise ChansimError(f"colours {name!r}: use auto or one of {', '.join(TABLES)}")
    return TABLES[name]


def colour_map(colours, limits):
    """A matplotlib colormap over a range of temperature.

    Parameters
    ----------
    colours : name of a table, or "auto"
    limits : (coldest, warmest) [K]; for differences (-limit, limit)

    Returns
    -------
    matplotlib.colors.ListedColormap, transparent where there is no value

    Raises
    ------
    ChansimError : unknown table, or an empty range
    """
    from matplotlib.colors import ListedColormap

    table = table_for(colours)
    cold, warm = (float(v) for v in limits)
    if not warm > cold:
        raise ChansimError(f"range {cold:g} to {warm:g} K: the second value must be the warmer one")
    middle = cold + (np.arange(_STEPS) + 0.5) / _STEPS * (warm - cold)
    srgb = np.clip(srgb_from_lab(_interpolated(table, middle, cold, warm)), 0.0, 1.0)
    return ListedColormap(srgb, table.name).with_extremes(bad=(0.0, 0.0, 0.0, 0.0))


def _interpolated(table, temperature, cold, warm):
    """L*, a*, b* at temperatures; stops at one temperature make a sharp edge."""
    places = [stop[0] for stop in table.stops]
    if table.name == DIFFERENCE_TABLE:
        places = [None if p is None else p * warm for p in places]
    places = np.array([cold, *places[1:-1], warm], dtype=float)
    values = np.array([stop[1:] for stop in table.stops], dtype=float)
    lab = np.column_stack([values[:, 0], values[:, 1] * np.cos(np.radians(values[:, 2])),
                           values[:, 1] * np.sin(np.radians(values[:, 2]))])  # fmt: skip
    place = np.searchsorted(places[1:-1], temperature, side="right")
    width = np.maximum(places[1:] - places[:-1], 1e-9)
    # a range that does not hold all stops cuts the table, it does not squeeze it
    share = np.clip((temperature - places[place]) / width[place], 0.0, 1.0)[:, None]
    return (1.0 - share) * lab[place] + share * lab[place + 1]


def srgb_from_lab(lab):
    """sRGB of CIELAB colours (D65), not clipped to what a screen can show.

    Parameters
    ----------
    lab : array (..., 3), L* a* b*

    Returns
    -------
    array (..., 3), 0 to 1 within the gamut

    Source: CIE 15:2004 (CIELAB), IEC 61966-2-1 (sRGB).
    """
    lab = np.asarray(lab, dtype=float)
    f_y = (lab[..., 0] + 16.0) / 116.0
    f = np.stack([f_y + lab[..., 1] / 500.0, f_y, f_y - lab[..., 2] / 200.0], axis=-1)
    xyz = np.where(f > 6.0 / 29.0, f**3, 3.0 * (6.0 / 29.0) ** 2 * (f - 4.0 / 29.0)) * _WHITE_D65
    linear = xyz @ _LINEAR_SRGB_FROM_XYZ.T
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * np.maximum(linear, 0.0) ** (1 / 2.4) - 0.055)


_WHITE_D65 = np.array([0.95047, 1.0, 1.08883])
_LINEAR_SRGB_FROM_XYZ = np.array(
    [[3.2404542, -1.5371385, -0.4985314], [-0.9692660, 1.8760108, 0.0415560], [0.0556434, -0.2040259, 1.0572252]]
)
