"""One column from arrays, a radiosonde ascent for instance."""

import numpy as np
import xarray as xr

from chansim.errors import SceneError
from chansim.scene.reading import open_scene
from chansim.scene.recognition import QUANTITIES


def scene_from_profile(pressure, temperature, *, latitude, longitude, time=None, units=None, **quantities):
    """A scene of a single column.

    The profile may stop anywhere: what lies above its top is taken from the reference atmosphere when the
    column is simulated, and the scene says so. Points without pressure, temperature or humidity, and points
    where the pressure does not fall any more (a sonde repeats readings), are left out and counted.

    Parameters
    ----------
    pressure, temperature : 1-D arrays, upward or downward [Pa, K, or as `units` says]
    latitude, longitude : numbers [degrees]
    time : valid time, anything `numpy.datetime64` takes; None if unknown
    units : {name: units} for arguments that are not in SI, e.g. {"pressure": "hPa", "temperature": "degC"}
    quantities : exactly one of `specific_humidity`, `relative_humidity` [1], `dew_point`,
        `humidity_mixing_ratio`; and any other quantity of a scene as 1-D array on the levels
        (`cloud_liquid`, ...) or number at the surface (`skin_temperature`, `surface_pressure`, ...)

    Returns
    -------
    xarray.Dataset : as from `open_scene`, with dimensions (level, cell) and one cell

    Raises
    ------
    SceneError : shapes that differ, unknown names, no or several humidities, impossible values
    """
    profile = {"pressure": pressure, "temperature": temperature, **quantities}
    units = dict(units or {})
    _check_names(profile, units)
    on_levels, at_surface = {}, {}
    for name, values in profile.items():
        values = np.asarray(np.ma.filled(np.ma.asarray(values, dtype=float), np.nan))
        (on_levels if QUANTITIES[name].place == "levels" else at_surface)[name] = values
    on_levels, dropped = _usable_points(_same_length(on_levels))
    dataset = xr.Dataset(
        coords={n: ("cell", [float(v)]) for n, v in (("latitude", latitude), ("longitude", longitude))}
    )
    for name, values in on_levels.items():
        dataset[name] = (("level", "cell"), values[:, None], {"units": units.get(name, QUANTITIES[name].units)})
    dataset["pressure"] = ("level", on_levels["pressure"], dataset["pressure"].attrs)
    for name, value in at_surface.items():
        dataset[name] = ("cell", np.atleast_1d(value), {"units": units.get(name, QUANTITIES[name].units)})
    scene = open_scene(dataset, time=time)
    scene.attrs["source"], scene.attrs["source_kind"] = "profile given as arrays", "profile"
    if dropped:
        line = f"profile: {dropped} of {dropped + len(on_levels['pressure'])} points left out (missing or repeated)"
        scene.attrs["adjusted"] = "\n".join(filter(None, [scene.attrs["adjusted"], line]))
    return scene


def _check_names(profile, units):
    unknown = [name for name in (*profile, *units) if name not in QUANTITIES]
    if unknown:
        raise SceneError(f"profile: '{unknown[0]}' is not a quantity of a scene; it can be: {', '.join(QUANTITIES)}")
    choices = ("specific_humidity", "relative_humidity", "dew_point", "humidity_mixing_ratio")
    given = [name for name in choices if name in profile]
    if len(given) != 1:
        raise SceneError(
            f"profile: give exactly one of {', '.join(choices)}; got {' and '.join(given) if given else 'none'}"
        )


def _same_length(on_levels):
    length = on_levels["pressure"].shape
    for name, values in on_levels.items():
        if values.ndim != 1 or values.shape != length:
            raise SceneError(
                f"profile: {name} has shape {values.shape}, pressure {length}; all profiles need one value a level"
            )
    return on_levels


def _usable_points(on_levels):
    """Profiles on the points with all of pressure, temperature and humidity, and how many were left out."""
    needed = [n for n in on_levels if n in ("pressure", "temperature") or "humidity" in n or n == "dew_point"]
    usable = np.all([np.isfinite(on_levels[n]) for n in needed], axis=0)
    count = usable.size
    kept = {name: values[usable] for name, values in on_levels.items()}
    pressure = kept["pressure"]
    if pressure.size < 2:
        raise SceneError(
            f"profile: {pressure.size} of {count} points have pressure, temperature and humidity; need two"
        )
    if pressure[0] > pressure[-1]:  # an ascent; a point counts when it is higher than all before
        keep = pressure < np.concatenate([[np.inf], np.minimum.accumulate(pressure)[:-1]])
    else:
        keep = pressure > np.concatenate([[-np.inf], np.maximum.accumulate(pressure)[:-1]])
    if keep.sum() < 0.5 * keep.size:
        raise SceneError(
            f"profile: pressure is not monotonic, {keep.size - keep.sum()} of {keep.size} points go the wrong way; "
            "sort it"
        )
    kept = {name: values[keep] for name, values in kept.items()}
    return kept, int(count - keep.sum())
