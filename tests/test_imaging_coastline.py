"""Coastlines: small, in the right place, from the recipe, and those of a scene's own land."""

import warnings
from pathlib import Path

import numpy as np
import pytest

from chansim.imaging import coastline
from chansim.imaging.coastline import DATA_FILE, SCALES, lines_of_land, natural_earth_lines, outlines, scale_for

BASEMAP = Path(__file__).parents[2] / "shared" / "basemap"


def distance_to_coast(longitude, latitude, scale):
    """Degrees to the nearest point of the coastline."""
    points = np.concatenate(natural_earth_lines(scale))
    east = (points[:, 0] - longitude) * np.cos(np.radians(latitude))
    return np.hypot(east, points[:, 1] - latitude).min()


# places at the sea from any atlas, rounded to 0.1 degree: [name, degrees_east, degrees_north]
CAPES = [
    ("Cape Agulhas", 20.0, -34.8), ("Cabo da Roca", -9.5, 38.8), ("Cape Horn", -67.3, -56.0),
    ("Land's End", -5.7, 50.1), ("North Cape", 25.8, 71.1), ("Cape Comorin", 77.5, 8.1),
    ("Cape York", 142.5, -10.7), ("Florida's southern tip", -81.1, 25.1),
]  # fmt: skip


@pytest.mark.parametrize(("name", "longitude", "latitude"), CAPES)
def test_known_capes_lie_on_the_coastline(name, longitude, latitude):
    assert distance_to_coast(longitude, latitude, "50m") < 0.25
    assert distance_to_coast(longitude, latitude, "110m") < 1.5


def test_inland_and_ocean_places_do_not():
    for longitude, latitude in ((25.0, 0.0), (100.0, 50.0), (-100.0, 40.0), (-30.0, 0.0), (-140.0, 20.0)):
        assert distance_to_coast(longitude, latitude, "50m") > 3.0


@pytest.mark.parametrize("scale", SCALES)
def test_lines_are_whole_and_within_the_earth(scale):
    lines = natural_earth_lines(scale)
    points = np.concatenate(lines)
    assert all(len(line) > 1 and line.shape[1] == 2 for line in lines)
    assert np.abs(points[:, 0]).max() <= 180.0 and np.abs(points[:, 1]).max() <= 90.0
    for line in lines:
        edge = np.abs(line[:, 0]) >= 180.0
        assert not np.any(edge[1:] & edge[:-1])  # no line along the date line
        assert np.abs(np.diff(line[:, 0])).max() < 180.0


def test_file_is_small_and_the_fine_scale_finer():
    assert DATA_FILE.stat().st_size < 400e3
    counts = {scale: sum(map(len, natural_earth_lines(scale))) for scale in SCALES}
    assert counts["50m"] > 5 * counts["110m"] > 10000
    assert scale_for(40.0) == "50m" and scale_for(180.0) == "110m"


def test_packaged_file_comes_from_the_recipe(tmp_path):
    if not BASEMAP.is_dir():
        pytest.skip("needs ../shared/basemap (Natural Earth TopoJSON)")
    path = coastline.main([str(BASEMAP / "land-110m.json"), str(BASEMAP / "land-50m.json"), str(tmp_path / "c.npz")])
    with np.load(path) as made, np.load(DATA_FILE) as packaged:
        assert set(made) == set(packaged)
        for name in made:
            assert np.array_equal(made[name], packaged[name]), name


def test_seams_are_cut():
    import shapely

    square = shapely.Polygon([(170.0, 10.0), (180.0, 10.0), (180.0, 20.0), (170.0, 20.0)])
    lines = outlines([square])
    assert sum(len(line) - 1 for line in lines) == 3  # the side on the date line is gone


@pytest.mark.parametrize("centre", [40.0, 179.5])
def test_own_coastline_of_a_round_island(centre):
    longitude, latitude = np.meshgrid(np.arange(centre - 8.0, centre + 8.01, 0.25), np.arange(-6.0, 6.01, 0.25))
    radius = np.hypot(longitude - centre, latitude)
    land = np.clip(0.5 + (4.0 - radius), 0.0, 1.0)
    wrapped = (longitude + 180.0) % 360.0 - 180.0
    (line,) = lines_of_land(land, latitude, wrapped)
    assert np.abs(np.hypot(line[:, 0] - centre, line[:, 1]) - 4.0).max() < 0.03
    assert np.allclose(line[0], line[-1])


def test_own_coastline_where_there_is_none():
    longitude, latitude = np.meshgrid(np.arange(5.0), np.arange(4.0))
    assert lines_of_land(np.zeros((4, 5)), latitude, longitude) == []
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert lines_of_land(np.full((4, 5), np.nan), latitude, longitude) == []


def test_damaged_file_is_named(tmp_path, monkeypatch):
    from chansim.errors import DataError

    broken = tmp_path / "coastline.npz"
    broken.write_bytes(b"not an archive")
    monkeypatch.setattr(coastline, "DATA_FILE", broken)
    natural_earth_lines.cache_clear()
    with pytest.raises(DataError, match="coastline"):
        natural_earth_lines("50m")
