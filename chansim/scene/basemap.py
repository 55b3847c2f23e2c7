"""Land polygons from a TopoJSON file (the public-domain Natural Earth form).

TopoJSON keeps every shared border once, as an arc of quantised, delta-coded
points; a ring is a list of arc numbers, a negative number `~i` meaning arc i
read backwards (TopoJSON format specification 1.0).
"""

import json
from pathlib import Path

import numpy as np
import shapely

from chansim.errors import DataError


def decode_topojson(path):
    """Land polygons of a TopoJSON file.

    Parameters
    ----------
    path : path of a TopoJSON file whose geometries are (multi)polygons

    Returns
    -------
    list of shapely.Polygon, longitude -180 to 180 and latitude [degrees], valid, with holes; land
    that crosses the date line is cut there

    Raises
    ------
    DataError : the file is not a TopoJSON topology
    """
    try:
        topology = json.loads(Path(path).read_text())
        arcs = _decode_arcs(topology)
        objects = topology["objects"]
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise DataError(f"{path}: not a TopoJSON topology ({error}); give a Natural Earth land file") from error
    polygons = []
    for item in objects.values():
        for rings in _polygons(item):
            polygons += _planar_polygons([_join(ring, arcs) for ring in rings])
    return polygons


def _decode_arcs(topology):
    scale = np.array(topology["transform"]["scale"]) if "transform" in topology else None
    arcs = []
    for arc in topology["arcs"]:
        points = np.array(arc, dtype=float)[:, :2]
        if scale is not None:
            points = np.cumsum(points, axis=0) * scale + np.array(topology["transform"]["translate"])
        arcs.append(points)
    return arcs


def _polygons(geometry):
    """Yields the rings (lists of arc numbers) of every polygon in a TopoJSON geometry."""
    kind = geometry.get("type")
    if kind == "GeometryCollection":
        for member in geometry["geometries"]:
            yield from _polygons(member)
    elif kind == "MultiPolygon":
        yield from geometry["arcs"]
    elif kind == "Polygon":
        yield geometry["arcs"]


def _join(arc_numbers, arcs):
    """One closed ring from its arcs; the first point of each further arc repeats the last one."""
    parts = []
    for number in arc_numbers:
        points = arcs[number] if number >= 0 else arcs[~number][::-1]
        parts.append(points if not parts else points[1:])
    return np.concatenate(parts)


def _planar_polygons(outlines):
    """Polygons on the longitude-latitude plane from one outline and its holes on the sphere.

    Such files carry rings across the date line and around a pole without a cut; a drawing program
    would join them the wrong way round.
    """
    unwrapped = [_unwrap(ring) for ring in outlines]
    middle = np.mean(unwrapped[0][:, 0])
    holes = [ring - [360.0 * np.round((np.mean(ring[:, 0]) - middle) / 360.0), 0.0] for ring in unwrapped[1:]]
    # quantisation makes a few rings touch themselves; make_valid keeps their area
    polygon = shapely.make_valid(shapely.Polygon(unwrapped[0], holes))
    west, _, east, _ = shapely.bounds(polygon)
    pieces = []
    for turn in range(int(np.floor((west + 180.0) / 360.0)), int(np.ceil((east - 180.0) / 360.0)) + 1):
        window = shapely.box(-180.0 + 360.0 * turn, -90.0, 180.0 + 360.0 * turn, 90.0)
        part = shapely.transform(shapely.intersection(polygon, window), lambda xy, t=turn: xy - [360.0 * t, 0.0])
        pieces += [p for p in shapely.get_parts(part) if p.geom_type == "Polygon" and p.area > 0.0]
    return pieces


def _unwrap(ring):
    """A ring with continuous longitudes; one that goes around a pole is closed through that pole."""
    longitude = np.unwrap(ring[:, 0], period=360.0)
    latitude = ring[:, 1]
    if abs(longitude[-1] - longitude[0]) > 180.0:
        pole = 90.0 if np.mean(latitude) > 0.0 else -90.0
        longitude = np.concatenate([longitude, [longitude[-1], longitude[0], longitude[0]]])
        latitude = np.concatenate([latitude, [pole, pole, latitude[0]]])
    return np.column_stack([longitude, latitude])
