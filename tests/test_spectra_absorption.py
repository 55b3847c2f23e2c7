"""Line shapes and line-by-line sums, against scipy's wofz and hitran-api."""

import json
import math

import numpy as np
import pytest
from scipy.special import wofz

from chansim.spectra import absorption, lineshape
from chansim.spectra.lines import LineList, read_line_list


def made_up_lines(molecule=2, count=60, centre=700.0, spread=40.0, seed=3):
    rng = np.random.default_rng(seed)
    nu = np.sort(centre + rng.uniform(-spread, spread, count))
    return LineList(
        molecule,
        np.ones(count, dtype=int),
        nu,
        10 ** rng.uniform(-24, -19, count),
        rng.uniform(0.05, 0.1, count),
        rng.uniform(0.08, 0.5, count),
        rng.uniform(0.0, 2500.0, count),
        rng.uniform(0.5, 0.8, count),
        rng.uniform(-0.005, 0.005, count),
    )


def test_faddeeva_against_scipy():
    rng = np.random.default_rng(0)
    x, y = 10 ** rng.uniform(-4, 4, 20000), 10 ** rng.uniform(-6, 2, 20000)
    ours = np.array([lineshape.faddeeva_real(a, b) for a, b in zip(x, y)])
    truth = wofz(x + 1j * y).real
    assert np.abs(ours / truth - 1.0).max() < 1e-5  # asked: 1e-4


def test_compiled_and_plain_faddeeva_agree():
    for x, y in [(0.1, 0.01), (3.0, 1e-4), (13.0, 0.5), (50.0, 2.0)]:
        assert lineshape.faddeeva_real(x, y) == pytest.approx(lineshape.faddeeva_real.py_func(x, y), rel=1e-12)


def test_voigt_limits_and_area():
    doppler, lorentz = 0.002, 0.07
    d = np.linspace(-400.0, 400.0, 800001)
    area = np.trapezoid([lineshape.voigt(x, doppler, lorentz) for x in d], d)
    assert area == pytest.approx(1.0, abs=2e-4)  # what is missing lies beyond 400 cm-1: 2 lorentz / (400 pi)
    assert lineshape.voigt(0.0, 1e-7, lorentz) == pytest.approx(1.0 / (math.pi * lorentz), rel=1e-4)
    assert lineshape.voigt(0.0, doppler, 1e-12) == pytest.approx(math.sqrt(math.log(2) / math.pi) / doppler, rel=1e-4)


def test_doppler_width():
    # handbook formula 3.58e-7 nu sqrt(T/M) (e.g. Goody & Yung 1989, Atmospheric Radiation, ch. 3)
    width = absorption.doppler_half_width(np.array([667.0]), np.array([43.99]), 296.0)[0]
    assert width == pytest.approx(3.581e-7 * 667.0 * math.sqrt(296.0 / 43.99), rel=1e-3)


@pytest.mark.parametrize("molecule", [1, 2])
@pytest.mark.parametrize("pressure", [100000.0, 1000.0, 10.0])
def test_nested_grids_agree_with_direct_sum(molecule, pressure):
    prepared = absorption.PreparedLines(made_up_lines(molecule), 250.0)
    fast = absorption.cross_section(prepared, 695.0, 705.0, 500, pressure, 0.01)
    direct = absorption.cross_section_direct(prepared, absorption.grid(695.0, 705.0, 500), pressure, 0.01)
    assert np.abs(fast - direct).max() < 3e-5 * direct.max()
    np.testing.assert_allclose(fast, direct, rtol=1e-4)


def test_compiled_and_plain_sums_agree():
    prepared = absorption.PreparedLines(made_up_lines(count=6), 280.0)
    nu = np.linspace(690.0, 710.0, 41)
    parameters = absorption._profile_parameters(prepared, 5e4, 0.0, "perrin-hartmann")
    plain = absorption._sum_direct.py_func(nu, *parameters, 280.0)
    np.testing.assert_allclose(absorption.cross_section_direct(prepared, nu, 5e4), plain, rtol=1e-12)


def test_cut_off_and_pedestal():
    line = made_up_lines(molecule=1, count=1, spread=0.0)
    prepared = absorption.PreparedLines(line, 296.0)
    nu = line.wavenumber[0] + line.air_shift[0] * 0.9 + np.array([0.0, 24.999, 25.001])
    k = absorption.cross_section_direct(prepared, nu, 0.9 * 101325.0)
    assert k[2] == 0.0 and abs(k[1]) < 1e-6 * k[0]  # with the pedestal taken off nothing jumps at the cut-off


def test_wing_factors_by_hand():
    # Perrin & Hartmann 1989 at 296 K: B1 = 0.416 - 0.354 exp(-0.00386 x 296) = 0.30309
    b1 = 0.416 - 0.354 * math.exp(-0.00386 * 296.0)
    assert lineshape.chi_perrin_hartmann(2.9, 296.0) == 1.0
    assert lineshape.chi_perrin_hartmann(10.0, 296.0) == pytest.approx(math.exp(-7.0 * b1))
    # Cousin et al. 1985 at 296 K, 30 cm-1: 0.050
    assert lineshape.chi_cousin(30.0, 296.0) == 0.050
    # both are known to agree near 50 cm-1 (README of the line lists)
    assert lineshape.chi_perrin_hartmann(50.0, 296.0) == pytest.approx(lineshape.chi_cousin(50.0, 296.0), rel=0.5)
    assert lineshape.chi_perrin_hartmann(69.999, 250.0) == pytest.approx(
        lineshape.chi_perrin_hartmann(70.001, 250.0), rel=1e-3
    )


def hapi_coefficient(folder, name, rows, low, high, step, pressure_atm, temperature, diluent):
    """Cross-section of hitran-api for some records (written as a table of its own)."""
    import hapi

    header = dict(
        hapi.HITRAN_DEFAULT_HEADER,
        table_name=name,
        number_of_rows=len(rows),
        size_in_bytes=sum(map(len, rows)) + len(rows),
    )
    (folder / f"{name}.header").write_text(json.dumps(header))
    (folder / f"{name}.data").write_text("\n".join(rows) + "\n")
    hapi.db_begin(str(folder))
    return hapi.absorptionCoefficient_Voigt(
        SourceTables=name,
        Environment={"p": pressure_atm, "T": temperature},
        WavenumberRange=[low, high],
        WavenumberStep=step,
        WavenumberWing=25.0,
        WavenumberWingHW=0.0,
        HITRAN_units=True,
        Diluent=diluent,
    )


@pytest.mark.parametrize(
    "gas, low, high, pressure_atm, temperature",
    [
        ("co2", 720.0, 722.5, 0.8, 280.0),
        ("co2", 720.0, 722.5, 0.01, 220.0),
        ("o3", 1040.0, 1042.5, 0.05, 230.0),
        ("ch4", 1300.0, 1302.5, 0.5, 260.0),
    ],
)
def test_against_hitran_api_on_real_lines(tmp_path, line_folder, capsys, gas, low, high, pressure_atm, temperature):
    lines = read_line_list(line_folder / f"{gas}.par")
    rows = [
        row
        for row in (line_folder / f"{gas}.par").read_text().splitlines()
        if low - 25.5 < float(row[3:15]) < high + 25.5
    ]
    assert len(rows) > 300
    nu, truth = hapi_coefficient(tmp_path, gas, rows, low, high, 0.01, pressure_atm, temperature, {"air": 1.0})
    prepared = absorption.PreparedLines(lines.between(low - 25.5, high + 25.5), temperature)
    ours = absorption.cross_section_direct(prepared, nu, pressure_atm * 101325.0, 0.0, wings="cut")
    np.testing.assert_allclose(ours, truth, rtol=1e-3)


def test_absorption_length_at_the_centre_of_the_co2_band(line_folder):
    # common practice: at the ground radiation at the 15 um band centre is absorbed within one or two hands
    lines = absorption.lines_acting_on(read_line_list(line_folder / "co2.par"), 665.0, 670.0)
    k = absorption.cross_section(absorption.PreparedLines(lines, 288.0), 665.0, 670.0, 100, 101325.0)
    k = k[230:370]  # the Q branch, 667.3-668.7 cm-1
    molecules = 420e-6 * 101325.0 / (1.380649e-23 * 288.0) * 1e-6  # cm-3
    assert 5.0 < 1.0 / (k.mean() * molecules) < 40.0  # cm
