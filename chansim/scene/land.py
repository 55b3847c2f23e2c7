"""Land fraction from the built-in coastline (Natural Earth 1:50 million, public domain; lakes count as land).

The raster holds how many quarters of each 0.1 degree cell are land. Recipe:
`python -m chansim.scene.land LAND.json` with a Natural Earth land file in TopoJSON.
"""

import argparse
import functools
from pathlib import Path

import numpy as np

from chansim.errors import DataError, SceneError

DATA_FILE = Path(__file__).parents[1] / "data" / "land.npz"
_CELLS_PER_DEGREE = 10
_QUARTERS = 4


@functools.cache
def _raster():
    """Quarters of land (latitude south to north, longitude from -180), one column wrapped on each side."""
    try:
        with np.load(DATA_FILE) as file:
            return np.pad(file["quarters"], ((0, 0), (1, 1)), mode="wrap")
    except (OSError, KeyError, ValueError) as error:
        raise DataError(
            f"{DATA_FILE}: the land raster is missing or damaged ({error}); reinstall chansim or run "
            "`python -m chansim.scene.land LAND.json`"
        ) from error


def land_fraction(latitude, longitude):
    """Share of land around each place, interpolated bilinearly between 0.1 degree cells.

    Parameters
    ----------
    latitude, longitude : arrays of one shape [degrees_north, degrees_east]; any turn of longitude

    Returns
    -------
    array of that shape, 0 to 1 [1]

    Raises
    ------
    SceneError : a place that is not on the Earth
    DataError : the packaged raster is missing

    Source: Natural Earth 1:50m land polygons.
    """
    latitude, longitude = np.broadcast_arrays(np.asarray(latitude, float), np.asarray(longitude, float))
    if not (np.all(np.abs(latitude) <= 90.0) and np.all(np.isfinite(longitude))):
        raise SceneError("land fraction: latitude must lie within -90 and 90 degrees, longitude be finite")
    raster = _raster()
    row = np.clip((latitude + 90.0) * _CELLS_PER_DEGREE - 0.5, 0.0, raster.shape[0] - 1.0)
    column = np.mod(longitude + 180.0, 360.0) * _CELLS_PER_DEGREE + 0.5  # +1 for the wrapped column
    south = np.minimum(row.astype(int), raster.shape[0] - 2)
    west = np.minimum(column.astype(int), raster.shape[1] - 2)
    north_share, east_share = row - south, column - west
    on_south = (1.0 - east_share) * raster[south, west] + east_share * raster[south, west + 1]
    on_north = (1.0 - east_share) * raster[south + 1, west] + east_share * raster[south + 1, west + 1]
    return ((1.0 - north_share) * on_south + north_share * on_north) / _QUARTERS


def rasterise(polygons):
    """Quarters of land in 0.1 degree cells, from one test point in the middle of each quarter.

    Parameters
    ----------
    polygons : list of shapely polygons within -180 to 180 and -90 to 90 [degrees]

    Returns
    -------
    uint8 array (latitude south to north, longitude from -180)
    """
    import shapely

    per_degree = 2 * _CELLS_PER_DEGREE
    inside = np.zeros((180 * per_degree, 360 * per_degree), dtype=np.uint8)
    for polygon in polygons:
        shapely.prepare(polygon)
        west, south, east, north = polygon.bounds
        rows = _covered(south + 90.0, north + 90.0, per_degree, inside.shape[0])
        columns = _covered(west + 180.0, east + 180.0, per_degree, inside.shape[1])
        longitude = (np.arange(columns.start, columns.stop) + 0.5) / per_degree - 180.0
        for row in range(rows.start, rows.stop):
            hit = shapely.contains_xy(polygon, longitude, (row + 0.5) / per_degree - 90.0)
            inside[row, columns] |= hit
    return inside.reshape(180 * _CELLS_PER_DEGREE, 2, 360 * _CELLS_PER_DEGREE, 2).sum((1, 3), dtype=np.uint8)


def _covered(start, end, per_degree, count):
    return slice(max(int(start * per_degree), 0), min(int(end * per_degree) + 1, count))


def main(arguments=None):
    """Writes the packaged raster from a TopoJSON file; returns its path."""
    from chansim.scene.basemap import decode_topojson

    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("topojson")
    parser.add_argument("output", nargs="?", default=str(DATA_FILE))
    options = parser.parse_args(arguments)
    np.savez_compressed(options.output, quarters=rasterise(decode_topojson(options.topojson)))
    return options.output


if __name__ == "__main__":
    print(main())
