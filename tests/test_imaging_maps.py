"""Maps: what is written on them, what their colours say, and how they are saved."""

import subprocess
import sys
import time
from pathlib import Path

import matplotlib
import numpy as np
import pytest
import xarray as xr
from imaging_samples import make_result

from chansim.errors import ChansimError, OutputError, ResponseError, SceneError
from chansim.imaging.maps import CAUTION, draw_channel, draw_difference, draw_sheet, save_figure

SHARED = Path(__file__).parents[2] / "shared" / "real_input"


def words(figure):
    """Everything written on a figure outside the axis ticks."""
    texts = [t.get_text() for t in figure.texts]
    for axes in figure.axes:
        texts += [axes.get_title(loc="left"), axes.get_title(), axes.get_xlabel(), *(t.get_text() for t in axes.texts)]
    for legend in figure.legends:
        texts += [t.get_text() for t in legend.get_texts()]
    return "\n".join(" ".join(text.split()) for text in texts)  # however the lines are broken


def picture_of(figure):
    figure.canvas.draw()
    return np.asarray(figure.canvas.buffer_rgba())[..., :3].astype(int)


def at(figure, picture, x_share, y_share, axes=0):
    """Pixels in a small square of the map, at shares of its width and height from the lower left."""
    box = figure.axes[axes].get_window_extent()
    column = int(box.x0 + x_share * box.width)
    row = int(picture.shape[0] - box.y0 - y_share * box.height)
    return picture[row - 6 : row + 7, column - 6 : column + 7].reshape(-1, 3)


def test_cold_is_whiter_than_warm():
    result = make_result()  # cold in the west
    for channel in ("ir104", "wv063"):
        figure = draw_channel(result, channel, coastline="none")
        picture = picture_of(figure)
        west, middle, east = (np.median(at(figure, picture, share, 0.53), axis=0) for share in (0.06, 0.53, 0.94))
        assert west.mean() > middle.mean() + 15 > east.mean() + 30
        assert np.ptp(west) <= 2  # grey


def test_colours_of_cold_tops():
    result = make_result(values=np.broadcast_to(np.linspace(195.0, 300.0, 41), (31, 41)))
    figure = draw_channel(result, "wv063", colours="cold-tops", limits=(190.0, 310.0), coastline="none")
    picture = picture_of(figure)
    yellow, blue, grey = (np.median(at(figure, picture, share, 0.53), axis=0) for share in (0.05, 0.32, 0.9))
    assert yellow[0] - yellow[2] > 40 and blue[2] - blue[0] > 40 and np.ptp(grey) <= 2


def test_title_says_all():
    text = words(draw_channel(make_result(), "ir104"))
    for piece in ("ir104", "10.45 µm", "simulated", "2026-01-21 06:30 UTC", "Quill 4", "tarn", "nadir", CAUTION, "[K]"):
        assert piece in text, piece
    clear = words(draw_channel(make_result().assign(
        brightness_temperature_clear=make_result()["brightness_temperature"]), "ir104",
        field="brightness_temperature_clear"))  # fmt: skip
    assert "clouds left out" in clear


def test_title_without_model_and_time():
    result = make_result().drop_vars(["time", "channel_kind", "central_wavenumber"])
    result.attrs = {"model": "model not named", "source_file": "/data/run/forecast.grib2"}
    text = words(draw_channel(result, "wv063"))
    assert "not named (forecast.grib2)" in text and "/data" not in text and "valid time not given" in text


def test_two_scales_agree():
    figure = draw_channel(make_result(), "ir104")
    figure.canvas.draw()
    bar = figure.axes[1]
    (second,) = bar.child_axes
    assert np.allclose(np.array(second.get_xlim()) + 273.15, bar.get_xlim())
    kelvin = [float(t.get_text()) for t in bar.get_xticklabels()]
    celsius = [float(t.get_text().replace("\N{MINUS SIGN}", "-")) for t in second.get_xticklabels()]
    assert 190.0 in kelvin or min(kelvin) < 200.0
    assert 0.0 in celsius and len(celsius) >= 6 and len(kelvin) >= 6
    # a tick stands where its number says
    place = second.transData.transform((0.0, 0.0))[0]
    assert abs(place - bar.transData.transform((273.15, 0.0))[0]) < 0.5
    text = words(figure)
    assert "°C" in text and "brightness temperature [K]" in text


def test_masked_columns_are_hatched_and_explained():
    values = np.full((31, 41), 300.0)
    values[10:20, 5:20] = np.nan
    figure = draw_channel(make_result(values=values), "ir104", coastline="none")
    assert "150 masked pixels" in words(figure)
    picture = picture_of(figure)
    hidden = at(figure, picture, 12 / 41, 15.5 / 31)
    shown = at(figure, picture, 0.8, 0.22)
    assert np.ptp(hidden, axis=1).max() <= 2  # greys
    assert hidden.mean(axis=1).std() > 5.0  # stripes
    assert shown.mean() < 60 < 120 < hidden.mean()


def test_no_picture_without_values():
    empty = make_result(values=np.full((31, 41), np.nan))
    for draw in (lambda: draw_channel(empty, "ir104"), lambda: draw_sheet(empty),
                 lambda: draw_difference(empty, "ir104", "wv063")):  # fmt: skip
        with pytest.raises(SceneError, match="masked"):
            draw()
    with pytest.raises(SceneError, match="brightness_temperature"):
        draw_channel(xr.Dataset({"x": 1}), "ir104")
    with pytest.raises(SceneError, match="no channels"):
        draw_sheet(make_result(), [])


def test_unknown_choices_name_what_exists():
    with pytest.raises(ResponseError, match="wv063, ir104"):
        draw_channel(make_result(), "vis006")
    with pytest.raises(ChansimError, match="cold-tops"):
        draw_channel(make_result(), "ir104", colours="rainbow")
    with pytest.raises(ChansimError, match="natural-earth"):
        draw_channel(make_result(), "ir104", coastline="highways")


def test_difference_is_symmetric_about_zero():
    result = make_result()
    warmer = np.linspace(-6.0, 6.0, 41)
    result["brightness_temperature"][0] = result["brightness_temperature"][1] + warmer
    figure = draw_difference(result, "wv063", "ir104", coastline="none")
    picture = picture_of(figure)
    west, middle, east = (np.median(at(figure, picture, share, 0.53), axis=0) for share in (0.04, 0.5, 0.96))
    assert west[2] - west[0] > 40 and east[0] - east[2] > 40 and middle.min() > 225
    low, high = figure.axes[0].images[-1].get_clim()
    assert low == -high == -10.0
    assert "wv063 (6.30 µm) minus ir104 (10.45 µm)" in words(figure)


def test_sheet_has_all_channels_each_with_its_range():
    result = make_result(channels=("wv063", "ir104", "sw038"))
    figure = draw_sheet(result)
    maps = [a for a in figure.axes if a.images and a.get_title(loc="left")]
    assert [a.get_title(loc="left") for a in maps] == ["wv063 (6.30 µm)", "ir104 (10.45 µm)", "sw038 (3.85 µm)"]
    assert [a.images[-1].get_clim() for a in maps] == [(200, 280), (190, 310), (200, 330)]
    text = words(figure)
    assert "Simulated" in text and "Quill 4" in text and CAUTION in text and "06:30 UTC" in text
    assert [a.get_title(loc="left")[:5] for a in draw_sheet(result, ["ir104"]).axes][:1] == ["ir104"]


def coast_colour_pixels(figure):
    picture = picture_of(figure)
    return np.argwhere((picture[..., 0] > 190) & (picture[..., 2] < 70))


def test_own_coastline_is_chosen_by_the_dataset():
    result = make_result(kind="latitude longitude")
    longitude, latitude = result["longitude"], result["latitude"]
    result["land_fraction"] = (np.hypot(longitude - 10.0, latitude - 50.0) < 8.0).astype(float)
    own = draw_channel(result.assign_attrs(coastline="own"), "ir104")
    assert "scene's own land" in words(own)
    pixels = coast_colour_pixels(own)
    places = (
        own.axes[0]
        .transData.inverted()
        .transform(np.column_stack([pixels[:, 1] + 0.5, own.canvas.get_width_height()[1] - pixels[:, 0] - 0.5]))
    )
    radius = np.hypot(places[:, 0], places[:, 1] - 50.0)  # the map is centred on 10 E
    assert len(radius) > 100 and 6.0 < radius.min() and radius.max() < 9.5
    assert "Natural Earth" in words(draw_channel(result, "ir104"))
    none = draw_channel(result, "ir104", coastline="none")
    assert not len(coast_colour_pixels(none)) and "oastline" not in words(none)
    assert "no land_fraction" in words(draw_channel(result.drop_vars("land_fraction"), "ir104", coastline="own"))


def test_existing_file_is_kept_unless_told_otherwise(tmp_path):
    figure = draw_channel(make_result(), "ir104")
    path = save_figure(figure, tmp_path / "map.png")
    first = path.read_bytes()
    assert first.startswith(b"\x89PNG")
    path.write_bytes(b"mine")
    with pytest.raises(OutputError, match="exists and is kept"):
        save_figure(figure, path)
    assert path.read_bytes() == b"mine"
    save_figure(figure, path, existing="replace")
    assert path.read_bytes() == first
    assert [p.name for p in tmp_path.iterdir()] == ["map.png"]


def test_unusable_targets(tmp_path):
    figure = draw_channel(make_result(), "ir104")
    with pytest.raises(OutputError, match="folder"):
        save_figure(figure, tmp_path / "nowhere" / "map.png")
    with pytest.raises(OutputError, match=".png"):
        save_figure(figure, tmp_path / "map.docx")
    with pytest.raises(OutputError, match="keep, replace"):
        save_figure(figure, tmp_path / "map.png", existing="yes")
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("failure", [OSError(28, "No space left on device"), KeyboardInterrupt()])
def test_nothing_half_written_is_left(tmp_path, monkeypatch, failure):
    figure = draw_channel(make_result(), "ir104")
    path = tmp_path / "map.png"
    path.write_bytes(b"older")

    def fail(target, **options):
        Path(target).write_bytes(b"half")
        raise failure

    monkeypatch.setattr(figure, "savefig", fail)
    with pytest.raises((OutputError, KeyboardInterrupt)):
        save_figure(figure, path, existing="replace")
    assert [p.name for p in tmp_path.iterdir()] == ["map.png"] and path.read_bytes() == b"older"


def test_backend_of_the_user_is_left_alone():
    code = (
        "import chansim, matplotlib; matplotlib.use('svg'); import sys; sys.path.insert(0, 'tests');"
        "from imaging_samples import make_result; from chansim.imaging.maps import draw_channel;"
        "f = draw_channel(make_result(), 'ir104'); print(matplotlib.get_backend(), type(f.canvas).__name__)"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=Path(__file__).parents[1], capture_output=True, text=True)
    assert done.stdout.split() == ["svg", "FigureCanvasAgg"], done.stderr


def test_nothing_is_fetched():
    """Every kind of map in a process in which opening a connection is an error."""
    code = """
import socket, sys
def refuse(*args, **options):
    raise AssertionError("a connection was tried")
socket.socket.connect = socket.create_connection = socket.getaddrinfo = refuse
sys.path.insert(0, "tests")
import chansim
from imaging_samples import MAPPINGS, make_result
from chansim.imaging.maps import draw_channel, draw_sheet, draw_difference
for kind in MAPPINGS:
    draw_channel(make_result(kind), "ir104").canvas.draw()
draw_channel(make_result("rotated pole"), "ir104", projection="latlon").canvas.draw()
draw_sheet(make_result()).canvas.draw()
draw_difference(make_result(), "ir104", "wv063").canvas.draw()
print("drawn")
"""
    done = subprocess.run([sys.executable, "-c", code], cwd=Path(__file__).parents[1], capture_output=True, text=True)
    assert done.stdout.strip() == "drawn", done.stderr


def test_a_million_pixels_in_seconds(tmp_path):
    values = 250.0 + 30.0 * np.sin(np.linspace(0, 20, 1000))[:, None] * np.cos(np.linspace(0, 30, 1000))
    result = make_result("lambert conformal", shape=(1000, 1000), channels=("ir104",), values=values)
    bare = result.drop_vars(["grid_mapping", "x", "y"])
    bare["brightness_temperature"].attrs = {}
    for dataset, limit in ((result, 10.0), (bare, 30.0)):
        start = time.perf_counter()
        save_figure(draw_channel(dataset, "ir104"), tmp_path / "map.png", existing="replace")
        assert time.perf_counter() - start < limit


def test_real_picture_agrees_with_its_own_positions():
    """The grid mapping of a real image puts its pixels where its own latitudes and longitudes do."""
    path = SHARED / "toa_brightness_stereographic.nc"
    if not path.is_file():
        pytest.skip("needs ../shared/real_input/toa_brightness_stereographic.nc")
    from chansim.imaging.projections import read_grid, to_plane

    with xr.open_dataset(path) as source:
        source = source.load()
    data = source["data"].expand_dims(channel=["tir108"]).rename("brightness_temperature")
    result = data.drop_vars(["lat", "lon"]).to_dataset().assign(stereographic=source["stereographic"])
    result["brightness_temperature"].attrs["grid_mapping"] = "stereographic"
    result = result.assign_coords(latitude=source["lat"], longitude=source["lon"])
    grid = read_grid(result)
    x, y = to_plane(grid.projection, grid.longitude, grid.latitude)
    spacing = abs(grid.x[1] - grid.x[0])
    assert np.abs(x - grid.x).max() < 0.5 * spacing and np.abs(y - grid.y[:, None]).max() < 0.5 * spacing
    for projection in ("source", "latlon"):
        figure = draw_channel(result, "tir108", projection=projection)
        assert "masked pixels" in words(figure) and len(coast_colour_pixels(figure)) > 500


def test_real_model_field_fits_the_coastline():
    """In the real file the 2 m temperature changes more across the coastline than across a displaced one."""
    path = SHARED / "nam_20180917_00z.grib2"
    if not path.is_file():
        pytest.skip("needs ../shared/real_input/nam_20180917_00z.grib2")
    from chansim.imaging.coastline import natural_earth_lines
    from chansim.imaging.projections import read_grid, to_plane
    from chansim.scene.reading import open_scene

    scene = open_scene(path)
    result = xr.Dataset(
        {
            "brightness_temperature": scene["air_temperature_2m"].expand_dims(channel=["t2m"]),
            "grid_mapping": scene["grid_mapping"],
        }
    )
    result["brightness_temperature"].attrs["grid_mapping"] = "grid_mapping"
    grid = read_grid(result)
    assert grid.projection is not None and "Lambert" in grid.projection.to_wkt()
    step = np.hypot(*np.gradient(scene["air_temperature_2m"].values))
    shore = np.concatenate(natural_earth_lines("50m"))
    x, y = to_plane(grid.projection, *shore.T)
    column = np.round((x - grid.x[0]) / (grid.x[1] - grid.x[0]))
    row = np.round((y - grid.y[0]) / (grid.y[1] - grid.y[0]))
    inside = (column >= 1) & (column < grid.x.size - 1) & (row >= 1) & (row < grid.y.size - 1)
    at_coast = np.zeros(step.shape, dtype=bool)
    at_coast[row[inside].astype(int), column[inside].astype(int)] = True
    assert 200 < at_coast.sum() < 1500
    right_place = step[at_coast].mean()
    shifted = [np.roll(at_coast, shift, axis=axis) for shift in (-6, 6) for axis in (0, 1)]
    assert all(right_place > 1.1 * step[s].mean() for s in shifted)


def test_matplotlib_settings_are_untouched():
    before = dict(matplotlib.rcParams)
    draw_channel(make_result(), "ir104")
    assert dict(matplotlib.rcParams) == before
