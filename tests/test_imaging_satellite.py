"""Maps and animations of pictures on a geostationary fixed grid."""

import cartopy.crs as ccrs
import matplotlib
import numpy as np
import pytest
import xarray as xr
from imaging_samples import make_result
from PIL import Image
from satellite_samples import disk_picture, sector_picture

from chansim.errors import ChansimError, OutputError, SceneError, ViewError
from chansim.imaging import maps
from chansim.imaging.animation import animate_channel
from chansim.imaging.maps import draw_channel, draw_difference, draw_sheet
from chansim.imaging.projections import projection_names


def colours_of(figure):
    """The picture of a figure's map as an array (rows, columns, 3) of 0-255, rows from above."""
    figure.set_dpi(100)
    figure.canvas.draw()
    whole = np.asarray(figure.canvas.buffer_rgba())[..., :3].astype(int)
    box = figure.axes[0].get_window_extent()
    height = whole.shape[0]
    return whole[int(height - box.y1) : int(height - box.y0), int(box.x0) : int(box.x1)]


def rgb(colour):
    return np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)])


def share_of(picture, colour):
    return float((np.abs(picture - rgb(colour)).max(axis=-1) <= 2).mean())


def test_space_is_dark_and_the_disk_is_told_from_it():
    """A disk fills pi/4 of its square; the corners are space."""
    picture = colours_of(draw_channel(disk_picture(), "ir104"))
    for corner in (picture[5, 5], picture[5, -5], picture[-5, 5], picture[-5, -5]):
        assert np.abs(corner - rgb(maps._SPACE_COLOUR)).max() <= 2
    assert share_of(picture, maps._SPACE_COLOUR) == pytest.approx(1.0 - np.pi / 4.0, abs=0.05)
    assert share_of(picture, maps._LIMB_COLOUR) > 0.003
    assert share_of(picture, maps._BEYOND_COLOUR) > 0.35


def test_outside_of_the_model_is_not_called_masked():
    figure = draw_channel(disk_picture(), "ir104")
    words = [t.get_text() for t in figure.legends[0].get_texts()]
    assert "outside the domain of the model" in words
    hole = disk_picture().copy(deep=True)
    inside = np.argwhere(np.isfinite(hole.brightness_temperature.values[0]))
    for row, column in inside[len(inside) // 2 :][:6]:
        hole.brightness_temperature[0, row, column] = np.nan
    before = int(next((w for w in words if "masked" in w), "no value: 0 m").split()[2])
    (found,) = (t.get_text() for t in draw_channel(hole, "ir104").legends[0].get_texts() if "masked" in t.get_text())
    assert found == f"no value: {before + 6} masked pixels"


def test_disk_in_another_projection_stays_on_paper():
    picture = colours_of(draw_channel(disk_picture(), "ir104", projection="latlon"))
    assert share_of(picture, maps._SPACE_COLOUR) < 0.01 and share_of(picture, "#ffffff") > 0.02


def test_own_coast_is_drawn_where_space_is_in_the_picture():
    lines = [c for c in draw_channel(disk_picture(), "ir104").axes[0].collections if len(c.get_segments())]
    assert lines, "the land of the demo scene has a coast"
    points = np.concatenate([s for c in lines for s in c.get_segments()])
    assert np.isfinite(points).all() and np.abs(points).max() < 5.5e6


def test_sheets_and_differences_of_a_sector():
    assert len(draw_sheet(sector_picture()).axes) == 4
    figure = draw_difference(sector_picture(), "ir104", "wv063")
    assert isinstance(figure.axes[0].projection, ccrs.Geostationary)
    expected = (sector_picture().brightness_temperature[1] - sector_picture().brightness_temperature[0]).values
    drawn = figure.axes[0].images[-1].get_array()
    np.testing.assert_allclose(drawn[~drawn.mask], expected[np.isfinite(expected)], rtol=1e-6)


def test_sheets_say_what_slate_blue_is():
    texts = " ".join(t.get_text().replace("\n", " ") for t in draw_sheet(disk_picture()).texts)
    assert "Slate blue lies outside the domain of the model" in texts


def test_long_words_of_the_view_stay_on_the_paper():
    for figure in (draw_channel(sector_picture(), "ir104"), draw_sheet(sector_picture())):
        figure.canvas.draw()
        width, height = figure.get_size_inches() * figure.dpi
        boxes = [t.get_window_extent() for t in figure.texts]
        assert max(b.x1 for b in boxes) < width and max(b.y1 for b in boxes) < height
        assert any("slanted columns" in t.get_text().replace("\n", " ") for t in figure.texts)
        top = max(a.get_window_extent().y1 for a in figure.axes[:1])
        assert min(b.y0 for b, t in zip(boxes, figure.texts) if "view:" in t.get_text()) > top


@pytest.mark.parametrize(
    "name", ["orthographic", "Lambert Conformal", "north-polar-stereo", "MOLLWEIDE", "geostationary"]
)
def test_projections_by_name(name):
    figure = draw_channel(sector_picture(), "ir104", projection=name)
    kind = projection_names()[name.replace(" ", "").replace("-", "").lower()]
    assert type(figure.axes[0].projection) is kind
    assert figure.axes[0].projection.proj4_params["lon_0"] == pytest.approx(40.0, abs=0.5)


def test_southern_domains_get_southern_parallels():
    result = make_result("across the date line")
    projection = draw_channel(result, "ir104", projection="lambertconformal").axes[0].projection
    assert projection.proj4_params["lat_1"] < 0.0 and projection.proj4_params["lon_0"] == pytest.approx(-177.5, abs=1)


@pytest.mark.parametrize(
    "name, words", [("ortographic", "orthographic"), ("flat", "lambertconformal"), ("utm", "not kno")]
)
def test_unknown_projections_are_told_the_known_ones(name, words):
    with pytest.raises(ViewError, match=f"projection '{name}': .*{words}"):
        draw_channel(sector_picture(), "ir104", projection=name)


def loop(times=3, done=None):
    """A small series in which it gets warmer by 10 K every hour."""
    steps = [make_result(shape=(9, 11)) for _ in range(times)]
    hours = np.datetime64("2026-01-21T06:00", "ns") + np.arange(times) * np.timedelta64(1, "h")
    for n, step in enumerate(steps):
        step["brightness_temperature"] = step["brightness_temperature"] + 10.0 * n
        step["brightness_temperature"].attrs = {"units": "K", "grid_mapping": "grid_mapping"}
    bt = xr.concat([s.brightness_temperature.drop_vars("time") for s in steps], "time")
    whole = steps[0].drop_vars("time").assign(brightness_temperature=bt).assign_coords(time=hours)
    whole["brightness_temperature"].attrs["grid_mapping"] = "grid_mapping"
    return whole if done is None else whole.assign(simulated=("time", done))


def frames(path):
    with Image.open(path) as film:
        pictures = []
        for n in range(film.n_frames):
            film.seek(n)
            pictures.append((np.asarray(film.convert("RGB")).astype(int), film.info["duration"]))
    return pictures


def test_animation_shows_every_time(tmp_path):
    seen = []
    path = animate_channel(loop(), "ir104", tmp_path / "a.gif", frames_per_second=5, progress=lambda *a: seen.append(a))
    pictures = frames(path)
    assert len(pictures) == 3 and seen == [(1, 3), (2, 3), (3, 3)]
    assert [d for _, d in pictures] == [200, 200, 600]
    brightness = [picture[300:400, 300:500].mean() for picture, _ in pictures]
    assert brightness[0] > brightness[1] + 10 > brightness[2] + 20  # warmer is darker
    assert (pictures[0][0] != pictures[1][0]).any(axis=-1)[:80].any()  # the valid time above the map


def test_animation_leaves_out_what_is_still_to_come(tmp_path):
    assert len(frames(animate_channel(loop(4, [1, 0, 1, 1]), "ir104", tmp_path / "a.gif"))) == 3
    with pytest.raises(SceneError, match="only 1 of 3 times are simulated"):
        animate_channel(loop(3, [1, 0, 0]), "ir104", tmp_path / "b.gif")


def test_what_cannot_be_animated(tmp_path):
    members = loop().expand_dims(member=[0, 1]).transpose("time", "member", "channel", "y", "x")
    cases = [
        (make_result(), "a.gif", SceneError, "several times"), (loop().isel(time=[0]), "a.gif", SceneError, "several"),
        (members, "a.gif", SceneError, "members .0, 1."), (loop(), "a.png", OutputError, "gif, mp4"),
        (loop(), "no/a.gif", OutputError, "does not exist"),
    ]  # fmt: skip
    for dataset, name, kind, words in cases:
        with pytest.raises(kind, match=words):
            animate_channel(dataset, "ir104", tmp_path / name)
    with pytest.raises(ChansimError, match="0.2 to 30"):
        animate_channel(loop(), "ir104", tmp_path / "a.gif", frames_per_second=100)
    (tmp_path / "a.gif").write_bytes(b"old")
    with pytest.raises(OutputError, match="exists and is kept"):
        animate_channel(loop(), "ir104", tmp_path / "a.gif")
    assert [p.name for p in tmp_path.iterdir()] == ["a.gif"]


def test_film_needs_ffmpeg(tmp_path):
    with matplotlib.rc_context({"animation.ffmpeg_path": "no-such-program"}):
        with pytest.raises(OutputError, match="ffmpeg, which is not installed"):
            animate_channel(loop(), "ir104", tmp_path / "a.mp4")
    assert not list(tmp_path.iterdir())


def test_film(tmp_path):
    from matplotlib.animation import FFMpegWriter

    settings = {}
    if not FFMpegWriter.isAvailable():
        program = pytest.importorskip("imageio_ffmpeg", reason="needs the program ffmpeg").get_ffmpeg_exe()
        settings = {"animation.ffmpeg_path": program}
    with matplotlib.rc_context(settings):
        path = animate_channel(loop(), "ir104", tmp_path / "a.mp4")
    assert path.read_bytes()[4:8] == b"ftyp" and path.stat().st_size > 5000
