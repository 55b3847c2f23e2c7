"""Where the sun stands: zenith angle, azimuth and distance.

I. Reda and A. Andreas (2004): Solar position algorithm for solar radiation applications, Solar Energy 76,
577-589, with the corrigendum of 2007 (Solar Energy 81, 838). Stated uncertainty 0.0003 degrees for the years
-2000 to 6000. The geocentric part is done once per time, the topocentric part for every pixel.

UTC is taken as UT1 (they differ by less than 0.9 s, 0.004 degrees of hour angle).
"""

import functools
from dataclasses import dataclass
from importlib import resources

import numpy as np

from chansim.errors import DataError, ViewError

# TT - UT1 [s]: 69.2 in the early 2020s (IERS). The sun moves 1 degree a day on the ecliptic, so that even the
# 20 s by which this was wrong around 1980 shift it by 0.0002 degrees only.
DELTA_T = 69.2
REFRACTION_AT_HORIZON = 0.5667  # degrees (Reda & Andreas 2004)
SOLAR_RADIUS = 0.26667  # degrees, angular (Reda & Andreas 2004)
_FLATTENING = 0.99664719  # pole / equator radius in the algorithm
_EQUATOR_RADIUS = 6378140.0  # m, in the algorithm
_J2000 = 2451545.0  # Julian day
_UNIX_EPOCH = 2440587.5  # Julian day
_TIMES_AT_ONCE = 4096


@dataclass(frozen=True)
class Sun:
    """Geocentric apparent place of the sun.

    right_ascension, declination [degrees]; sidereal_time : apparent, at Greenwich [degrees]; distance [au]
    """

    right_ascension: np.ndarray
    declination: np.ndarray
    sidereal_time: np.ndarray
    distance: np.ndarray


def solar_angles(time, latitude, longitude, height=0.0, *, pressure=None, temperature=283.15, delta_t=DELTA_T):
    """Solar zenith angle and azimuth.

    Parameters
    ----------
    time : UTC, `numpy.datetime64` or what it takes, or an array of it
    latitude, longitude : geodetic [degrees_north, degrees_east]
    height : above the ellipsoid [m]
    pressure : of the air at the place, adds refraction; None = geometric direction, without refraction [Pa]
    temperature : of the air at the place, for refraction [K]
    delta_t : TT - UT1 [s]

    All of them broadcast against each other.

    Returns
    -------
    zenith : above 90 where the sun is below the horizon [degrees]
    azimuth : of the direction to the sun, clockwise from north, 0 to 360 [degrees]

    Raises
    ------
    ViewError : time missing or not a time, latitude or longitude out of range

    Source: Reda and Andreas (2004), sections 3.8-3.14.
    """
    latitude, longitude = _checked(latitude, "latitude", 90.0), _checked(longitude, "longitude", 540.0)
    zenith, azimuth = topocentric_angles(_sun_at_each(time, delta_t), latitude, longitude, height)
    if pressure is not None:
        zenith = zenith - refraction(90.0 - zenith, pressure, temperature)
    return zenith, azimuth


def solar_distance(time, delta_t=DELTA_T):
    """Distance of the Earth from the sun [au], shape of `time`."""
    return _sun_at_each(time, delta_t).distance


def solar_distance_factor(time, delta_t=DELTA_T):
    """Factor on the solar irradiance at 1 au for the distance at this time, 1 / distance**2 [1]."""
    return solar_distance(time, delta_t) ** -2


def sun_at(time, delta_t=DELTA_T):
    """Geocentric apparent place of the sun.

    time : datetime64, any shape; delta_t : TT - UT1 [s]; returns Sun with arrays of that shape.

    Raises ViewError when a time is missing or none. Source: Reda and Andreas (2004), sections 3.1-3.10.
    """
    day = _julian_day(time)
    century = (day - _J2000) / 36525.0
    ephemeris_century = (day + delta_t / 86400.0 - _J2000) / 36525.0
    millennium = ephemeris_century / 10.0
    distance = _heliocentric("R", millennium)
    nutation_longitude, nutation_obliquity = _nutation(ephemeris_century)
    obliquity = np.radians(_mean_obliquity(millennium) + nutation_obliquity)
    aberration = -20.4898 / 3600.0 / distance
    longitude = np.radians(np.degrees(_heliocentric("L", millennium)) + 180.0 + nutation_longitude + aberration)
    latitude = -_heliocentric("B", millennium)
    right_ascension = np.arctan2(
        np.sin(longitude) * np.cos(obliquity) - np.tan(latitude) * np.sin(obliquity), np.cos(longitude)
    )
    declination = np.arcsin(
        np.sin(latitude) * np.cos(obliquity) + np.cos(latitude) * np.sin(obliquity) * np.sin(longitude)
    )
    sidereal = _mean_sidereal_time(day, century) + nutation_longitude * np.cos(obliquity)
    return Sun(np.degrees(right_ascension) % 360.0, np.degrees(declination), sidereal % 360.0, distance)


def topocentric_angles(sun, latitude, longitude, height=0.0):
    """Zenith angle and azimuth of the sun without refraction, from its geocentric place.

    sun : Sun; latitude, longitude : geodetic [degrees]; height [m]; all broadcast against each other.
    Returns zenith and azimuth clockwise from north [degrees]. Source: Reda and Andreas (2004), 3.11-3.14.
    """
    phi = np.radians(latitude)
    hour_angle = np.radians(sun.sidereal_time + longitude - sun.right_ascension)
    declination = np.radians(sun.declination)
    parallax = np.sin(np.radians(8.794 / 3600.0 / sun.distance))
    reduced = np.arctan(_FLATTENING * np.tan(phi))
    x = (np.cos(reduced) + height / _EQUATOR_RADIUS * np.cos(phi)) * parallax
    y = (_FLATTENING * np.sin(reduced) + height / _EQUATOR_RADIUS * np.sin(phi)) * parallax
    across = np.cos(declination) - x * np.cos(hour_angle)
    shift = np.arctan2(-x * np.sin(hour_angle), across)
    declination = np.arctan2((np.sin(declination) - y) * np.cos(shift), across)
    hour_angle = hour_angle - shift
    sine = np.sin(phi) * np.sin(declination) + np.cos(phi) * np.cos(declination) * np.cos(hour_angle)
    from_south = np.arctan2(np.sin(hour_angle), np.cos(hour_angle) * np.sin(phi) - np.tan(declination) * np.cos(phi))
    return np.degrees(np.arccos(np.clip(sine, -1.0, 1.0))), (np.degrees(from_south) + 180.0) % 360.0


def refraction(elevation, pressure, temperature=283.15):
    """By how much the air lifts the sun [degrees]; 0 where even the lifted disk is below the horizon.

    elevation : without refraction [degrees]; pressure [Pa]; temperature [K].
    Source: Reda and Andreas (2004), eq. 42.
    """
    elevation = np.asarray(elevation, dtype=float)
    seen = elevation >= -(SOLAR_RADIUS + REFRACTION_AT_HORIZON)
    bent = np.radians(np.where(seen, elevation, 0.0) + 10.3 / (np.where(seen, elevation, 0.0) + 5.11))
    density = np.asarray(pressure) / 101000.0 * 283.0 / (np.asarray(temperature) - 0.15)
    return np.where(seen, density * 1.02 / (60.0 * np.tan(bent)), 0.0)


def relative_azimuth(view_azimuth, solar_azimuth):
    """Angle between the azimuths of the directions to the imager and to the sun, 0 to 180 [degrees].

    0 : imager and sun on the same side of the pixel (light scattered back); 180 : on opposite sides (scattered
    forward, sun glint). Both azimuths are those of the direction FROM the pixel, clockwise from north [degrees].
    """
    difference = np.abs(np.asarray(view_azimuth, dtype=float) - solar_azimuth) % 360.0
    return np.minimum(difference, 360.0 - difference)


def scattering_angle(view_zenith, view_azimuth, solar_zenith, solar_azimuth):
    """Angle between the way of the sunlight before and after one scattering into the imager [degrees].

    All angles belong to directions from the pixel, to the imager and to the sun, azimuths clockwise from north
    [degrees]; they broadcast. 180 is straight back to the sun, 0 straight on.

    cos(scattering) = -cos(view) cos(sun) - sin(view) sin(sun) cos(relative azimuth), the spherical law of cosines
    """
    view, sun = np.radians(view_zenith), np.radians(solar_zenith)
    azimuth = np.radians(relative_azimuth(view_azimuth, solar_azimuth))
    cosine = -np.cos(view) * np.cos(sun) - np.sin(view) * np.sin(sun) * np.cos(azimuth)
    return np.degrees(np.arccos(np.clip(cosine, -1.0, 1.0)))


def _sun_at_each(time, delta_t):
    """`sun_at` for an array in which many times repeat, in pieces of bounded size."""
    time = _as_time(time)
    if time.ndim == 0:
        return sun_at(time, delta_t)
    unique, where = np.unique(time, return_inverse=True)
    pieces = [sun_at(unique[i : i + _TIMES_AT_ONCE], delta_t) for i in range(0, unique.size, _TIMES_AT_ONCE)]
    where = where.reshape(time.shape)
    names = ("right_ascension", "declination", "sidereal_time", "distance")
    return Sun(*(np.concatenate([getattr(p, name) for p in pieces])[where] for name in names))


def _as_time(time):
    try:
        time = np.asarray(getattr(time, "values", time)).astype("datetime64[us]")
    except (TypeError, ValueError):
        raise ViewError(f"time {time!r} is not a time; give UTC as numpy.datetime64 or '2020-07-15T12:00'") from None
    if time.size == 0 or np.isnat(time).any():
        raise ViewError("the solar position needs a time; some or all are missing (NaT)")
    return time


def _julian_day(time):
    return _as_time(time).astype(np.int64) / 86400e6 + _UNIX_EPOCH


def _checked(angle, name, largest):
    angle = np.asarray(getattr(angle, "values", angle), dtype=float)
    if angle.size and np.nanmax(np.abs(angle), initial=0.0) > largest:
        raise ViewError(f"{name}: values up to {np.nanmax(np.abs(angle)):g}, allowed are {largest:g} degrees")
    return angle


def _heliocentric(coordinate, millennium):
    """Heliocentric longitude "L", latitude "B" [rad] or distance "R" [au] of the Earth."""
    total = np.zeros(np.shape(millennium))
    for power, (amplitude, phase, rate) in enumerate(_series(coordinate)):
        terms = amplitude * np.cos(phase + rate * np.asarray(millennium)[..., None])
        total = total + terms.sum(axis=-1) * millennium**power
    return total * 1e-8


def _nutation(century):
    """Nutation in longitude and in obliquity [degrees]."""
    t = np.asarray(century)[..., None]
    fundamental = (  # mean elongation of the moon, anomalies of sun and moon, moon's latitude and node [degrees]
        297.85036 + 445267.111480 * t - 0.0019142 * t**2 + t**3 / 189474.0,
        357.52772 + 35999.050340 * t - 0.0001603 * t**2 - t**3 / 300000.0,
        134.96298 + 477198.867398 * t + 0.0086972 * t**2 + t**3 / 56250.0,
        93.27191 + 483202.017538 * t - 0.0036825 * t**2 + t**3 / 327270.0,
        125.04452 - 1934.136261 * t + 0.0020708 * t**2 + t**3 / 450000.0,
    )
    table = _nutation_terms()
    argument = np.radians(sum(table[:, i] * fundamental[i] for i in range(5)))
    a, b, c, d = table[:, 5:].T
    longitude = ((a + b * t) * np.sin(argument)).sum(axis=-1)
    obliquity = ((c + d * t) * np.cos(argument)).sum(axis=-1)
    return longitude / 36e6, obliquity / 36e6


def _mean_obliquity(millennium):
    """Of the ecliptic [degrees]."""
    arc_seconds = (84381.448, -4680.93, -1.55, 1999.25, -51.38, -249.67, -39.05, 7.12, 27.87, 5.79, 2.45)
    return np.polynomial.polynomial.polyval(millennium / 10.0, arc_seconds) / 3600.0


def _mean_sidereal_time(day, century):
    """At Greenwich [degrees]."""
    return (
        280.46061837 + 360.98564736629 * (day - _J2000) + 0.000387933 * century**2 - century**3 / 38710000.0
    ) % 360.0


@functools.cache
def _series(coordinate):
    """[(amplitude, phase, rate)] by power of time."""
    rows = [line.split(",") for line in _lines("solar_terms.csv")]
    powers = sorted({row[0] for row in rows if row[0][0] == coordinate})
    return [np.array([row[1:] for row in rows if row[0] == name], dtype=float).T for name in powers]


@functools.cache
def _nutation_terms():
    return np.array([line.split(",") for line in _lines("nutation_terms.csv")], dtype=float)


def _lines(name):
    try:
        text = (resources.files("chansim") / "data" / name).read_text()
    except OSError as error:
        raise DataError(f"chansim/data/{name} cannot be read ({error}); install chansim again") from None
    return [line for line in text.splitlines() if not line.startswith("#")][1:]
