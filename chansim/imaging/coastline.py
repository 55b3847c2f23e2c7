"""Coastlines for maps, from a file in the package: nothing is ever fetched.

Natural Earth land (public domain) at 1:110 million and 1:50 million, as lines in hundredths of a degree.
Recipe: `python -m chansim.imaging.coastline LAND-110M.json LAND-50M.json` with the two TopoJSON files.
"""

import argparse
import functools
from pathlib import Path

import numpy as np

from chansim.errors import DataError
from chansim.scene.basemap import decode_topojson

DATA_FILE = Path(__file__).parents[1] / "data" / "coastline.npz"
SCALES = ("110m", "50m")
_PER_DEGREE = 100
_WIDE_VIEW = 120.0  # degrees of latitude or longitude from which the coarse coastline is enough


def scale_for(width_degrees):
    """Which of `SCALES` suits a map this wide [degrees]."""
    return "110m" if width_degrees >= _WIDE_VIEW else "50m"


@functools.cache
def natural_earth_lines(scale="50m"):
    """Coastlines of the Earth.

    Parameters
    ----------
    scale : one of `SCALES`

    Returns
    -------
    list of arrays (points, 2): longitude, latitude [degrees]

    Raises
    ------
    DataError : the packaged file is missing or damaged

    Source: Natural Earth, public domain.
    """
    try:
        with np.load(DATA_FILE) as file:
            steps, counts = file[f"steps_{scale}"].astype(np.int32), file[f"counts_{scale}"]
    except (OSError, KeyError, ValueError) as error:
        raise DataError(
            f"{DATA_FILE}: the coastline is missing or damaged ({error}); reinstall chansim or run "
            "`python -m chansim.imaging.coastline LAND-110M.json LAND-50M.json`"
        ) from error
    return [np.cumsum(line, axis=0) / _PER_DEGREE for line in np.split(steps, np.cumsum(counts)[:-1])]


def lines_of_land(land_fraction, latitude, longitude):
    """The coast of a model's own land: where its land fraction passes one half.

    Parameters
    ----------
    land_fraction : array (y, x) [1]
    latitude, longitude : arrays (y, x) [degrees]

    Returns
    -------
    list of arrays (points, 2): longitude, latitude [degrees]
    """
    import contourpy
    from scipy.ndimage import map_coordinates

    land = np.ma.masked_invalid(np.asarray(land_fraction, dtype=float))
    latitude, longitude = (np.asarray(degrees, dtype=float) for degrees in (latitude, longitude))
    turned = _without_jumps(longitude)
    lines = []
    for column_row in contourpy.contour_generator(z=land).lines(0.5):
        where = column_row.T[::-1]
        lines.append(np.column_stack([map_coordinates(c, where, order=1) for c in (turned, latitude)]))
    return lines


def _without_jumps(longitude):
    """Longitude that goes on across the date line; NaN in space."""
    if np.isfinite(longitude).all():
        return np.unwrap(np.unwrap(longitude, period=360.0, axis=0), period=360.0, axis=1)
    turns = np.radians(longitude[np.isfinite(longitude)])
    middle = np.degrees(np.arctan2(np.sin(turns).mean(), np.cos(turns).mean()))
    return middle + np.mod(longitude - middle + 180.0, 360.0) - 180.0


def outlines(polygons):
    """Rings of polygons as open lines in hundredths of a degree, without the cuts along the date line.

    Parameters
    ----------
    polygons : list of shapely polygons within -180 to 180 and -90 to 90 [degrees]

    Returns
    -------
    list of int arrays (points, 2)
    """
    lines = []
    for polygon in polygons:
        for ring in (polygon.exterior, *polygon.interiors):
            points = np.round(np.asarray(ring.coords) * _PER_DEGREE).astype(int)
            moved = np.concatenate([[True], np.any(np.diff(points, axis=0) != 0, axis=1)])
            lines += _without_seams(points[moved])
    return lines


def _without_seams(points):
    """Pieces of a ring between the segments that run along the date line or through a pole."""
    edge = (np.abs(points[:, 0]) >= 180 * _PER_DEGREE) | (points[:, 1] <= -90 * _PER_DEGREE)
    seam = edge[1:] & edge[:-1]
    return [piece for piece in np.split(points, np.flatnonzero(seam) + 1) if len(piece) > 1]


def main(arguments=None):
    """Writes the packaged coastline; returns its path."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("land_110m", help="Natural Earth land, 1:110 million, TopoJSON")
    parser.add_argument("land_50m", help="the same at 1:50 million")
    parser.add_argument("output", nargs="?", default=str(DATA_FILE))
    options = parser.parse_args(arguments)
    arrays = {}
    for scale, source in zip(SCALES, (options.land_110m, options.land_50m)):
        lines = outlines(decode_topojson(source))
        arrays[f"counts_{scale}"] = np.array([len(line) for line in lines], dtype=np.uint16)
        steps = np.concatenate([np.concatenate([line[:1], np.diff(line, axis=0)]) for line in lines])
        arrays[f"steps_{scale}"] = steps.astype(np.int16)
    np.savez_compressed(options.output, **arrays)
    return options.output


if __name__ == "__main__":
    print(main())
