"""Directions from places on the Earth to a geostationary satellite.

Everything on the ellipsoid: latitudes are geodetic, the vertical is the normal of the ellipsoid. Earth-fixed
vectors have their first axis at the equator below the satellite.
"""

import numpy as np

from chansim.errors import ViewError

GEOSTATIONARY_RADIUS = 42164.0e3  # m from the Earth's centre (CGMS LRIT/HRIT global specification)
EQUATOR_RADIUS, POLE_RADIUS = 6378.137e3, 6356.7523e3  # m, the ellipsoid of the same specification (GRS80 / WGS84)
LARGEST_ZENITH = 85.0  # degrees: beyond, a plane-parallel column says nothing about the slanted path
_SAMPLE = 4000  # places that are enough to say which longitudes see them


def geostationary_angles(
    latitude,
    longitude,
    sub_satellite_longitude,
    height=0.0,
    *,
    orbit_radius=GEOSTATIONARY_RADIUS,
    equator_radius=EQUATOR_RADIUS,
    pole_radius=POLE_RADIUS,
):
    """Zenith angle and azimuth of the direction to a geostationary satellite.

    Parameters
    ----------
    latitude, longitude : geodetic, any shapes that broadcast [degrees]
    sub_satellite_longitude [degrees_east]
    height : above the ellipsoid [m]
    orbit_radius, equator_radius, pole_radius [m]

    Returns
    -------
    zenith : 0 below the satellite, above 90 where it is below the horizon [degrees]
    azimuth : clockwise from north, 0 to 360; 0 by definition below the satellite [degrees]

    NaN in, NaN out. Source: vector geometry on the ellipsoid of the CGMS LRIT/HRIT global specification.
    """
    phi = np.radians(np.asarray(latitude, dtype=float))
    lam = np.radians(np.asarray(longitude, dtype=float) - sub_satellite_longitude)
    eccentricity2 = 1.0 - (pole_radius / equator_radius) ** 2
    normal = equator_radius / np.sqrt(1.0 - eccentricity2 * np.sin(phi) ** 2)
    from_axis = (normal + height) * np.cos(phi)
    to_x, to_y = orbit_radius - from_axis * np.cos(lam), -from_axis * np.sin(lam)
    to_z = -(normal * (1.0 - eccentricity2) + height) * np.sin(phi)
    outward = to_x * np.cos(lam) + to_y * np.sin(lam)  # away from the axis, in the meridian
    east = to_y * np.cos(lam) - to_x * np.sin(lam)
    north = to_z * np.cos(phi) - outward * np.sin(phi)
    up = to_z * np.sin(phi) + outward * np.cos(phi)
    zenith = np.degrees(np.arctan2(np.hypot(east, north), up))
    return zenith, np.degrees(np.arctan2(east, north)) % 360.0


def geostationary_zenith(latitude, longitude, sub_satellite_longitude):
    """Zenith angle alone, see `geostationary_angles` [degrees]."""
    return geostationary_angles(latitude, longitude, sub_satellite_longitude)[0]


def visible_mask(zenith, largest_zenith=90.0):
    """True where the satellite is seen at less than `largest_zenith` [degrees]; False for NaN."""
    return np.asarray(zenith) < largest_zenith


def require_visible(latitude, longitude, sub_satellite_longitude, largest_zenith=90.0):
    """Angles of a domain that the satellite must see at least in part.

    latitude, longitude : [degrees]; sub_satellite_longitude [degrees_east]; largest_zenith [degrees]

    Returns
    -------
    zenith, azimuth [degrees], mask of the visible places

    Raises
    ------
    ViewError : no place is visible; the message tells the sub-satellite longitudes that would see the domain
    """
    zenith, azimuth = geostationary_angles(latitude, longitude, sub_satellite_longitude)
    mask = visible_mask(zenith, largest_zenith)
    if not mask.any():
        raise ViewError(
            f"a geostationary satellite at {sub_satellite_longitude:g} degrees east sees no part of the domain at "
            f"less than {largest_zenith:g} degrees from the zenith; {in_words(latitude, longitude, largest_zenith)}"
        )
    return zenith, azimuth, mask


def longitudes_that_see(latitude, longitude, largest_zenith=90.0):
    """Sub-satellite longitudes from which a domain is seen.

    Parameters
    ----------
    latitude, longitude : places [degrees]
    largest_zenith [degrees]

    Returns
    -------
    west, east : from west eastward to east some of it is seen, whole degrees, west in -180 to 179, the span at
        most 359; (-180, 179) when every longitude sees some
    best : longitude with the most visible places, the middle if there are several

    None when no geostationary satellite sees any of it
    """
    latitude, longitude = (a.ravel() for a in np.broadcast_arrays(latitude, longitude))
    known = np.flatnonzero(np.isfinite(latitude) & np.isfinite(longitude))
    chosen = known[:: max(1, known.size // _SAMPLE)]
    candidates = np.arange(-180, 180)
    zenith = geostationary_angles(latitude[chosen], longitude[chosen], candidates[:, None])[0]
    seen = visible_mask(zenith, largest_zenith).sum(axis=1)
    if not seen.any():
        return None
    west, east = _longest_arc(seen > 0)
    best_west, best_east = _longest_arc(seen == seen.max())
    middle = (best_west + ((best_east - best_west) % 360) // 2) % 360
    return tuple(int(candidates[i]) for i in (west, east, middle))


def in_words(latitude, longitude, largest_zenith=90.0):
    """The result of `longitudes_that_see` as the end of an error message."""
    found = longitudes_that_see(latitude, longitude, largest_zenith)
    if found is None:
        return "no geostationary satellite sees it: it lies too near a pole; use nadir or angles of another orbit"
    west, east, best = found
    return (
        f"sub-satellite longitudes from {west} eastward to {east} degrees east see some of it, {best} degrees east "
        "the most"
    )


def _longest_arc(flags):
    """First and last index of the longest run of True on a circle."""
    if flags.all():
        return 0, flags.size - 1
    start = int(np.flatnonzero(~flags)[0])
    rolled = np.roll(flags, -start)  # begins with False, so that no run is cut
    edges = np.flatnonzero(np.diff(np.concatenate([rolled, [False]]).astype(int)))
    first, last = edges[0::2] + 1, edges[1::2]
    longest = int(np.argmax(last - first))
    return int(first[longest] + start) % flags.size, int(last[longest] + start) % flags.size
