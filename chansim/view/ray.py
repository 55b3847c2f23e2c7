"""The straight line from a pixel to the imager: which place it stands over at a height.

On the ellipsoid; heights are above it. Refraction bends the ray by less than 0.1 degrees where the zenith angle is
below 80 degrees and is left out.
"""

import math

import numpy as np
from numba import njit

from chansim.view.angles import EQUATOR_RADIUS, POLE_RADIUS

_ECCENTRICITY2 = 1.0 - (POLE_RADIUS / EQUATOR_RADIUS) ** 2
_SECOND_ECCENTRICITY2 = (EQUATOR_RADIUS / POLE_RADIUS) ** 2 - 1.0


def ray_places(latitude, longitude, zenith, azimuth, height):
    """Places below the points of rays.

    Parameters
    ----------
    latitude, longitude : of the pixels on the ellipsoid, geodetic [degrees]
    zenith, azimuth : direction from the pixel to the imager, azimuth clockwise from north [degrees]
    height : of the points above the ellipsoid [m]

    All of them broadcast against each other; the zenith angle is below 90.

    Returns
    -------
    latitude, longitude : geodetic, the longitude within 180 of that of the pixel [degrees]

    Source: straight line in Earth-fixed coordinates; length of the ray from the circle of curvature of the
    ellipsoid in its azimuth (Euler's formula); latitude by Bowring (1976), Survey Review 23, 323-327.
    """
    arrays = np.broadcast_arrays(*(np.asarray(a, dtype=float) for a in (latitude, longitude, zenith, azimuth, height)))
    shape = arrays[0].shape
    results = np.empty(arrays[0].size), np.empty(arrays[0].size)
    follow_rays(*(np.ascontiguousarray(a).ravel() for a in arrays), *results)
    return tuple(r.reshape(shape)[()] for r in results)


def parallax_distance(zenith, height, radius):
    """Distance along the ground between the places below the foot of a ray and below its point at a height.

    zenith : at the foot [degrees]; height [m]; radius of the sphere [m]; returns [m].

    d = R (z - arcsin(R sin z / (R + h))), the law of sines on a sphere
    """
    zenith = np.radians(zenith)
    return radius * (zenith - np.arcsin(radius * np.sin(zenith) / (radius + height)))


@njit(cache=True, nogil=True)
def follow_rays(latitude, longitude, zenith, azimuth, height, out_latitude, out_longitude):
    """`ray_places` for flat arrays; fills the last two."""
    for i in range(latitude.size):
        phi = math.radians(latitude[i])
        z, a = math.radians(zenith[i]), math.radians(azimuth[i])
        sin_phi, cos_phi = math.sin(phi), math.cos(phi)
        # radii of curvature: across the meridian, along it, in the azimuth of the ray
        squeeze = 1.0 - _ECCENTRICITY2 * sin_phi * sin_phi
        normal = EQUATOR_RADIUS / math.sqrt(squeeze)
        meridional = normal * (1.0 - _ECCENTRICITY2) / squeeze
        radius = 1.0 / (math.cos(a) ** 2 / meridional + math.sin(a) ** 2 / normal)
        vertical = radius * math.cos(z)
        # (R + h)^2 = R^2 + 2 R s cos z + s^2, without the cancellation at small heights
        rise = height[i] * (2.0 * radius + height[i])
        length = rise / (vertical + math.sqrt(vertical * vertical + rise))
        east, north, up = math.sin(z) * math.sin(a), math.sin(z) * math.cos(a), math.cos(z)
        # first axis in the meridian of the pixel
        x = normal * cos_phi + length * (up * cos_phi - north * sin_phi)
        y = length * east
        third = normal * (1.0 - _ECCENTRICITY2) * sin_phi + length * (up * sin_phi + north * cos_phi)
        from_axis = math.hypot(x, y)
        reduced = math.atan2(third * EQUATOR_RADIUS, from_axis * POLE_RADIUS)
        out_latitude[i] = math.degrees(
            math.atan2(
                third + _SECOND_ECCENTRICITY2 * POLE_RADIUS * math.sin(reduced) ** 3,
                from_axis - _ECCENTRICITY2 * EQUATOR_RADIUS * math.cos(reduced) ** 3,
            )
        )
        out_longitude[i] = longitude[i] + math.degrees(math.atan2(y, x))
