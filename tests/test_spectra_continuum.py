"""Absorption that is not lines."""

import numpy as np
import pytest

from chansim.constants import SECOND_RADIATION
from chansim.spectra import continuum


@pytest.fixture(scope="module")
def water():
    nu = np.arange(700.0, 1300.0, 10.0)
    return continuum.WaterContinuum(nu, 1e-25 * np.exp(-nu / 300.0), 1e-28 * np.ones_like(nu), np.full(nu.size, 5.5))


def test_reference_state(water):
    # by the definition of Mlawer et al. 2012: coefficient x radiation term at 1013 hPa, 296 K
    foreign, own = continuum.water_continuum_parts(water, 101300.0, 296.0)
    radiation = water.wavenumber * np.tanh(SECOND_RADIATION * water.wavenumber / (2 * 296.0))
    np.testing.assert_allclose(own, water.self_coefficient * radiation, rtol=1e-12)
    np.testing.assert_allclose(foreign, water.foreign_coefficient * radiation, rtol=1e-12)


def test_temperature_and_density_scaling(water):
    cold, warm = (continuum.water_continuum_parts(water, 50650.0, t)[1] for t in (260.0, 296.0))
    radiation = [np.tanh(SECOND_RADIATION * water.wavenumber / (2 * t)) for t in (260.0, 296.0)]
    np.testing.assert_allclose(cold / warm, (296.0 / 260.0) ** 6.5 * radiation[0] / radiation[1], rtol=1e-12)


def test_interpolation_reproduces_the_points(water):
    at = water.at(water.wavenumber[3:8])
    np.testing.assert_allclose(at.self_coefficient, water.self_coefficient[3:8], rtol=1e-12)


def test_published_table(line_folder):
    table = continuum.read_water_continuum(line_folder / "absco-ref_wv-mt-ckd.nc")
    at = table.at(np.array([1000.0]))
    # the table's own point at 1000 cm-1
    assert at.self_coefficient[0] == pytest.approx(1.3311952e-25, rel=1e-6)
    assert at.self_exponent[0] == pytest.approx(5.6358225, rel=1e-6)
    # window continuum at 296 K near 1000 cm-1, 1 atm of vapour: about 2e-22 cm2 (Burch & Alt 1984,
    # AFGL-TR-84-0128, from memory: C_s = 2.0e-22 cm2 molecule-1 atm-1 at 1000 cm-1, 296 K)
    own = continuum.water_continuum_parts(at, 101325.0, 296.0)[1][0]
    assert 1.0e-22 < own < 2.6e-22


def test_collision_induced_table(line_folder):
    table = continuum.read_collision_induced(line_folder / "collision_induced_n2_o2.csv")
    at = table.at(np.array([1000.0, 1560.0, 2330.0]))
    assert at.nitrogen_warm[0] == 0.0 and at.oxygen[0] == 0.0 and at.oxygen[2] == 0.0
    # one amagat of air over 1 km at 272 K, 2330 cm-1: B x (N2 amagat)^2-like x path, by hand
    sigma = continuum.collision_induced_cross_section(at, 101325.0, 273.15)[2]
    path = sigma * continuum.AMAGAT * 1e5
    by_hand = at.nitrogen_warm[2] * 0.7808 * (0.7808 + 0.9 * 0.2095) * 1e5
    assert path == pytest.approx(by_hand, rel=0.01)


def test_collision_induced_grows_with_the_square_of_density(line_folder):
    at = continuum.read_collision_induced(line_folder / "collision_induced_n2_o2.csv").at(np.array([2330.0]))
    low, high = (continuum.collision_induced_cross_section(at, p, 260.0)[0] for p in (2e4, 8e4))
    assert high / low == pytest.approx(4.0)  # per molecule: once the density
