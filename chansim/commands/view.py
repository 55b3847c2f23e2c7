"""Options of the view: angles, geostationary pictures, what the detector makes of them."""

from pathlib import Path

from chansim.errors import ViewError


def add_view_options(parser):
    """Where the imager stands and looks."""
    group = parser.add_argument_group("view, one of")
    view = group.add_mutually_exclusive_group()
    view.add_argument("--nadir", action="store_true", help="look straight down everywhere (default)")
    view.add_argument("--zenith", type=float, metavar="DEGREES", help="the same zenith angle everywhere")
    view.add_argument(
        "--geostationary",
        type=float,
        metavar="LONGITUDE",
        help="on the model's own grid, from above the equator at this longitude, degrees east",
    )
    view.add_argument(
        "--full-disk", type=float, metavar="LONGITUDE", help="the imager's own picture: all pixels of its full disk"
    )
    view.add_argument(
        "--sector", type=float, metavar="LONGITUDE", help="the same, but the part around --bounds or the model's domain"
    )
    view.add_argument("--like", metavar="IMAGE.nc", help="the pixels of a geostationary image file (CF grid mapping)")
    _add_grid_options(parser.add_argument_group("for --full-disk, --sector and --like"))


def _add_grid_options(group):
    group.add_argument("--resolution", type=float, metavar="KM", help="of a pixel below the satellite")
    group.add_argument("--bounds", metavar="WEST,EAST,SOUTH,NORTH", help="of the sector, degrees")
    group.add_argument("--sweep", choices=("x", "y"), help="axis about which the imager sweeps (default: y)")
    group.add_argument(
        "--vertical-columns",
        action="store_true",
        help="take the column that stands over a pixel; by default the slanted line of sight is followed, which puts "
        "high cloud where the imager sees it",
    )
    group.add_argument(
        "--bilinear", action="store_true", help="interpolate between model columns instead of taking the nearest"
    )
    group.add_argument(
        "--footprint", type=int, metavar="N", help="average N x N lines of sight over each pixel, in radiance"
    )
    group.add_argument(
        "--point-spread", type=float, metavar="PIXELS", help="Gaussian footprint of this full width at half maximum"
    )
    group.add_argument("--noise", metavar="K", help="detector noise at 300 K: 0.1, or ir104=0.1,wv063=0.2")
    group.add_argument("--seed", type=int, default=0, help="of the noise (default: %(default)s)")
    group.add_argument("--bits", metavar="N", help="of the detector's counts: 10, or ir104=12,wv063=10")


def has_grid(options):
    """True when the imager's own pixels are asked for."""
    return any(value is not None for value in (options.full_disk, options.sector, options.like))


def view_of(options):
    """What `chansim.simulate` takes as its view, for views on the model's own grid; ViewError."""
    given = [
        f"--{name.replace('_', '-')}"
        for name in ("resolution", "bounds", "sweep", "footprint", "point_spread", "noise", "bits")
        if getattr(options, name) is not None
    ]
    if options.vertical_columns or options.bilinear:
        given.append("--vertical-columns" if options.vertical_columns else "--bilinear")
    if given:
        raise ViewError(f"{', '.join(given)}: only for the imager's own pixels; add --full-disk, --sector or --like")
    if options.geostationary is not None:
        return ("geostationary", options.geostationary)
    return "nadir" if options.zenith is None else options.zenith


def grid_of(options, scene):
    """The fixed grid that was asked for.

    options : parsed command line; scene : canonical scene, whose domain is the sector without --bounds

    Raises
    ------
    ViewError : no resolution, impossible bounds, a file without a fixed grid
    """
    from chansim.view.fixed_grid import full_disk, sector

    if options.bounds is not None and options.sector is None:
        raise ViewError("--bounds: only for --sector LONGITUDE")
    if options.like is not None:
        return _grid_like(options)
    if options.resolution is None:
        raise ViewError("give the size of a pixel below the satellite, e.g. --resolution 3 (km)")
    sweep, metres = options.sweep or "y", options.resolution * 1e3
    if options.full_disk is not None:
        return full_disk(options.full_disk, metres, sweep=sweep)
    bounds = domain_of(scene) if options.bounds is None else _bounds(options.bounds)
    west, east, south, north = bounds
    return sector(options.sector, metres, west=west, east=east, south=south, north=north, sweep=sweep)


def _grid_like(options):
    import xarray as xr

    from chansim.view.fixed_grid import grid_of_file

    given = [f"--{name}" for name in ("resolution", "sweep") if getattr(options, name) is not None]
    if given:
        raise ViewError(f"{', '.join(given)}: --like takes it from the file; leave it out")
    kind = {"engine": "zarr"} if Path(options.like).is_dir() else {"engine": "netcdf4"}
    try:
        with xr.open_dataset(options.like, decode_times=False, **kind) as image:
            return grid_of_file(image)
    except ViewError as error:
        raise ViewError(f"{options.like}: {error}") from None
    except (OSError, ValueError, RuntimeError) as error:
        raise ViewError(f"{options.like}: cannot be read as an image file ({error})") from None


def _bounds(text):
    try:
        west, east, south, north = (float(part) for part in text.split(","))
    except ValueError:
        raise ViewError(
            f"--bounds {text}: give four numbers WEST,EAST,SOUTH,NORTH in degrees, e.g. -10,30,35,60"
        ) from None
    return west, east, south, north


def domain_of(scene):
    """West, east, south, north of a scene [degrees], from west eastward to east."""
    import numpy as np

    longitude, latitude = (np.asarray(scene[n].values, dtype=float).ravel() for n in ("longitude", "latitude"))
    turned = np.sort(np.mod(longitude[np.isfinite(longitude)], 360.0))
    gaps = np.diff(np.append(turned, turned[0] + 360.0))
    widest = int(np.argmax(gaps))
    if gaps[widest] < 10.0:  # all round
        west, east = -180.0, 180.0
    else:
        west, east = turned[(widest + 1) % turned.size], turned[widest]
        west -= 360.0 if west > 180.0 else 0.0
        east = west + (east - west) % 360.0
    return float(west), float(east), float(np.nanmin(latitude)), float(np.nanmax(latitude))


def detector_of(options):
    """The `chansim.satellite.Detector` that was asked for; ViewError."""
    from chansim.satellite import Detector

    return Detector(
        subpixels=1 if options.footprint is None else options.footprint,
        point_spread=options.point_spread,
        noise=_numbers("--noise", options.noise, float),
        seed=options.seed,
        bits=_numbers("--bits", options.bits, int),
    )


def _numbers(option, text, kind):
    """One number, or {channel: number}."""
    if text is None:
        return None
    try:
        if "=" not in text:
            return kind(text)
        pairs = (part.split("=") for part in text.split(",") if part.strip())
        return {channel.strip(): kind(number) for channel, number in pairs}
    except ValueError:
        raise ViewError(f"{option} {text}: give one number, or channel=number,channel=number") from None


def join_bounds(arguments):
    """The command line with '--bounds -10,...' as one word, which argparse would take for an option otherwise."""
    arguments, joined = list(arguments), []
    while arguments:
        word = arguments.pop(0)
        if word == "--bounds" and arguments and arguments[0][:1] == "-" and arguments[0][1:2].isdigit():
            word = f"{word}={arguments.pop(0)}"
        joined.append(word)
    return joined
