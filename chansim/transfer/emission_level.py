"""Where the air is as warm as the picture says."""

import math

import numpy as np
from numba import njit

HIGHEST = 5000.0  # Pa: the search for the coldest level starts below


@njit(cache=True)
def emission_pressure(brightness, pressure, temperature, surface_pressure, out):
    """Pressure at which the air is as warm as the brightness temperature, going down from the coldest level.

    Parameters
    ----------
    brightness : (channels, columns) [K]
    pressure : (1 or columns, levels), top -> surface [Pa]; temperature : (columns, levels) [K]
    surface_pressure : (columns,) [Pa]
    out : (channels, columns) result [Pa]: the coldest level where the picture is colder still, the surface where all
        air is colder than the picture, NaN where there is no picture
    """
    for c in range(temperature.shape[0]):
        p = pressure[c if pressure.shape[0] > 1 else 0]
        lowest = -1
        coldest = -1
        for k in range(p.size):
            if p[k] < surface_pressure[c]:
                lowest = k
                if p[k] >= HIGHEST and (coldest < 0 or temperature[c, k] < temperature[c, coldest]):
                    coldest = k
        for channel in range(brightness.shape[0]):
            value = brightness[channel, c]
            if coldest < 0 or not value == value:
                out[channel, c] = np.nan
                continue
            out[channel, c] = p[coldest] if value <= temperature[c, coldest] else surface_pressure[c]
            if value <= temperature[c, coldest]:
                continue
            for k in range(coldest + 1, lowest + 1):
                if temperature[c, k] >= value:
                    w = (value - temperature[c, k - 1]) / (temperature[c, k] - temperature[c, k - 1])
                    out[channel, c] = p[k - 1] * math.exp(w * math.log(p[k] / p[k - 1]))
                    break
