"""GeoTIFF: read back by a general library, every pixel lies where the result says it lies."""

import numpy as np
import pyproj
import pytest
from imaging_samples import MAPPINGS, make_result
from satellite_samples import sector_picture

from chansim.errors import OutputError
from chansim.geotiff import write_geotiff

rasterio = pytest.importorskip("rasterio", reason="needs rasterio, the extra 'geotiff'")


def places_of(file):
    """Longitude, latitude of the pixel centres of an open raster, by pyproj."""
    crs = pyproj.CRS(file.crs.to_wkt())
    columns, rows = np.meshgrid(np.arange(file.width) + 0.5, np.arange(file.height) + 0.5)
    step_x, _, west, _, step_y, north = tuple(file.transform)[:6]
    x, y = west + step_x * columns, north + step_y * rows
    if crs.is_geographic and not crs.is_derived:
        return x, y
    target = crs.source_crs if crs.is_derived and crs.source_crs is not None else crs.geodetic_crs
    return pyproj.Transformer.from_crs(crs, target, always_xy=True).transform(x, y)


def assert_same_places(file, result):
    longitude, latitude = places_of(file)
    expected = result.longitude.values, result.latitude.values
    if result.y[0] < result.y[-1]:
        expected = tuple(a[::-1] for a in expected)
    seen = np.isfinite(expected[0])
    assert seen.sum() > 100
    np.testing.assert_allclose(latitude[seen], expected[1][seen], atol=2e-5)
    turn = (longitude[seen] - expected[0][seen] + 180.0) % 360.0 - 180.0
    np.testing.assert_allclose(turn, 0.0, atol=2e-5)


@pytest.mark.parametrize("upside", ["north up", "south up"])
@pytest.mark.parametrize("kind", MAPPINGS)
def test_pixels_lie_at_their_places(tmp_path, kind, upside):
    result = make_result(kind, values=np.arange(31.0 * 41.0).reshape(31, 41) + 200.0, upside=upside)
    write_geotiff(result, tmp_path / "a.tif")
    with rasterio.open(tmp_path / "a.tif") as file:
        assert_same_places(file, result)
        values = result.brightness_temperature.values
        np.testing.assert_array_equal(file.read(), values if upside == "north up" else values[:, ::-1])
        assert file.descriptions[0].startswith("wv063 (6.30 um)") and file.units == ("K", "K")


@pytest.mark.parametrize("sweep", ["x", "y"])
def test_satellite_picture(tmp_path, sweep):
    picture = sector_picture(sweep)
    write_geotiff(picture, tmp_path / "a.tif")
    with rasterio.open(tmp_path / "a.tif") as file:
        assert_same_places(file, picture)
        assert "not an observation" in file.tags()["summary"] and file.tags()["valid_time"] == "2026-01-21T00:00:00"
        np.testing.assert_array_equal(file.read(2), picture.brightness_temperature.sel(channel="ir104"))
        height = picture.grid_mapping.attrs["perspective_point_height"]
        assert file.transform.c + file.transform.a / 2 == pytest.approx(float(picture.x[0]) * height)


def test_other_fields(tmp_path):
    write_geotiff(sector_picture(), tmp_path / "angle.tif", field="view_zenith_angle")
    with rasterio.open(tmp_path / "angle.tif") as file:
        assert file.count == 1 and file.units == ("degree",)
    with pytest.raises(OutputError, match="view_zenith_angle"):
        write_geotiff(sector_picture(), tmp_path / "b.tif", field="wind")


def test_what_cannot_be_written(tmp_path):
    result = make_result()
    (tmp_path / "there.tif").write_bytes(b"old")
    curvilinear = result.assign(latitude=result.latitude + 0.1 * result.longitude).drop_vars(["x", "y"])
    cases = [
        (result, "there.tif", "exists and is kept"), (result, "a.png", "ends in .tif"),
        (result, "no/a.tif", "does not exist"), (curvilinear, "c.tif", "even spacing"),
        (result.isel(x=[0, 1, 5, 9]), "u.tif", "even spacing"),
    ]  # fmt: skip
    for dataset, name, words in cases:
        with pytest.raises(OutputError, match=words):
            write_geotiff(dataset, tmp_path / name)
            pytest.fail(name)
    assert [p.name for p in tmp_path.iterdir()] == ["there.tif"]
    write_geotiff(result, tmp_path / "there.tif", existing="replace")
    assert (tmp_path / "there.tif").stat().st_size > 1000
