"""The views that a simulation accepts: each gives the zenith angle of every column."""

from dataclasses import dataclass

import numpy as np
import xarray as xr

from chansim.errors import ViewError
from chansim.view.angles import LARGEST_ZENITH, geostationary_angles, geostationary_zenith

_SOLAR_ANGLES = ("solar_zenith_angle", "solar_azimuth_angle")


@dataclass(frozen=True)
class FixedZenith:
    """The same zenith angle everywhere [degrees]; nadir is 0. direction : azimuth to the imager [degrees]."""

    angle: float = 0.0
    largest_zenith: float = LARGEST_ZENITH
    direction: float = 0.0
    gives_sun = False

    def zenith(self, columns):
        """View zenith angle of the columns [degrees]."""
        return np.full(columns["latitude"].shape, self.angle)

    def azimuth(self, columns):
        """Azimuth of the direction to the imager, clockwise from north [degrees]."""
        return np.full(columns["latitude"].shape, self.direction)

    def describe(self):
        """The view in words."""
        if self.angle == 0.0:
            return "nadir"
        return f"zenith angle {self.angle:g} degrees everywhere, imager at azimuth {self.direction:g} degrees"


@dataclass(frozen=True)
class Geostationary:
    """From above the equator; longitude [degrees_east]."""

    longitude: float
    largest_zenith: float = LARGEST_ZENITH
    gives_sun = False

    def zenith(self, columns):
        """View zenith angle of the columns [degrees]; above 90 where the satellite is below the horizon."""
        return geostationary_zenith(columns["latitude"].values, columns["longitude"].values, self.longitude)

    def azimuth(self, columns):
        """Azimuth of the direction to the imager, clockwise from north [degrees]."""
        return geostationary_angles(columns["latitude"].values, columns["longitude"].values, self.longitude)[1]

    def describe(self):
        """The view in words."""
        return f"geostationary, sub-satellite longitude {self.longitude:g} degrees east"


@dataclass(frozen=True)
class GivenAngles:
    """Angles that the user brings, on the horizontal grid of the scene.

    angles : Dataset with view_zenith_angle and, for sunlight, view_azimuth_angle (of the direction to the imager,
        clockwise from north) and optionally solar_zenith_angle and solar_azimuth_angle [degrees]
    """

    angles: xr.Dataset
    largest_zenith: float = LARGEST_ZENITH
    words: str = "angles given for each column"

    def zenith(self, columns):
        """View zenith angle of the columns [degrees]."""
        return self._of("view_zenith_angle", columns)

    def azimuth(self, columns):
        """Azimuth of the direction to the imager [degrees]. Raises ViewError when it is not given."""
        if "view_azimuth_angle" not in self.angles:
            raise ViewError(
                "sunlight needs the azimuth of the imager: add view_azimuth_angle [degrees, clockwise from north, of "
                "the direction from the pixel to the imager] to the view Dataset, or choose sunlight='none'"
            )
        return self._of("view_azimuth_angle", columns)

    @property
    def gives_sun(self):
        """True where the sun's angles are given, too."""
        return all(name in self.angles for name in _SOLAR_ANGLES)

    def solar(self, columns):
        """Given solar zenith and azimuth angles of the columns [degrees]."""
        return tuple(self._of(name, columns) for name in _SOLAR_ANGLES)

    def _of(self, name, columns):
        latitude = columns["latitude"]
        angles = self.angles[name]
        for dim in latitude.dims:
            if dim in columns.coords and dim in angles.coords:
                angles = angles.sel({dim: columns[dim]})
            elif dim in angles.dims and angles.sizes[dim] != latitude.sizes[dim]:
                raise ViewError(
                    f"view angles have {angles.sizes[dim]} points along {dim!r}, the scene piece has "
                    f"{latitude.sizes[dim]}; give both the same {dim!r} coordinate"
                )
        try:
            return angles.transpose(*latitude.dims).values
        except ValueError:
            raise ViewError(f"view angles have dimensions {angles.dims}, the scene {latitude.dims}") from None

    def describe(self):
        """The view in words."""
        return self.words


def as_view(view):
    """A view object from what users write.

    view : "nadir", zenith angle [degrees], ("geostationary", longitude [degrees_east]), a Dataset with
        `view_zenith_angle` [degrees] (see `GivenAngles`), or a view object

    Raises
    ------
    ViewError : nothing of these, or an angle outside 0-85 degrees
    """
    if hasattr(view, "zenith") and hasattr(view, "describe"):
        return view
    if isinstance(view, xr.Dataset):
        if "view_zenith_angle" not in view:
            raise ViewError("the view Dataset has no variable view_zenith_angle [degrees]")
        words = "; ".join(str(view.attrs[name]) for name in ("view", "view_columns") if name in view.attrs)
        return GivenAngles(view, words=words or GivenAngles.words)
    if isinstance(view, str) and view == "nadir":
        return FixedZenith(0.0)
    if isinstance(view, (int, float)) and not isinstance(view, bool):
        if not 0.0 <= view < LARGEST_ZENITH:
            raise ViewError(f"zenith angle {view:g} degrees: give 0 to {LARGEST_ZENITH:g}")
        return FixedZenith(float(view))
    if isinstance(view, (tuple, list)) and len(view) == 2 and view[0] == "geostationary":
        longitude = float(view[1])
        if not -180.0 <= longitude <= 360.0:
            raise ViewError(f"sub-satellite longitude {longitude:g}: give -180 to 360 degrees east")
        return Geostationary(longitude)
    raise ViewError(
        f"view {view!r}: give 'nadir', a zenith angle in degrees, ('geostationary', longitude), or a Dataset with "
        "view_zenith_angle"
    )
