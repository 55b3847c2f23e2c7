"""Reading 160-character line records."""

import pytest

from chansim.errors import DataError
from chansim.spectra.lines import partition_sum_ratio, read_line_folder, read_line_list


def record(
    molecule=2, isotopologue="1", nu=667.661, s=3.1e-19, air=0.0700, own=0.0950, energy=234.0833, n=0.71, shift=-0.0015
):
    """One record by the published field widths (Rothman et al. 2005, JQSRT 96, 139, table 1)."""
    head = f"{molecule:2d}{isotopologue}{nu:12.6f}{s:10.3e}{1.0:10.3e}{air:5.4f}"[:40].ljust(40)
    head = head[:35] + f"{air:.4f}"[1:].rjust(5) + f"{own:.3f}".rjust(5) + f"{energy:10.4f}{n:4.2f}{shift:8.5f}"
    return head.ljust(160)


def write(path, *records):
    path.write_text("\n".join(records) + "\n")
    return path


def test_fields_come_from_their_columns(tmp_path):
    lines = read_line_list(write(tmp_path / "co2.par", record(nu=700.5, isotopologue="2"), record()))
    assert lines.wavenumber.tolist() == [667.661, 700.5]  # sorted
    assert lines.isotopologue.tolist() == [1, 2]
    first = [
        lines.intensity[0],
        lines.air_width[0],
        lines.self_width[0],
        lines.lower_energy[0],
        lines.width_exponent[0],
        lines.air_shift[0],
    ]
    assert first == [3.1e-19, 0.07, 0.095, 234.0833, 0.71, -0.0015]


@pytest.mark.parametrize("code, number", [("1", 1), ("9", 9), ("0", 10), ("A", 11), ("B", 12)])
def test_isotopologue_codes(tmp_path, code, number):
    # HITRAN convention: 0 is the tenth isotopologue, letters follow
    assert read_line_list(write(tmp_path / "co2.par", record(isotopologue=code))).isotopologue[0] == number


@pytest.mark.parametrize(
    "content, words",
    [
        ("", "empty"),
        ("short line\n", "not 160"),
        (record()[:20] + "x" * 10 + record()[30:] + "\n", "text where a number"),
        (record() + "\n" + record(molecule=3) + "\n", "one file for each molecule"),
    ],
)
def test_bad_files_are_refused(tmp_path, content, words):
    path = tmp_path / "bad.par"
    path.write_text(content)
    with pytest.raises(DataError, match=words):
        read_line_list(path)


def test_a_folder_names_what_is_missing(tmp_path):
    write(tmp_path / "co2.par", record())
    with pytest.raises(DataError, match="h2o.par"):
        read_line_folder(tmp_path)


@pytest.mark.parametrize(
    "molecule, isotopologue, q296",
    [
        # total internal partition sums at 296 K, HITRAN isotopologue metadata table (from memory)
        (1, 1, 174.58),
        (2, 1, 286.09),
        (3, 1, 3483.7),
        (5, 1, 107.42),
        (6, 1, 590.48),
    ],
)
def test_partition_sums(molecule, isotopologue, q296):
    import hapi

    assert hapi.partitionSum(molecule, isotopologue, 296.0) == pytest.approx(q296, rel=5e-3)
    assert partition_sum_ratio(molecule, isotopologue, 296.0) == 1.0


def test_partition_sum_of_a_linear_rotor_grows_with_temperature():
    # Herzberg: Q_rot ~ T, and vibration adds; between 200 and 300 K CO2 is close to the rigid rotor
    assert 1.45 < partition_sum_ratio(2, 1, 200.0) / partition_sum_ratio(2, 1, 300.0) < 1.65
