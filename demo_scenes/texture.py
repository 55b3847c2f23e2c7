"""Smooth deterministic noise as a function of position, so that any grid samples the same weather."""

import numpy as np

_WAVES = 28  # plane waves per octave; fewer show as a lattice


def smooth_noise(x, y, *, wavelength, seed, octaves=4, persistence=0.6):
    """Isotropic random field of mean 0 and variance about 1: plane waves of random direction and phase.

    Parameters
    ----------
    x, y : arrays of one shape, positions in one unit
    wavelength : of the largest waves, in that unit; each octave halves it
    seed : integer, another field for each
    octaves : number of scales
    persistence : amplitude of an octave relative to the one before

    Returns
    -------
    array of that shape
    """
    field = np.zeros(np.shape(x))
    variance = 0.0
    for octave in range(octaves):
        amplitude = persistence**octave
        random = np.random.default_rng([seed, octave]).random((3, _WAVES))
        direction, phase = 2.0 * np.pi * random[:2]
        # lengths spread over an octave, or the field would ring at one length
        wavenumber = 2.0 * np.pi / (wavelength / 2.0**octave) * 2.0 ** (random[2] - 0.5)
        for angle, shift, number in zip(direction, phase, wavenumber):
            field += amplitude * np.cos(number * (np.cos(angle) * x + np.sin(angle) * y) + shift)
        variance += amplitude**2 * _WAVES / 2.0
    return field / np.sqrt(variance)


def warped(x, y, *, wavelength, amplitude, seed):
    """Positions displaced by noise: straight edges and ellipses become ragged.

    Parameters
    ----------
    x, y, wavelength, seed : see `smooth_noise`
    amplitude : root-mean-square displacement, in the unit of x

    Returns
    -------
    x, y : arrays
    """
    return (
        x + amplitude * smooth_noise(x, y, wavelength=wavelength, seed=seed),
        y + amplitude * smooth_noise(x, y, wavelength=wavelength, seed=seed + 1),
    )


def cells(x, y, *, size, seed):
    """Cellular pattern: 1 in the middle of closed cells, falling to 0 along the rims between them.

    Parameters
    ----------
    x, y, seed : see `smooth_noise`
    size : mean distance of cell centres, in the unit of x

    Returns
    -------
    array
    """
    x, y = warped(x, y, wavelength=6.0 * size, amplitude=0.3 * size, seed=seed + 50)
    column, row = np.floor(x / size).astype(int), np.floor(y / size).astype(int)
    nearest, second = np.full(np.shape(x), np.inf), np.full(np.shape(x), np.inf)
    for i in (-1, 0, 1):
        for j in (-1, 0, 1):
            centre_x = (column + i + _scatter(column + i, row + j, seed)) * size
            centre_y = (row + j + _scatter(column + i, row + j, seed + 1)) * size
            distance = np.hypot(x - centre_x, y - centre_y)
            second = np.minimum(second, np.maximum(distance, nearest))
            nearest = np.minimum(nearest, distance)
    return np.clip((second - nearest) / (0.7 * size), 0.0, 1.0)


def _scatter(i, j, seed):
    """A number in 0.15..0.85 that looks random, the same for the same cell everywhere."""
    bits = (i.astype(np.int64) * 73856093) ^ (j.astype(np.int64) * 19349663) ^ (seed * 83492791)
    bits = (bits * 2654435761) & 0xFFFFFFFF
    bits = ((bits ^ (bits >> 15)) * 2246822519) & 0xFFFFFFFF
    return 0.15 + 0.7 * ((bits ^ (bits >> 13)) & 0xFFFFFF) / float(0xFFFFFF)


def step(value, edge, width):
    """Smooth step from 0 (value well below edge) to 1 over about `width`."""
    return 0.5 * (1.0 + np.tanh(2.0 * (value - edge) / width))


def ramp(value, low, high):
    """0 below `low`, 1 above `high`, smooth in between; unlike `step` exactly 0 and 1 outside."""
    share = np.clip((value - low) / (high - low), 0.0, 1.0)
    return share * share * (3.0 - 2.0 * share)


def bell(x, y, centre_x, centre_y, radius_x, radius_y, power=2.0):
    """exp(-r**power) with r in units of the radii."""
    return np.exp(-(np.hypot((x - centre_x) / radius_x, (y - centre_y) / radius_y) ** power))


def streaks(x, y, *, direction, length, width, seed):
    """Noise drawn out along a direction [degrees anticlockwise from +x]."""
    angle = np.radians(direction)
    along = (np.cos(angle) * x + np.sin(angle) * y) / length
    across = (-np.sin(angle) * x + np.cos(angle) * y) / width
    along, across = warped(along, across, wavelength=3.0, amplitude=0.25, seed=seed + 70)
    return smooth_noise(along, across, wavelength=1.0, seed=seed, octaves=4, persistence=0.55)
