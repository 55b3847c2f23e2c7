"""Every pixel is drawn where it belongs, on every kind of grid and in every projection."""

import cartopy.crs as ccrs
import numpy as np
import pyproj
import pytest
import xarray as xr
from imaging_samples import MAPPINGS, make_result, places

from chansim.errors import SceneError, ViewError
from chansim.imaging import maps
from chansim.imaging.projections import middle_longitude, read_grid, target_projection, to_plane
from chansim.imaging.raster import make_raster

MARK = (7, 29)  # row and column of the one cold pixel
WARM, COLD = 300.0, 195.0


def marked(kind, upside="north up"):
    values = np.full((31, 41), WARM)
    values[MARK] = COLD
    return make_result(kind, channels=("ir104",), values=values, upside=upside)


def centre_of_mark(dataset, projection):
    """Coordinates, in the projection of the map, of the middle of the one coloured patch in the drawn picture."""
    figure = maps.draw_channel(dataset, "ir104", projection=projection, colours="cold-tops", coastline="none")
    axes = figure.axes[0]
    figure.canvas.draw()
    picture = np.asarray(figure.canvas.buffer_rgba()).astype(int)
    left, bottom, right, top = axes.get_window_extent().extents
    height = picture.shape[0]
    inside = np.zeros(picture.shape[:2], dtype=bool)
    inside[int(height - top) : int(height - bottom), int(left) : int(right)] = True
    rows, columns = np.nonzero((picture[..., 0] - picture[..., 2] > 40) & inside)  # yellow: very cold
    assert len(rows) > 4
    return axes.transData.inverted().transform((columns.mean() + 0.5, height - rows.mean() - 0.5))


@pytest.mark.parametrize("upside", ["north up", "south up"])
@pytest.mark.parametrize("kind", MAPPINGS)
def test_pixel_lies_at_its_place_in_its_own_projection(kind, upside):
    dataset = marked(kind, upside)
    x, y = float(dataset["x"][MARK[1]]), float(dataset["y"][MARK[0]])
    grid = read_grid(dataset)
    found = centre_of_mark(dataset, "source")
    shift = 0.5 * (MAPPINGS[kind][1][0] + MAPPINGS[kind][1][1]) if dataset["grid_mapping"].attrs[
        "grid_mapping_name"] == "latitude_longitude" else 0.0  # fmt: skip
    cell = abs(float(dataset["x"][1] - dataset["x"][0])), abs(float(dataset["y"][1] - dataset["y"][0]))
    assert abs(found[0] - (x - shift)) < 0.25 * cell[0]
    assert abs(found[1] - y) < 0.25 * cell[1]
    # and cartopy puts the latitude and longitude of the pixel, found by pyproj, at that very place
    longitude, latitude = (float(dataset[name][MARK]) for name in ("longitude", "latitude"))
    plane_x, plane_y = to_plane(grid.projection, np.array([longitude]), np.array([latitude]))
    assert abs(plane_x[0] - (x - shift)) < 1e-5 * np.ptp(dataset["x"].values)
    assert abs(plane_y[0] - y) < 1e-5 * np.ptp(dataset["y"].values)


@pytest.mark.parametrize("kind", MAPPINGS)
def test_pixel_lies_at_its_place_in_latitude_and_longitude(kind):
    dataset = marked(kind)
    longitude, latitude = (float(dataset[name][MARK]) for name in ("longitude", "latitude"))
    middle = middle_longitude(read_grid(dataset))
    found = centre_of_mark(dataset, "latlon")
    rows, columns = (slice(i - 1, i + 2) for i in MARK)
    turned = (dataset["longitude"].values[rows, columns] - longitude + 180.0) % 360.0 - 180.0
    reach = np.abs(turned).max(), np.abs(dataset["latitude"].values[rows, columns] - latitude).max()
    east = (longitude - middle + 180.0) % 360.0 - 180.0
    assert abs(found[0] - east) < 0.35 * reach[0]
    assert abs(found[1] - latitude) < 0.35 * reach[1]


@pytest.mark.parametrize("kind", ["lambert conformal", "geostationary", "rotated pole"])
def test_search_by_distance_agrees_with_the_grid_mapping(kind):
    values = np.random.default_rng(5).uniform(200.0, 300.0, (31, 41))
    dataset = make_result(kind, channels=("ir104",), values=values)
    target = ccrs.LambertAzimuthalEqualArea(*[float(dataset[n].mean()) for n in ("longitude", "latitude")])
    bare = dataset.drop_vars(["grid_mapping", "x", "y"])
    bare["brightness_temperature"].attrs = {}
    first, second = (make_raster(read_grid(d), target, pixels=300) for d in (dataset, bare))
    both = ~first.outside & ~second.outside
    assert both.mean() > 0.3
    # the two differ only where a place lies near the border between two pixels
    assert (first.index == second.index)[both].mean() > 0.97
    assert (first.outside == second.outside).mean() > 0.95


def test_list_of_cells_is_drawn():
    values = np.full((31, 41), WARM)
    values[5:9, 27:32] = COLD
    dataset = make_result("lambert conformal", channels=("ir104",), values=values).drop_vars(["grid_mapping", "x", "y"])
    dataset["brightness_temperature"].attrs = {}
    cells = dataset.stack(cell=("y", "x")).reset_index("cell", drop=True).transpose("channel", "cell")
    found = centre_of_mark(cells, "source")
    middle = middle_longitude(read_grid(cells))
    expected = dataset["longitude"][5:9, 27:32].mean() - middle, dataset["latitude"][5:9, 27:32].mean()
    assert np.allclose(found, expected, atol=0.4)


def test_global_grid_from_0_to_360_in_another_projection():
    longitude, latitude = np.arange(0.0, 360.0, 2.0), np.arange(90.0, -90.1, -2.0)
    bt = 250.0 + 40.0 * np.cos(np.radians(np.meshgrid(longitude, latitude)[0]))
    dataset = xr.Dataset(
        {"brightness_temperature": (("channel", "latitude", "longitude"), bt[None])},
        coords={"channel": ["ir104"], "latitude": latitude, "longitude": longitude},
    )
    projection = ccrs.Robinson(central_longitude=-60.0)
    raster = make_raster(read_grid(dataset), projection, pixels=400)
    picture = raster.sample(bt)
    for place in ((-100.0, 20.0), (179.0, -30.0), (0.5, 60.0), (-0.5, 5.0)):
        x, y = to_plane(projection, np.array([place[0]]), np.array([place[1]]))
        west, east, south, north = raster.extent
        row = int((north - y[0]) / (north - south) * picture.shape[0])
        column = int((x[0] - west) / (east - west) * picture.shape[1])
        assert abs(picture[row, column] - (250.0 + 40.0 * np.cos(np.radians(place[0])))) < 2.5
    assert not raster.outside[raster.index.shape[0] // 2].any()


def test_uneven_axis_is_stretched_not_shifted():
    latitude = 60.0 * np.linspace(-1.0, 1.0, 31) ** 3  # dense at the equator
    longitude = np.linspace(0.0, 50.0, 26)
    bt = np.broadcast_to(250.0 + latitude[:, None] / 2.0, (31, 26))
    dataset = xr.Dataset(
        {"brightness_temperature": (("channel", "y", "x"), bt[None])},
        coords={"channel": ["ir104"], "latitude": ("y", latitude), "longitude": ("x", longitude)},
    )
    grid = read_grid(dataset)
    raster = make_raster(grid, target_projection(grid, "source"), pixels=600)
    picture = raster.sample(bt)
    north = raster.extent[3] - (np.arange(picture.shape[0]) + 0.5) / picture.shape[0] * (
        raster.extent[3] - raster.extent[2]
    )
    nearest = latitude[np.abs(latitude[None, :] - north[:, None]).argmin(axis=1)]
    inside = np.abs(north) < 59.0
    assert np.mean(np.abs(picture[:, 10] - (250.0 + nearest / 2.0))[inside] < 1e-9) > 0.97


def test_space_around_the_disc_is_not_masked():
    disc = (MAPPINGS["geostationary"][0], (-5.7e6, 5.7e6), (-5.7e6, 5.7e6))
    x = np.linspace(*disc[1], 61)
    longitude, latitude = places(disc[0], x, x[::-1])
    assert np.isnan(longitude).any()
    dataset = xr.Dataset(
        {
            "brightness_temperature": (("channel", "y", "x"), np.where(np.isfinite(latitude), 280.0, np.nan)[None],
                                       {"grid_mapping": "fixed_grid"}),
            "fixed_grid": ((), 0, disc[0]),
        },
        coords={"channel": ["ir104"], "latitude": (("y", "x"), latitude), "longitude": (("y", "x"), longitude),
                "x": ("x", x / disc[0]["perspective_point_height"], {"units": "rad"}),
                "y": ("y", x[::-1] / disc[0]["perspective_point_height"], {"units": "rad"})},
    )  # fmt: skip
    grid = read_grid(dataset)
    assert isinstance(grid.projection, ccrs.Geostationary) and np.allclose(grid.x, x)
    figure = maps.draw_channel(dataset, "ir104")
    assert not figure.legends  # nothing masked, nothing hatched


def test_crs_in_words_is_understood():
    dataset = make_result("lambert conformal", channels=("ir104",))
    wkt = pyproj.CRS.from_cf(MAPPINGS["lambert conformal"][0]).to_wkt()
    dataset["grid_mapping"].attrs = {"crs_wkt": wkt}
    grid = read_grid(dataset)
    x, y = to_plane(grid.projection, grid.longitude, grid.latitude)
    assert np.abs(x - dataset["x"].values).max() < 1.0 and np.abs(y - dataset["y"].values[:, None]).max() < 1.0


def test_what_cannot_be_placed():
    dataset = make_result()
    with pytest.raises(ViewError, match="latlon"):
        maps.draw_channel(dataset, "ir104", projection="upside down")
    with pytest.raises(ViewError, match="nothing of the data"):
        maps.draw_channel(dataset, "ir104", projection=ccrs.Geostationary(central_longitude=-170.0))
    with pytest.raises(SceneError, match="latitude"):
        maps.draw_channel(dataset.drop_vars("latitude"), "ir104")
    dataset["grid_mapping"].attrs = {"grid_mapping_name": "folded_paper"}
    with pytest.raises(SceneError, match="grid mapping"):
        maps.draw_channel(dataset, "ir104")
