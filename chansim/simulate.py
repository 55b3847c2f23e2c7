"""Scene x imager x view -> Dataset of brightness temperatures: the only place that joins them."""

import datetime
from dataclasses import dataclass, field

import numpy as np
import xarray as xr

from chansim._version import __version__
from chansim.channels.absorption_tables import PRESSURES, TEMPERATURES, absorption_tables
from chansim.channels.atlas import load_atlas
from chansim.channels.imager import load_imager
from chansim.errors import SceneError, ViewError
from chansim.optics.condensate import (
    CLAMPED,
    PARAMETRISED,
    SPECIES,
    condensate_moments,
    condensate_optics,
    effective_radii,
)
from chansim.optics.phase import SHORTWAVE, sunlit_optics
from chansim.optics.surface import channel_emissivity
from chansim.quality import flag_attributes, quality_flags
from chansim.scene.reading import open_scene
from chansim.scene.reference_atmosphere import GASES as REFERENCE_GASES
from chansim.scene.reference_atmosphere import reference_profile, reference_table
from chansim.transfer.emission_level import emission_pressure
from chansim.transfer.overlap import OVERLAPS
from chansim.transfer.scattering import quadrature
from chansim.transfer.solve import RESULTS, SOLVERS, solve_columns
from chansim.view.lines_of_sight import as_view
from chansim.view.solar_irradiance import solar_irradiance
from chansim.view.solar_position import relative_azimuth, solar_angles, solar_distance_factor

CAUTION = (
    "A simulation from model output, not an observation. Official warnings and the judgement of licensed "
    "forecasters come first."
)
# scene variable, short name in the absorption tables, name in the reference atmosphere
_TRACE_GASES = {
    "carbon_dioxide_mole_fraction": "co2",
    "nitrous_oxide_mole_fraction": "n2o",
    "methane_mole_fraction": "ch4",
    "carbon_monoxide_mole_fraction": "co",
}
_GAS_NAMES = {gas: name for name, gas in _TRACE_GASES.items()} | {"o3": "ozone_mole_fraction"}
_COLUMNS_AT_ONCE = 16384
SUNLIGHT = ("auto", "none")
_REFERENCE_STRIDE = 3  # of its levels, which lie 5 % apart in pressure: as fine as the solver needs


@dataclass(frozen=True)
class Settings:
    """What a simulation assumes; recorded in its output.

    solver : "scattering" (multiple scattering wherever there is condensate) or "absorbing" (condensate only absorbs)
    streams, solar_streams : of the scattering solver and of its solar term, for each half-sphere
    sunlight : "auto" (where the scene has a valid time, or the view gives solar angles) or "none" (night everywhere)
    overlap : a key of `chansim.transfer.overlap.OVERLAPS`
    subcolumns : for columns with partial cloud
    decorrelation_length : of the exponential-random overlap [m]
    liquid_radius, ice_radius : parametrisations of the effective radius, by name
    ice_habit : ice crystal model, by name
    gases : {gas: mole fraction at the surface} that replace the defaults of co2, n2o, ch4, co
    """

    solver: str = "scattering"
    streams: int = 2
    sunlight: str = "auto"
    solar_streams: int = 8
    overlap: str = "maximum-random"
    subcolumns: int = 20
    decorrelation_length: float = 2000.0
    liquid_radius: str = "martin-1994"
    ice_radius: str = "sun-2001"
    ice_habit: str = "equal-volume-to-area"
    gases: dict = field(default_factory=dict)


def simulate(scene, imager="tarn", *, channels=None, view="nadir", settings=None, emissivity=None, progress=None):
    """Simulate the picture an imager would have taken.

    Parameters
    ----------
    scene : canonical Dataset from `chansim.open_scene`, or what that function reads (path, Dataset)
    imager : what `chansim.load_imager` takes: id of a built-in imager, folder, response file(s), Imager
    channels : channel ids, in order; None = all
    view : "nadir", a zenith angle [degrees], ("geostationary", longitude [degrees_east]), or a Dataset with
        `view_zenith_angle` [degrees] on the horizontal grid of the scene
    settings : Settings; None = the defaults
    emissivity : surface emissivity (channel,) or (channel, horizontal) that replaces the built-in one [1]
    progress : function (done, all columns) called between pieces of work

    Returns
    -------
    xarray.Dataset with dimensions (channel, horizontal dimensions of the scene), see `docs/solvers.md`:
    brightness_temperature, brightness_temperature_clear, cloud_effect, subcolumn_spread [K]; radiance, radiance_solar
    [mW m-2 sr-1 (cm-1)-1]; surface_transmittance, cloud_optical_thickness [1]; weighting_function_peak,
    effective_emission_pressure [Pa]; weighting_function_peak_height [m]; quality_flag; what was assumed is in its
    attributes

    Raises
    ------
    SceneError, ResponseError, ViewError : see there
    """
    settings = settings or Settings()
    if not (isinstance(scene, xr.Dataset) and "column_valid" in scene):
        scene = open_scene(scene)
    _check_settings(settings)
    imager = load_imager(imager, channels)
    dims, shape = _horizontal(scene)
    view = as_view(view)
    given = tuple(["o3"] + [gas for name, gas in _TRACE_GASES.items() if name in scene])
    atlas = load_atlas()
    tables = absorption_tables(
        imager.channels, _well_mixed(settings.gases, given), given, atlas.pressure, atlas.temperature
    )
    optics = (
        *condensate_optics(tables.wavenumber, settings.ice_habit),
        condensate_moments(tables.wavenumber, settings.ice_habit, 2 * settings.streams + 1),
    )
    sun = _Sunlight.of(scene, view, settings, tables.wavenumber)
    sunlit = sunlit_optics(tables.wavenumber, sun.irradiance, settings.ice_habit, settings.solar_streams)
    out = {name: np.empty((len(imager.channels), *shape), dtype=np.float32) for name in _FIELDS}
    zenith, solar_zenith = np.empty(shape, dtype=np.float32), np.empty(shape, dtype=np.float32)
    counts, masked = {}, 0
    carried = {n: np.empty(shape, np.float32) for n in ("view_azimuth_angle", "land_fraction") if n in scene}
    rows = max(1, _COLUMNS_AT_ONCE // max(1, int(np.prod(shape[1:]))))
    for start in range(0, shape[0], rows):
        piece = slice(start, min(start + rows, shape[0]))
        slab = scene.isel({dims[0]: piece}).load()
        results, angles = _solve_slab(
            slab, imager, view, settings, emissivity, tables, optics, sunlit, sun, dims, counts, piece
        )
        for name, values in results.items():
            out[name][:, piece] = values
        zenith[piece], solar_zenith[piece] = angles
        masked += int((~slab["column_valid"]).sum())
        for name in carried:
            carried[name][piece] = slab[name].transpose(*dims)
        if progress is not None:
            progress(piece.stop * int(np.prod(shape[1:])), int(np.prod(shape)))
    if not (zenith < view.largest_zenith).any():
        raise ViewError(
            f"the view ({view.describe()}) sees no column of the scene, which lies at longitudes "
            f"{float(scene['longitude'].min()):.1f} to {float(scene['longitude'].max()):.1f} degrees east; choose a "
            "sub-satellite longitude near its middle"
        )
    # a lazy scene is not to be read again for these
    scene = scene.assign({n: (dims, v, scene[n].attrs) for n, v in carried.items()}).assign_attrs(masked_columns=masked)
    return _as_dataset(scene, imager, view, settings, out, (zenith, solar_zenith), dims, counts, atlas, sun)


def _check_settings(settings):
    for name, value, known in (
        ("cloud overlap", settings.overlap, OVERLAPS),
        ("solver", settings.solver, SOLVERS),
        ("sunlight", settings.sunlight, SUNLIGHT),
    ):
        if value not in known:
            raise SceneError(f"unknown {name} {value!r}; use one of {', '.join(known)}")
    for name, value, most, usual in (
        ("streams", settings.streams, 16, 2),
        ("solar_streams", settings.solar_streams, 16, 8),
    ):
        if not 1 <= value <= most:
            raise SceneError(f"{name} {value}: give 1 to {most} for each half-sphere ({usual} is the default)")
    if settings.subcolumns < 1:
        raise SceneError(f"subcolumns {settings.subcolumns}: at least 1 is needed (20 is the default)")


def _horizontal(scene):
    dims = scene["column_valid"].dims
    if not dims:
        raise SceneError("the scene has no horizontal dimension; a single column needs one of length 1")
    return dims, tuple(scene.sizes[d] for d in dims)


def _well_mixed(requested, given):
    """Profiles (functions of pressure) of the gases that have no field."""
    table = reference_table()
    profiles = {}
    unknown = set(requested) - set(_TRACE_GASES.values())
    if unknown:
        raise SceneError(
            f"cannot set the mole fraction of {', '.join(sorted(unknown))}; "
            f"settable: {', '.join(_TRACE_GASES.values())}"
        )
    for name, gas in _TRACE_GASES.items():
        if gas in given:
            continue
        mean = table[name].mean(axis=0)
        if gas in requested:
            mean = mean * (float(requested[gas]) / mean[-1])
        profiles[gas] = lambda p, mean=mean: np.interp(np.log(p), np.log(table["pressure"]), mean)
    return profiles


def _columns(slab, name, dims, count, default):
    """A surface field as (columns,), or the default."""
    if name not in slab:
        return np.full(count, default, dtype=float)
    return np.ascontiguousarray(slab[name].transpose(*dims).values.reshape(count), dtype=float)


def _profiles(slab, name, dims, count):
    """A level field as (columns, levels), None when absent."""
    if name not in slab:
        return None
    field_ = slab[name]
    if field_.ndim == 1:
        return np.ascontiguousarray(field_.values[None, :], dtype=float)
    vertical = [d for d in field_.dims if d not in dims][0]
    return np.ascontiguousarray(field_.transpose(*dims, vertical).values.reshape(count, -1), dtype=float)


def _half_pressure(slab, dims, count, pressure):
    half = _profiles(slab, "half_pressure", dims, count)
    if half is not None:
        return half
    middle = np.sqrt(pressure[:, :-1] * pressure[:, 1:])
    return np.concatenate(
        [pressure[:, :1] ** 2 / middle[:, :1], middle, pressure[:, -1:] ** 2 / middle[:, -1:]], axis=1
    )


def _day_of_year(slab):
    if "time" not in slab.coords:
        return None
    time = np.asarray(slab["time"].values).ravel()
    if time.size != 1 or np.isnat(time[0]):
        return None
    day = time[0].astype("datetime64[D]")
    return int((day - day.astype("datetime64[Y]").astype("datetime64[D]")).astype(int)) + 1


def _reference(slab, dims, count, given):
    latitude = _columns(slab, "latitude", dims, count, 45.0)
    # the reference changes slowly: half a degree is far below what is known of it
    rounded, where = np.unique(np.round(np.nan_to_num(latitude) * 2.0) / 2.0, return_inverse=True)
    profile = reference_profile(rounded, _day_of_year(slab))
    names = [REFERENCE_GASES[0]] + [_GAS_NAMES[gas] for gas in given]
    gases = np.stack([profile[name][where] for name in names])
    thin = np.s_[..., ::_REFERENCE_STRIDE]
    return (
        np.ascontiguousarray(profile["pressure"][thin]),
        np.ascontiguousarray(profile["temperature"][thin][where]),
        np.ascontiguousarray(gases[thin]),
    )


def _clouds(slab, settings, dims, count, levels, pressure, temperature, counts):
    """Mixing ratios, ln effective radii (species, columns, levels), cloud fraction (columns, levels), size doubts.

    The last are two (columns,) bool: a radius outside the tables, a radius that the model does not give.
    """
    mixing = np.zeros((len(SPECIES), count, levels))
    for s, name in enumerate(SPECIES):
        values = _profiles(slab, name, dims, count)
        if values is not None:
            mixing[s] = np.nan_to_num(values, nan=0.0)
    fraction = _profiles(slab, "cloud_fraction", dims, count)
    fraction = np.ones((count, levels)) if fraction is None else np.nan_to_num(fraction, nan=0.0)
    fraction = _fraction_everywhere(mixing, np.clip(fraction, 0.0, 1.0), counts)
    fields = {
        name: _profiles(slab, name, dims, count)
        for name in ("effective_radius_liquid", "effective_radius_ice", "number_liquid", "number_ice")
    }
    land = _columns(slab, "land_fraction", dims, count, 0.0)
    latitude = _columns(slab, "latitude", dims, count, 45.0)
    flags = np.empty(mixing.shape, dtype=np.uint8)
    radius = effective_radii(
        mixing,
        fraction,
        pressure,
        temperature,
        land,
        latitude,
        fields,
        settings.liquid_radius,
        settings.ice_radius,
        counts,
        flags,
        settings.ice_habit,
    )
    doubts = tuple((flags & bit > 0).any(axis=(0, 2)) for bit in (CLAMPED, PARAMETRISED))
    return (mixing, np.log(radius), fraction), doubts


def _fraction_everywhere(mixing, fraction, counts):
    """Cloud fraction with a value wherever there is condensate.

    Precipitation below its cloud takes the largest fraction above it; cloud without a fraction fills its cell.
    """
    cloud = (mixing[:2].sum(axis=0) > 1e-9) & (fraction <= 0.0)
    fraction = np.where(cloud, 1.0, fraction)
    falling = (mixing[2:].sum(axis=0) > 1e-9) & (fraction <= 0.0)
    above = np.maximum.accumulate(fraction, axis=1)
    for name, cells in (
        ("cloudy cells without cloud fraction, taken as overcast", cloud),
        ("cells of precipitation without cloud fraction, given that of the cloud above", falling),
    ):
        counts[name] = counts.get(name, 0) + int(cells.sum())
    return np.where(falling, np.where(above > 0.0, above, 1.0), fraction)


@dataclass(frozen=True)
class _Sunlight:
    """Where the sun stands and what it sends.

    irradiance : (nodes,) [mW m-2 (cm-1)-1], 0 below 2000 cm-1 or without sunlight; note : for the record
    """

    irradiance: np.ndarray
    note: str

    @classmethod
    def of(cls, scene, view, settings, wavenumber):
        """For the nodes of all channels [cm-1]."""
        nothing = np.zeros(wavenumber.size)
        shortwave = wavenumber >= SHORTWAVE
        if not shortwave.any():
            return cls(nothing, "no channel below 5 um")
        if settings.sunlight == "none":
            return cls(nothing, "left out on request: night everywhere")
        if settings.solver == "absorbing":
            return cls(nothing, "left out: the absorbing solver does not scatter")
        time = _valid_time(scene)
        if time is None and not view.gives_sun:
            return cls(nothing, "left out: the scene has no valid time (night everywhere)")
        factor = 1.0 if time is None else float(np.mean(solar_distance_factor(time)))
        irradiance = np.zeros(wavenumber.size)
        irradiance[shortwave] = solar_irradiance(wavenumber[shortwave]) * factor
        return cls(irradiance, f"included, irradiance of ASTM E490-00 x {factor:.4f}")

    def at(self, slab, view, zenith, dims, count):
        """Sun of a slab: cosine of zenith angle, cosine of azimuth to imager, sea share, wind (columns,), zenith."""
        dark = np.full(count, -1.0)
        sea = 1.0 - np.clip(_columns(slab, "land_fraction", dims, count, 0.0), 0.0, 1.0)
        if "surface_class" in slab:
            sea = (slab["surface_class"].transpose(*dims).values.reshape(count) == 0).astype(float)
        wind = _columns(slab, "wind_speed_10m", dims, count, 7.0)
        if not self.irradiance.any():
            return (dark, np.ones(count), sea, wind), np.full(count, np.nan)
        if view.gives_sun:
            angles = view.solar(slab)
        else:
            latitude, longitude = (_columns(slab, name, dims, count, np.nan) for name in ("latitude", "longitude"))
            angles = solar_angles(_times(slab, dims, count), latitude, longitude)
        solar_zenith, solar_azimuth = (np.asarray(a, dtype=float).reshape(count) for a in angles)
        cosine = np.cos(np.radians(solar_zenith))
        cosine = np.where(cosine > 1e-3, cosine, -1.0)  # at the horizon the term vanishes
        if not (cosine > 0.0).any():
            return (dark, np.ones(count), sea, wind), solar_zenith
        azimuth = np.zeros(count)
        if (zenith > 0.0).any():
            imager = np.broadcast_to(view.azimuth(slab), tuple(slab.sizes[d] for d in dims)).reshape(count)
            azimuth = relative_azimuth(imager, solar_azimuth)
        return (cosine, np.cos(np.radians(azimuth)), sea, wind), solar_zenith


def _valid_time(scene):
    """The valid time or times of the scene, None where there is none."""
    if "time" not in scene.coords or np.isnat(np.asarray(scene["time"].values, dtype="datetime64[ns]")).any():
        return None
    return scene["time"].values


def _times(slab, dims, count):
    time = slab["time"]
    if time.ndim == 0:
        return time.values
    return np.broadcast_to(
        time.broadcast_like(slab["latitude"]).transpose(*dims).values, tuple(slab.sizes[d] for d in dims)
    ).reshape(count)


def _solve_slab(slab, imager, view, settings, emissivity, tables, optics, sunlit, sun, dims, counts, piece):
    shape = tuple(slab.sizes[d] for d in dims)
    count = int(np.prod(shape))
    pressure = _profiles(slab, "pressure", dims, count)
    temperature = _profiles(slab, "temperature", dims, count)
    levels = temperature.shape[1]
    gases = np.full((len(tables.gases), count, levels), np.nan)
    for g, gas in enumerate(tables.gases):
        values = _profiles(slab, _GAS_NAMES[gas], dims, count)
        if values is not None:
            gases[g] = values
    zenith = np.broadcast_to(view.zenith(slab), shape).reshape(count)
    valid = slab["column_valid"].transpose(*dims).values.reshape(count) & (zenith < view.largest_zenith)
    surface_pressure = _columns(slab, "surface_pressure", dims, count, np.nan)
    surface = (
        surface_pressure,
        _columns(slab, "air_temperature_2m", dims, count, np.nan),
        _columns(slab, "specific_humidity_2m", dims, count, np.nan),
        _columns(slab, "skin_temperature", dims, count, np.nan),
        _columns(slab, "orography", dims, count, 0.0),
    )
    surface_emissivity = _emissivity(slab, imager, zenith, emissivity, dims, count, piece)
    results = np.full((len(RESULTS), len(imager.channels), count), np.nan)
    sun_of_columns, solar_zenith = sun.at(slab, view, zenith, dims, count)
    clouds, doubts = _clouds(slab, settings, dims, count, levels, pressure, temperature, counts)
    grid = (
        np.log(PRESSURES[0]),
        np.log(PRESSURES[1] / PRESSURES[0]),
        TEMPERATURES[0],
        TEMPERATURES[1] - TEMPERATURES[0],
    )
    solve_columns(
        np.ascontiguousarray(valid),
        (
            pressure,
            temperature,
            _profiles(slab, "specific_humidity", dims, count),
            gases,
            _half_pressure(slab, dims, count, pressure),
        ),
        surface,
        _reference(slab, dims, count, tables.gases),
        clouds,
        optics,
        sunlit,
        sun_of_columns,
        np.cos(np.radians(np.where(valid, zenith, 0.0))),
        surface_emissivity,
        (tables.table, grid, tables.wavenumber, tables.weight, tables.first),
        (
            OVERLAPS[settings.overlap],
            float(settings.decorrelation_length),
            int(settings.subcolumns),
            SOLVERS[settings.solver],
        ),
        quadrature(settings.streams),
        quadrature(settings.solar_streams),
        results,
    )
    fields = dict(zip(RESULTS, results))
    _add_temperatures(fields, imager.channels)
    fields["emission_pressure"] = np.empty_like(fields["brightness"])
    emission_pressure(fields["brightness"], pressure, temperature, surface_pressure, fields["emission_pressure"])
    fields["flags"] = quality_flags(
        valid,
        zenith,
        solar_zenith,
        fields["spread"],
        np.array([c.node_wavenumber.max() >= SHORTWAVE for c in imager.channels]),
        temperature,
        pressure < surface_pressure[:, None],
        *doubts,
    )
    return {name: fields[name].reshape(-1, *shape) for name in _FIELDS}, (
        zenith.reshape(shape),
        solar_zenith.reshape(shape),
    )


def _add_temperatures(fields, channels):
    """Brightness temperatures and the spread of subcolumns, from radiance to K."""
    for name, source in (("brightness", "radiance"), ("brightness_clear", "radiance_clear")):
        fields[name] = np.stack([c.brightness_temperature(fields[source][i]) for i, c in enumerate(channels)])
    more = np.stack([c.brightness_temperature(1.001 * fields["radiance"][i]) for i, c in enumerate(channels)])
    fields["spread"] = fields["spread"] * (more - fields["brightness"]) / (0.001 * fields["radiance"])


def _emissivity(slab, imager, zenith, given, dims, count, piece):
    """Surface emissivity (channels, columns): what the user gives, what the scene carries, or the built-in one."""
    channels = imager.channels
    if given is None:
        classes = None
        if "surface_class" in slab:
            classes = slab["surface_class"].transpose(*dims).values.reshape(count).astype(np.int64)
        return channel_emissivity(
            classes,
            _columns(slab, "land_fraction", dims, count, 0.0),
            np.clip(zenith, 0.0, 85.0),
            _columns(slab, "wind_speed_10m", dims, count, 7.0),
            [c.node_wavenumber for c in channels],
            [c.node_weight for c in channels],
        )
    values = np.asarray(given, dtype=float)
    if values.shape[:1] != (len(channels),):
        raise SceneError(
            f"emissivity: {values.shape} given; the first dimension must be the {len(channels)} channel(s)"
        )
    if values.ndim > 1:
        values = values[:, piece]
    values = np.broadcast_to(values.reshape(len(channels), -1), (len(channels), count))
    if not ((values >= 0.0) & (values <= 1.0)).all():
        raise SceneError(f"emissivity must lie within 0 and 1; given {values.min():g} to {values.max():g}")
    return np.ascontiguousarray(values)


# kernel or slab field -> name in the output, words, units, CF standard name
_FIELDS = {
    "radiance": ("radiance", "simulated radiance", "mW m-2 sr-1 (cm-1)-1", "toa_outgoing_radiance_per_unit_wavenumber"),
    "radiance_solar": ("radiance_solar", "part of the radiance that is sunlight", "mW m-2 sr-1 (cm-1)-1", None),
    "brightness": ("brightness_temperature", "simulated brightness temperature", "K", "toa_brightness_temperature"),
    "brightness_clear": (
        "brightness_temperature_clear",
        "the same without condensate",
        "K",
        "toa_brightness_temperature_assuming_clear_sky",
    ),
    "spread": ("subcolumn_spread", "standard deviation among subcolumns with different cloud", "K", None),
    "transmittance": (
        "surface_transmittance",
        "transmittance from the surface to the top, absorption of condensate included",
        "1",
        None,
    ),
    "cloud_optical_thickness": (
        "cloud_optical_thickness",
        "extinction optical thickness of all condensate, grid mean",
        "1",
        None,
    ),
    "peak_pressure": (
        "weighting_function_peak",
        "pressure where transmittance changes most with ln p",
        "Pa",
        None,
    ),
    "peak_height": ("weighting_function_peak_height", "height of that level above mean sea level", "m", None),
    "emission_pressure": (
        "effective_emission_pressure",
        "pressure where the air is as warm as the brightness temperature",
        "Pa",
        None,
    ),
    "flags": ("quality_flag", "what to be careful about", None, "quality_flag"),
}


def _as_dataset(scene, imager, view, settings, out, angles, dims, counts, atlas, sun):
    mapping = {"grid_mapping": "grid_mapping"} if "grid_mapping" in scene else {}
    data = {}
    for field_name, (name, long_name, units, standard_name) in _FIELDS.items():
        attributes = {"long_name": long_name, "units": units, "standard_name": standard_name, **mapping}
        attributes = {key: value for key, value in attributes.items() if value is not None}
        data[name] = (("channel", *dims), out[field_name], attributes)
    data["quality_flag"] = (
        ("channel", *dims),
        out["flags"].astype(np.int16),
        {**data["quality_flag"][2], **flag_attributes()},
    )
    data["cloud_effect"] = (
        ("channel", *dims),
        out["brightness"] - out["brightness_clear"],
        {"long_name": "brightness temperature with condensate minus without", "units": "K", **mapping},
    )
    for name, values, body, standard_name in (
        ("view_zenith_angle", angles[0], "imager", "sensor_zenith_angle"),
        ("solar_zenith_angle", angles[1], "sun", "solar_zenith_angle"),
    ):
        if np.isfinite(values).any():
            attributes = {"long_name": f"zenith angle of the {body}", "units": "degree", "standard_name": standard_name}
            data[name] = (dims, values, {**attributes, **mapping})
    for name in ("view_azimuth_angle", "land_fraction", "grid_mapping"):
        if name in scene:
            data[name] = scene[name]
    result = xr.Dataset(data, coords=_coordinates(scene, imager.channels, dims))
    result.attrs = _record(scene, imager, view, settings, counts, atlas, sun)
    return result


def _coordinates(scene, channels, dims):
    def along(values, **attributes):
        return ("channel", np.asarray(values), attributes)

    coordinates = {
        "channel": [c.id for c in channels],
        "channel_name": along([c.name for c in channels]),
        "channel_kind": along([c.kind for c in channels]),
        "central_wavenumber": along(
            [c.central_wavenumber for c in channels],
            units="cm-1",
            standard_name="sensor_band_central_radiation_wavenumber",
        ),
        "bandwidth": along([c.bandwidth for c in channels], units="cm-1"),
        "band_offset": along([c.band_offset for c in channels], units="K"),
        "band_slope": along([c.band_slope for c in channels], units="1"),
        "node_count": along([c.node_wavenumber.size for c in channels]),
        "node_fit_error": along([c.fit_error for c in channels], units="K"),
    }
    for name in ("latitude", "longitude", "time", *dims):
        if name in scene.coords:
            coordinates[name] = scene.coords[name]
    return coordinates


def _record(scene, imager, view, settings, counts, atlas, sun):
    """Global attributes: everything that is needed to make the output again."""
    attributes = {
        "Conventions": "CF-1.11, ACDD-1.3",
        "title": f"Simulated brightness temperature, {imager.name}",
        "summary": CAUTION,
        "imager": imager.id,
        "view": view.describe(),
        "model": str(scene.attrs.get("model", scene.attrs.get("source_model", ""))) or "model not named",
        "source_file": str(scene.attrs.get("source", "")),
        "software": f"chansim {__version__}",
        "atlas_sha256": atlas.digest,
        "co2_wings": str(atlas.attributes.get("co2_wings", "")),
        "date_created": datetime.datetime.now(datetime.UTC).strftime("%Y-%m-%dT%H:%M:%SZ"),
        "solver": settings.solver,
        "streams": settings.streams,
        "solar_streams": settings.solar_streams,
        "sunlight": sun.note,
        "cloud_overlap": settings.overlap,
        "subcolumns": settings.subcolumns,
        "decorrelation_length_m": settings.decorrelation_length,
        "effective_radius_liquid": settings.liquid_radius,
        "effective_radius_ice": settings.ice_radius,
        "ice_habit": settings.ice_habit,
        "changed_gases": ", ".join(f"{gas}={value:g}" for gas, value in settings.gases.items()) or "none",
        "defaulted": str(scene.attrs.get("defaulted", "")),
        "adjusted": str(scene.attrs.get("adjusted", "")),
        "counted": "\n".join(f"{name}: {number}" for name, number in sorted(counts.items()) if number) or "nothing",
        "masked_columns": scene.attrs["masked_columns"],
    }
    recognised = scene.attrs.get("recognised", "")
    attributes["recognised"] = recognised if isinstance(recognised, str) else "\n".join(recognised)
    if "coastline" in scene.attrs:
        attributes["coastline"] = scene.attrs["coastline"]
    return attributes
