"""Maps of a simulated picture: one channel, a sheet of channels, the difference of two.

Input is what `chansim.simulate` returns, or a Dataset like it: `brightness_temperature` [K] over
(channel, y, x) or (channel, cell), coordinates `channel`, `latitude`, `longitude`, `time`, and a CF grid
mapping where the grid is projected. Nothing is fetched; no window is opened.
"""

import os
import tempfile
import textwrap
from dataclasses import dataclass
from pathlib import Path

import cartopy.crs as ccrs
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import LineCollection
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Patch, Rectangle
from matplotlib.ticker import MaxNLocator

from chansim.channels.imager import unknown_channel
from chansim.errors import ChansimError, OutputError, SceneError
from chansim.imaging.coastline import lines_of_land, natural_earth_lines, scale_for
from chansim.imaging.colours import DIFFERENCE_TABLE, channel_kind, colour_map, temperature_range
from chansim.imaging.projections import Grid, middle_longitude, read_grid, target_projection, to_plane
from chansim.imaging.raster import Raster, make_raster

CAUTION = "Simulation, not an observation - official warnings come first."
EXISTING = ("keep", "replace")
COASTLINES = ("auto", "own", "natural-earth", "none")
_FREEZING = 273.15  # K
_COAST_COLOUR = "#e8b400"  # stands out on grey, blue and brown alike
_MASK_COLOURS = ("#b4b4b4", "#6e6e6e")
_PAPER_COLOUR = "white"  # where the grid has no pixels
_SPACE_COLOUR = "#0a0a0f"  # around the disk
_LIMB_COLOUR = "#26262c"  # on the disk, seen at too grazing an angle
_LIMB_LINE = "#c8c8c8"
_BEYOND_COLOUR = "#5f6b7c"  # on the disk, outside the domain of the model
_LABEL_COLOUR = "#8c8c8c"  # to be read on space and on paper
_GRAZING = 85.0  # degrees from the zenith, from which there are no values
_WIDTH = 9.0  # inches
_CHARACTERS_PER_INCH = 14.5  # of the small type under the title


@dataclass
class _Map:
    """What all maps of one Dataset share."""

    dataset: object
    field: str
    grid: Grid
    projection: ccrs.Projection
    raster: Raster
    coast: list
    coast_note: str
    beyond: np.ndarray
    limb: np.ndarray

    @property
    def from_space(self):
        """True for a picture on its own geostationary grid."""
        return self.projection is self.grid.projection and isinstance(self.projection, ccrs.Geostationary)


def draw_channel(
    dataset, channel, *, projection="source", colours="auto", limits=None, coastline="auto",
    field="brightness_temperature",
):  # fmt: skip
    """A map of one channel.

    Parameters
    ----------
    dataset : result of `chansim.simulate`
    channel : channel id
    projection : "source" (that of the model grid), "latlon", or a cartopy projection
    colours : "auto" (grey, cold white), or a name in `colours.TABLES`
    limits : (coldest, warmest) of the colours [K]; None is the fixed range of the kind of channel
    coastline : "auto" follows the attribute `coastline` of the Dataset, else "own" (its land fraction),
        "natural-earth" or "none"
    field : variable with brightness temperatures, e.g. "brightness_temperature_clear"

    Returns
    -------
    matplotlib.figure.Figure, to be saved with `save_figure`

    Raises
    ------
    SceneError : not such a Dataset, or no pixel with a value
    ResponseError : no such channel
    ViewError : the projection does not show the data
    ChansimError : unknown colours or coastline
    """
    return figure_of_channel(prepare(dataset, projection, coastline, field), channel, colours, limits)


def figure_of_channel(shared, channel, colours="auto", limits=None):
    """What `draw_channel` draws, from a map that `prepare` has made; for many pictures of one grid."""
    dataset, field = shared.dataset, shared.field
    values = channel_values(dataset, channel, field)
    limits = limits or temperature_range(_kind(dataset, channel))
    figure, axes = _figure_with_map(shared)
    masked = _draw_field(axes, shared, values, colour_map(colours, limits), limits)
    _draw_coast(axes, shared)
    _draw_graticule(axes, shared)
    _draw_scale(figure, axes, values, "brightness temperature [K]", celsius="shown")
    words = "" if field == "brightness_temperature" else f", {_field_words(dataset, field)}"
    title = f"{channel_words(dataset, channel)}: simulated brightness temperature{words}"
    _write_titles(figure, axes, title, dataset)
    _write_small_print(figure, axes, shared, masked)
    return figure


def draw_difference(dataset, channel_a, channel_b, *, projection="source", limit=None, coastline="auto"):
    """A map of channel A minus channel B.

    Parameters
    ----------
    dataset, projection, coastline : see `draw_channel`
    channel_a, channel_b : channel ids
    limit : largest difference of the colours [K]; None fits the data

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    see `draw_channel`
    """
    shared = prepare(dataset, projection, coastline, "brightness_temperature")
    values = channel_values(dataset, channel_a) - channel_values(dataset, channel_b)
    _require_values(values, f"{channel_a} minus {channel_b}")
    limit = limit or _round_limit(values)
    figure, axes = _figure_with_map(shared)
    masked = _draw_field(axes, shared, values, colour_map(DIFFERENCE_TABLE, (-limit, limit)), (-limit, limit))
    _draw_coast(axes, shared, colour="#303030")
    _draw_graticule(axes, shared)
    _draw_scale(figure, axes, values, f"{channel_a} minus {channel_b} [K]", celsius="left out")
    first, second = channel_words(dataset, channel_a), channel_words(dataset, channel_b)
    _write_titles(figure, axes, f"{first} minus {second}: simulated difference", dataset)
    _write_small_print(figure, axes, shared, masked)
    return figure


def draw_sheet(dataset, channels=None, *, projection="source", colours="auto", coastline="auto", columns=None):
    """All channels, or some, on one sheet.

    Parameters
    ----------
    dataset, projection, colours, coastline : see `draw_channel`
    channels : channel ids in order; None is all
    columns : panels side by side; None chooses

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    see `draw_channel`
    """
    shared = prepare(dataset, projection, coastline, "brightness_temperature")
    channels = [str(c) for c in (dataset["channel"].values if channels is None else channels)]
    if not channels:
        raise SceneError("cannot draw a sheet of no channels; name at least one")
    fields = [channel_values(dataset, channel) for channel in channels]
    masked = 0
    figure, boxes = _sheet_layout(len(channels), columns, _aspect(shared), dataset)
    for channel, values, box in zip(channels, fields, boxes):
        axes = figure.add_axes(box, projection=shared.projection)
        limits = temperature_range(_kind(dataset, channel))
        masked = max(masked, _draw_field(axes, shared, values, colour_map(colours, limits), limits))
        _draw_coast(axes, shared, width=0.5)
        axes.set_title(channel_words(dataset, channel), fontsize=9, loc="left", pad=3)
        _draw_small_scale(figure, axes, values)
    width, height = figure.get_size_inches()
    left = _SHEET_GAP / width
    figure.text(left, 1 - 0.12 / height, "Simulated brightness temperature", ha="left", va="top", fontsize=13)
    figure.text(left, 1 - 0.44 / height, _subtitle(dataset, width), ha="left", va="top", fontsize=9)
    beyond = "  Slate blue lies outside the domain of the model." if shared.beyond.any() else ""
    small = textwrap.fill(_small_print(shared, masked) + beyond, int(16.5 * (width - 2 * _SHEET_GAP)))
    figure.text(left, 0.10 / height, small, ha="left", va="bottom", fontsize=7)
    return figure


_SHEET_GAP = 0.25  # inches between panels and around them


def _sheet_layout(count, columns, aspect, dataset):
    """A figure, and one box for each panel, row by row."""
    columns = columns or int(np.clip(np.ceil(np.sqrt(count * aspect * 1.2)), 1, min(count, 5)))
    rows = -(-count // columns)
    panel, above, below, foot = 3.6, 0.28, 0.50, 0.50  # inches
    step = (panel + _SHEET_GAP, panel * aspect + above + below)
    width = columns * step[0] + _SHEET_GAP
    head = 0.50 + 0.16 * (1 + _subtitle(dataset, width).count("\n"))
    height = head + rows * step[1] + foot
    figure = _new_figure((width, height))
    boxes = []
    for number in range(count):
        left = _SHEET_GAP + (number % columns) * step[0]
        bottom = height - head - (number // columns) * step[1] - above - panel * aspect
        boxes.append((left / width, bottom / height, panel / width, panel * aspect / height))
    return figure, boxes


def _draw_small_scale(figure, axes, values):
    image, box = axes.images[-1], axes.get_position()
    height = figure.get_size_inches()[1]
    place = figure.add_axes((box.x0, box.y0 - 0.17 / height, 0.92 * box.width, 0.09 / height))
    bar = figure.colorbar(image, cax=place, orientation="horizontal", extend=_extend(values, image.get_clim()))
    bar.ax.xaxis.set_major_locator(MaxNLocator(7))
    bar.ax.tick_params(labelsize=7, length=2, pad=1)
    place.text(1.08, 0.5, "K", transform=place.transAxes, fontsize=7, ha="right", va="center")


def save_figure(figure, path, *, existing="keep", dpi=130):
    """Writes a figure, whole or not at all.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    path : file whose ending names the format (.png, .pdf, .svg, .jpg, ...)
    existing : "keep" or "replace" a file that is there
    dpi : dots per inch

    Returns
    -------
    pathlib.Path

    Raises
    ------
    OutputError : the file exists and is kept, the folder is missing or not writable, unknown format
    """
    path = Path(path)
    check_picture(path, existing, figure.canvas.get_supported_filetypes())
    return write_whole(path, lambda temporary: figure.savefig(temporary, dpi=dpi))


def write_whole(path, write):
    """Lets `write` make a temporary file beside `path` and renames it when it is complete; OutputError."""
    handle, temporary = None, None
    try:
        handle, temporary = tempfile.mkstemp(prefix=f".{path.stem}-", suffix=path.suffix, dir=path.parent)
        os.close(handle)
        write(temporary)
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, path)
        temporary = None
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror or error})") from error
    finally:
        if temporary is not None:
            Path(temporary).unlink(missing_ok=True)
    return path


def check_picture(path, existing, formats):
    """Makes sure that a picture can be written there; OutputError."""
    path = Path(path)
    if existing not in EXISTING:
        raise OutputError(f"existing={existing!r}: use one of {', '.join(EXISTING)}")
    if path.suffix.lower().lstrip(".") not in formats:
        raise OutputError(f"{path}: the name must end in a picture format, .png for example ({', '.join(formats)})")
    if path.exists() and existing == "keep":
        raise OutputError(f"{path}: exists and is kept; choose another name or ask for replacement (--replace)")
    if not path.parent.is_dir():
        raise OutputError(f"{path}: the folder {path.parent} does not exist; make it first")


def _umask():
    mask = os.umask(0)
    os.umask(mask)
    return mask


def channel_values(dataset, channel, field="brightness_temperature"):
    """One channel as an array (horizontal), checked for having values; SceneError, ResponseError."""
    _require_result(dataset, field)
    existing = [str(c) for c in dataset["channel"].values]
    if str(channel) not in existing:
        raise unknown_channel(str(channel), dataset.attrs.get("imager", "of this Dataset"), existing)
    values = dataset[field].isel(channel=existing.index(str(channel)))
    values = values.values.astype(float)
    _require_values(values, str(channel))
    return values


def _require_result(dataset, field):
    if field not in dataset or "channel" not in dataset[field].dims or "channel" not in dataset.coords:
        raise SceneError(
            f"cannot draw: no '{field}' over a coordinate 'channel' in the Dataset; give a result of chansim.simulate"
        )
    horizontal = [d for d in dataset[field].dims if d != "channel"]
    if len(horizontal) not in (1, 2):
        raise SceneError(f"cannot draw: '{field}' lies over {', '.join(map(str, horizontal))}; pick one of them first")


def _require_values(values, words):
    if not np.any(np.isfinite(values)):
        raise SceneError(
            f"cannot draw {words}: not one of {values.size} pixels has a value; the columns were all masked or "
            "out of view, see the attributes 'masked_columns' and 'view' of the Dataset"
        )


def prepare(dataset, projection="source", coastline="auto", field="brightness_temperature"):
    """What all maps of a Dataset share: grid, projection, raster and coast; arguments as for `draw_channel`."""
    _require_result(dataset, field)
    grid = read_grid(dataset, field)
    projection = target_projection(grid, projection)
    raster = make_raster(grid, projection)
    lines, note = _coast_lines(dataset, grid, coastline)
    return _Map(dataset, field, grid, projection, raster, lines, note, *_seen_past_the_model(dataset, field, grid))


def _seen_past_the_model(dataset, field, grid):
    """Which pixels of a satellite look past the domain of the model, and which graze the limb."""
    nowhere = np.zeros(grid.latitude.shape, dtype=bool)
    if not {"view_azimuth_angle", "view_zenith_angle", "land_fraction"} <= set(dataset.data_vars):
        return nowhere, nowhere
    dims = [d for d in dataset[field].dims if d != "channel"]
    zenith, land = (dataset[name].transpose(*dims).values for name in ("view_zenith_angle", "land_fraction"))
    limb = grid.on_earth & (zenith >= _GRAZING)
    return grid.on_earth & ~np.isfinite(land) & ~limb, limb


def _coast_lines(dataset, grid, coastline):
    """Lines in degrees, and what they are in words."""
    if coastline == "auto":
        coastline = str(dataset.attrs.get("coastline", "")) or "natural-earth"
    if coastline not in COASTLINES:
        raise ChansimError(f"coastline {coastline!r}: use one of {', '.join(COASTLINES)}")
    if coastline == "none":
        return [], ""
    if coastline == "natural-earth":
        return natural_earth_lines(scale_for(_width_degrees(grid))), "Coastline: Natural Earth."
    if "land_fraction" not in dataset or grid.latitude.ndim != 2:
        return [], "No coastline: it would be the scene's own, but there is no land_fraction on a grid here."
    land = dataset["land_fraction"].transpose(*(d for d in dataset["brightness_temperature"].dims if d != "channel"))
    return lines_of_land(land.values, grid.latitude, grid.longitude), "Coastline: the scene's own land."


def _width_degrees(grid):
    return float(np.ptp(grid.latitude[grid.on_earth]))


def _kind(dataset, channel):
    if "channel_kind" in dataset.coords:
        return str(dataset["channel_kind"].sel(channel=channel).values)
    wavelength = _wavelength_um(dataset, channel)
    return channel_kind(wavelength) if wavelength is not None else "window"


def _wavelength_um(dataset, channel):
    """Central wavelength [um] of a channel, None when the Dataset does not say."""
    if "central_wavelength_um" in dataset.coords:
        return float(dataset["central_wavelength_um"].sel(channel=channel))
    if "central_wavenumber" in dataset.coords:
        return 1e4 / float(dataset["central_wavenumber"].sel(channel=channel))
    return None


def channel_words(dataset, channel):
    """A channel for titles: id and central wavelength."""
    wavelength = _wavelength_um(dataset, channel)
    return str(channel) if wavelength is None else f"{channel} ({wavelength:.2f} µm)"


def _field_words(dataset, field):
    if field == "brightness_temperature_clear":
        return "clouds left out"
    return str(dataset[field].attrs.get("long_name", field))


def _new_figure(size):
    figure = Figure(figsize=size)
    FigureCanvasAgg(figure)  # the backend a user may have chosen stays as it is
    return figure


def _aspect(shared):
    """Height over width of the map."""
    west, east, south, north = shared.raster.extent
    return float(np.clip((north - south) / (east - west), 0.15, 2.2))


def _figure_with_map(shared):
    aspect = _aspect(shared)
    width = _WIDTH if aspect <= 1.0 else max(_WIDTH / aspect**0.6, 5.5)
    map_width = width - 1.1
    map_height = map_width * aspect
    height = map_height + 2.55
    figure = _new_figure((width, height))
    box = (0.75 / width, 1.60 / height, map_width / width, map_height / height)
    return figure, figure.add_axes(box, projection=shared.projection)


def _draw_field(axes, shared, values, colours, limits):
    """Draws a field; returns how many pixels within the domain of the model have no value."""
    raster = shared.raster
    masked = ~np.isfinite(values) & shared.grid.on_earth & ~shared.beyond & ~shared.limb
    place = {"extent": raster.extent, "origin": "upper", "interpolation": "nearest"}
    west, east, south, north = raster.extent
    axes.set_xlim(west, east)
    axes.set_ylim(south, north)
    plain = _SPACE_COLOUR if shared.from_space else _PAPER_COLOUR
    axes.set_facecolor(plain)
    if shared.from_space:
        _darken_space(axes)
    limb_colour = _LIMB_COLOUR if shared.from_space else _PAPER_COLOUR
    covers = [(shared.limb & ~np.isfinite(values), limb_colour), (shared.beyond, _BEYOND_COLOUR)]
    if masked.any():
        axes.patch.set(facecolor=_MASK_COLOURS[0], edgecolor=_MASK_COLOURS[1], hatch="////", linewidth=0.0)
        # what the grid does not cover is not masked: it stays plain
        _cover(axes, raster.outside, plain, place)
    for where, colour in covers:
        if where.any():
            _cover(axes, raster.sample(where).filled(0.0) > 0.0, colour, place)
    _plain_imshow(axes, raster.sample(values), cmap=colours, vmin=limits[0], vmax=limits[1], **place)
    return int(masked.sum())


def _cover(axes, where, colour, place):
    """Fills part of the raster with one colour."""
    _plain_imshow(axes, np.ma.masked_where(~where, where.astype(float)), cmap=ListedColormap([colour]), **place)


def _darken_space(axes):
    """The rectangle of the axes around the disk; cartopy fills the disk alone."""
    axes.spines["geo"].set(edgecolor=_LIMB_LINE, linewidth=0.6)
    behind = Rectangle((0, 0), 1, 1, transform=axes.transAxes, facecolor=_SPACE_COLOUR, edgecolor="none", zorder=-5)
    axes.figure.add_artist(behind)


def _plain_imshow(axes, picture, **options):
    """Draws a raster that already lies in the projection of the map; cartopy need not look at it again."""
    from matplotlib.axes import Axes

    return Axes.imshow(axes, picture, aspect=axes.get_aspect(), **options)


def _draw_coast(axes, shared, width=0.8, colour=_COAST_COLOUR):
    """Coastline within the map, cut where the projection is torn."""
    west, east, south, north = shared.raster.extent
    if not shared.coast:
        return
    counts = np.array([len(line) for line in shared.coast])
    x, y = to_plane(shared.projection, *np.concatenate(shared.coast).T)
    size = max(east - west, north - south)
    starts = np.concatenate([[0], np.cumsum(counts)[:-1]])
    near = (x > west - size) & (x < east + size) & (y > south - size) & (y < north + size)
    jump = np.hypot(np.diff(x, prepend=np.nan), np.diff(y, prepend=np.nan)) > 0.25 * size
    cut = np.zeros(len(x), dtype=bool)
    cut[starts] = True
    cut |= jump | ~near | ~np.append(True, near[:-1])
    pieces = [p for p in np.split(np.column_stack([x, y]), np.flatnonzero(cut)) if len(p) > 1 and np.isfinite(p).all()]
    axes.add_collection(LineCollection(pieces, colors=colour, linewidths=width, zorder=3), autolim=False)


def _draw_graticule(axes, shared):
    """Meridians and parallels at round degrees, labelled on the left and below."""
    grid = shared.grid
    space = shared.from_space and not grid.on_earth.all()  # labels may fall on it
    middle = middle_longitude(grid)
    places = grid.on_earth
    from_middle = np.mod(grid.longitude[places] - middle + 180.0, 360.0) - 180.0
    meridians = _round_degrees(middle + from_middle.min(), middle + from_middle.max())
    meridians = np.unique(np.mod(meridians + 180.0, 360.0) - 180.0)
    parallels = _round_degrees(grid.latitude[places].min(), grid.latitude[places].max())
    lines = axes.gridlines(draw_labels=True, linewidth=0.4, color="#9a9a9a", alpha=0.8, linestyle=":", zorder=2,
                           x_inline=False, y_inline=False, xlocs=meridians, ylocs=parallels)  # fmt: skip
    lines.top_labels = lines.right_labels = False
    lines.rotate_labels = False
    lines.xlabel_style = lines.ylabel_style = {"size": 8, "color": _LABEL_COLOUR if space else "black"}


def _round_degrees(low, high):
    """About half a dozen round values between two angles [degrees]."""
    span = max(high - low, 1e-6)
    step = next((s for s in (0.1, 0.2, 0.5, 1, 2, 5, 10, 15, 20, 30) if span / s <= 7.5), 60)
    return np.arange(np.ceil(low / step - 1e-6), np.floor(high / step + 1e-6) + 1.0) * step


def _extend(values, limits):
    seen = values[np.isfinite(values)]
    below, above = seen.min() < limits[0], seen.max() > limits[1]
    return {(False, False): "neither", (True, False): "min", (False, True): "max", (True, True): "both"}[below, above]


def _draw_scale(figure, axes, values, label, celsius):
    """Colour bar under the map: kelvin below, degrees Celsius above it."""
    image = axes.images[-1]
    box = axes.get_position()
    height = figure.get_size_inches()[1]
    place = figure.add_axes((box.x0 + 0.06 * box.width, 0.95 / height, 0.88 * box.width, 0.16 / height))
    bar = figure.colorbar(image, cax=place, orientation="horizontal", extend=_extend(values, image.get_clim()))
    bar.ax.xaxis.set_major_locator(MaxNLocator(10))
    bar.ax.tick_params(labelsize=8, pad=2)
    bar.set_label(label, fontsize=9, labelpad=2)
    if celsius == "shown":
        second = bar.ax.secondary_xaxis("top", functions=(lambda k: k - _FREEZING, lambda c: c + _FREEZING))
        second.xaxis.set_major_locator(MaxNLocator(10))
        second.tick_params(labelsize=8, pad=1)
        place.text(1.045, 1.7, "°C", transform=place.transAxes, fontsize=8, ha="left", va="center")
        place.text(1.045, -0.8, "K", transform=place.transAxes, fontsize=8, ha="left", va="center")


def _round_limit(values):
    """A round limit [K] that holds all but one per cent of the differences."""
    size = np.nanpercentile(np.abs(values), 99.0)
    return float(next((limit for limit in (1, 2, 3, 5, 10, 15, 20, 30, 50, 100) if size <= limit), 150))


def _subtitle(dataset, width):
    """Model, time, imager and view, on as many lines as a figure of this width [inches] needs."""
    parts = [f"model: {_model(dataset)}", _valid_time(dataset)]
    parts += [f"{word}: {dataset.attrs[word]}" for word in ("imager", "view") if dataset.attrs.get(word)]
    lines, room = [parts[0]], int(_CHARACTERS_PER_INCH * width)
    for part in parts[1:]:
        joined = f"{lines[-1]}   {part}"
        if len(joined) <= room:
            lines[-1] = joined
        else:
            lines += textwrap.wrap(part, room, subsequent_indent="   ")
    return "\n".join(lines)


def _model(dataset):
    name = str(dataset.attrs.get("model", "")).strip()
    if name and name != "model not named":
        return textwrap.shorten(name, 60, placeholder=" ...")
    source = str(dataset.attrs.get("source_file", "")).strip()
    return f"not named ({Path(source).name})" if source else "not named"


def _valid_time(dataset):
    if "time" not in dataset.coords or dataset["time"].size != 1:
        return "valid time not given"
    time = dataset["time"].values.ravel()[0]
    if not np.issubdtype(np.asarray(time).dtype, np.datetime64) or np.isnat(time):
        return "valid time not given"
    return f"valid {np.datetime_as_string(time, unit='m').replace('T', ' ')} UTC"


def _write_titles(figure, axes, title, dataset):
    box = axes.get_position()
    width, height = figure.get_size_inches()
    subtitle = _subtitle(dataset, width - 0.9)
    above = 0.22 + 0.145 * (1 + subtitle.count("\n"))
    figure.text(box.x0, box.y1 + 0.12 / height, subtitle, fontsize=8, ha="left", va="bottom")
    size = 11 if width > 7.0 else 9
    figure.text(box.x0, box.y1 + above / height, title, fontsize=size, ha="left", va="bottom", fontweight="bold")


def _small_print(shared, masked):
    software = str(shared.dataset.attrs.get("software", "")).strip()
    hidden = f"{masked} pixels without a value are hatched." if masked else ""
    return "  ".join(part for part in (CAUTION, shared.coast_note, hidden, software) if part)


def _write_small_print(figure, axes, shared, masked):
    width, height = figure.get_size_inches()
    lines = textwrap.wrap(_small_print(shared, 0), int(16.5 * (width - 1.0)))
    figure.text(axes.get_position().x0, 0.10 / height, "\n".join(lines), fontsize=7, ha="left", va="bottom")
    handles = []
    if shared.beyond.any():
        handles.append(Patch(facecolor=_BEYOND_COLOUR, label="outside the domain of the model"))
    if masked:
        handles.append(Patch(facecolor=_MASK_COLOURS[0], edgecolor=_MASK_COLOURS[1], hatch="////",
                             label=f"no value: {masked} masked pixels"))  # fmt: skip
    if handles:
        above = (0.15 + 0.12 * len(lines)) / height
        figure.legend(handles=handles, loc="lower right", bbox_to_anchor=(1 - 0.3 / width, above), fontsize=7,
                      frameon=False, borderaxespad=0.0, ncols=2)  # fmt: skip
