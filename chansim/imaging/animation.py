"""Animations of one channel over time, as GIF or MP4."""

import dataclasses
from pathlib import Path

import matplotlib
import numpy as np
from PIL import Image

from chansim.errors import ChansimError, OutputError, SceneError
from chansim.imaging.maps import check_picture, figure_of_channel, prepare, write_whole

FORMATS = ("gif", "mp4")
_LAST_PICTURE = 3  # times as long as the others, so that the eye finds the end


def animate_channel(
    dataset, channel, path, *, field="brightness_temperature", projection="source", colours="auto", limits=None,
    coastline="auto", frames_per_second=4.0, existing="keep", dpi=90, progress=None,
):  # fmt: skip
    """An animation of one channel over the times of a result.

    Parameters
    ----------
    dataset : result over time, such as `chansim.series.simulate_series` writes; of one member
    channel : channel id
    path : name that ends in .gif, or in .mp4 where the program ffmpeg is installed
    field, projection, colours, limits, coastline : see `chansim.imaging.maps.draw_channel`
    frames_per_second : 0.2 to 30
    existing : "keep" or "replace" a file that is there
    dpi : dots per inch
    progress : function (done, all pictures) called after each picture

    Returns
    -------
    pathlib.Path. Times that are not simulated yet are left out

    Raises
    ------
    SceneError : one time only, several members
    OutputError : the file exists and is kept, cannot be written, MP4 without ffmpeg
    see `draw_channel`
    """
    path = Path(path)
    check_picture(path, existing, FORMATS)
    if not 0.2 <= frames_per_second <= 30.0:
        raise ChansimError(f"{frames_per_second:g} pictures a second: give 0.2 to 30")
    times = _times_to_show(dataset, field)
    shared = prepare(dataset.isel(time=times[0]), projection, coastline, field)

    def pictures():
        for number, time in enumerate(times):
            of_time = dataclasses.replace(shared, dataset=dataset.isel(time=time))
            yield figure_of_channel(of_time, channel, colours, limits)
            if progress is not None:
                progress(number + 1, len(times))

    if path.suffix.lower() == ".mp4":
        writer = _ffmpeg(path, frames_per_second)
        return write_whole(path, lambda temporary: _write_film(writer, pictures(), temporary, dpi))
    return write_whole(path, lambda temporary: _write_gif(pictures(), temporary, dpi, frames_per_second))


def _times_to_show(dataset, field):
    """Positions of the times that have a picture; at least two."""
    if "time" not in dataset.dims or dataset.sizes["time"] < 2:
        raise SceneError("an animation needs a result with several times; a single one is drawn by draw_channel")
    if dataset.sizes.get("member", 1) > 1:
        members = ", ".join(str(m) for m in dataset["member"].values[:12])
        raise SceneError(f"the result has several members ({members}); animate one of them")
    done = np.ones(dataset.sizes["time"], dtype=bool)
    if "simulated" in dataset:
        done = (dataset["simulated"] == 1).values.reshape(done.size, -1).all(axis=1)
    if done.sum() < 2:
        raise SceneError(f"only {int(done.sum())} of {done.size} times are simulated; an animation needs two")
    return np.flatnonzero(done)


def _pixels(figure, dpi):
    figure.set_dpi(dpi)
    figure.canvas.draw()
    return Image.fromarray(np.asarray(figure.canvas.buffer_rgba())[..., :3])


def _write_gif(figures, path, dpi, frames_per_second):
    """One palette for all, so that colours do not flicker; pictures are kept with one byte a pixel."""
    frames = []
    for figure in figures:
        frame = _pixels(figure, dpi)
        if not frames:
            palette = frame.quantize(colors=256, method=Image.Quantize.MEDIANCUT, dither=Image.Dither.NONE)
        frames.append(frame.quantize(palette=palette, dither=Image.Dither.NONE))
    duration = [int(round(1000.0 / frames_per_second))] * len(frames)
    duration[-1] *= _LAST_PICTURE
    frames[0].save(path, format="GIF", save_all=True, append_images=frames[1:], duration=duration, loop=0)


def _ffmpeg(path, frames_per_second):
    from matplotlib.animation import FFMpegWriter

    if not FFMpegWriter.isAvailable():
        raise OutputError(f"{path}: MP4 needs the program ffmpeg, which is not installed here; write a .gif instead")
    even = ["-vf", "pad=ceil(iw/2)*2:ceil(ih/2)*2:color=white", "-pix_fmt", "yuv420p"]
    return FFMpegWriter(fps=frames_per_second, codec="h264", extra_args=even)


def _write_film(writer, figures, path, dpi):
    first = next(figures)
    with matplotlib.rc_context({"savefig.bbox": None}), writer.saving(first, path, dpi):
        writer.grab_frame()
        for figure in figures:
            writer.fig = figure
            writer.grab_frame()
