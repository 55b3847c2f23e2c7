"""Reading spectral response functions from files people e-mail each other.

Accepted: a text file with two columns (comma, semicolon, tab or blanks;
comment lines start with # ! % or any letter), spectral coordinate first, and
CF netCDF. The coordinate may be a wavelength in um or nm or a wavenumber in
cm-1, in any order, the response normalised or not.
"""

import re
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from chansim.errors import ResponseError

LOWEST_WAVENUMBER, HIGHEST_WAVENUMBER = 650.0, 2850.0  # cm-1, reach of the absorption atlas
_NEGLIGIBLE = 0.01  # of the peak: smaller negative values are measurement noise
_OUTSIDE = 0.002  # fraction of the integral that may lie outside the atlas
COORDINATES = ("um", "nm", "cm-1")
# magnitudes of the infrared that can mean one unit only
_MAGNITUDES = {"um": (2.5, 20.0), "cm-1": (500.0, 2950.0), "nm": (3300.0, 16000.0)}


@dataclass(frozen=True)
class Response:
    """A spectral response function.

    wavenumber : (n,) increasing [cm-1]
    response : (n,) >= 0, largest value 1 [1]; per unit of energy
    name : identifier
    notes : what was done to the input, in words
    """

    wavenumber: np.ndarray
    response: np.ndarray
    name: str
    notes: tuple = field(default=())

    @property
    def bandwidth(self):
        """Effective bandwidth: integral over the peak [cm-1]."""
        return float(np.trapezoid(self.response, self.wavenumber))

    @property
    def central_wavenumber(self):
        """Response-weighted mean wavenumber [cm-1]."""
        return float(np.trapezoid(self.response * self.wavenumber, self.wavenumber) / self.bandwidth)


def make_response(coordinate, response, name, unit=None):
    """Check and normalise a response function.

    Parameters
    ----------
    coordinate : (n,) wavelength or wavenumber
    response : (n,) relative response
    name : identifier, used in messages
    unit : "um", "nm", "cm-1" or None to tell it from the magnitudes

    Returns
    -------
    Response

    Raises
    ------
    ResponseError : empty, a single point, negative, not finite, repeated points, outside 650-2850 cm-1
    """
    x, r = np.asarray(coordinate, dtype=float).ravel(), np.asarray(response, dtype=float).ravel()
    notes = []
    if x.size != r.size:
        raise ResponseError(f"{name}: {x.size} spectral points but {r.size} response values; they must pair up")
    if x.size == 0:
        raise ResponseError(f"{name}: no data; a response needs two columns, wavelength or wavenumber and response")
    if x.size < 3:
        raise ResponseError(f"{name}: only {x.size} point(s); a response function needs at least 3, better 20 or more")
    if not (np.isfinite(x).all() and np.isfinite(r).all()):
        row = int(np.flatnonzero(~(np.isfinite(x) & np.isfinite(r)))[0]) + 1
        raise ResponseError(f"{name}: point {row} is not a finite number; remove or repair it")
    if (x <= 0).any():
        raise ResponseError(f"{name}: spectral coordinate {x.min():g} is not positive")
    peak = r.max()
    if peak <= 0:
        raise ResponseError(f"{name}: the response is nowhere positive (largest value {peak:g})")
    if r.min() < -_NEGLIGIBLE * peak:
        raise ResponseError(
            f"{name}: response {r.min():g} at {x[r.argmin()]:g} is negative, more than noise "
            f"({_NEGLIGIBLE:.0%} of the peak {peak:g}); set it to zero if it is out of band"
        )
    if r.min() < 0:
        notes.append(f"{int((r < 0).sum())} slightly negative value(s) set to zero")
    unit = unit or _unit_by_magnitude(x[r > 0.01 * peak], name, notes)
    if unit not in COORDINATES:
        raise ResponseError(f"{name}: unknown spectral unit {unit!r}; use one of {', '.join(COORDINATES)}")
    wavenumber = {"um": 1e4, "nm": 1e7}[unit] / x if unit != "cm-1" else x
    order = np.argsort(wavenumber, kind="stable")
    wavenumber, r = wavenumber[order], np.maximum(r[order], 0.0) / peak
    if (np.diff(wavenumber) <= 0).any():
        twice = x[order][np.flatnonzero(np.diff(wavenumber) <= 0)[0]]
        raise ResponseError(f"{name}: the spectral coordinate {twice:g} occurs twice; give each point once")
    return Response(*_inside_atlas(wavenumber, r, name, notes), name, tuple(notes))


def _unit_by_magnitude(x, name, notes):
    fits = [u for u, (low, high) in _MAGNITUDES.items() if low <= x.min() and x.max() <= high]
    if len(fits) != 1:
        raise ResponseError(
            f"{name}: spectral coordinates {x.min():g} to {x.max():g} fit no infrared unit (um, nm, cm-1 between "
            "3.5 and 15.4 um); convert them or name the unit (for text files in a comment, e.g. '# wavelength [um]')"
        )
    notes.append(f"unit {fits[0]} told from the magnitude of the numbers")
    return fits[0]


def _inside_atlas(wavenumber, r, name, notes):
    total = np.trapezoid(r, wavenumber)
    inside = (wavenumber >= LOWEST_WAVENUMBER) & (wavenumber <= HIGHEST_WAVENUMBER)
    low_um, high_um = 1e4 / HIGHEST_WAVENUMBER, 1e4 / LOWEST_WAVENUMBER
    if not (r[inside] > 0).any():
        raise ResponseError(
            f"{name}: the response ({wavenumber[0]:.0f}-{wavenumber[-1]:.0f} cm-1) does not overlap "
            f"the range served, {low_um:.2f}-{high_um:.2f} um; reflected-light channels are not simulated"
        )
    kept = np.trapezoid(r[inside], wavenumber[inside])
    if kept < (1.0 - _OUTSIDE) * total:
        raise ResponseError(
            f"{name}: {1 - kept / total:.1%} of the response lies outside {low_um:.2f}-{high_um:.2f} um "
            f"(650-2850 cm-1), where there is no absorption data; cut it off only if it is a leak you "
            "want to ignore"
        )
    if not inside.all():
        notes.append(
            f"{int((~inside).sum())} point(s) outside 650-2850 cm-1 left out, {1 - kept / total:.2%} of the integral"
        )
    first, last = np.flatnonzero(r[inside] > 0)[[0, -1]]
    keep = slice(max(first - 1, 0), last + 2)
    wavenumber, r = wavenumber[inside][keep], r[inside][keep]
    if wavenumber.size < 3:
        raise ResponseError(f"{name}: the response is positive at a single point; sample it more finely")
    return wavenumber, r / r.max()


def read_response(path, channel=None):
    """Read one response function from a text or CF netCDF file.

    Parameters
    ----------
    path : file
    channel : which one, where a netCDF file holds several

    Returns
    -------
    Response

    Raises
    ------
    ResponseError : see `make_response`; also a file that cannot be read
    """
    path = Path(path)
    if not path.is_file():
        raise ResponseError(f"{path}: no such file")
    head = path.read_bytes()[:8]
    if head[:3] == b"CDF" or head[1:4] == b"HDF":
        return _read_netcdf(path, channel)
    return _read_text(path)


def _read_text(path):
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except UnicodeDecodeError:
        lines = path.read_text(encoding="latin-1").splitlines()
    comments, rows = [], []
    for number, line in enumerate(lines, start=1):
        line = line.strip()
        if not line:
            continue
        if not re.match(r"[-+.\d]", line):
            if not re.match(r"[#!%;/*\"'A-Za-zµμ]", line) or "\x00" in line:
                raise ResponseError(f"{path}, line {number}: neither two numbers nor a comment: {line[:40]!r}")
            comments.append(line)
            continue
        fields = [f for f in re.split(r"[\s,;]+", line) if f]
        try:
            rows.append((float(fields[0]), float(fields[1])))
        except (ValueError, IndexError):
            raise ResponseError(f"{path}, line {number}: expected two numbers, found {line[:40]!r}") from None
    data = np.array(rows, dtype=float).reshape(-1, 2)
    return make_response(data[:, 0], data[:, 1], path.stem, _unit_in_words(" ".join(comments)))


def _unit_in_words(text):
    """The spectral unit that a comment names, None if none or several."""
    text = text.lower()
    found = set()
    if re.search(r"(?<![a-z])(um|µm|μm|micromet\w*|micron\w*)(?![a-z])", text):
        found.add("um")
    if re.search(r"(?<![a-z])(nm|nanomet\w*)(?![a-z])", text):
        found.add("nm")
    if re.search(r"cm\s*(\^|\*\*)?\s*\{?(-1|−1)|(?<![a-z0-9])1/cm", text):
        found.add("cm-1")
    return found.pop() if len(found) == 1 else None


_UNIT_NAMES = {
    "um": "um",
    "µm": "um",
    "μm": "um",
    "micron": "um",
    "micrometer": "um",
    "micrometre": "um",
    "microns": "um",
    "nm": "nm",
    "nanometer": "nm",
    "nanometre": "nm",
    "cm-1": "cm-1",
    "cm^-1": "cm-1",
    "1/cm": "cm-1",
    "m": "m",
    "m-1": "m-1",
}
_SPECTRAL_NAMES = ("radiation_wavelength", "radiation_wavenumber", "sensor_band_central_radiation_wavelength")


def _read_netcdf(path, channel):
    import xarray as xr

    try:
        with xr.open_dataset(path, engine="netcdf4") as data:
            data = data.load()
    except (OSError, ValueError, RuntimeError) as error:
        raise ResponseError(f"{path}: cannot be read as netCDF ({error})") from None
    response = next(
        (
            v
            for v in data.data_vars.values()
            if "response"
            in (str(v.name) + str(v.attrs.get("long_name", "")) + str(v.attrs.get("standard_name", ""))).lower()
        ),
        None,
    )
    if response is None:
        raise ResponseError(
            f"{path}: no variable with 'response' in its name, long_name or standard_name; "
            f"it holds {', '.join(map(str, data.data_vars)) or 'none'}"
        )
    spectral = _spectral_coordinate(path, data, response)
    others = [d for d in response.dims if d not in spectral.dims]
    if others:
        response = _one_channel(path, data, response, others, channel)
        spectral = spectral.sel({}) if not set(others) & set(spectral.dims) else spectral
    unit = _UNIT_NAMES.get(str(spectral.attrs.get("units", "")).strip())
    values = spectral.values.astype(float)
    if unit == "m":
        values, unit = values * 1e6, "um"
    elif unit == "m-1":
        values, unit = values * 1e-2, "cm-1"
    elif unit is None and "units" in spectral.attrs:
        raise ResponseError(
            f"{path}: spectral coordinate {spectral.name!r} has units {spectral.attrs['units']!r}; "
            "expected um, nm, m, cm-1 or m-1"
        )
    name = path.stem if channel is None else str(channel)
    return make_response(values, np.nan_to_num(response.values, nan=0.0), name, unit)


def _spectral_coordinate(path, data, response):
    for name in data.variables:
        variable = data[name]
        words = (str(name) + str(variable.attrs.get("standard_name", ""))).lower()
        if (
            ("wavelength" in words or "wavenumber" in words)
            and variable.ndim == 1
            and set(variable.dims) <= set(response.dims)
            and variable.size > 2
        ):
            return variable
    raise ResponseError(f"{path}: no wavelength or wavenumber coordinate for {response.name!r}")


def _one_channel(path, data, response, others, channel):
    if len(others) > 1:
        raise ResponseError(f"{path}: {response.name!r} has dimensions {response.dims}; expected (channel, wavelength)")
    names = [
        str(v) for v in (data[others[0]].values if others[0] in data.variables else range(response.sizes[others[0]]))
    ]
    if len(names) == 1:
        return response.isel({others[0]: 0})
    if channel is None or str(channel) not in names:
        raise ResponseError(f"{path}: holds {len(names)} channels, name one of: {', '.join(names)}")
    return response.isel({others[0]: names.index(str(channel))})
