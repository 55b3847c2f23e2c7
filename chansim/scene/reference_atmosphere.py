"""The reference atmosphere: what fills a column where the model has nothing.

Five AFGL 1986 model atmospheres (Anderson et al. 1986, AFGL-TR-86-0110), blended continuously in latitude
and season. `tropical` holds within 15 degrees of the equator all year, `midlatitude` at 45 and `subarctic`
from 60 degrees to the pole, where the season swings as a cosine between the middle of January and the
middle of July. Since both hemispheres share the tropics, no seam runs along the equator or any date.
"""

import functools
from pathlib import Path

import numpy as np

from chansim.errors import DataError, SceneError

DATA_FILE = Path(__file__).parents[1] / "data" / "reference_atmospheres.nc"
ATMOSPHERES = (
    "tropical",
    "midlatitude_summer",
    "midlatitude_winter",
    "subarctic_summer",
    "subarctic_winter",
)
GASES = (
    "water_mole_fraction",
    "ozone_mole_fraction",
    "carbon_dioxide_mole_fraction",
    "nitrous_oxide_mole_fraction",
    "methane_mole_fraction",
    "carbon_monoxide_mole_fraction",
)
_ANCHORS = (15.0, 45.0, 60.0)  # degrees of latitude of the AFGL atmospheres
_MID_JULY = 196.0  # day of the year
_YEAR = 365.25  # days


@functools.cache
def reference_table():
    """The packaged profiles: dict of arrays.

    `pressure` (level,) [Pa], top to surface; `temperature` [K] and the gases [mole fraction]
    (atmosphere, level) in the order of `ATMOSPHERES`.
    """
    import netCDF4

    try:
        with netCDF4.Dataset(DATA_FILE) as file:
            names = ["pressure", "temperature", *GASES]
            return {name: np.asarray(file.variables[name][:], dtype=float) for name in names}
    except (OSError, KeyError) as error:
        raise DataError(
            f"{DATA_FILE}: the reference atmospheres are missing or damaged ({error}); reinstall chansim or "
            "run `python -m chansim.scene.build_reference`"
        ) from error


def summer_share(latitude, day_of_year):
    """Share of the summer atmosphere: 1 in mid July north and mid January south of the equator.

    Parameters
    ----------
    latitude : array [degrees_north]
    day_of_year : array or scalar, 1 to 366, or None for the mean of the year

    Returns
    -------
    array [1]
    """
    if day_of_year is None:
        return np.full(np.shape(latitude), 0.5)
    north = 0.5 * (1.0 + np.cos(2.0 * np.pi * (np.asarray(day_of_year, dtype=float) - _MID_JULY) / _YEAR))
    return np.where(np.asarray(latitude) >= 0.0, north, 1.0 - north)


def atmosphere_weights(latitude, day_of_year):
    """Weight of each reference atmosphere.

    Parameters
    ----------
    latitude : array of any shape [degrees_north]
    day_of_year : number, array of the same shape, or None for the mean of the year

    Returns
    -------
    array (..., atmosphere), non-negative, sum 1, in the order of `ATMOSPHERES` [1]

    Raises
    ------
    SceneError : a latitude beyond the poles or not a number
    """
    latitude = np.asarray(latitude, dtype=float)
    if not np.all(np.abs(latitude) <= 90.0):
        raise SceneError("reference atmosphere: latitude must lie within -90 and 90 degrees and not be NaN")
    distance = np.abs(latitude)
    to_midlatitude = _smooth_step(distance, _ANCHORS[0], _ANCHORS[1])
    to_subarctic = _smooth_step(distance, _ANCHORS[1], _ANCHORS[2])
    summer = summer_share(latitude, day_of_year)
    midlatitude = to_midlatitude * (1.0 - to_subarctic)
    return np.stack(
        [
            1.0 - to_midlatitude,
            midlatitude * summer,
            midlatitude * (1.0 - summer),
            to_subarctic * summer,
            to_subarctic * (1.0 - summer),
        ],
        axis=-1,
    )


def reference_profile(latitude, day_of_year=None):
    """Reference atmosphere at places and a day of the year.

    Above 0.05 hPa and below 1100 hPa there is nothing: who interpolates holds the end values. Below the
    lowest level of the AFGL atmospheres (about 1013 hPa) their lowest values are held.

    Parameters
    ----------
    latitude : scalar or array [degrees_north]
    day_of_year : number or array like `latitude`; None is the mean of the year

    Returns
    -------
    dict of arrays: `pressure` (level,) [Pa], top to surface; `temperature` (..., level) [K] and the mole
    fractions named in `GASES` (..., level) [1], where ... is the shape of `latitude`

    Raises
    ------
    SceneError : latitude out of range
    DataError : the packaged file is missing

    Source: AFGL 1986; CO2, CH4, N2O scaled to 420 ppm, 1.92 ppm, 337 ppb at the surface.
    """
    table = reference_table()
    weights = atmosphere_weights(latitude, day_of_year)
    profile = {name: weights @ table[name] for name in ("temperature", *GASES)}
    return {"pressure": table["pressure"].copy(), **profile}


def reference_at_pressure(name, pressure, latitude, day_of_year=None):
    """One quantity of the reference atmosphere at given pressures, level by level.

    Parameters
    ----------
    name : "temperature" or one of `GASES`
    pressure : array (level,) or (level, ...) [Pa]
    latitude : array (...) [degrees_north]
    day_of_year : number or None

    Returns
    -------
    array (level, ...); end values held outside 0.05-1100 hPa
    """
    table = reference_table()
    log_grid = np.log(table["pressure"])
    latitude = np.asarray(latitude, dtype=float)
    log_pressure = np.log(np.asarray(pressure, dtype=float))
    if log_pressure.ndim == 1:
        log_pressure = log_pressure.reshape((-1,) + (1,) * latitude.ndim)
    weights = atmosphere_weights(latitude, day_of_year)
    step = log_grid[1] - log_grid[0]
    position = np.clip((log_pressure - log_grid[0]) / step, 0.0, len(log_grid) - 1.0)
    lower = np.minimum(position.astype(int), len(log_grid) - 2)
    share = position - lower
    total = 0.0
    for i in range(len(ATMOSPHERES)):
        column = table[name][i]
        total = total + weights[..., i] * ((1.0 - share) * column[lower] + share * column[lower + 1])
    return total


def _smooth_step(x, start, end):
    t = np.clip((x - start) / (end - start), 0.0, 1.0)
    return t * t * (3.0 - 2.0 * t)
