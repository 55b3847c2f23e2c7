"""GRIB files as a list of fields, without an index file beside them.

One pass over the message headers finds every parameter, level and valid time. The messages of the wanted
time are then handed to cfgrib, one parameter and kind of level at a time, so that parameters on different
sets of levels live side by side.
"""

import logging
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import xarray as xr

from chansim.errors import SceneError
from chansim.scene.recognition import Field

_HEADER_KEYS = ("paramId", "shortName", "cfName", "name", "units", "typeOfLevel", "stepType", "centre")
_NUMBER_KEYS = ("level", "validityDate", "validityTime", "dataDate", "dataTime", "number")
# kinds of level that are floors of a column; the isobaric ones are one family in two units
_LEVEL_FAMILY = {
    "isobaricInhPa": "isobaric", "isobaricInPa": "isobaric", "hybrid": "hybrid", "sigma": "sigma",
    "generalVertical": "generalVertical", "generalVerticalLayer": "generalVertical", "theta": "theta",
    "hybridHeight": "hybridHeight", "heightAboveSea": "heightAboveSea", "hybridPressure": "hybrid",
}  # fmt: skip
# what the values of a kind of level are, where cfgrib does not say
_LEVEL_ATTRS = {
    "theta": {"units": "K", "standard_name": "air_potential_temperature"},
    "heightAboveSea": {"units": "m", "standard_name": "altitude"},
}
_ON_HYBRID_BUT_SURFACE = (129, 152)  # surface geopotential and ln p_s are coded on model level 1


@dataclass(frozen=True)
class Header:
    """What one GRIB message says about itself, and where it lies in which file."""

    path: str
    offset: object
    keys: dict

    @property
    def valid_time(self):
        """Valid time, numpy.datetime64 in seconds."""
        date, time = int(self.keys["validityDate"]), int(self.keys["validityTime"])
        text = f"{date // 10000:04d}-{date // 100 % 100:02d}-{date % 100:02d}T{time // 100:02d}:{time % 100:02d}:00"
        return np.datetime64(text, "s")


class _Selection(Mapping):
    """Some messages of a file, by offset, read when asked for; what cfgrib calls a fieldset."""

    def __init__(self, stream, offsets):
        self._stream = stream
        self._offsets = list(offsets)

    def __getitem__(self, offset):
        return self._stream[offset]

    def __iter__(self):
        return iter(self._offsets)

    def __len__(self):
        return len(self._offsets)


def scan(path):
    """Headers of all messages of a GRIB file.

    Parameters
    ----------
    path : path of one file

    Returns
    -------
    list of Header

    Raises
    ------
    SceneError : the file is damaged or cut short
    """
    stream = _stream(path)
    headers = []
    try:
        for offset, message in stream.items():
            keys = {key: message.message_get(key, default=None) for key in _HEADER_KEYS}
            keys |= {key: message.message_get(key, default=None) for key in _NUMBER_KEYS}
            headers.append(Header(str(path), offset, keys))
    except Exception as error:  # ecCodes raises many kinds; EOFError when nothing was found
        raise SceneError(
            f"{path}: damaged GRIB file, message {len(headers) + 1} cannot be read ({error}); fetch the file again"
        ) from error
    return headers


def _stream(path):
    from cfgrib.messages import FileStream

    # cfgrib logs what we report ourselves
    logging.getLogger("cfgrib").setLevel(logging.ERROR)
    return FileStream(str(path), errors="raise")


def valid_times(headers):
    """Sorted valid times of the messages, numpy.datetime64."""
    return sorted({h.valid_time for h in headers})


def fields_at(name, headers, time, select, chunks=None):
    """The fields of one valid time.

    Parameters
    ----------
    name : what messages call the file, or the files
    headers : list of Header, from `scan`; of one or more files
    time : numpy.datetime64, one of `valid_times`
    select : {"number": ensemble member} or {}
    chunks : None, or what `xarray.Dataset.chunk` takes

    Returns
    -------
    list of Field

    Raises
    ------
    SceneError : two runs or members are valid at that time
    """
    wanted = [h for h in headers if h.valid_time == time]
    wanted = _one_of(name, wanted, "number", "ensemble members", select.get("number"))
    _refuse_two_runs(name, wanted)
    groups = {}
    for header in wanted:
        groups.setdefault(_group_key(header), []).append(header)
    streams = {path: _stream(path) for path in {h.path for h in wanted}}
    return [_field(streams, key, members, chunks) for key, members in groups.items()]


def _one_of(path, headers, key, what, wanted):
    numbers = sorted({h.keys[key] for h in headers if h.keys[key] is not None})
    if wanted is not None and int(wanted) not in numbers:
        raise SceneError(f"{path}: no {what[:-1]} {wanted}; the file has {numbers}")
    if len(numbers) > 1 and wanted is None:
        raise SceneError(f'{path}: holds {what} {numbers}; say which, e.g. select={{"{key}": {numbers[0]}}}')
    return [h for h in headers if h.keys[key] is None or wanted is None or h.keys[key] == int(wanted)]


def _refuse_two_runs(path, headers):
    runs = sorted({(h.keys["dataDate"], h.keys["dataTime"]) for h in headers if h.keys["stepType"] == "instant"})
    if len(runs) > 1:
        raise SceneError(f"{path}: two forecast runs {runs} are valid at the same time; keep one in the file")


def _group_key(header):
    keys = header.keys
    kind = keys["typeOfLevel"]
    family = _LEVEL_FAMILY.get(kind)
    if family == "hybrid" and keys["paramId"] in _ON_HYBRID_BUT_SURFACE:
        kind, family = "surface", None
    level = None if family else keys["level"]
    return keys["paramId"], keys["shortName"], family or kind, level, keys["stepType"]


def _field(streams, key, headers, chunks):
    param_id, short_name, kind, level, step_type = key
    keys = headers[0].keys
    on_levels = level is None
    evidence = {
        "param_id": param_id, "short_name": short_name, "long_name": keys["name"], "over_time": step_type,
        "centre": keys["centre"],
    }  # fmt: skip
    if keys["units"] not in (None, "unknown"):
        evidence["units"] = keys["units"]
    if keys["cfName"] not in (None, "unknown"):
        evidence["standard_name"] = keys["cfName"]
    by_type = _by_level_type(headers)
    suffix = f":{level}" if level else ""
    if kind == "hybrid" and on_levels and (pv := _coefficients(streams, headers[0])) is not None:
        evidence["pv"] = pv
    if kind == "theta":
        evidence |= {"level_standard_name": "air_potential_temperature", "level_units": "K"}
    return Field(
        name=f"{short_name}@{kind}{suffix}",
        open=lambda: _join_levels(
            [_open(streams[members[0].path], members, chunks, on_levels) for members in by_type], kind
        ),
        place="levels" if on_levels else _place(kind, level),
        level_dim=kind if on_levels else "",
        evidence=evidence,
    )


def _coefficients(streams, header):
    """Vertical coefficients in the header of a message; None when it has none."""
    message = streams[header.path][header.offset]
    if not message.message_get("PVPresent", default=0):
        return None
    return np.asarray(message.message_get("pv", default=[]), dtype=float)


def _place(kind, level):
    if kind == "heightAboveGround" and level in (2, 10):
        return f"{level}m"
    return "surface" if kind == "surface" else kind


def _by_level_type(headers):
    kinds = {}
    for header in headers:
        kinds.setdefault((header.path, header.keys["typeOfLevel"]), []).append(header)
    return list(kinds.values())


def _open(stream, headers, chunks, on_levels):
    """The messages as one DataArray; levels are a dimension named by their family."""
    from cfgrib.xarray_plugin import CfGribBackend

    kind = headers[0].keys["typeOfLevel"]
    dataset = xr.open_dataset(
        _Selection(stream, [h.offset for h in headers]),
        engine=CfGribBackend,  # by class: looking it up by name would load every plug-in installed
        chunks=chunks,
        backend_kwargs={"indexpath": None, "errors": "raise", "read_keys": ["projTargetString", "radius"]},
    )
    (name,) = dataset.data_vars
    data = dataset[name].drop_vars([c for c in ("step", "time", "valid_time", "number") if c in dataset.coords])
    data = _in_rows(data, stream, headers[0])
    if not on_levels:
        return data
    family = _LEVEL_FAMILY[kind]
    if kind not in data.dims:
        data = data.expand_dims(kind)
    data = data.rename({kind: family}) if kind != family else data
    if family in _LEVEL_ATTRS:
        data[family].attrs = dict(_LEVEL_ATTRS[family])
    if family == "isobaric":
        to_pascal = 100.0 if kind == "isobaricInhPa" else 1.0
        data = data.assign_coords(isobaric=data["isobaric"].values * to_pascal)
        data["isobaric"].attrs = {"units": "Pa", "standard_name": "air_pressure"}
    return data


# grids of rows that cfgrib gives as a list of values all the same
_ROWS_AS_LIST = ("mercator", "transverse_mercator", "space_view", "equatorial_azimuthal_equidistant")


def _in_rows(data, stream, header):
    """A field in rows and columns where cfgrib leaves them in one list."""
    if "values" not in data.dims or data.attrs.get("GRIB_gridType") not in _ROWS_AS_LIST:
        return data
    message = stream[header.offset]
    rows = tuple(int(message.message_get(key, default=0) or 0) for key in ("Ny", "Nx"))
    if rows[0] * rows[1] != data.sizes["values"]:
        return data

    def fold(array):
        folded = (array.data if array.chunks else array.values).reshape(*array.shape[:-1], *rows)
        return (*array.dims[:-1], "y", "x"), folded, array.attrs

    data = data.transpose(..., "values")
    kept = {n: c if "values" not in c.dims else fold(c.variable) for n, c in data.coords.items()}
    return xr.DataArray(fold(data)[1], dims=fold(data)[0], coords=kept, name=data.name, attrs=data.attrs)


def _join_levels(pieces, dim):
    if len(pieces) == 1 or dim not in pieces[0].dims:
        return pieces[0]
    return xr.concat(pieces, dim=dim, coords="minimal", compat="override").sortby(dim)
