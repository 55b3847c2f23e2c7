"""The invented clouds, each a sheet with a top, a base, a water path and a share of the sky.

Positions in degrees; pressure in Pa; paths in kg/m2 within the cloud. `ground` is what
`make_demo_scene.describe_ground` returns.
"""

from dataclasses import dataclass

import numpy as np
from invented_air import LOW_CENTRE, dry_slot, dryness, front_distance, unwound
from texture import bell, cells, ramp, smooth_noise, step, streaks, warped

# convective towers: degrees_east, degrees_north, strength, radius of the anvil in degrees
_TOWERS = (
    (36.2, 0.6, 1.00, 2.5), (34.1, -0.9, 0.95, 2.2), (38.3, -1.7, 0.90, 1.9), (35.3, 2.9, 0.85, 1.8),
    (32.0, 1.3, 0.70, 1.9), (37.1, -3.9, 0.75, 1.5), (40.9, 1.7, 0.80, 1.3), (29.9, -2.6, 0.60, 1.3),
    (43.9, -2.4, 0.85, 1.0), (26.6, 0.2, 0.55, 0.9), (20.4, 5.2, 0.70, 1.0), (53.8, -3.6, 0.75, 0.9),
)  # fmt: skip


@dataclass
class Cloud:
    """One kind of cloud.

    path : condensate in the cloud [kg m-2]
    fraction : share of the sky [1]
    top, base : [Pa]
    upper, lower : exponents of the profile towards top and base; small = full up to the edge
    precipitation : rain and snow [kg m-2]
    overshoot : depth of the domes above the anvil, 0 to 1
    """

    path: np.ndarray
    fraction: np.ndarray
    top: np.ndarray
    base: np.ndarray
    upper: float = 1.0
    lower: float = 1.0
    precipitation: np.ndarray | float = 0.0
    overshoot: np.ndarray | float = 0.0


def all_clouds(x, y, ground):
    """{name: Cloud} of the scene."""
    return {
        "towers": towers(x, y),
        "anvils": anvils(x, y),
        "showers": showers(x, y, ground),
        "thin cirrus": thin_cirrus(x, y),
        "jet cirrus": jet_cirrus(x, y),
        "frontal cloud": frontal_cloud(x, y),
        "frontal cirrus": frontal_cirrus(x, y),
        "open cells": open_cells(x, y, ground),
        "stratocumulus": stratocumulus(x, y, ground),
        "trade cumulus": trade_cumulus(x, y, ground),
        "fog": fog(x, y, ground),
    }


def _tower_distance(x, y, tower, downwind_stretch):
    """Distance from a tower; towards the west, where the upper wind blows, measured in longer units."""
    dx, dy = x - tower[0], y - tower[1]
    dx, dy = dx - 0.25 * dy, dy + 0.12 * dx
    return np.hypot(dx / np.where(dx < 0.0, downwind_stretch, 0.8), dy)


def towers(x, y):
    """Deep cores with rain, domes where they overshoot."""
    x, y = warped(x, y, wavelength=1.6, amplitude=0.09, seed=101)
    core, dome = np.zeros_like(x), np.zeros_like(x)
    for tower in _TOWERS:
        distance = _tower_distance(x, y, tower, 1.0)
        core = np.maximum(core, tower[2] * np.exp(-((distance / (0.30 + 0.28 * tower[3])) ** 2.5)))
        dome = np.maximum(dome, step(tower[2], 0.72, 0.15) * tower[2] * np.exp(-((distance / 0.34) ** 2)))
    core = np.clip(core * np.exp(0.25 * smooth_noise(x, y, wavelength=1.5, seed=103, octaves=3)), 0.0, 1.2)
    fraction = ramp(core, 0.12, 0.42)
    top = 15500.0 - 4300.0 * np.clip(core, 0.0, 1.0) - 2900.0 * dome
    return Cloud(3.2 * core, fraction, top, np.full_like(x, 94500.0), 0.35, 0.8, 3.3 * core, dome)


def anvils(x, y):
    """Spreading ice around the towers, thick inside, ragged and thin at the rim."""
    u, v = warped(x, y, wavelength=3.2, amplitude=0.38, seed=111)
    depth = np.zeros_like(x)
    for tower in _TOWERS:
        distance = _tower_distance(u, v, tower, 1.7)
        depth = np.maximum(depth, tower[2] * np.exp(-((distance / (0.9 * tower[3])) ** 1.2)))
    ripples = streaks(x, y, direction=8.0, length=5.0, width=1.6, seed=113)
    depth = np.clip(depth * (1.0 + 0.22 * ripples), 0.0, 1.0)
    path = 0.003 + 1.4 * depth**2.2
    fraction = ramp(depth, 0.03, 0.30)
    top = 20500.0 - 8200.0 * depth + 500.0 * smooth_noise(x, y, wavelength=2.5, seed=115)
    return Cloud(path, fraction, top, top + 3500.0 + 13000.0 * depth, 0.6, 1.0, 0.35 * depth**2)


def showers(x, y, ground):
    """Scattered deep and middling convection of the tropics."""
    u, v = warped(x, y, wavelength=2.0, amplitude=0.15, seed=121)
    lumps = smooth_noise(u, v, wavelength=2.6, seed=123, octaves=3)
    activity = smooth_noise(x, y, wavelength=14.0, seed=124, octaves=2)
    place = (1.0 - step(y, 8.0, 6.0)) * (1.0 - dryness(x, y))
    strength = np.clip((lumps + 0.7 * activity - 1.25) / 2.1, 0.0, 1.0) * place
    top = 62000.0 - 46000.0 * np.clip(strength * 1.7, 0.0, 1.0)
    fraction = 0.95 * ramp(strength, 0.02, 0.28)
    return Cloud(0.05 + 2.2 * strength**1.5, fraction, top, np.full_like(x, 94000.0), 0.7, 0.8, 0.5 * strength)


def thin_cirrus(x, y):
    """Wispy ice over the warm sea in the south-east, 5 to 30 g/m2."""
    wisps = streaks(x, y, direction=17.0, length=9.0, width=2.6, seed=131)
    place = bell(x - 0.8 * (y - 6.0), y, 56.0, 7.0, 12.0, 5.5, power=3.0)
    amount = place * np.clip(0.55 + 0.42 * wisps, 0.0, 1.6)
    top = 15000.0 + 900.0 * smooth_noise(x, y, wavelength=6.0, seed=133) + 800.0 * (1.0 - place)
    return Cloud(0.005 + 0.014 * amount, ramp(amount, 0.06, 0.50), top, top + 4200.0)


def jet_cirrus(x, y):
    """A streaky band along the subtropical jet, sharp on its poleward side."""
    x1, y1 = warped(x, y, wavelength=20.0, amplitude=0.7, seed=141)
    across = y1 - (28.0 + 3.0 * np.sin((x1 - 44.0) / 8.5) + 0.16 * (x1 - 52.0))
    band = step(across, -3.6, 3.2) * (1.0 - step(across, 0.2, 0.7)) * step(x, 37.0, 6.0)
    wisps = streaks(x, y, direction=24.0, length=6.5, width=1.8, seed=143)
    amount = np.clip(band * (0.62 + 0.40 * wisps), 0.0, 1.5)
    top = 21000.0 + 1200.0 * smooth_noise(x, y, wavelength=7.0, seed=145)
    return Cloud(0.006 + 0.075 * amount**2, ramp(amount, 0.08, 0.45), top, top + 6500.0)


def _front(x, y):
    """Degrees on the cold side of the front, position along it before the stirring, distance from the low."""
    u, v = warped(x, y, wavelength=4.0, amplitude=0.18, seed=151)
    return front_distance(u, v), unwound(u, v)[0], np.hypot((x - LOW_CENTRE[0]) * 0.78, y - LOW_CENTRE[1])


def ascent(x, y):
    """Strength of the rising motion along the fronts and in the comma head [1]."""
    distance, along, radius = _front(x, y)
    east = step(along, LOW_CENTRE[0] + 1.0, 6.0)
    width = 1.15 + 1.5 * east
    band = np.exp(-(np.abs((distance + 0.55 + 0.9 * east) / width) ** 2.6))
    ends = step(along, 4.0, 9.0) * (1.0 - step(along, 38.0, 9.0))
    north = 1.0 - 0.45 * step(-radius, -2.2, 1.5)
    rope = smooth_noise(*unwound(x, y), wavelength=5.0, seed=153, octaves=5, persistence=0.65)
    return np.clip(band * ends * north * np.exp(0.30 * rope), 0.0, 1.2) * (1.0 - dry_slot(x, y))


def frontal_cloud(x, y):
    """Deep layered cloud with rain and snow."""
    strength = ascent(x, y)
    bumps = smooth_noise(*unwound(x, y), wavelength=4.0, seed=155, octaves=4, persistence=0.7)
    top = np.clip(56000.0 - 26000.0 * step(strength + 0.10 * bumps, 0.50, 0.80) + 2200.0 * bumps, 26000.0, 70000.0)
    fraction = ramp(strength, 0.08, 0.40)
    path = 0.06 + 1.25 * strength**2
    return Cloud(path, fraction, top, np.full_like(x, 92000.0), 0.7, 0.6, 0.85 * strength**2)


def frontal_cirrus(x, y):
    """The high cloud that spreads ahead of the front, fibrous along the flow."""
    distance, along, radius = _front(x, y)
    fibres = smooth_noise(*(c * s for c, s in zip(unwound(x, y), (0.35, 1.5))), wavelength=2.6, seed=157, octaves=5)
    ahead = step(-distance, 0.2, 1.6) * (1.0 - step(-distance, 4.6, 4.5))
    ends = step(along, 12.0, 9.0) * (1.0 - step(along, 40.0, 9.0)) * step(radius, 2.5, 2.0) * step(y, 26.0, 5.0)
    amount = np.clip(ahead * ends * (0.75 + 0.35 * fibres), 0.0, 1.5)
    top = 24000.0 + 1300.0 * smooth_noise(x, y, wavelength=5.0, seed=159)
    return Cloud(0.01 + 0.14 * amount**1.6, ramp(amount, 0.06, 0.40), top, top + 8000.0)


def open_cells(x, y, ground):
    """Convective cells in the cold air behind the front, over the sea."""
    u, v = warped(x, y, wavelength=3.0, amplitude=0.15, seed=161)
    rims = np.clip(1.20 - 1.5 * cells(0.8 * u, v, size=1.7, seed=163), 0.0, 1.0)
    patches = 0.75 + 0.35 * smooth_noise(x, y, wavelength=6.0, seed=165)
    grain = 1.0 + 0.3 * smooth_noise(x, y, wavelength=1.4, seed=167, octaves=2)
    cold = step(front_distance(x, y), 3.2, 2.4) * step(y, 27.0, 4.0) * (1.0 - step(x, 36.0, 3.0))
    cold = cold * (1.0 - ground["land"]) * (1.0 - 0.9 * dry_slot(x, y))
    amount = np.clip(rims * cold * patches * grain, 0.0, 1.0)
    top = 78000.0 - 18000.0 * amount - 4500.0 * step(y, 37.0, 5.0)
    base = np.full_like(x, 92500.0)
    return Cloud(0.05 + 0.20 * amount, 0.9 * ramp(amount, 0.10, 0.80), top, base, 0.6, 0.9, 0.02 * amount)


def stratocumulus_area(x, y, ground):
    """1 inside the deck, 0 outside [1]."""
    u, v = warped(x, y, wavelength=7.0, amplitude=0.65, seed=171)
    return bell(u - 0.35 * (v - 18.0), v, 25.0, 17.8, 11.5, 6.4, power=3.5) * (1.0 - step(ground["land"], 0.35, 0.3))


def inversion_pressure(x, y):
    """[Pa], where the marine layer ends: about 920 hPa near the coast, 880 hPa far offshore."""
    return 92000.0 - 190.0 * np.clip(34.0 - x, 0.0, 20.0) + 250.0 * smooth_noise(x, y, wavelength=8.0, seed=173)


def stratocumulus(x, y, ground):
    """Closed cells under the inversion, breaking up to the south-west, 50 to 150 g/m2."""
    area = stratocumulus_area(x, y, ground)
    closed = cells(x, y, size=1.5, seed=175)
    bands = smooth_noise(x, y, wavelength=5.0, seed=177, octaves=4)
    solid = ramp(area + 0.10 * bands, 0.30, 0.75)
    clear_rims = (1.0 - solid) * 0.9 * (1.0 - closed)
    fraction = np.clip(ramp(area + 0.12 * bands, 0.14, 0.42) * (1.0 - clear_rims), 0.0, 1.0)
    path = np.clip(0.098 + 0.030 * bands + 0.035 * (closed - 0.5), 0.052, 0.148)
    top = inversion_pressure(x, y) + 150.0
    return Cloud(path, fraction, top, top + 3300.0, 0.35, 1.0)


def trade_cumulus(x, y, ground):
    """Small cumulus of the warm seas."""
    lumps = smooth_noise(*warped(x, y, wavelength=3.0, amplitude=0.3, seed=181), wavelength=1.7, seed=183, octaves=3)
    groups = smooth_noise(x, y, wavelength=9.0, seed=185, octaves=3)
    place = (1.0 - step(y, 27.0, 6.0)) * (1.0 - ground["land"]) * (1.0 - stratocumulus_area(x, y, ground))
    amount = np.clip((0.7 * lumps + 0.6 * groups - 0.25) / 2.0, 0.0, 1.0) * place
    top = 87500.0 - 11000.0 * amount
    return Cloud(0.03 + 0.08 * amount, 0.55 * ramp(amount, 0.01, 0.32), top, np.full_like(x, 94800.0), 0.8, 0.8)


def fog(x, y, ground):
    """Fog and low stratus in a basin of the continent, with fingers into the valleys."""
    u, v = warped(x, y, wavelength=3.5, amplitude=0.55, seed=191)
    basin = bell(u, v, 64.0, 30.6, 4.2, 1.9, power=4.0) * step(ground["land"], 0.8, 0.2)
    basin = basin * (1.0 - step(ground["orography"], 900.0, 200.0))
    base = ground["surface_pressure"] + 700.0
    return Cloud(0.02 + 0.055 * basin, ramp(basin, 0.20, 0.55), base - 3400.0, base, 0.5, 0.3)
