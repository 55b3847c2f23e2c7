"""Coastline and land fraction."""

import json
from pathlib import Path

import numpy as np
import pytest
import shapely

import chansim  # noqa: F401
from chansim.errors import DataError, SceneError
from chansim.scene.basemap import decode_topojson
from chansim.scene.land import land_fraction, rasterise

BASEMAP = Path(__file__).parents[2] / "shared" / "basemap"


@pytest.mark.parametrize(
    ("latitude", "longitude", "expected"),
    [  # any atlas
        (50.0, 10.0, 1.0),  # central Europe
        (40.0, -100.0, 1.0),  # North American plains
        (0.0, -150.0, 0.0),  # Pacific
        (-90.0, 0.0, 1.0),  # South Pole
        (90.0, 0.0, 0.0),  # North Pole
        (72.0, -40.0, 1.0),  # Greenland
        (42.0, 50.5, 0.0),  # Caspian Sea
        (-25.0, 135.0, 1.0),  # Australia
        (66.7, 180.0, 1.0),  # Chukotka, on the date line
        (18.0, 18.0, 1.0),  # Sahara
    ],
)
def test_known_places(latitude, longitude, expected):
    assert land_fraction(latitude, longitude) == pytest.approx(expected, abs=1e-3)


def test_land_covers_twenty_nine_percent():
    # common practice: 29 % of the Earth is land (148.9 of 510.1 million km2)
    latitude, longitude = np.meshgrid(np.arange(-89.75, 90, 0.5), np.arange(-179.75, 180, 0.5), indexing="ij")
    weight = np.cos(np.radians(latitude))
    share = (land_fraction(latitude, longitude) * weight).sum() / weight.sum()
    assert share == pytest.approx(0.29, abs=0.01)


def test_any_turn_of_longitude():
    longitude = np.array([-350.0, 10.0, 370.0, -100.0, 260.0])
    found = land_fraction(np.full(5, 48.0), longitude)
    np.testing.assert_allclose(found[:3], found[0])
    np.testing.assert_allclose(found[3], found[4])


def test_impossible_places():
    with pytest.raises(SceneError, match="latitude"):
        land_fraction([95.0], [0.0])


def _topology(arcs, rings):
    return {
        "type": "Topology",
        "transform": {"scale": [1.0, 1.0], "translate": [0.0, 0.0]},
        "arcs": arcs,
        "objects": {"land": {"type": "GeometryCollection", "geometries": [{"type": "Polygon", "arcs": rings}]}},
    }


def test_shared_arc_read_backwards(tmp_path):
    # a square in two arcs, delta-coded by hand; the second ring uses both the other way round
    arcs = [[[0, 0], [4, 0], [0, 4]], [[0, 0], [0, 4], [4, 0]]]
    file = tmp_path / "land.json"
    file.write_text(json.dumps(_topology(arcs, [[0, -2]])))
    (polygon,) = decode_topojson(file)
    assert polygon.area == pytest.approx(16.0)
    assert polygon.bounds == (0.0, 0.0, 4.0, 4.0)


def test_ring_across_the_date_line_is_cut(tmp_path):
    # from 170 E over the date line to 170 W, 10 degrees high
    arcs = [[[170, 0], [20 - 360, 0], [0, 10], [-20 + 360, 0], [0, -10]]]
    file = tmp_path / "land.json"
    file.write_text(json.dumps(_topology(arcs, [[0]])))
    pieces = decode_topojson(file)
    assert sorted(p.bounds for p in pieces) == [(-180.0, 0.0, -170.0, 10.0), (170.0, 0.0, 180.0, 10.0)]


def test_ring_around_a_pole_is_closed_through_it(tmp_path):
    ring = [[-180, -70], *[[60, 0]] * 6]
    file = tmp_path / "land.json"
    file.write_text(json.dumps(_topology([ring], [[0]])))
    land = shapely.union_all(decode_topojson(file))
    assert land.area == pytest.approx(360.0 * 20.0)


def test_hole_and_raster(tmp_path):
    outline = [[0, 0], [4, 0], [0, 4], [-4, 0], [0, -4]]
    hole = [[1, 1], [2, 0], [0, 2], [-2, 0], [0, -2]]
    file = tmp_path / "land.json"
    file.write_text(json.dumps(_topology([outline, hole], [[0], [1]])))
    quarters = rasterise(decode_topojson(file))
    assert quarters.sum() == 4 * (40 * 40 - 20 * 20)


@pytest.mark.parametrize("text", ["", "{}", '{"type": "Topology"}', "[1, 2]"])
def test_not_a_topology(tmp_path, text):
    file = tmp_path / "bad.json"
    file.write_text(text)
    with pytest.raises(DataError, match="TopoJSON"):
        decode_topojson(file)


@pytest.mark.skipif(not BASEMAP.exists(), reason="../shared/basemap is not there")
def test_packaged_raster_matches_the_polygons():
    polygons = decode_topojson(BASEMAP / "land-50m.json")
    assert all(p.is_valid for p in polygons)
    land = shapely.union_all(polygons)
    generator = np.random.default_rng(5)
    longitude, latitude = generator.uniform(-180, 180, 3000), generator.uniform(-89, 89, 3000)
    inside = shapely.contains_xy(land, longitude, latitude)
    agree = (land_fraction(latitude, longitude) > 0.5) == inside
    assert agree.mean() > 0.995
