"""The vertical coordinate: pressure on the levels, and every field brought onto the same ones.

The reader asks `level_pressure` for pressure on the levels of the temperature; `on_levels` then brings the
other fields onto these. `level` runs from the top of the atmosphere to the surface.
"""

import numpy as np
import xarray as xr

from chansim.errors import SceneError
from chansim.scene.columns import CONDENSATES, HUMIDITY_ROUTES
from chansim.scene.units import convert, is_convertible

# what is zero where the file stops, because models write it only where it can exist
_ZERO_BEYOND = ("cloud_fraction", *CONDENSATES, *(f"{name}_mixing_ratio" for name in CONDENSATES))
_SAME_PRESSURE = 1e-4  # relative difference below which two pressures are the same level


def level_pressure(temperature, recognised, log):
    """Pressure of the levels of a field.

    Parameters
    ----------
    temperature : Field that defines the levels
    recognised : Recognised
    log : list that receives a line

    Returns
    -------
    DataArray with the dimension of the levels, and more when a pressure field is given [Pa]

    Raises
    ------
    SceneError : the levels carry no pressure
    """
    dim = temperature.level_dim
    coord = temperature.data.coords.get(dim)
    given = recognised.fields.get("pressure")
    if "pressure" not in recognised.mapped and coord is not None and _is_pressure(coord):
        log.append(f"pressure <- coordinate {dim} [{coord.attrs['units']}]")
        return convert(coord.astype(float), coord.attrs["units"], "Pa", str(dim))
    if given is not None and given.level_dim == dim:
        return convert(given.data.astype(float), recognised.units["pressure"], "Pa", given.name)
    kind = (
        coord.attrs.get("standard_name") or coord.attrs.get("long_name") or "no standard name"
        if coord is not None
        else "no values"
    )
    raise SceneError(
        f"{temperature.name}: its levels '{dim}' ({kind}) give no pressure. Add a field with standard_name "
        "'air_pressure' on the same levels, give the coordinate pressure units, or say "
        'mapping={"pressure": "its name"}'
    )


def _is_pressure(coord):
    # a hybrid coordinate may carry hPa as units of its nominal values; its standard name tells
    if str(coord.attrs.get("standard_name", "air_pressure")) != "air_pressure":
        return False
    return "units" in coord.attrs and is_convertible(coord.attrs["units"], "Pa")


def runs_upward(pressure, dim):
    """True when the first level is the lowest."""
    others = {d: pressure.sizes[d] // 2 for d in pressure.dims if d != dim}
    first, last = (float(pressure.isel({dim: k, **others})) for k in (0, -1))
    if not np.isfinite([first, last]).all():
        first, last = (float(pressure.isel({dim: k}).max()) for k in (0, -1))
    return first > last


def on_levels(name, field, reference_dim, reference_pressure, notes):
    """A field on the levels of the temperature.

    Parameters
    ----------
    name : quantity
    field : Field on levels
    reference_dim : dimension of the levels of the temperature
    reference_pressure : DataArray over it (1-D) to align pressure levels by, or None
    notes : list that receives what was filled

    Returns
    -------
    DataArray with dimension `reference_dim`; None when the field cannot be brought there

    Raises
    ------
    SceneError : humidity does not reach the lowest level
    """
    data = field.data
    own = data.coords.get(field.level_dim)
    alignable = reference_pressure is not None and own is not None and own.ndim == 1 and _is_pressure(own)
    if not alignable:
        if field.level_dim != reference_dim or data.sizes[reference_dim] < 1:
            notes.append(f"{field.name}: on other levels ({field.level_dim}) than the temperature; not used")
            return None
        return data
    pressure = convert(own.values.astype(float), own.attrs["units"], "Pa", field.name)
    wanted = reference_pressure.values
    position = [_find(pressure, p) for p in wanted]
    if position == list(range(len(wanted))) and len(pressure) == len(wanted):
        return data.rename({field.level_dim: reference_dim}) if field.level_dim != reference_dim else data
    slices = _fill_levels(name, field, data, position, wanted, notes)
    template = xr.DataArray(wanted, dims=reference_dim, name=reference_dim)
    return xr.concat(slices, dim=template, coords="minimal", compat="override")


def _find(pressure, wanted):
    hits = np.flatnonzero(np.abs(pressure - wanted) <= _SAME_PRESSURE * wanted)
    return int(hits[0]) if len(hits) else None


def _fill_levels(name, field, data, position, wanted, notes):
    """One slice a wanted level: found, interpolated between found ones, zero or NaN beyond them."""
    present = [k for k, where in enumerate(position) if where is not None]
    if not present:
        raise SceneError(f"{field.name}: shares no pressure level with the temperature")
    order = sorted(range(len(wanted)), key=lambda k: wanted[k])
    rank = {k: i for i, k in enumerate(order)}
    ranks = sorted(rank[k] for k in present)
    lowest_missing = [wanted[k] for k in range(len(wanted)) if rank[k] > ranks[-1]]
    if lowest_missing and name in HUMIDITY_ROUTES:
        raise SceneError(
            f"{field.name}: humidity is missing on the lowest levels ({_hpa(lowest_missing)} hPa) where the "
            "temperature is given; supply it there or drop these levels"
        )
    slices, interpolated, beyond = [], [], []
    for k, where in enumerate(position):
        if where is not None:
            piece = data.isel({field.level_dim: where})
        elif ranks[0] < rank[k] < ranks[-1]:
            piece = _between(data, field.level_dim, position, wanted, order, rank[k])
            interpolated.append(wanted[k])
        else:
            fill = 0.0 if name in _ZERO_BEYOND else np.nan
            piece = xr.full_like(data.isel({field.level_dim: 0}), fill)
            beyond.append(wanted[k])
        slices.append(piece.drop_vars(field.level_dim, errors="ignore"))
    if interpolated:
        notes.append(f"{name}: interpolated linearly in ln p to {_hpa(interpolated)} hPa, which {field.name} lacks")
    if beyond:
        what = "zero" if name in _ZERO_BEYOND else "reference atmosphere"
        notes.append(f"{name}: {what} at {_hpa(beyond)} hPa, which {field.name} lacks")
    return slices


def _between(data, dim, position, wanted, order, rank):
    above = next(order[r] for r in range(rank, -1, -1) if position[order[r]] is not None)
    below = next(order[r] for r in range(rank, len(order)) if position[order[r]] is not None)
    weight = np.log(wanted[order[rank]] / wanted[above]) / np.log(wanted[below] / wanted[above])
    upper, lower = (data.isel({dim: position[k]}).drop_vars(dim, errors="ignore") for k in (above, below))
    return (1.0 - float(weight)) * upper + float(weight) * lower


def _hpa(pressures):
    return ", ".join(f"{p / 100:g}" for p in sorted(pressures))
