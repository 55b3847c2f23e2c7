"""Datasets of several files, all at one time, as one; only coordinates are read."""

import numpy as np

from chansim.errors import SceneError

_SAME_PLACE = 1e-4  # degrees, or relative, below which two coordinates are the same
_COMPARED = 50e6  # bytes of a variable in two files up to which its values are compared


def merged(parts, is_free):
    """One Dataset of what several files hold.

    Parameters
    ----------
    parts : {name of the file: Dataset}, none with a time dimension
    is_free : function (dimension, Dataset), True for a dimension that may have another length in each file (levels)

    Returns
    -------
    xarray.Dataset; lazy variables stay lazy

    Raises
    ------
    SceneError : two files hold different values of one variable, or lie on different grids
    """
    origin = {}
    result = None
    for path, part in parts.items():
        if result is None:
            result = part
        else:
            part = _aligned(part, result, path, next(iter(parts)), is_free)
            result = _joined(result, part, path, origin)
        for name in part.variables:
            origin.setdefault(name, path)
    return result


def _aligned(part, reference, path, first_path, is_free):
    """A part with its coordinates in the order of the reference; levels of another set are renamed."""
    for dim in [d for d in part.dims if d in reference.dims]:
        own, wanted = part.get(dim), reference.get(dim)
        if part.sizes[dim] != reference.sizes[dim]:
            if is_free(dim, part):
                part = part.rename({dim: _unused(dim, reference)})
                continue
            raise SceneError(
                f"{path} has {part.sizes[dim]} values of {dim} and {first_path} {reference.sizes[dim]}; files to be "
                "joined must lie on one grid"
            )
        if own is None or wanted is None or own.dtype.kind not in "fiu":
            continue
        order = _order(own.values.astype(float), wanted.values.astype(float), dim)
        if order is None and is_free(dim, part):
            part = part.rename({dim: _unused(dim, reference)})
        elif order is None:
            raise SceneError(
                f"{path}: {dim} runs from {own.values[0]:g} to {own.values[-1]:g}, in {first_path} from "
                f"{wanted.values[0]:g} to {wanted.values[-1]:g}; files to be joined must lie on one grid"
            )
        else:
            part = part.isel({dim: order}) if not np.array_equal(order, np.arange(order.size)) else part
            part = part.assign_coords({dim: wanted.variable})  # without scalar coordinates that ride along
    return part


def _order(own, wanted, dim):
    """Positions that bring a coordinate into the order of another; None when the values differ.

    Longitudes count modulo 360 degrees.
    """
    turn = "lon" in str(dim).lower()
    tolerance = _SAME_PLACE * np.maximum(1.0, np.abs(wanted) if not turn else 1.0)
    distance = own[None, :] - wanted[:, None]
    if turn:
        distance = (distance + 180.0) % 360.0 - 180.0
    nearest = np.abs(distance).argmin(axis=1)
    close = np.abs(distance[np.arange(wanted.size), nearest]) <= tolerance
    return nearest if close.all() and np.unique(nearest).size == own.size else None


def _unused(dim, reference):
    return next(f"{dim}_{k}" for k in range(2, 1000) if f"{dim}_{k}" not in reference.dims)


def _renamed_scalars(part, result):
    """A part whose scalar coordinates (the 10 m of a wind) keep clear of others of the same name (the 2 m)."""
    for name in [n for n, c in part.coords.items() if c.ndim == 0 and n in result.coords]:
        if part[name].dtype.kind not in "fi" or result[name].ndim or _equal(result[name], part[name]):
            continue
        new = next(f"{name}_{k}" for k in range(2, 1000) if f"{name}_{k}" not in result.variables)
        part = part.rename({name: new})
        for variable in part.data_vars.values():
            words = str(variable.encoding.get("coordinates", "")).split()
            if name in words:
                variable.encoding["coordinates"] = " ".join(new if w == name else w for w in words)
    return part


def _joined(result, part, path, origin):
    part = _renamed_scalars(part, result)
    for name in part.variables:
        if name not in result.variables:
            continue
        ours, theirs = result[name], part[name]
        if name in result.coords and name in part.coords and ours.ndim == 0:
            part = part.drop_vars(name)  # the time, a height: the first file's
            continue
        if not _equal(ours, theirs):
            raise SceneError(
                f"{name} is in {origin[name]} and in {path}, both valid at the same time, with different values; are "
                "these members or runs? Name the files of one of them"
            )
        if name not in part.dims:
            part = part.drop_vars(name)
    return result.assign_coords({n: c.variable for n, c in part.coords.items()}).assign(
        {n: part[n].variable for n in part.data_vars}
    )


def _equal(ours, theirs):
    if ours.dims != theirs.dims or ours.shape != theirs.shape:
        return False
    if ours.size * ours.dtype.itemsize > _COMPARED:
        return False  # a large field twice is no invariant of the grid
    if ours.dtype.kind in "fiub" and theirs.dtype.kind in "fiub":
        return np.allclose(ours.values, theirs.values, rtol=1e-5, atol=1e-6, equal_nan=True)
    return np.array_equal(ours.values, theirs.values)
