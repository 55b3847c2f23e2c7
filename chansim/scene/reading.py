"""Model file to canonical scene: `open_scene`; what a file has and lacks: `describe_scene`."""

import textwrap
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from chansim._version import __version__
from chansim.errors import SceneError
from chansim.scene.checks import Tally
from chansim.scene.columns import HUMIDITY_ROUTES, canonical_columns, make_plan, require
from chansim.scene.description import defaulted, found_in_words, grid_in_words, times_in_words
from chansim.scene.grids import find_grid, grid_mapping_variable
from chansim.scene.humidity import SATURATION
from chansim.scene.mapping import read_mapping
from chansim.scene.native import on_columns, with_isentropic, with_sums
from chansim.scene.recognition import QUANTITIES, recognise
from chansim.scene.sources import members_of_source, open_source, refusing_damage, times_of_source
from chansim.scene.variables import VARIABLES
from chansim.scene.vertical import level_pressure, on_levels, runs_upward

# above this size of one time, values are read in chunks when they are needed
_EAGER_BYTES = 1.5e9


def open_scene(source, *, time=None, mapping=None, select=None, chunks=None, relative_humidity_over=None):
    """A model file as a canonical scene.

    Parameters
    ----------
    source : path of a GRIB or CF netCDF file or a Zarr store; a list of paths, or a pattern with * and ?, when times
        or variables are spread over files; or an xarray.Dataset
    time : valid time, anything `numpy.datetime64` takes; needed when the source holds several, or none
    mapping : {quantity: name in the source, or a table, or "" to leave it out}, or the path of a TOML file with such a
        table [variables]; only for what is not recognised by itself. A table has "name" or "sum" (list of names),
        and "units", "add" (a constant in these units), "staggered" (dimension to average neighbours along) as
        needed. The key "vertical" (in TOML: table [vertical]) describes the levels: "coordinate", one of "height"
        and the keys of `formula_terms.KINDS`; its terms, as names or numbers (SI); "ap_half", "b_half";
        "known_pressure" [Pa] at "known_height" [m] for hydrostatic integration
    select : {dimension: value} for dimensions that are neither space nor time, e.g. an ensemble
    chunks : None reads now (unless one time is larger than 1.5 GB); "auto" or a dict of sizes keeps the
        scene lazy
    relative_humidity_over : "water", "ice_below_freezing" or "mixed": what the source means by relative
        humidity; None is over water (WMO), "mixed" for files of ECMWF, which documents it so

    Returns
    -------
    xarray.Dataset : names and units of `scene.variables`; dimensions `level` (top to surface) first, then
        those of the source; coordinates `latitude`, `longitude` for every column and scalar `time`;
        `pressure` over `level` alone on pressure levels; `half_pressure` over `half_level` where it is exactly known;
        `column_valid` is False where needed values are
        missing; `grid_mapping` where the grid is projected or regular. Attributes: `recognised` (list of
        lines), `defaulted`, `adjusted` (lines), `masked_columns` (number, absent while lazy).

    Raises
    ------
    SceneError : damaged, ambiguous, incomplete or impossible; the message says what to do
    """
    opened = open_source(source, time=time, select=select, chunks=chunks)
    found, vertical = _recognise(opened, mapping)
    require(found, opened.name, "; ".join(str(f) for f in opened.fields))
    with refusing_damage(opened.name):
        if chunks is None:
            _chunk_if_large(found)
        assembled = _assemble(opened, found, vertical)
    return _make_scene(opened, found, assembled, relative_humidity_over)


def scene_times(source):
    """Valid times that a source holds.

    Parameters
    ----------
    source : as for `open_scene`: a path, a list of paths, a pattern, or a Dataset

    Returns
    -------
    list of numpy.datetime64 [s], sorted; empty when the source gives no time

    Raises
    ------
    SceneError : the source cannot be opened
    """
    return times_of_source(source)


def scene_members(source):
    """Ensemble members that a source holds.

    Parameters
    ----------
    source : as for `open_scene`

    Returns
    -------
    {dimension: list of members}, {} when there is no ensemble; one is opened with
    `open_scene(source, select={dimension: member})`

    Raises
    ------
    SceneError : the source cannot be opened
    """
    return members_of_source(source)


def _chunk_if_large(found):
    """Makes fields lazy when one time of all of them is too large to be read at once."""
    # a sum is opened after its parts have been made lazy
    whole = [part for f in found.fields.values() for part in (f.parts or (f,))]
    if sum(f.data.nbytes for f in whole) <= _EAGER_BYTES:
        return
    sizes = {}  # of the largest field, for all: pieces that fit together
    for f in sorted(whole, key=lambda f: -f.data.nbytes):
        f.data = f.data.chunk({d: -1 if d == f.level_dim else sizes.get(d, "auto") for d in f.data.dims})
        sizes = {d: n for d, n in f.data.chunksizes.items() if d != f.level_dim} | sizes


@dataclass
class _Assembled:
    """All recognised fields on common dimensions, `level` from the top; half_pressure is None where not known."""

    raw: xr.Dataset
    pressure: xr.DataArray
    half_pressure: xr.DataArray | None
    grid: object
    notes: list


def _make_scene(opened, found, assembled, relative_humidity_over=None):
    raw, pressure, grid, notes = assembled.raw, assembled.pressure, assembled.grid, assembled.notes
    over = _saturation(opened, found, relative_humidity_over)
    plan = make_plan(found, relative_humidity_over=over, day_of_year=_day_of_year(opened.time))
    tally = Tally()
    if _is_lazy(raw) or (pressure.ndim > 1 and pressure.chunks):
        scene = _lazy_columns(assembled, plan)
    else:
        scene = _eager_columns(assembled, plan, opened.name, tally)
    if found.fields.keys() & {"relative_humidity", "relative_humidity_2m"}:
        found.log.append(f"relative humidity taken as relative to saturation over {over.replace('_', ' ')}")
    _finish(scene, opened, found, plan, grid, notes, tally)
    return scene


def _is_lazy(dataset):
    return any(variable.chunks for variable in dataset.variables.values())


def _recognise(opened, mapping):
    """What the fields are, and the table [vertical] of the mapping; sums join the fields of the source."""
    variables, vertical = read_mapping(mapping)
    opened.fields, variables, log = with_sums(opened.fields, variables)
    opened.fields = with_isentropic(opened.fields)
    found = recognise(opened.fields, variables)
    found.log[:0] = opened.log + log
    return found, vertical


def _saturation(opened, found, wanted):
    if wanted is not None:
        if wanted not in SATURATION:
            raise SceneError(f"relative_humidity_over: '{wanted}' is not one of {', '.join(SATURATION)}")
        return wanted
    centre = _temperature_field(found).evidence.get("centre")
    if opened.dataset is not None:
        centre = opened.dataset.attrs.get("GRIB_centre")
    # ECMWF documents its relative humidity (parameter 157) as over water, ice or both by temperature
    return "mixed" if centre == "ecmf" else "water"


def _temperature_field(found):
    names = sorted(("temperature", "potential_temperature"), key=lambda name: name not in found.mapped)
    return next(found.fields[name] for name in names if name in found.fields)


def _day_of_year(time):
    if time is None:
        return None
    return float((time - time.astype("datetime64[Y]")) / np.timedelta64(1, "D")) + 1.0


def _assemble(opened, found, vertical=None):
    """All recognised fields on common dimensions, in the units of their quantities."""
    temperature = _temperature_field(found)
    grid = find_grid(temperature.data, opened.dataset, _positions(opened))
    found.log += grid.log
    notes = []
    levels = level_pressure(temperature, found, opened, vertical)
    pressure, half = levels.full, levels.half
    dim = temperature.level_dim
    count = temperature.data.sizes[dim]
    pressure_levels = pressure if pressure.ndim == 1 else None
    variables = {}
    for name, f in found.fields.items():
        if name in _NOT_COLUMNS:
            continue
        data = on_columns(f, temperature.data, dim, name)
        on_level = QUANTITIES[name].place == "levels"
        if on_level:
            data = on_levels(name, replace(f, open=lambda data=data: data), dim, pressure_levels, notes, count)
        if data is None or not _fits(data, f, temperature, grid, dim, notes):
            continue
        variables[name] = _canonical_dims(data, dim if on_level else None, grid)
    _drop_lost(found, variables)
    raw = xr.Dataset(variables)
    pressure = _canonical_dims(pressure, dim, grid if pressure.ndim > 1 else None)
    if half is not None:
        half = _canonical_dims(half, None, grid if half.ndim > 1 else None, "half_level")
    if runs_upward(pressure, "level"):
        raw, pressure = raw.isel(level=slice(None, None, -1)), pressure.isel(level=slice(None, None, -1))
        half = half.isel(half_level=slice(None, None, -1)) if half is not None else None
    top = pressure.isel(level=0, **{d: pressure.sizes[d] // 2 for d in pressure.dims if d != "level"})
    notes.append(f"above the top level ({float(top) / 100:g} hPa): the reference atmosphere")
    return _Assembled(raw, pressure, half, grid, notes)


# quantities that serve the pressure of the levels only
_NOT_COLUMNS = ("pressure", "half_pressure", "exner_function", "air_density", "height_above_ground")


def _positions(opened):
    """Latitude and longitude of cells that a GRIB source holds as fields; None when it does not."""
    if opened.dataset is not None:
        return None
    names = {"latitude": ("tlat", "clat", "nlat", "lat"), "longitude": ("tlon", "clon", "nlon", "lon")}
    found = {}
    for name, short_names in names.items():
        for f in opened.fields:
            if str(f.evidence.get("short_name", "")).lower() in short_names and f.place != "levels":
                found.setdefault(name, f.data)
    return found if len(found) == 2 else None


def _fits(data, f, temperature, grid, level_dim, notes):
    """True when a field lies on the columns of the temperature; else a note says why it is left out."""
    own = {d: data.sizes[d] for d in data.dims if d != level_dim}
    wanted = {d: n for d, n in temperature.data.sizes.items() if d != level_dim}
    if own == wanted:
        return True
    notes.append(f"{f.name}: on another grid {own} than the temperature {wanted}; not used")
    return False


def _drop_lost(found, variables):
    """Forgets fields that could not be brought onto the columns; humidity must not be among them."""
    lost = [name for name in found.fields if name not in variables and name not in _NOT_COLUMNS]
    for name in lost:
        del found.fields[name]
    if not set(found.fields) & set(HUMIDITY_ROUTES):
        raise SceneError(f"humidity: {', '.join(lost)} does not lie on the levels and grid of the temperature")


def _canonical_dims(data, level_dim, grid, leading_dim="level"):
    data = data.drop_vars(list(data.coords))
    if level_dim is not None:
        data = data.rename({level_dim: "level"}) if level_dim != "level" else data
    if grid is None:
        return data
    data = data.rename({d: short for d, short in grid.renamed.items() if d in data.dims})
    if "cell" in grid.dims and "cell" not in data.dims:
        data = data.expand_dims("cell", axis=-1)
    leading = (leading_dim,) if leading_dim in data.dims else ()
    return data.transpose(*leading, *grid.dims)


def _eager_columns(assembled, plan, name, tally):
    raw, grid = assembled.raw, assembled.grid
    with refusing_damage(name):
        values = {n: raw[n].values for n in raw.data_vars}
        pressure = np.asarray(assembled.pressure.values, dtype=float)
        half = None if assembled.half_pressure is None else np.asarray(assembled.half_pressure.values, dtype=float)
    columns = canonical_columns(values, pressure, grid.latitude.values, grid.longitude.values, plan, tally, half)
    return _as_dataset(columns, grid.dims, plan, half)


def _as_dataset(columns, dims, plan, half=None):
    pressure = columns.pop("pressure")
    variables = {"pressure": (("level",) if pressure.ndim == 1 else ("level", *dims), pressure)}
    if half is not None:
        variables["half_pressure"] = (("half_level",) if half.ndim == 1 else ("half_level", *dims), half)
    for name, values in columns.items():
        on_level = plan.outputs.get(name) == "level"
        variables[name] = (("level", *dims) if on_level else dims, values)
    return xr.Dataset(variables)


def _lazy_columns(assembled, plan):
    """The same, chunk by chunk when the values are asked for."""
    raw, grid = assembled.raw, assembled.grid
    block = raw.unify_chunks().chunk({"level": -1})
    block["__pressure"] = assembled.pressure
    if assembled.half_pressure is not None:
        block["__half_pressure"] = assembled.half_pressure
    block = block.assign(__latitude=grid.latitude, __longitude=grid.longitude)
    block = block.unify_chunks()
    vertical = {d: -1 for d in ("level", "half_level") if d in block.dims}
    block = block.chunk({d: block.chunksizes.get(d, -1) for d in grid.dims} | vertical).unify_chunks()

    def work(part):
        values = {n: part[n].values for n in raw.data_vars}
        pressure = np.asarray(part["__pressure"].values, dtype=float)
        half = np.asarray(part["__half_pressure"].values, dtype=float) if "__half_pressure" in part else None
        latitude, longitude = part["__latitude"].values, part["__longitude"].values
        columns = canonical_columns(values, pressure, latitude, longitude, plan, half_pressure=half)
        return _as_dataset(columns, grid.dims, plan, half)

    return xr.map_blocks(work, block, template=_template(block, grid, plan))


def _template(block, grid, plan):
    temperature = "temperature" if "temperature" in block else "potential_temperature"
    precision = block[temperature].dtype if block[temperature].dtype.kind == "f" else np.float64
    surface = xr.zeros_like(block["__latitude"], dtype=precision)
    level = surface.expand_dims(level=block.sizes["level"]).chunk({"level": -1})
    variables = {"pressure": block["__pressure"].astype(float)}
    if "__half_pressure" in block:
        variables["half_pressure"] = block["__half_pressure"].astype(float)
    for name, kind in plan.outputs.items():
        variables[name] = level if kind == "level" else surface
    variables["column_valid"] = surface.astype(bool)
    return xr.Dataset(variables)


def _finish(scene, opened, found, plan, grid, notes, tally):
    """Coordinates, attributes, and the record of what was recognised, assumed and adjusted."""
    for name in scene.data_vars:
        if name in VARIABLES:
            variable = VARIABLES[name]
            scene[name].attrs = {"units": variable.units}
            if variable.standard_name:
                scene[name].attrs["standard_name"] = variable.standard_name
            if grid.crs is not None and set(grid.dims) <= set(scene[name].dims):
                scene[name].attrs["grid_mapping"] = "grid_mapping"
    scene["column_valid"].attrs = {"long_name": "True where nothing that is needed is missing"}
    scene["pressure"].attrs["positive"] = "down"
    _add_coordinates(scene, opened, grid)
    scene.attrs = {
        "source": opened.name,
        "source_kind": opened.kind,
        "recognised": list(found.log),
        "defaulted": "\n".join(defaulted(found, plan, opened) + notes),
        "adjusted": "\n".join(tally.lines()),
        "software": f"chansim {__version__}",
    }
    scene.attrs["model"] = _model_name(opened)
    if opened.dataset is not None and "coastline" in opened.dataset.attrs:
        scene.attrs["coastline"] = opened.dataset.attrs["coastline"]
    if not scene["column_valid"].chunks:
        scene.attrs["masked_columns"] = int((~scene["column_valid"]).sum())


def _model_name(opened):
    """What the source says of the model that wrote it ("" when it says nothing)."""
    attributes = opened.dataset.attrs if opened.dataset is not None else opened.fields[0].evidence
    names = ("model", "model_id", "source_id", "source", "TITLE", "title", "institution")
    known = next((str(attributes[name]).strip() for name in names if attributes.get(name)), "")
    return known or (f"GRIB centre {attributes['centre']}" if attributes.get("centre") else "")


def _add_coordinates(scene, opened, grid):
    for name, values in (("latitude", grid.latitude), ("longitude", grid.longitude)):
        variable = VARIABLES[name]
        attrs = {"units": variable.units, "standard_name": variable.standard_name}
        scene.coords[name] = (values.dims, values.values, attrs)
    for dim, axis in grid.axes.items():
        scene.coords[dim] = axis
    if grid.crs is not None:
        scene["grid_mapping"] = grid_mapping_variable(grid.crs)
    time = np.datetime64("NaT", "ns") if opened.time is None else opened.time.astype("datetime64[ns]")
    scene.coords["time"] = ((), time, {"standard_name": "time", "long_name": "valid time"})


def describe_scene(source, *, time=None, mapping=None, select=None):
    """What a source has, what was recognised as what, what is missing and what would be assumed.

    Parameters
    ----------
    source, time, mapping, select : as for `open_scene`; without `time` the first one is described, without `select`
        the first member

    Returns
    -------
    str, lines to print. A source that cannot be used is described too, with what would mend it.

    Raises
    ------
    SceneError : the source cannot be opened at all
    """
    opened, members = _open_first(source, time, select)
    lines = [f"{opened.name} ({opened.kind})", times_in_words(opened), *members]
    problems, found, scene, notes = [], None, None, []
    try:
        found, vertical = _recognise(opened, mapping)
        require(found, opened.name, "the fields listed here")
        with refusing_damage(opened.name):
            _chunk_if_large(found)
            assembled = _assemble(opened, found, vertical)
        notes = assembled.notes
        lines.append(grid_in_words(assembled.pressure, assembled.grid))
        if not _is_lazy(assembled.raw):  # a larger one is not read just to be described
            scene = _make_scene(opened, found, assembled)
    except SceneError as error:
        problems.append(str(error))
    if found is None:
        lines += ["", "Fields:", *(f"  {f}" for f in opened.fields)]
    else:
        lines += found_in_words(opened, found, notes)
    if scene is not None:
        adjusted = scene.attrs["adjusted"].splitlines()
        lines += ["", f"Columns masked for missing values: {scene.attrs['masked_columns']}", *adjusted]
    lines += [
        "",
        "Problems:" if problems else "This source can be used.",
        *(textwrap.indent(p, "  ") for p in problems),
    ]
    return "\n".join(lines)


def _open_first(source, time, select):
    """The source at the first time and of the first member where none is named; lines on the members."""
    try:
        return open_source(source, time=time, select=select), []
    except SceneError:
        pass  # several times or members; when it is something else, it is met again below
    members = {dim: labels for dim, labels in scene_members(source).items() if dim not in (select or {})}
    lines = []
    for dim, labels in members.items():
        shown = ", ".join(map(str, labels[:20])) + (", ..." if len(labels) > 20 else "")
        if len(labels) > 1:
            lines.append(
                f"Ensemble members: {dim} = {shown}; shown here: {labels[0]}; open one with "
                f'select={{"{dim}": {labels[0]!r}}}'
            )
    select = {dim: labels[0] for dim, labels in members.items()} | dict(select or {})
    if time is None:
        times = scene_times(source)
        time = times[0] if times else None
    return open_source(source, time=time, select=select), lines
