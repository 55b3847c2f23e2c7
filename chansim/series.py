"""Several valid times, and members of an ensemble, in one result: one at a time, and restartable.

Every time is written to its own place in a Zarr store as soon as it is simulated and only then marked as done, so an
interrupt loses at most the time in work and a later run continues. A netCDF file is made from such a store at the end.
"""

import shutil
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import dask.array
import numpy as np
import xarray as xr
import zarr

from chansim.errors import ChansimError, OutputError, SceneError
from chansim.output import cf_ready, check_target, encoding, picture_dims, plain_strings, write_dataset
from chansim.scene.reading import open_scene, scene_times

EXISTING = ("keep", "replace", "continue")
# what does not change from time to time
_STATIC = ("grid_mapping", "view_zenith_angle", "view_azimuth_angle", "land_fraction")
# attributes that must be the same in a run that continues another
_SAME = (
    "imager", "view", "solver", "streams", "cloud_overlap", "subcolumns", "decorrelation_length_m",
    "effective_radius_liquid", "effective_radius_ice", "ice_habit", "changed_gases", "atlas_sha256", "footprint",
)  # fmt: skip
_JOINED = ("source_file", "defaulted", "recognised")  # attributes of which every different line is kept
_LISTED = ("adjusted", "counted", "noise", "quantisation")  # attributes that belong to one time
_DONE, _MASKED = "simulated", "masked_columns"
_LARGEST_CHUNK = 2048  # pixels along each side


@dataclass(frozen=True)
class Frame:
    """One time, of one member, that is to be simulated.

    time : numpy.datetime64; open : function () -> canonical scene; member : number or name, None without ensemble
    """

    time: np.datetime64
    open: Callable
    member: int | str | None = None


def frames_of(sources, times="all", *, members=None, **options):
    """What a series of model files holds, in the order of time.

    Parameters
    ----------
    sources : a path or Dataset, or a list of them, each with one or several valid times
    times : "all", or valid times, anything `numpy.datetime64` takes
    members : None; (dimension, values), such as ("number", [0, 1, 2]), of every source; or "files" when each source
        is one member, numbered from 0
    options : for `chansim.open_scene`, such as mapping

    Returns
    -------
    list of Frame

    Raises
    ------
    SceneError : a time is in no source or in two, a source without time among several, members not given so
    """
    sources = list(sources) if isinstance(sources, (list, tuple)) else [sources]
    if members == "files":
        own = [_frames([source], times, options, number) for number, source in enumerate(sources)]
        frames = [frame for group in own for frame in group]
    elif members is None:
        frames = _frames(sources, times, options)
    else:
        dimension, values = members
        frames = []
        for value in values:
            select = {**options.get("select", {}), dimension: value}
            frames += _frames(sources, times, {**options, "select": select}, value)
    return sorted(frames, key=lambda frame: frame.time)  # stable: members stay in order


def _frames(sources, times, options, member=None):
    holders = {}
    for source in sources:
        name = "Dataset" if isinstance(source, xr.Dataset) else str(source)
        own = scene_times(source)
        if not own:
            raise SceneError(f"{name}: tells no valid time and cannot be part of a series; simulate it on its own")
        for time in own:
            if time in holders:
                raise SceneError(
                    f"{time} is valid in {holders[time][1]} and in {name}; keep one of them, or give files of one run"
                )
            holders[time] = source, name
    wanted = _wanted(times, list(holders))
    return [Frame(time, _opener(holders[time][0], time, options), member) for time in wanted]


def _opener(source, time, options):
    return lambda: open_scene(source, time=time, **options)


def _wanted(times, known):
    if isinstance(times, str) and times == "all":
        return sorted(known)
    try:
        wanted = [np.datetime64(t).astype("datetime64[s]") for t in ([times] if isinstance(times, str) else times)]
    except (ValueError, TypeError):
        raise SceneError(f"times {times!r}: write each as 2026-06-21T12, or all") from None
    missing = [str(t) for t in wanted if t not in known]
    if missing:
        shown = ", ".join(str(t) for t in sorted(known)[:12]) + (", ..." if len(known) > 12 else "")
        raise SceneError(f"nothing is valid at {', '.join(missing)}; the source has {shown}")
    return sorted(set(wanted))


def simulate_series(frames, path, picture, *, existing="keep", progress=None):
    """Simulate frames one after the other into one result.

    Parameters
    ----------
    frames : list of Frame, such as `frames_of` gives: the same members at every time
    path : .zarr, which fills time by time; or .nc, which is written whole at the end from a store beside it
    picture : function (scene) -> result of `chansim.simulate` or `chansim.satellite.simulate_on_grid`, on the same
        grid every time
    existing : "keep" or "replace" a result that is there, or "continue" one that was interrupted
    progress : function (number done, number of all, Frame or None) called before every frame and at the end

    Returns
    -------
    pathlib.Path of the result: variables over (time, member where there are members, channel, y, x); `simulated` is
    0 at times that are still to come, `masked_columns` counts columns without value

    Raises
    ------
    OutputError : the result exists and is kept, belongs to other times or settings, cannot be written
    ChansimError : of reading and simulating; what was done before is kept, and "continue" goes on from there
    KeyboardInterrupt : its words tell how much is done
    """
    path = Path(path)
    if not frames:
        raise SceneError("a series needs at least one time")
    if existing not in EXISTING:
        raise OutputError(f"existing={existing!r}: use one of {', '.join(EXISTING)}")
    store = _Store(path, frames, existing)
    done = number = 0
    try:
        for number, frame in enumerate(frames):
            if store.has(frame):
                done += 1
                continue
            if progress is not None:
                progress(number, len(frames), frame)
            store.put(frame, picture(frame.open()))
            done += 1
    except KeyboardInterrupt:
        raise KeyboardInterrupt(_left(path, done, frames)) from None
    except ChansimError as error:
        if done:
            raise type(error)(f"{frames[number].time}: {error}; {_left(path, done, frames)}") from error
        raise
    store.finish()
    if progress is not None:
        progress(len(frames), len(frames), None)
    return path


def _left(path, done, frames):
    if not done:
        return "nothing was written"
    return f"{done} of {len(frames)} pictures of {path} are done and kept; the same call with --continue makes the rest"


class _Store:
    """The Zarr store that fills frame by frame."""

    def __init__(self, path, frames, existing):
        self.path = path
        self.store = path if path.suffix == ".zarr" else path.parent / f".{path.name}.parts.zarr"
        self.existing = existing
        self.times = np.unique([frame.time.astype("datetime64[ns]") for frame in frames])
        self.members = list(dict.fromkeys(frame.member for frame in frames if frame.member is not None))
        self.axes = ("time", "member") if self.members else ("time",)
        if len(frames) != len(self.times) * max(1, len(self.members)):
            raise SceneError("a series needs every member at every time, each once")
        self.complete = existing == "continue" and self.store != path and path.exists() and not self.store.exists()
        check_target(path, "replace" if existing != "keep" else "keep")
        self.fresh = not (existing == "continue" and (self.store.exists() or self.complete))
        self.checked = False
        self.done = np.zeros([len(getattr(self, f"{axis}s")) for axis in self.axes], dtype=bool)
        if self.complete:
            self.done[:] = True
        elif not self.fresh:
            self._resume()

    def has(self, frame):
        """True when a frame is in the store."""
        return bool(self.done[self._index(frame)])

    def put(self, frame, result):
        """Writes one frame, then marks it as done."""
        result = cf_ready(result)
        if self.fresh:
            self._create(result)
        elif not self.checked:
            self._require_same(result)
        self.fresh, self.checked = False, True
        index = self._index(frame)
        region = {axis: slice(i, i + 1) for axis, i in zip(self.axes, index)}
        moving = {n: v for n, v in result.data_vars.items() if n not in _STATIC and v.ndim}
        masked = int(result.attrs.get("masked_columns", 0))
        moving[_MASKED] = xr.DataArray(np.int32(masked))
        try:
            self._write(moving, region)
            self._record(frame, result.attrs)
            self._write({_DONE: xr.DataArray(np.int8(1))}, region)
        except OSError as error:
            raise OutputError(f"{self.path}: cannot be written ({error})") from error
        self.done[index] = True

    def finish(self):
        """Makes the netCDF file, where that was asked for."""
        if self.store == self.path or self.complete:
            return
        with xr.open_dataset(self.store, engine="zarr", consolidated=False, chunks={}) as whole:
            for variable in whole.variables.values():
                variable.encoding = {}
            write_dataset(whole, self.path, "replace" if self.existing != "keep" else "keep", unlimited=("time",))
        shutil.rmtree(self.store)

    def _index(self, frame):
        time = int(np.searchsorted(self.times, frame.time.astype("datetime64[ns]")))
        return (time, self.members.index(frame.member)) if self.members else (time,)

    def _write(self, variables, region):
        leading = {axis: (axis, [0]) for axis in self.axes}
        part = {
            n: v.reset_coords(drop=True).drop_vars(list(v.coords), errors="ignore").expand_dims(list(leading))
            for n, v in variables.items()
        }
        with plain_strings():
            xr.Dataset(part).drop_attrs().to_zarr(self.store, region=region, consolidated=False)

    def _create(self, result):
        """An empty store with the times, the members and the form of a first result; it appears whole."""
        count = self.done.ndim
        variables, chosen = {}, {}
        for name, variable in result.data_vars.items():
            if name in _STATIC or not variable.ndim:
                variables[name] = variable.drop_vars("time", errors="ignore")
                continue
            shape = (*self.done.shape, *variable.shape)
            chunks = (1,) * count + tuple(
                1 if d == "channel" else min(n, _LARGEST_CHUNK) for d, n in variable.sizes.items()
            )
            nothing = np.nan if variable.dtype.kind == "f" else 1  # of quality flags: masked
            empty = dask.array.full(shape, nothing, dtype=variable.dtype, chunks=chunks)
            variables[name] = ((*self.axes, *variable.dims), empty, variable.attrs)
            chosen[name] = {"chunks": chunks, "fill_value": nothing}
        variables[_DONE] = self._marks(np.int8, "1 where the time is simulated, 0 where it is still to come")
        variables[_DONE][2].update(flag_values=np.array([0, 1], dtype=np.int8), flag_meanings="pending simulated")
        variables[_MASKED] = self._marks(np.int32, "columns without a value")
        chosen |= {n: {"chunks": (1,) * count, "fill_value": 0} for n in (_DONE, _MASKED)}
        coordinates = {n: c for n, c in result.drop_vars("time", errors="ignore").coords.items()}
        coordinates["time"] = ("time", self.times, {"standard_name": "time", "axis": "T"})
        if self.members:
            words = {"standard_name": "realization"}
            if all(isinstance(member, int) for member in self.members):
                words["units"] = "1"
            coordinates["member"] = ("member", self.members, words)
        attributes = {n: v for n, v in result.attrs.items() if n not in (*_LISTED, _MASKED) and "coverage" not in n}
        whole = cf_ready(xr.Dataset(variables, coordinates, attrs=attributes))
        chosen = encoding(whole, ".zarr") | chosen
        self._place(whole, chosen)

    def _marks(self, dtype, words):
        return self.axes, dask.array.zeros(self.done.shape, dtype=dtype, chunks=1), {"long_name": words, "units": "1"}

    def _place(self, whole, chosen):
        try:
            folder = Path(tempfile.mkdtemp(prefix=f".{self.store.stem}-", dir=self.store.parent))
        except OSError as error:
            raise OutputError(f"{self.path}: cannot be written ({error.strerror})") from error
        try:
            with plain_strings():
                whole.to_zarr(folder / "new.zarr", compute=False, consolidated=False, encoding=chosen)
            if self.store.exists():
                shutil.rmtree(self.store)
            (folder / "new.zarr").replace(self.store)
        except OSError as error:
            raise OutputError(f"{self.path}: cannot be written ({error})") from error
        finally:
            shutil.rmtree(folder, ignore_errors=True)

    def _resume(self):
        """What is done in a store that is there, after a look at its times and members."""
        try:
            with xr.open_dataset(self.store, engine="zarr", consolidated=False) as begun:
                marks = begun[_DONE].transpose(*self.axes).values == 1
                times = begun["time"].values
                members = [m.item() for m in begun["member"].values] if "member" in begun.dims else []
        except (OSError, ValueError, KeyError) as error:
            raise OutputError(f"{self.path}: not a series that can be continued ({error})") from None
        if not np.array_equal(times, self.times) or members != self.members:
            raise OutputError(
                f"{self.path}: was begun with {len(times)} times from {times[0]} to {times[-1]} and {len(members)} "
                f"members, now {len(self.times)} times from {self.times[0]} to {self.times[-1]} and "
                f"{len(self.members)} members are asked for; choose another name or ask for replacement (--replace)"
            )
        self.done = marks

    def _require_same(self, result):
        with xr.open_dataset(self.store, engine="zarr", consolidated=False) as begun:
            for name in _SAME:
                old, new = begun.attrs.get(name), result.attrs.get(name)
                if old != new:
                    raise OutputError(f"{self.path}: was begun with {name} {old!r}, now it is {new!r}; {_OTHER_NAME}")
            for name in ("channel", *picture_dims(result)):
                if name in result.coords and not np.array_equal(begun[name].values, result[name].values):
                    raise OutputError(f"{self.path}: was begun with other values of {name}; {_OTHER_NAME}")
            for dim in picture_dims(result):
                if begun.sizes[dim] != result.sizes[dim]:
                    size = begun.sizes[dim]
                    raise OutputError(f"{self.path}: was begun with {size} points along {dim}; {_OTHER_NAME}")

    def _record(self, frame, attributes):
        """What is told of one frame joins what is told of the others."""
        group = zarr.open_group(self.store, mode="r+")
        known = dict(group.attrs)
        label = str(frame.time) + ("" if frame.member is None else f" member {frame.member}")
        changed = {}
        for name in (n for n in (*_JOINED, *_LISTED) if attributes.get(n)):
            lines = str(known.get(name, "")).splitlines()
            new = str(attributes[name]).splitlines()
            if name in _LISTED:
                new = [f"{label}: {line}" for line in new]
            changed[name] = "\n".join(dict.fromkeys([*lines, *new]))
        group.attrs.update(changed)


_OTHER_NAME = "choose another name or ask for replacement (--replace)"
