"""`chansim draw`, `chansim animate` and `chansim geotiff`."""

from pathlib import Path

from chansim.commands.common import (
    CAUTION,
    add_command,
    add_moment_options,
    at_moment,
    existing_of,
    make_folder,
    progress_bar,
    require_channels,
    split_list,
)
from chansim.errors import ChansimError

_PROJECTION_HELP = (
    "source (that of the result), latlon, or the name of a cartopy projection such as orthographic "
    "(default: %(default)s)"
)


def add_draw(commands):
    """The parser of `chansim draw`."""
    parser = add_command(
        commands, "draw", _draw, "draw maps of a result",
        "Draws one map for each channel (cold = white), or all on one sheet, or the difference of two.",
        ["chansim draw simulated.nc --channels ir104", "chansim draw simulated.nc --sheet --folder pictures",
         "chansim draw simulated.nc --difference ir104,ir123",
         "chansim draw loop.zarr --time 2026-06-21T12 --projection orthographic"],
    )  # fmt: skip
    parser.add_argument("file", help="result of 'chansim simulate'")
    parser.add_argument("--channels", metavar="ID,ID", help="channels (default: all)")
    add_moment_options(parser)
    parser.add_argument("--folder", default=".", help="folder for the pictures (default: here)")
    parser.add_argument("--sheet", action="store_true", help="all channels on one sheet")
    parser.add_argument("--difference", metavar="A,B", help="map of channel A minus channel B")
    parser.add_argument("--colours", default="auto", help="colour table by name (default: %(default)s)")
    parser.add_argument("--projection", default="source", help=_PROJECTION_HELP)
    parser.add_argument("--replace", action="store_true", help="overwrite pictures that are there")


def add_animate(commands):
    """The parser of `chansim animate`."""
    parser = add_command(
        commands, "animate", _animate, "animate a result over its times",
        "Draws a channel at every time of a result and joins the pictures to a GIF, or to an MP4 where ffmpeg is "
        "installed.",
        ["chansim animate loop.zarr --channel ir104 -o loop.gif",
         "chansim animate loop.zarr --channel wv063 --colours dry-to-moist --speed 8 -o loop.mp4"],
    )  # fmt: skip
    parser.add_argument("file", help="result of 'chansim simulate' with several times")
    parser.add_argument("--channel", required=True, metavar="ID", help="the channel")
    parser.add_argument("-o", "--output", required=True, help="animation, .gif or .mp4")
    parser.add_argument("--member", help="member, where the result holds several")
    parser.add_argument("--speed", type=float, default=4.0, help="pictures a second (default: %(default)s)")
    parser.add_argument("--colours", default="auto", help="colour table by name (default: %(default)s)")
    parser.add_argument("--projection", default="source", help=_PROJECTION_HELP)
    parser.add_argument("--replace", action="store_true", help="overwrite an animation that is there")


def add_geotiff(commands):
    """The parser of `chansim geotiff`."""
    parser = add_command(
        commands, "geotiff", _geotiff, "write a result as GeoTIFF",
        "Writes the channels of a result as the bands of a GeoTIFF in the projection of the result. Needs rasterio\n"
        '(pip install "chansim[geotiff]").',
        ["chansim geotiff simulated.nc -o simulated.tif", "chansim geotiff loop.zarr --time 2026-06-21T12 -o noon.tif"],
    )  # fmt: skip
    parser.add_argument("file", help="result of 'chansim simulate'")
    parser.add_argument("-o", "--output", required=True, help="picture, .tif")
    parser.add_argument("--channels", metavar="ID,ID", help="channels (default: all)")
    add_moment_options(parser)
    parser.add_argument("--field", default="brightness_temperature", help="variable (default: %(default)s)")
    parser.add_argument("--replace", action="store_true", help="overwrite a picture that is there")


def draw_all(result, folder, colours, projection, existing, sheet):
    """Draws every channel of a result into a folder, and all on one sheet."""
    from chansim.imaging.maps import draw_channel, draw_sheet, save_figure

    for channel in result["channel"].values:
        figure = draw_channel(result, str(channel), colours=colours, projection=projection)
        print(f"wrote {save_figure(figure, folder / f'{channel}.png', existing=existing)}")
    if sheet and result.sizes["channel"] > 1:
        figure = draw_sheet(result, projection=projection)
        print(f"wrote {save_figure(figure, folder / 'sheet.png', existing=existing)}")


def _draw(options):
    from chansim.imaging.maps import draw_difference, draw_sheet, save_figure
    from chansim.output import open_result

    existing, folder = existing_of(options), Path(options.folder)
    result = at_moment(open_result(options.file), options)
    make_folder(folder)
    wanted = split_list(options.channels) or [str(c) for c in result["channel"].values]
    pair = split_list(options.difference) or []
    require_channels(result, wanted + pair)
    if options.difference:
        if len(pair) != 2:
            raise ChansimError(f"--difference {options.difference}: give two channels, A,B")
        figure = draw_difference(result, *pair, projection=options.projection)
        print(f"wrote {save_figure(figure, folder / f'{pair[0]}-{pair[1]}.png', existing=existing)}")
    elif options.sheet:
        figure = draw_sheet(result, wanted, projection=options.projection)
        print(f"wrote {save_figure(figure, folder / 'sheet.png', existing=existing)}")
    else:
        draw_all(result.sel(channel=wanted), folder, options.colours, options.projection, existing, sheet=False)


def _animate(options):
    from chansim.imaging.animation import animate_channel
    from chansim.output import open_result

    result = at_moment(open_result(options.file), options, keep_time=True)
    require_channels(result, [options.channel])
    path = animate_channel(
        result, options.channel, options.output, projection=options.projection, colours=options.colours,
        frames_per_second=options.speed, existing=existing_of(options), progress=progress_bar("drawing", " pictures"),
    )  # fmt: skip
    print(f"wrote {path}\n{CAUTION}")


def _geotiff(options):
    from chansim.geotiff import write_geotiff
    from chansim.output import open_result

    result = at_moment(open_result(options.file), options)
    wanted = split_list(options.channels) or [str(c) for c in result["channel"].values]
    result = result.sel(channel=require_channels(result, wanted))
    path = write_geotiff(result, options.output, field=options.field, existing=existing_of(options))
    print(f"wrote {path}\n{CAUTION}")
