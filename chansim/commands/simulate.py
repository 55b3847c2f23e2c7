"""`chansim simulate` and `chansim demo`."""

import os
import sys
from pathlib import Path

from chansim.commands.common import (
    CAUTION,
    add_command,
    existing_of,
    make_folder,
    progress_bar,
    split_list,
)
from chansim.commands.draw import draw_all
from chansim.commands.view import add_view_options, detector_of, grid_of, has_grid, view_of
from chansim.errors import ChansimError, OutputError

_DEMO_SCENE = Path(__file__).parents[1] / "data" / "demo_scene.nc"


def add_simulate(commands):
    """The parser of `chansim simulate`."""
    parser = add_command(
        commands, "simulate", simulate_files, "simulate model files",
        "Reads model files (GRIB, CF netCDF, Zarr), simulates the channels of an imager and writes a CF netCDF or\n"
        "Zarr file. What was missing in the file and which default took its place is printed and recorded.\n"
        "Several times or files go into one result, time by time; an interrupted series goes on with --continue.",
        ["chansim simulate forecast.grib2 -o simulated.nc",
         "chansim simulate forecast.nc -o simulated.nc --channels wv063,ir104 --geostationary 40",
         "chansim simulate forecast.nc -o disk.nc --full-disk 40 --resolution 4",
         "chansim simulate forecast.nc -o sector.nc --sector 40 --resolution 2 --bounds 15,65,0,42 --footprint 3",
         "chansim simulate forecast.nc -o there.nc --like observed.nc",
         "chansim simulate forecast_*.grib2 --times all -o loop.zarr --sector 40 --resolution 3",
         "chansim simulate forecast.nc -o simulated.nc --imager response_from_a_colleague.txt --zenith 30"],
    )  # fmt: skip
    parser.add_argument("file", nargs="+", help="model file; several make a series of times")
    parser.add_argument("-o", "--output", required=True, help="result, .nc or .zarr")
    parser.add_argument("--mapping", help="TOML file that names the variables of an unusual file")
    parser.add_argument("--replace", action="store_true", help="overwrite the result if it is there")
    _add_time_options(parser.add_argument_group("times and members"))
    add_imager_options(parser)
    add_view_options(parser)
    parser.add_argument(
        "--solver",
        default="scattering",
        choices=("scattering", "absorbing"),
        help="multiple scattering in cloud, or condensate that only absorbs (default: %(default)s)",
    )
    parser.add_argument(
        "--sunlight",
        default="auto",
        choices=("auto", "none"),
        help="sunlight below 5 um: by the valid time, or night everywhere (default: %(default)s)",
    )
    parser.add_argument(
        "--inferred-cloud",
        metavar="THICKNESS",
        help="for a file without condensate: cloud between its cloud-top and cloud-base pressure, 'opaque' or of this "
        "visible optical thickness; columns where the two contradict each other stay clear and are counted",
    )
    parser.add_argument("--co2", type=float, metavar="PPM", help="CO2 mole fraction instead of the default")
    parser.add_argument("--draw", metavar="FOLDER", help="draw maps of all channels to this folder as well")


def _add_time_options(group):
    group.add_argument("--time", help="one valid time, where the file holds several, e.g. 2026-06-21T12")
    group.add_argument("--times", metavar="all|T1,T2", help="several valid times into one result")
    group.add_argument(
        "--members",
        metavar="DIMENSION=A,B|files",
        help="members of an ensemble into one result: number=0,1,2, or 'files' when each file is one",
    )
    group.add_argument(
        "--continue", dest="continues", action="store_true", help="go on with a series that was interrupted"
    )


def add_imager_options(parser):
    """The imager and its channels."""
    parser.add_argument(
        "--imager",
        default="tarn",
        metavar="IMAGER",
        help="id of a built-in imager, a folder with imager.toml, or a response file a colleague sent "
        "(default: %(default)s)",
    )
    parser.add_argument("--channels", metavar="ID,ID", help="channels to simulate, by id (default: all of the imager)")


def add_demo(commands):
    """The parser of `chansim demo`."""
    parser = add_command(
        commands, "demo", _demo, "simulate and draw the embedded weather case",
        "Simulates an invented weather case with an invented geostationary imager and draws the maps.",
        ["chansim demo", "chansim demo --folder pictures --channels wv063,ir104"],
    )  # fmt: skip
    parser.add_argument("--folder", default="chansim-demo", help="folder for the result (default: %(default)s)")
    parser.add_argument("--channels", metavar="ID,ID", help="channels (default: all ten)")
    parser.add_argument("--replace", action="store_true", help="overwrite results that are there")


def _demo(options):
    from chansim.output import check_target, write_dataset
    from chansim.scene.reading import open_scene
    from chansim.simulate import Settings, simulate

    folder, existing = Path(options.folder), existing_of(options)
    make_folder(folder)
    output = folder / "demo.nc"
    check_target(output, existing)
    scene = open_scene(_DEMO_SCENE)
    view, channels = ("geostationary", 40.0), split_list(options.channels)
    settings = Settings(subcolumns=6)  # a third of the usual number: the first run should be short
    result = simulate(scene, "tarn", channels=channels, view=view, settings=settings, progress=progress_bar())
    write_dataset(result, output, existing)
    print(summary(result, output))
    draw_all(result, folder, "auto", "source", existing, sheet=True)


def simulate_files(options):
    """Runs `chansim simulate`."""
    from chansim.output import check_target, write_dataset
    from chansim.scene.reading import open_scene

    series = len(options.file) > 1 or options.times is not None or options.members is not None or options.continues
    picture = _picture(options)
    if series:
        return _simulate_series(options, picture)
    existing = existing_of(options)
    check_target(options.output, existing)
    scene = open_scene(options.file[0], time=options.time, mapping=options.mapping)
    if options.inferred_cloud is not None:
        scene = _with_cloud(scene, options)
    result = picture(scene)
    write_dataset(result, options.output, existing)
    print(summary(result, options.output))
    if options.draw:
        make_folder(options.draw)
        draw_all(result, Path(options.draw), "auto", "source", existing, sheet=True)
    return None


def _with_cloud(scene, options):
    """The scene with cloud between the pressures at cloud top and base that its file holds."""
    from chansim.scene.inferred_cloud import cloud_boundaries, with_inferred_cloud

    thickness = options.inferred_cloud
    if thickness != "opaque":
        try:
            thickness = float(thickness)
        except ValueError:
            raise ChansimError(f"--inferred-cloud {thickness}: give 'opaque' or an optical thickness") from None
    top, base = cloud_boundaries(options.file[0], time=options.time)
    return with_inferred_cloud(scene, top, base, optical_thickness=thickness, upside_down="clear")


def _picture(options):
    """A function scene -> result, as the options ask; what can be wrong with them is found at once."""
    from chansim.channels.imager import load_imager
    from chansim.satellite import simulate_on_grid
    from chansim.simulate import Settings, simulate

    imager = load_imager(options.imager, split_list(options.channels))
    gases = {} if options.co2 is None else {"co2": options.co2 * 1e-6}
    settings = Settings(solver=options.solver, sunlight=options.sunlight, gases=gases)
    if not has_grid(options):
        view = view_of(options)
        return lambda scene: simulate(scene, imager, view=view, settings=settings, progress=progress_bar())
    detector = detector_of(options)
    known = []

    def on_grid(scene):
        if not known:
            known.append(grid_of(options, scene))
            _tell_memory(known[0], len(imager.channels), detector.subpixels)
        return simulate_on_grid(
            scene, known[0], imager, columns="vertical" if options.vertical_columns else "slanted",
            interpolation="bilinear" if options.bilinear else "nearest", detector=detector, settings=settings,
            progress=progress_bar(),
        )  # fmt: skip

    return on_grid


def _tell_memory(grid, channels, subpixels):
    """What a large picture needs, before it is begun."""
    from chansim.satellite import memory_needed

    needed = memory_needed(grid, channels, subpixels)
    if needed < 1e9:
        return
    words = f"{grid.shape[0]} x {grid.shape[1]} pixels, {channels} channels: about {needed / 1e9:.0f} GB of memory"
    try:
        there = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
    except (AttributeError, ValueError, OSError):
        there = None
    if there is not None and needed > 0.9 * there:
        words += f", but this machine has {there / 1e9:.0f} GB; take fewer channels, a sector or larger pixels"
    print(f"chansim: {words}", file=sys.stderr)


def _simulate_series(options, picture):
    from chansim.output import open_result
    from chansim.series import frames_of, simulate_series

    if options.time is not None:
        raise ChansimError("--time is for one picture; a series takes --times")
    if options.inferred_cloud is not None:
        raise ChansimError("--inferred-cloud is for one picture; run it time by time")
    if options.draw:
        raise ChansimError("--draw is for one picture; draw from a series with chansim draw or chansim animate")
    existing = existing_of(options)
    if options.continues:
        if options.replace:
            raise ChansimError("--continue and --replace: choose one of them")
        existing = "continue"
    elif Path(options.output).exists() and not options.replace:
        raise OutputError(
            f"{options.output}: exists and is kept; choose another name, or ask for replacement (--replace) or for the "
            "rest of an interrupted series (--continue)"
        )
    times = "all" if options.times in (None, "all") else split_list(options.times)
    frames = frames_of(options.file, times, members=_members(options.members), mapping=options.mapping)

    def tell(number, count, frame):
        if frame is not None:
            member = "" if frame.member is None else f", member {frame.member}"
            print(f"{number + 1} of {count}: {frame.time}{member}", file=sys.stderr, flush=True)

    path = simulate_series(frames, options.output, picture, existing=existing, progress=tell)
    with open_result(path) as result:
        print(summary(result, path))


def _members(text):
    """What `frames_of` takes as members."""
    if text is None or text == "files":
        return text
    dimension, _, values = text.partition("=")
    values = [int(v) if v.lstrip("-").isdigit() else v for v in split_list(values)]
    if not dimension or not values:
        raise ChansimError(f"--members {text}: write DIMENSION=A,B such as number=0,1,2, or files")
    return dimension, values


def summary(result, output):
    """What a user wants to know of a result, as text."""
    lines = [f"wrote {output}", f"view: {result.attrs['view']}"]
    if "time" in result.dims:
        lines.append(f"times: {result.sizes['time']}, {result['time'].values[0]} to {result['time'].values[-1]}")
    for title, name in (("assumed", "defaulted"), ("adjusted", "adjusted"), ("counted", "counted")):
        text = result.attrs.get(name)
        if text and text != "nothing":
            lines.append(f"{title}:")
            lines += [f"  {line}" for line in text.splitlines()]
    masked = result["masked_columns"].sum() if "masked_columns" in result else result.attrs.get("masked_columns", 0)
    if int(masked):
        lines.append(f"masked columns: {int(masked)}")
    lines.append("brightness temperature [K]   coldest   mean  warmest")
    for channel in result["channel"].values:
        values = result["brightness_temperature"].sel(channel=channel)
        lines.append(
            f"  {str(channel):24s} {float(values.min()):9.1f} {float(values.mean()):7.1f} {float(values.max()):8.1f}"
        )
    return "\n".join([*lines, CAUTION])
