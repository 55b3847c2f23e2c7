"""Colour tables: cold is white, colours stay apart for people with colour deficiencies."""

import numpy as np
import pytest

from chansim.errors import ChansimError
from chansim.imaging.colours import (
    RANGES,
    TABLES,
    channel_kind,
    colour_map,
    srgb_from_lab,
    table_for,
    temperature_range,
)

# Machado, Oliveira and Fernandes 2009 (IEEE Trans. Vis. Comput. Graph. 15), severity 1.0, linear RGB
DEFICIENCIES = {
    "none": np.eye(3),
    "protanopia": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "deuteranopia": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
}
# a just noticeable difference in CIELAB is about 2.3 (Mahy, Van Eycken and Oosterlinck 1994, Color Res. Appl. 19)
JUST_NOTICEABLE = 2.3
# parts within which lightness has to rise steadily as it gets colder [K]
PARTS = {
    "grey": ((190.0, 310.0), [(190.0, 310.0)]),
    "cold-tops": ((190.0, 310.0), [(190.0, 214.9), (215.1, 239.9), (240.1, 310.0)]),
    "dry-to-moist": ((200.0, 280.0), [(200.0, 280.0)]),
}


def colours_at(name, limits, temperatures):
    share = (np.asarray(temperatures) - limits[0]) / (limits[1] - limits[0])
    return colour_map(name, limits)(share)[:, :3]


def lab_from_srgb(srgb):
    """CIELAB (D65) of sRGB: IEC 61966-2-1 and CIE 15:2004, written down apart from the package."""
    linear = np.where(srgb <= 0.04045, srgb / 12.92, ((srgb + 0.055) / 1.055) ** 2.4)
    return lab_from_linear(linear)


def lab_from_linear(linear):
    to_xyz = np.array(
        [[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]]
    )
    xyz = np.clip(linear, 0.0, 1.0) @ to_xyz.T / np.array([0.95047, 1.0, 1.08883])
    f = np.where(xyz > (6 / 29) ** 3, np.cbrt(xyz), xyz / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.stack([116 * f[:, 1] - 16, 500 * (f[:, 0] - f[:, 1]), 200 * (f[:, 1] - f[:, 2])], axis=1)


def seen_by(deficiency, srgb):
    """CIELAB of colours as someone with a deficiency sees them."""
    linear = np.where(srgb <= 0.04045, srgb / 12.92, ((srgb + 0.055) / 1.055) ** 2.4)
    return lab_from_linear(linear @ DEFICIENCIES[deficiency].T)


def test_srgb_of_lab_against_published_values():
    # Lindbloom's CIE colour calculator, D65, sRGB: primaries and middle grey (published, rounded to 0.01)
    lab = [[53.24, 80.09, 67.20], [87.73, -86.18, 83.18], [32.30, 79.19, -107.86], [100, 0, 0], [53.585, 0, 0]]
    srgb = [[1, 0, 0], [0, 1, 0], [0, 0, 1], [1, 1, 1], [0.50196] * 3]
    assert np.allclose(srgb_from_lab(lab), srgb, atol=2e-3)


@pytest.mark.parametrize("name", TABLES)
@pytest.mark.parametrize("deficiency", DEFICIENCIES)
def test_lightness_falls_steadily_with_warmth(name, deficiency):
    if name == "colder-warmer":
        limits, parts = (-10.0, 10.0), [(0.05, -9.95), (0.05, 9.95)]  # darker away from zero
    else:
        limits, parts = PARTS[name]
    for start, end in parts:
        lightness = seen_by(deficiency, colours_at(name, limits, np.linspace(start, end, 40)))[:, 0]
        assert np.all(np.diff(lightness) < 0.0), (start, end)
        assert lightness[0] - lightness[-1] > 35.0


@pytest.mark.parametrize("deficiency", DEFICIENCIES)
@pytest.mark.parametrize(("name", "step"), [("cold-tops", 2.0), ("dry-to-moist", 2.5)])
def test_neighbouring_steps_are_told_apart(name, step, deficiency):
    limits, parts = PARTS[name]
    for start, end in parts:
        if end > 300.0:
            continue  # the grey part shows the ground, not the colours
        lab = seen_by(deficiency, colours_at(name, limits, np.arange(start, end, step)))
        assert np.linalg.norm(np.diff(lab, axis=0), axis=1).min() > JUST_NOTICEABLE


@pytest.mark.parametrize("deficiency", DEFICIENCIES)
def test_very_cold_and_cold_tops_are_never_confused(deficiency):
    limits = (190.0, 310.0)
    very_cold = seen_by(deficiency, colours_at("cold-tops", limits, np.arange(190.5, 214.5, 0.5)))
    cold = seen_by(deficiency, colours_at("cold-tops", limits, np.arange(215.5, 239.5, 0.5)))
    grey = seen_by(deficiency, colours_at("cold-tops", limits, np.arange(240.5, 310.0, 0.5)))
    for first, second in ((very_cold, cold), (cold, grey), (very_cold, grey)):
        distance = np.linalg.norm(first[:, None] - second[None], axis=2)
        assert distance.min() > 2.0 * JUST_NOTICEABLE


@pytest.mark.parametrize("name", TABLES)
def test_tables_lie_within_what_a_screen_shows(name):
    from chansim.imaging.colours import _interpolated

    limits = (-10.0, 10.0) if name == "colder-warmer" else PARTS[name][0]
    table = TABLES[name]
    lab = _interpolated(table, np.linspace(*limits, 500), *limits)
    assert srgb_from_lab(lab).min() >= 0.0 and srgb_from_lab(lab).max() <= 1.0


@pytest.mark.parametrize("kind", RANGES)
def test_cold_is_white_and_warm_is_black(kind):
    # common practice of the trade, for infrared and water vapour alike
    limits = temperature_range(kind)
    cold, warm = colours_at("auto", limits, [limits[0] + 0.1, limits[1] - 0.1])
    assert cold.min() > 0.95 and warm.max() < 0.1
    assert np.ptp(cold) < 0.01 and np.ptp(warm) < 0.01


def test_ranges_and_kinds():
    assert temperature_range("window") == (190.0, 310.0) and temperature_range("water_vapour") == (200.0, 280.0)
    assert [channel_kind(w) for w in (3.9, 6.2, 7.35, 8.6, 13.3)] == [
        "shortwave", "water_vapour", "water_vapour", "window", "window",
    ]  # fmt: skip


def test_colours_stay_at_their_temperature_in_another_range():
    wide = colours_at("cold-tops", (190.0, 310.0), [200.0, 212.0, 230.0, 238.0])
    narrow = colours_at("cold-tops", (180.0, 300.0), [200.0, 212.0, 230.0, 238.0])
    assert np.abs(wide - narrow)[1:].max() < 0.03
    warm_only = colours_at("cold-tops", (250.0, 300.0), np.linspace(250.5, 299.5, 9))
    assert np.ptp(warm_only, axis=1).max() < 0.01


def test_what_is_missing_is_transparent():
    colours = colour_map("grey", (190.0, 310.0))
    assert colours(np.ma.masked_invalid([np.nan]))[0, 3] == 0.0


def test_unknown_names_and_empty_ranges():
    with pytest.raises(ChansimError, match="cold-tops"):
        table_for("rainbow")
    with pytest.raises(ChansimError, match="warmer"):
        colour_map("grey", (300.0, 200.0))
    with pytest.raises(ChansimError, match="water_vapour"):
        temperature_range("visible")
