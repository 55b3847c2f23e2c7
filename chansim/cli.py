"""The command line: parse, call, print."""

import argparse
import sys
import warnings

from chansim._version import __version__
from chansim.commands.common import EPILOG, add_command, split_list
from chansim.commands.draw import add_animate, add_draw, add_geotiff
from chansim.commands.simulate import add_demo, add_simulate
from chansim.commands.view import join_bounds
from chansim.errors import ChansimError, OutputError

OK, FAILED, USAGE, KEPT, INTERRUPTED = 0, 1, 2, 3, 130


def main(arguments=None):
    """Run one command; returns the exit code."""
    options = _parser().parse_args(join_bounds(sys.argv[1:] if arguments is None else arguments))
    try:
        return options.run(options) or OK
    except OutputError as error:
        print(f"chansim: {error}", file=sys.stderr)
        return KEPT if "exists and is kept" in str(error) else FAILED
    except ChansimError as error:
        print(f"chansim: {error}", file=sys.stderr)
        return FAILED
    except KeyboardInterrupt as interrupt:
        print(f"\nchansim: interrupted; {str(interrupt) or 'nothing was written'}", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        return OK


def _parser():
    parser = argparse.ArgumentParser(
        prog="chansim",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Turns weather-model output into the infrared picture a satellite imager would have taken.",
        epilog="first steps:\n  chansim demo\n  chansim scene FILE.grib2\n  chansim simulate FILE.grib2 -o result.nc\n"
        "  chansim draw result.nc\n\n" + EPILOG,
    )
    parser.add_argument("--version", action="version", version=f"chansim {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="command")
    add_demo(commands)
    add_simulate(commands)
    add_draw(commands)
    add_animate(commands)
    add_geotiff(commands)
    _add_channel(commands)
    _add_scene(commands)
    return parser


def _add_channel(commands):
    parser = add_command(
        commands, "channel", _channel, "describe an imager, a channel or a response file",
        "Prints the central wavenumber, bandwidth, band correction, nodes and fit error of channels.",
        ["chansim channel tarn", "chansim channel tarn --channels wv063", "chansim channel response.txt"],
    )  # fmt: skip
    parser.add_argument("imager", nargs="?", default="tarn", help="imager id, folder or response file")
    parser.add_argument("--channels", metavar="ID,ID")


def _add_scene(commands):
    parser = add_command(
        commands, "scene", _scene, "describe a model file: what it has, what is missing",
        "Lists what a model file holds, what was recognised as what, what is missing, what would be assumed and how\n"
        "to mend it.",
        ["chansim scene forecast.grib2"],
    )  # fmt: skip
    parser.add_argument("file", help="model file")
    parser.add_argument("--time", help="one valid time, where the file holds several, e.g. 2026-06-21T12")
    parser.add_argument("--mapping", help="TOML file that names the variables of an unusual file")


def _channel(options):
    from chansim.channels.imager import load_imager

    imager = load_imager(options.imager, split_list(options.channels))
    print(f"{imager.id}: {imager.name}")
    if imager.sub_satellite_longitude is not None:
        print(f"sub-satellite longitude {imager.sub_satellite_longitude:g} degrees east")
    for channel in imager.channels:
        print(describe_channel(channel))


def describe_channel(channel):
    """What a user wants to know of a channel, as text."""
    low, high = channel.response_wavenumber[[0, -1]]
    lines = [
        "",
        f"{channel.id}: {channel.name} ({channel.kind.replace('_', ' ')})",
        f"  centre            {channel.central_wavenumber:9.3f} cm-1   {channel.central_wavelength_um:.3f} um",
        f"  effective width   {channel.bandwidth:9.3f} cm-1   response {1e4 / high:.2f}-{1e4 / low:.2f} um",
        f"  band correction   T_equivalent = {channel.band_offset:.5f} K + {channel.band_slope:.7f} T, "
        f"within {channel.band_residual:.4f} K over 180-340 K",
        f"  nodes             {channel.node_wavenumber.size} wavenumbers; fit {channel.fit_error:.3f} K rms, "
        f"{channel.fit_worst:.3f} K worst over clear and cloudy test scenes",
        "  node, weight      "
        + "  ".join(f"{n:.3f} {w:.4f}" for n, w in zip(channel.node_wavenumber, channel.node_weight)),
    ]
    return "\n".join(lines + [f"  note              {note}" for note in channel.notes])


def _scene(options):
    from chansim.scene.reading import describe_scene

    print(describe_scene(options.file, time=options.time, mapping=options.mapping))


if __name__ == "__main__":
    warnings.simplefilter("default")
    sys.exit(main())
