"""Complex refractive index of liquid water and ice in the thermal infrared.

Liquid water: Hale and Querry (1973), Appl. Opt. 12, 555-563, measured at 25 degC.
Ice: Warren and Brandt (2008), J. Geophys. Res. 113, D14220, for -7 degC.

Between the published points the real part is interpolated linearly and the
imaginary part logarithmically, both in the logarithm of wavelength (the way
Warren and Brandt recommend for their table). The temperature dependence is not
represented: supercooled cloud water absorbs slightly differently from water at
25 degC (largest between 10 and 13 um and on the flanks of the 6 um band).
"""

import functools
import hashlib
from importlib import resources

import numpy as np

from chansim.errors import DataError, OpticsError

MATERIALS = ("water", "ice")
SHORTEST_WAVELENGTH_UM = 3.3
LONGEST_WAVELENGTH_UM = 17.0
DATA_FILE = "refractive_index.csv"
CHECKSUM_FILE = "cloud_optics.sha256"


def refractive_index(material, wavenumber):
    """Complex refractive index m = n + i k.

    Parameters
    ----------
    material : "water" or "ice"
    wavenumber : array_like [cm-1], any shape, within 3.3-17 um

    Returns
    -------
    complex array of the shape of `wavenumber` [1]; the imaginary part is positive

    Raises
    ------
    OpticsError : unknown material, or a wavenumber outside the table

    Sources: Hale and Querry (1973) for water, Warren and Brandt (2008) for ice.
    """
    wavelength_um = 1e4 / _checked_wavenumber(wavenumber)
    points = _points(material)
    log_wavelength = np.log(wavelength_um)
    real = np.interp(log_wavelength, np.log(points[:, 0]), points[:, 1])
    imaginary = np.exp(np.interp(log_wavelength, np.log(points[:, 0]), np.log(points[:, 2])))
    return real + 1j * imaginary


def published_points(material):
    """The stored published points.

    Returns
    -------
    array (n, 3): wavelength [um] ascending, real part [1], imaginary part [1]
    """
    return _points(material).copy()


def _checked_wavenumber(wavenumber):
    wavenumber = np.asarray(wavenumber, dtype=float)
    lowest, highest = 1e4 / LONGEST_WAVELENGTH_UM, 1e4 / SHORTEST_WAVELENGTH_UM
    inside = (wavenumber >= lowest) & (wavenumber <= highest)
    if not np.all(inside):
        raise OpticsError(
            f"wavenumber {np.asarray(wavenumber)[~inside].flat[0]} cm-1 is outside the refractive index "
            f"table ({lowest:.0f}-{highest:.0f} cm-1, {SHORTEST_WAVELENGTH_UM}-{LONGEST_WAVELENGTH_UM} um)"
        )
    return wavenumber


@functools.cache
def _tables():
    rows = {material: [] for material in MATERIALS}
    for line in verified_bytes(DATA_FILE).decode("ascii").splitlines():
        if line.startswith("#") or line.startswith("material"):
            continue
        material, *numbers = line.split(",")
        rows[material].append([float(number) for number in numbers])
    return {material: np.array(values) for material, values in rows.items()}


def _points(material):
    if material not in MATERIALS:
        raise OpticsError(f"no refractive index for material {material!r}; there are {', '.join(MATERIALS)}")
    return _tables()[material]


def verified_bytes(name):
    """Bytes of a file in chansim/data whose SHA-256 agrees with the recorded one.

    Raises
    ------
    DataError : the file or its checksum is missing, or they disagree
    """
    folder = resources.files("chansim").joinpath("data")
    remedy = "reinstall chansim, or rebuild it with `python -m chansim.optics.build_tables`"
    try:
        content = folder.joinpath(name).read_bytes()
        recorded = folder.joinpath(CHECKSUM_FILE).read_text()
    except (OSError, UnicodeDecodeError) as error:
        raise DataError(f"cannot read optical data file {name}: {error}; {remedy}") from error
    known = {parts[1]: parts[0] for parts in (line.split() for line in recorded.splitlines()) if len(parts) == 2}
    found = hashlib.sha256(content).hexdigest()
    if known.get(name) != found:
        raise DataError(
            f"optical data file {name} is damaged: SHA-256 is {found}, recorded is {known.get(name)}; {remedy}"
        )
    return content
