"""The command line: parse, call, print."""

import argparse
import sys
import warnings
from pathlib import Path

from chansim._version import __version__
from chansim.errors import ChansimError, OutputError

OK, FAILED, USAGE, KEPT, INTERRUPTED = 0, 1, 2, 3, 130
_EPILOG = """exit codes: 0 done, 1 the input or the output cannot be used, 2 wrong call, 3 the output exists and
was kept, 130 interrupted (nothing half-written is left)

This is a simulation, not an observation: official warnings and licensed practice come first."""


def main(arguments=None):
    """Run one command; returns the exit code."""
    parser = _parser()
    options = parser.parse_args(arguments)
    try:
        return options.run(options) or OK
    except OutputError as error:
        print(f"chansim: {error}", file=sys.stderr)
        return KEPT if "exists and is kept" in str(error) else FAILED
    except ChansimError as error:
        print(f"chansim: {error}", file=sys.stderr)
        return FAILED
    except KeyboardInterrupt:
        print("chansim: interrupted; nothing was written", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        return OK


def _parser():
    parser = argparse.ArgumentParser(
        prog="chansim",
        formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Turns weather-model output into the infrared picture a satellite imager would have taken.",
        epilog="first steps:\n  chansim demo\n  chansim scene FILE.grib2\n  chansim simulate FILE.grib2 -o result.nc\n"
        "  chansim draw result.nc\n\n" + _EPILOG,
    )
    parser.add_argument("--version", action="version", version=f"chansim {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="command")
    _add_demo(commands)
    _add_simulate(commands)
    _add_draw(commands)
    _add_channel(commands)
    _add_scene(commands)
    return parser


def _command(commands, name, run, summary, description, examples):
    parser = commands.add_parser(
        name,
        help=summary,
        description=description,
        epilog="examples:\n" + "\n".join(f"  {e}" for e in examples) + "\n\n" + _EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.set_defaults(run=run)
    return parser


def _add_imager_options(parser):
    parser.add_argument(
        "--imager",
        default="tarn",
        metavar="IMAGER",
        help="id of a built-in imager, a folder with imager.toml, or a response file a colleague sent "
        "(default: %(default)s)",
    )
    parser.add_argument("--channels", metavar="ID,ID", help="channels to simulate, by id (default: all of the imager)")


def _add_view_options(parser):
    view = parser.add_mutually_exclusive_group()
    view.add_argument("--nadir", action="store_true", help="look straight down everywhere (default)")
    view.add_argument("--zenith", type=float, metavar="DEGREES", help="the same zenith angle everywhere")
    view.add_argument(
        "--geostationary",
        type=float,
        metavar="LONGITUDE",
        help="from above the equator at this longitude, degrees east",
    )


def _add_demo(commands):
    parser = _command(
        commands, "demo", _demo, "simulate and draw the embedded weather case",
        "Simulates an invented weather case with an invented geostationary imager and draws the maps.",
        ["chansim demo", "chansim demo --folder pictures --channels wv063,ir104"],
    )  # fmt: skip
    parser.add_argument("--folder", default="chansim-demo", help="folder for the result (default: %(default)s)")
    parser.add_argument("--channels", metavar="ID,ID", help="channels (default: all ten)")
    parser.add_argument("--replace", action="store_true", help="overwrite results that are there")


def _add_simulate(commands):
    parser = _command(
        commands, "simulate", _simulate, "simulate a model file",
        "Reads a model file (GRIB, CF netCDF, Zarr), simulates the channels of an imager and writes a CF netCDF or\n"
        "Zarr file. What was missing in the file and which default took its place is printed and recorded.",
        ["chansim simulate forecast.grib2 -o simulated.nc",
         "chansim simulate forecast.nc -o simulated.nc --channels wv063,ir104 --geostationary 40",
         "chansim simulate forecast.nc -o simulated.nc --imager response_from_a_colleague.txt --zenith 30"],
    )  # fmt: skip
    parser.add_argument("file", help="model file")
    parser.add_argument("-o", "--output", required=True, help="result, .nc or .zarr")
    parser.add_argument("--time", help="valid time, where the file holds several, e.g. 2026-06-21T12")
    parser.add_argument("--mapping", help="TOML file that names the variables of an unusual file")
    parser.add_argument("--replace", action="store_true", help="overwrite the result if it is there")
    _add_imager_options(parser)
    _add_view_options(parser)
    parser.add_argument(
        "--solver",
        default="scattering",
        choices=("scattering", "absorbing"),
        help="multiple scattering in cloud, or condensate that only absorbs (default: %(default)s)",
    )
    parser.add_argument("--co2", type=float, metavar="PPM", help="CO2 mole fraction instead of the default")
    parser.add_argument("--draw", metavar="FOLDER", help="draw maps of all channels to this folder as well")


def _add_draw(commands):
    parser = _command(
        commands, "draw", _draw, "draw maps of a result",
        "Draws one map for each channel (cold = white), or all on one sheet, or the difference of two.",
        ["chansim draw simulated.nc --channels ir104", "chansim draw simulated.nc --sheet --folder pictures",
         "chansim draw simulated.nc --difference ir104,ir123"],
    )  # fmt: skip
    parser.add_argument("file", help="result of 'chansim simulate'")
    parser.add_argument("--channels", metavar="ID,ID", help="channels (default: all)")
    parser.add_argument("--folder", default=".", help="folder for the pictures (default: here)")
    parser.add_argument("--sheet", action="store_true", help="all channels on one sheet")
    parser.add_argument("--difference", metavar="A,B", help="map of channel A minus channel B")
    parser.add_argument("--colours", default="auto", help="colour table by name (default: %(default)s)")
    parser.add_argument("--projection", default="source", choices=("source", "latlon"))
    parser.add_argument("--replace", action="store_true", help="overwrite pictures that are there")


def _add_channel(commands):
    parser = _command(
        commands, "channel", _channel, "describe an imager, a channel or a response file",
        "Prints the central wavenumber, bandwidth, band correction, nodes and fit error of channels.",
        ["chansim channel tarn", "chansim channel tarn --channels wv063", "chansim channel response.txt"],
    )  # fmt: skip
    parser.add_argument("imager", nargs="?", default="tarn", help="imager id, folder or response file")
    parser.add_argument("--channels", metavar="ID,ID")


def _add_scene(commands):
    parser = _command(
        commands, "scene", _scene, "describe a model file: what it has, what is missing",
        "Lists what a model file holds, what was recognised as what, what is missing, what would be assumed and how\n"
        "to mend it.",
        ["chansim scene forecast.grib2"],
    )  # fmt: skip
    parser.add_argument("file", help="model file")
    parser.add_argument("--mapping", help="TOML file that names the variables of an unusual file")


def _ids(text):
    return None if text is None else [part.strip() for part in text.split(",") if part.strip()]


def _view(options):
    if options.geostationary is not None:
        return ("geostationary", options.geostationary)
    return "nadir" if options.zenith is None else options.zenith


def _progress():
    """A function (done, all) that moves a progress bar on the terminal."""
    from tqdm import tqdm

    bar = tqdm(total=0, unit=" columns", unit_scale=True, desc="simulating", leave=False, file=sys.stderr)

    def advance(done, everything):
        bar.total = everything
        bar.n = done
        bar.refresh()
        if done >= everything:
            bar.close()

    return advance


def _run_simulation(scene, imager, channels, view, output, existing, settings=None):
    from chansim.channels.imager import load_imager
    from chansim.output import write_dataset
    from chansim.simulate import simulate

    imager = load_imager(imager, channels)
    result = simulate(scene, imager, view=view, settings=settings, progress=_progress())
    write_dataset(result, output, existing)
    print(_summary(result, output))
    return result


def _summary(result, output):
    lines = [f"wrote {output}", f"view: {result.attrs['view']}"]
    for title, name in (("assumed", "defaulted"), ("adjusted", "adjusted"), ("counted", "counted")):
        text = result.attrs[name]
        if text and text != "nothing":
            lines.append(f"{title}:")
            lines += [f"  {line}" for line in text.splitlines()]
    if result.attrs["masked_columns"]:
        lines.append(f"masked columns: {result.attrs['masked_columns']}")
    lines.append("brightness temperature [K]   coldest   mean  warmest")
    for channel in result["channel"].values:
        values = result["brightness_temperature"].sel(channel=channel)
        lines.append(
            f"  {str(channel):24s} {float(values.min()):9.1f} {float(values.mean()):7.1f} {float(values.max()):8.1f}"
        )
    lines.append("A simulation, not an observation. Official warnings come first.")
    return "\n".join(lines)


def _demo(options):
    from chansim.output import check_target
    from chansim.scene.reading import open_scene

    folder = Path(options.folder)
    existing = "replace" if options.replace else "keep"
    _make_folder(folder)
    output = folder / "demo.nc"
    check_target(output, existing)
    scene = open_scene(Path(__file__).parent / "data" / "demo_scene.nc")
    result = _run_simulation(scene, "tarn", _ids(options.channels), ("geostationary", 40.0), output, existing)
    _draw_all(result, folder, "auto", "source", existing, sheet=True)


def _simulate(options):
    from chansim.output import check_target
    from chansim.scene.reading import open_scene
    from chansim.simulate import Settings

    existing = "replace" if options.replace else "keep"
    check_target(options.output, existing)
    scene = open_scene(options.file, time=options.time, mapping=options.mapping)
    gases = {} if options.co2 is None else {"co2": options.co2 * 1e-6}
    settings = Settings(solver=options.solver, gases=gases)
    result = _run_simulation(
        scene, options.imager, _ids(options.channels), _view(options), options.output, existing, settings
    )
    if options.draw:
        _make_folder(Path(options.draw))
        _draw_all(result, Path(options.draw), "auto", "source", existing, sheet=True)


def _make_folder(folder):
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(f"{folder}: cannot make this folder ({error.strerror})") from None


def _draw_all(result, folder, colours, projection, existing, sheet):
    from chansim.imaging.maps import draw_channel, draw_sheet, save_figure

    for channel in result["channel"].values:
        figure = draw_channel(result, str(channel), colours=colours, projection=projection)
        print(f"wrote {save_figure(figure, folder / f'{channel}.png', existing=existing)}")
    if sheet and result.sizes["channel"] > 1:
        figure = draw_sheet(result, projection=projection)
        print(f"wrote {save_figure(figure, folder / 'sheet.png', existing=existing)}")


def _open_result(path):
    import xarray as xr

    try:
        kind = {"engine": "zarr", "consolidated": False} if str(path).endswith(".zarr") else {"engine": "netcdf4"}
        result = xr.open_dataset(path, **kind)
    except (OSError, ValueError, RuntimeError) as error:
        raise ChansimError(f"{path}: cannot be read as a result of 'chansim simulate' ({error})") from None
    if "brightness_temperature" not in result or "channel" not in result.dims:
        raise ChansimError(f"{path}: not a result of 'chansim simulate': it has no brightness_temperature by channel")
    return result


def _draw(options):
    from chansim.channels.imager import unknown_channel
    from chansim.imaging.maps import draw_difference, draw_sheet, save_figure

    existing = "replace" if options.replace else "keep"
    result = _open_result(options.file)
    folder = Path(options.folder)
    _make_folder(folder)
    existing_ids = [str(c) for c in result["channel"].values]
    wanted = _ids(options.channels) or existing_ids
    pair = _ids(options.difference) or []
    for channel in wanted + pair:
        if channel not in existing_ids:
            raise unknown_channel(channel, result.attrs.get("imager", "?"), existing_ids)
    if options.difference:
        if len(pair) != 2:
            raise ChansimError(f"--difference {options.difference}: give two channels, A,B")
        figure = draw_difference(result, *pair, projection=options.projection)
        print(f"wrote {save_figure(figure, folder / f'{pair[0]}-{pair[1]}.png', existing=existing)}")
    elif options.sheet:
        figure = draw_sheet(result, wanted, projection=options.projection)
        print(f"wrote {save_figure(figure, folder / 'sheet.png', existing=existing)}")
    else:
        _draw_all(result.sel(channel=wanted), folder, options.colours, options.projection, existing, sheet=False)


def _channel(options):
    from chansim.channels.imager import load_imager

    imager = load_imager(options.imager, _ids(options.channels))
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

    print(describe_scene(options.file, mapping=options.mapping) if options.mapping else describe_scene(options.file))


if __name__ == "__main__":
    warnings.simplefilter("default")
    sys.exit(main())
