"""Reading spectral lines: 160-character HITRAN-2004 records."""

import contextlib
import functools
import io
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from chansim.errors import DataError

# molecule numbers of the HITRAN database (Gordon et al. 2022, JQSRT 277)
MOLECULES = {"h2o": 1, "co2": 2, "o3": 3, "n2o": 4, "co": 5, "ch4": 6}
REFERENCE_TEMPERATURE = 296.0  # K, of intensities and half-widths in the database

_RECORD_LENGTH = 160
# first column and width of each field (Rothman et al. 2005, JQSRT 96, table 1)
_FIELDS = {
    "wavenumber": (3, 12),
    "intensity": (15, 10),
    "air_width": (35, 5),
    "self_width": (40, 5),
    "lower_energy": (45, 10),
    "width_exponent": (55, 4),
    "air_shift": (59, 8),
}


@dataclass(frozen=True)
class LineList:
    """Lines of one molecule, sorted by wavenumber. All arrays have shape (lines,).

    molecule : HITRAN molecule number
    isotopologue : local isotopologue number
    wavenumber : vacuum wavenumber [cm-1]
    intensity : at 296 K, natural abundance included [cm-1/(molecule cm-2)]
    air_width, self_width : Lorentz half-width at half maximum at 296 K [cm-1 atm-1]
    lower_energy : [cm-1]
    width_exponent : temperature exponent of the air width [1]
    air_shift : pressure shift [cm-1 atm-1]
    """

    molecule: int
    isotopologue: np.ndarray
    wavenumber: np.ndarray
    intensity: np.ndarray
    air_width: np.ndarray
    self_width: np.ndarray
    lower_energy: np.ndarray
    width_exponent: np.ndarray
    air_shift: np.ndarray

    def __len__(self):
        return self.wavenumber.size

    def chosen(self, index):
        """The lines picked by a boolean mask or slice."""
        return LineList(
            self.molecule,
            *(
                getattr(self, name)[index]
                for name in (
                    "isotopologue",
                    "wavenumber",
                    "intensity",
                    "air_width",
                    "self_width",
                    "lower_energy",
                    "width_exponent",
                    "air_shift",
                )
            ),
        )

    def between(self, low, high):
        """Lines with low <= wavenumber <= high [cm-1]."""
        i, j = np.searchsorted(self.wavenumber, [low, high])
        return self.chosen(slice(i, j))


def _isotopologue_number(codes):
    # one character: 1-9, then 0 for the tenth, A, B, ... (HITRAN convention)
    order = b"1234567890ABCDEFGHIJ"
    table = np.zeros(256, dtype=np.int64)
    for number, code in enumerate(order, start=1):
        table[code] = number
    return table[codes]


def read_line_list(path):
    """Read one file of 160-character records holding a single molecule.

    Parameters
    ----------
    path : path of the file

    Returns
    -------
    LineList

    Raises
    ------
    DataError : not such a file, more than one molecule, or a record that cannot be read
    """
    path = Path(path)
    raw = path.read_bytes().replace(b"\r\n", b"\n")
    if not raw.strip():
        raise DataError(f"{path}: the file is empty; expected 160-character line records")
    rows = raw.rstrip(b"\n").split(b"\n")
    wrong = next((i for i, row in enumerate(rows) if len(row) != _RECORD_LENGTH), None)
    if wrong is not None:
        raise DataError(
            f"{path}: record {wrong + 1} has {len(rows[wrong])} characters, not 160; "
            "give line lists as 160-character HITRAN-2004 records"
        )
    table = np.frombuffer(b"".join(rows), dtype=np.uint8).reshape(-1, _RECORD_LENGTH)
    try:
        molecules = np.unique(table[:, 0:2].copy().view("S2").astype(int))
        fields = {
            name: table[:, start : start + width].copy().view(f"S{width}").ravel().astype(float)
            for name, (start, width) in _FIELDS.items()
        }
    except ValueError as error:
        raise DataError(f"{path}: a record holds text where a number belongs ({error})") from None
    if molecules.size != 1:
        raise DataError(f"{path}: holds molecules {molecules.tolist()}; give one file for each molecule")
    order = np.argsort(fields["wavenumber"], kind="stable")
    isotopologue = _isotopologue_number(table[:, 2])
    if not isotopologue.all():
        raise DataError(f"{path}: an isotopologue code is not one of 1-9, 0, A-J")
    return LineList(int(molecules[0]), isotopologue[order], **{k: v[order] for k, v in fields.items()})


def read_line_folder(folder):
    """Read `<gas>.par` for each gas of the atlas. Returns {gas: LineList}."""
    folder = Path(folder)
    missing = [f"{gas}.par" for gas in MOLECULES if not (folder / f"{gas}.par").exists()]
    if missing:
        raise DataError(
            f"{folder}: no {', '.join(missing)}; the folder must hold one line list for each of "
            f"{', '.join(MOLECULES)}, named <gas>.par"
        )
    lists = {}
    for gas, number in MOLECULES.items():
        lists[gas] = read_line_list(folder / f"{gas}.par")
        if lists[gas].molecule != number:
            raise DataError(f"{folder / (gas + '.par')}: holds molecule {lists[gas].molecule}, expected {number}")
    return lists


def _hitran_api():
    with contextlib.redirect_stdout(io.StringIO()):  # it prints a banner
        import hapi
    return hapi


@functools.lru_cache(maxsize=4096)
def partition_sum_ratio(molecule, isotopologue, temperature):
    """Q(296 K) / Q(T) of one isotopologue (TIPS, Gamache et al. 2021, through hitran-api) [1]."""
    hapi = _hitran_api()
    reference = hapi.partitionSum(molecule, int(isotopologue), REFERENCE_TEMPERATURE)
    return reference / hapi.partitionSum(molecule, int(isotopologue), float(temperature))


@functools.lru_cache(maxsize=256)
def molar_mass(molecule, isotopologue):
    """Molar mass of one isotopologue [g mol-1]."""
    return _hitran_api().molecularMass(molecule, int(isotopologue))
