"""What the commands share: parsers, lists, folders, results that are opened again."""

import argparse
import sys
from pathlib import Path

from chansim.errors import ChansimError, OutputError

EPILOG = """exit codes: 0 done, 1 the input or the output cannot be used, 2 wrong call, 3 the output exists and
was kept, 130 interrupted (nothing half-written is left)

This is a simulation, not an observation: official warnings and licensed practice come first."""
CAUTION = "A simulation, not an observation. Official warnings come first."


def add_command(commands, name, run, summary, description, examples):
    """A parser of one command, with examples and the common end of its help."""
    parser = commands.add_parser(
        name,
        help=summary,
        description=description,
        epilog="examples:\n" + "\n".join(f"  {e}" for e in examples) + "\n\n" + EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.set_defaults(run=run)
    return parser


def split_list(text):
    """ "a, b" -> ["a", "b"]; None stays None."""
    return None if text is None else [part.strip() for part in text.split(",") if part.strip()]


def existing_of(options):
    """ "keep" or "replace", from the option --replace."""
    return "replace" if options.replace else "keep"


def make_folder(folder):
    """Makes a folder unless it is there; OutputError."""
    try:
        Path(folder).mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(f"{folder}: cannot make this folder ({error.strerror})") from None


def add_moment_options(parser):
    """Options that choose from a result with several times or members."""
    parser.add_argument("--time", help="valid time, where the result holds several, e.g. 2026-06-21T12")
    parser.add_argument("--member", help="member, where the result holds several")


def at_moment(result, options, keep_time=False):
    """A result at the time and of the member that were asked for; ChansimError when these are not clear."""
    if not keep_time:
        result = _at_time(result, options.time, options.file)
    if "member" not in result.dims:
        if options.member is not None:
            raise ChansimError(f"{options.file}: has no members; leave out --member")
        return result
    members = [str(m) for m in result["member"].values]
    if options.member is None and len(members) > 1:
        raise ChansimError(f"{options.file}: holds members {', '.join(members[:12])}; choose one with --member")
    wanted = members[0] if options.member is None else options.member
    if wanted not in members:
        raise ChansimError(f"{options.file}: has no member {wanted}; it has {', '.join(members[:12])}")
    return result.isel(member=members.index(wanted))


def _at_time(result, wanted, name):
    import numpy as np

    times = np.atleast_1d(result["time"].values) if "time" in result.coords else np.array([], dtype="datetime64[ns]")
    shown = ", ".join(np.datetime_as_string(times, unit="m")[:12])
    if wanted is None:
        if times.size > 1:
            raise ChansimError(f"{name}: holds {times.size} times ({shown}); choose one with --time")
        return result.isel(time=0) if "time" in result.dims else result
    try:
        hits = np.flatnonzero(times == np.datetime64(wanted))
    except ValueError:
        raise ChansimError(f"--time {wanted}: write it as 2026-06-21T12") from None
    if not hits.size:
        raise ChansimError(f"{name}: nothing is valid at {wanted}; it has {shown}")
    return result.isel(time=int(hits[0])) if "time" in result.dims else result


def require_channels(result, wanted):
    """ResponseError that names the channels of the result when one is not among them."""
    from chansim.channels.imager import unknown_channel

    known = [str(c) for c in result["channel"].values]
    for channel in wanted:
        if channel not in known:
            raise unknown_channel(channel, result.attrs.get("imager", "?"), known)
    return wanted


def progress_bar(words="simulating", unit=" columns"):
    """A function (done, all) that moves a progress bar on the terminal."""
    from tqdm import tqdm

    bar = tqdm(total=0, unit=unit, unit_scale=True, desc=words, leave=False, file=sys.stderr)

    def advance(done, everything):
        bar.total = everything
        bar.n = done
        bar.refresh()
        if done >= everything:
            bar.close()

    return advance
