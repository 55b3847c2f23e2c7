"""The fixed grid of a geostationary imager: scan angles, pixels and their places on the Earth.

Normalized geostationary projection of the CGMS LRIT/HRIT global specification (CGMS 03), section 4.4, which
sweeps about the y axis; the other sweep axis after the GOES-R product definition and user's guide, volume 3,
section 5.1.2.8. Scan angles follow CF: x to the east, y to the north, 0 below the satellite [rad].
"""

import dataclasses
import math
from dataclasses import dataclass, field

import numpy as np
import pyproj
import xarray as xr
from numba import njit

from chansim.errors import ViewError
from chansim.view import angles

SWEEP_AXES = ("x", "y")
_EDGE_POINTS = 200  # along each side of a latitude-longitude box when its extent in scan angles is sought


@dataclass(frozen=True, eq=False)
class FixedGrid:
    """Pixels of a geostationary imager, on regular scan angles.

    Made by `full_disk`, `sector` or `grid_of_file` as a rule.

    longitude : sub-satellite [degrees_east]
    x, y : scan angles of the pixel centres, regular, to the east and to the north, in the order of the picture
        (y usually falls) [rad]
    sweep : axis about which the imager sweeps, "x" or "y"
    orbit_radius, equator_radius, pole_radius [m]

    Raises ViewError when no pixel sees the Earth, when x or y is irregular, or for another sweep axis.
    """

    longitude: float
    x: np.ndarray = field(repr=False)
    y: np.ndarray = field(repr=False)
    sweep: str = "y"
    orbit_radius: float = angles.GEOSTATIONARY_RADIUS
    equator_radius: float = angles.EQUATOR_RADIUS
    pole_radius: float = angles.POLE_RADIUS

    def __post_init__(self):
        if self.sweep not in SWEEP_AXES:
            raise ViewError(f"sweep axis {self.sweep!r}: give 'x' or 'y'")
        if not -180.0 <= self.longitude <= 360.0:
            raise ViewError(f"sub-satellite longitude {self.longitude:g}: give -180 to 360 degrees east")
        if not self.orbit_radius > self.equator_radius >= self.pole_radius > 0.0:
            raise ViewError("orbit_radius, equator_radius, pole_radius must fall in this order [m from the centre]")
        for name in ("x", "y"):
            object.__setattr__(self, name, _regular(getattr(self, name), name))
        x, y = self._nearest_to_centre()
        if not np.isfinite(self.to_places(x, y)[0]):
            raise ViewError(
                f"the sector lies outside the Earth's disk: its scan angles are x {_range(self.x)}, y "
                f"{_range(self.y)} rad, the disk reaches to {self.limb_angle:.4f} rad from its centre"
            )

    @property
    def height(self):
        """Of the satellite above the equator [m]."""
        return self.orbit_radius - self.equator_radius

    @property
    def limb_angle(self):
        """Scan angle of the equator's limb [rad]."""
        return math.asin(self.equator_radius / self.orbit_radius)

    @property
    def shape(self):
        """(rows, columns)."""
        return self.y.size, self.x.size

    def to_scan_angles(self, latitude, longitude):
        """Scan angles x, y of places [rad]; NaN where the satellite does not see them.

        latitude, longitude : geodetic, broadcast [degrees]. Source: CGMS 03, section 4.4.3.2.
        """
        return _over_shapes(_forward, latitude, longitude, self._parameters)

    def to_places(self, x, y):
        """Latitude, longitude (-180 to 180) of scan angles [degrees]; NaN where they miss the Earth.

        x, y : broadcast [rad]. Source: CGMS 03, section 4.4.3.1; GOES-R guide, section 5.1.2.8.1.
        """
        return _over_shapes(_inverse, x, y, self._parameters)

    def angles(self, latitude, longitude, height=0.0):
        """Zenith angle and azimuth of the direction from places to the satellite [degrees]."""
        return angles.geostationary_angles(
            latitude,
            longitude,
            self.longitude,
            height,
            orbit_radius=self.orbit_radius,
            equator_radius=self.equator_radius,
            pole_radius=self.pole_radius,
        )

    def pixels(self):
        """Where every pixel looks.

        Returns
        -------
        xarray.Dataset over (y, x): coordinates latitude, longitude [degrees, NaN in space]; variables
        view_zenith_angle, view_azimuth_angle (to the satellite, clockwise from north) [degrees, NaN in space],
        on_earth (False in space), and the CF grid mapping `geostationary`
        """
        latitude, longitude = self.to_places(self.x[None, :], self.y[:, None])
        zenith, azimuth = self.angles(latitude, longitude)
        dims = ("y", "x")
        mapped = {"grid_mapping": "geostationary", "units": "degree"}
        return xr.Dataset(
            {
                "view_zenith_angle": (dims, zenith, {**mapped, "standard_name": "sensor_zenith_angle"}),
                "view_azimuth_angle": (dims, azimuth, {**mapped, "standard_name": "sensor_azimuth_angle"}),
                "on_earth": (dims, np.isfinite(latitude), {"long_name": "False where the pixel looks into space"}),
                "geostationary": self.grid_mapping(),
            },
            coords={
                **self.axes(),
                "latitude": (dims, latitude, {"units": "degrees_north", "standard_name": "latitude"}),
                "longitude": (dims, longitude, {"units": "degrees_east", "standard_name": "longitude"}),
            },
        )

    def axes(self):
        """CF coordinate variables {"x": ..., "y": ...} [rad]."""
        return {
            name: xr.DataArray(
                getattr(self, name),
                dims=name,
                attrs={
                    "units": "rad",
                    "standard_name": f"projection_{name}_angular_coordinate",
                    "long_name": f"scan angle to the {'east' if name == 'x' else 'north'}",
                    "axis": name.upper(),
                },
            )
            for name in ("x", "y")
        }

    def crs(self):
        """pyproj CRS; its coordinates are scan angle times `height` [m]."""
        return pyproj.CRS.from_dict(
            {
                "proj": "geos",
                "h": self.height,
                "lon_0": (self.longitude + 180.0) % 360.0 - 180.0,
                "sweep": self.sweep,
                "a": self.equator_radius,
                "b": self.pole_radius,
                "units": "m",
            }
        )

    def grid_mapping(self):
        """CF grid mapping variable (CF-1.11, appendix F, geostationary projection) with `crs_wkt`."""
        attributes = {
            "grid_mapping_name": "geostationary",
            "perspective_point_height": self.height,
            "latitude_of_projection_origin": 0.0,
            "longitude_of_projection_origin": (self.longitude + 180.0) % 360.0 - 180.0,
            "sweep_angle_axis": self.sweep,
            "fixed_angle_axis": "y" if self.sweep == "x" else "x",
            "semi_major_axis": self.equator_radius,
            "semi_minor_axis": self.pole_radius,
            "longitude_of_prime_meridian": 0.0,
            "false_easting": 0.0,
            "false_northing": 0.0,
            "crs_wkt": self.crs().to_wkt(),
        }
        return xr.DataArray(np.int32(0), attrs=attributes)

    def finer(self, factor):
        """The grid whose pixels divide each of these into factor x factor; for averaging over the footprint.

        factor : whole number from 1; ViewError for others
        """
        if int(factor) != factor or factor < 1:
            raise ViewError(f"factor {factor}: give a whole number of sub-pixels along each side")
        if min(self.shape) < 2:
            raise ViewError("a single row or column of pixels has no known step to divide")
        offsets = (np.arange(int(factor)) - (factor - 1) / 2.0) / factor
        axes = [(v[:, None] + self._step(n) * offsets).ravel() for n, v in (("x", self.x), ("y", self.y))]
        return dataclasses.replace(self, x=axes[0], y=axes[1])

    def describe(self):
        """The grid in words."""
        return (
            f"geostationary fixed grid, sub-satellite longitude {self.longitude:g} degrees east, {self.y.size} x "
            f"{self.x.size} pixels of {abs(self._step('x')) * self.height / 1e3:.3g} km below the satellite, sweep "
            f"axis {self.sweep}"
        )

    @property
    def _parameters(self):
        return (
            math.radians(self.longitude),
            self.sweep == "x",
            self.orbit_radius / self.equator_radius,
            self.pole_radius / self.equator_radius,
        )

    def _step(self, name):
        values = getattr(self, name)
        return values[1] - values[0] if values.size > 1 else math.nan

    def _nearest_to_centre(self):
        """The pixel nearest to the sub-satellite point: the disk is convex and centred, so none sees it if not this."""
        return tuple(values[np.argmin(np.abs(values))] for values in (self.x, self.y))


def full_disk(longitude, resolution, *, sweep="y", **earth):
    """Fixed grid that covers the whole disk, the sub-satellite point at the middle corner of four pixels.

    Parameters
    ----------
    longitude : sub-satellite [degrees_east]
    resolution : of a pixel below the satellite; its step in scan angle is resolution / height [m]
    sweep : "x" or "y"
    earth : orbit_radius, equator_radius, pole_radius, see `FixedGrid` [m]

    Returns
    -------
    FixedGrid, y falling (north on top)

    Raises
    ------
    ViewError : impossible resolution or orbit
    """
    step, limb = _step_and_limb(resolution, earth)
    half = math.ceil(limb / step - 1e-9)
    centres = (np.arange(2 * half) - half + 0.5) * step
    return FixedGrid(float(longitude), centres, centres[::-1].copy(), sweep, **earth)


def sector(longitude, resolution, *, west, east, south, north, sweep="y", **earth):
    """The rows and columns of the full disk that hold a box of latitude and longitude.

    Parameters
    ----------
    longitude, resolution, sweep, earth : as for `full_disk`
    west, east : eastward from west to east, less than 360 apart [degrees_east]
    south, north : [degrees_north]

    Returns
    -------
    FixedGrid; its pixels are those of `full_disk`

    Raises
    ------
    ViewError : the box is empty, or the satellite sees no part of it (the message tells which longitudes would)
    """
    if not -90.0 <= south < north <= 90.0:
        raise ViewError(f"south {south:g} and north {north:g}: give -90 to 90 degrees, south below north")
    width = (east - west) % 360.0 or 360.0
    disk = full_disk(longitude, resolution, sweep=sweep, **earth)
    latitude, lengths = np.linspace(south, north, _EDGE_POINTS), np.linspace(0.0, width, _EDGE_POINTS)
    box_longitude, box_latitude = np.meshgrid(west + lengths, latitude)
    x, y = disk.to_scan_angles(box_latitude, box_longitude)
    if not np.isfinite(x).any():
        raise ViewError(
            f"the sector {west:g} to {east:g} degrees east, {south:g} to {north:g} degrees north lies outside the disk "
            f"seen from {longitude:g} degrees east; {angles.in_words(box_latitude, box_longitude)}"
        )
    half = abs(disk._step("x")) / 2.0
    chosen = [
        values[(values >= np.nanmin(found) - half) & (values <= np.nanmax(found) + half)]
        for values, found in ((disk.x, x), (disk.y, y))
    ]
    return FixedGrid(float(longitude), *chosen, sweep, **earth)


def grid_of_file(dataset):
    """The fixed grid of an image file, to simulate the very pixels of an observation.

    Parameters
    ----------
    dataset : xarray.Dataset with a CF `geostationary` grid mapping and its x and y coordinates, in radians or
        (scan angle times height) in metres

    Returns
    -------
    FixedGrid

    Raises
    ------
    ViewError : no such grid mapping or coordinates
    """
    mappings = [v.attrs for v in dataset.variables.values() if v.attrs.get("grid_mapping_name") == "geostationary"]
    if not mappings:
        raise ViewError("the file has no variable with grid_mapping_name 'geostationary'")
    attributes = mappings[0]
    equator = float(attributes.get("semi_major_axis", angles.EQUATOR_RADIUS))
    flattening = attributes.get("inverse_flattening")
    pole = equator * (1.0 - 1.0 / float(flattening)) if flattening else angles.POLE_RADIUS
    height = float(attributes["perspective_point_height"])
    return FixedGrid(
        float(attributes["longitude_of_projection_origin"]),
        *(_scan_axis(dataset, axis, height) for axis in "xy"),
        str(attributes.get("sweep_angle_axis", "y")),
        orbit_radius=height + equator,
        equator_radius=equator,
        pole_radius=float(attributes.get("semi_minor_axis", pole)),
    )


def _scan_axis(dataset, axis, height):
    names = (f"projection_{axis}_coordinate", f"projection_{axis}_angular_coordinate")
    found = [v for v in dataset.variables.values() if v.attrs.get("standard_name") in names and v.ndim == 1]
    if not found:
        raise ViewError(f"the file has no coordinate with standard_name {names[0]} or {names[1]}")
    units = str(found[0].attrs.get("units", "rad")).lower()
    factors = {"rad": 1.0, "radian": 1.0, "radians": 1.0, "microradian": 1e-6}
    factors |= {"m": 1.0 / height, "meter": 1.0 / height, "metre": 1.0 / height, "km": 1e3 / height}
    if units not in factors:
        raise ViewError(f"coordinate {axis} has units {units!r}; known are {', '.join(factors)}")
    return np.asarray(found[0].values, dtype=float) * factors[units]


def _step_and_limb(resolution, earth):
    orbit = earth.get("orbit_radius", angles.GEOSTATIONARY_RADIUS)
    equator = earth.get("equator_radius", angles.EQUATOR_RADIUS)
    if not orbit > equator:
        raise ViewError(f"orbit_radius {orbit:g} m must be larger than equator_radius {equator:g} m")
    if not 100.0 <= resolution <= 1e6:
        raise ViewError(f"resolution {resolution:g} m: give 100 to 1000000 m (it is in metres, e.g. 2000)")
    return resolution / (orbit - equator), math.asin(equator / orbit)


def _regular(values, name):
    values = np.array(values, dtype=float).ravel()
    steps = np.diff(values)
    if values.size == 0 or not np.isfinite(values).all():
        raise ViewError(f"scan angles {name}: empty or with missing values")
    # the scale and offset of packed files leave each step rough by their rounding
    if steps.size and not np.abs(steps - steps.mean()).max() < 0.05 * abs(steps.mean()):
        raise ViewError(f"scan angles {name} are not regular: steps from {steps.min():g} to {steps.max():g} rad")
    if np.abs(values).max() > 1.0:
        raise ViewError(
            f"scan angles {name} reach {np.abs(values).max():g}; they are in radians, at most 0.16 on Earth"
        )
    return values


def _range(values):
    return f"{values.min():.4f} to {values.max():.4f}"


def _over_shapes(kernel, first, second, parameters):
    first, second = np.broadcast_arrays(np.asarray(first, dtype=float), np.asarray(second, dtype=float))
    results = np.empty(first.size), np.empty(first.size)
    kernel(np.ascontiguousarray(first).ravel(), np.ascontiguousarray(second).ravel(), *parameters, *results)
    return tuple(r.reshape(first.shape)[()] for r in results)


@njit(cache=True)
def _forward(latitude, longitude, sub_satellite, sweeps_x, orbit, pole, x, y):
    """Scan angles of places; lengths in equator radii, sub_satellite [rad], latitude and longitude [degrees]."""
    for i in range(latitude.size):
        phi = math.radians(latitude[i])
        lam = math.radians(longitude[i]) - sub_satellite
        geocentric = math.atan(pole * pole * math.tan(phi))
        radius = pole / math.hypot(pole * math.cos(geocentric), math.sin(geocentric))
        place_x = radius * math.cos(geocentric) * math.cos(lam)
        place_y = radius * math.cos(geocentric) * math.sin(lam)
        place_z = radius * math.sin(geocentric)
        away = orbit - place_x
        # the normal of the ellipsoid leans away from the satellite beyond the limb; NaN fails as well
        if not away * place_x - place_y * place_y - place_z * place_z / (pole * pole) > 0.0:
            x[i] = y[i] = math.nan
        elif sweeps_x:
            x[i] = math.atan(place_y / math.hypot(place_z, away))
            y[i] = math.atan(place_z / away)
        else:
            x[i] = math.atan(place_y / away)
            y[i] = math.atan(place_z / math.hypot(place_y, away))


@njit(cache=True)
def _inverse(x, y, sub_satellite, sweeps_x, orbit, pole, latitude, longitude):
    """Places of scan angles; units as for `_forward`."""
    for i in range(x.size):
        if sweeps_x:
            ray_x = math.cos(x[i]) * math.cos(y[i])
            ray_y = math.sin(x[i])
            ray_z = math.cos(x[i]) * math.sin(y[i])
        else:
            ray_x = math.cos(x[i]) * math.cos(y[i])
            ray_y = math.sin(x[i]) * math.cos(y[i])
            ray_z = math.sin(y[i])
        # |satellite + s * ray| on the ellipsoid: a s^2 - 2 b s + c = 0, the nearer root
        a = ray_x * ray_x + ray_y * ray_y + ray_z * ray_z / (pole * pole)
        b = orbit * ray_x
        root = b * b - a * (orbit * orbit - 1.0)
        if not (root >= 0.0 and ray_x > 0.0):
            latitude[i] = longitude[i] = math.nan
            continue
        s = (orbit * orbit - 1.0) / (b + math.sqrt(root))
        place_x = orbit - s * ray_x
        place_y = s * ray_y
        lam = math.degrees(math.atan2(place_y, place_x) + sub_satellite)
        latitude[i] = math.degrees(math.atan(s * ray_z / (pole * pole) / math.hypot(place_x, place_y)))
        longitude[i] = (lam + 180.0) % 360.0 - 180.0
