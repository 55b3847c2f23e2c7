"""The scattering solver: conservation, limits, published solutions, an independent package."""

import numpy as np
import pytest
from scattering_samples import differences, random_column

from chansim.transfer import scattering as s
from chansim.transfer.absorbing import absorbing_radiance
from chansim.transfer.small_matrices import cholesky, inverse, lower_inverse_transposed, symmetric_eigen


def layer(tau, albedo, moments, streams=8, view=0.7, above=0.0, below=0.0):
    """Operators and emission of one layer: transmission, reflection, one, view transmission, view emission, sources."""
    mu, weight, legendre = s.quadrature(streams)
    matrices, vectors = s.work_arrays(streams)
    at_view = np.empty(2 * streams)
    s.associated_legendre(0, 2 * streams, view, at_view)
    direct = s.layer_operators(
        streams, tau, albedo, moments, 0, mu, weight, legendre[0], at_view, 1.0 / view, matrices, vectors
    )
    seen = s.thermal_source(streams, tau, albedo, 1.0 / view, direct, above, below, matrices, vectors)
    return {
        "t": matrices[s._T].copy(),
        "r": matrices[s._R].copy(),
        "one": vectors[s._ONE].copy(),
        "direct": direct,
        "seen": seen,
        "up": vectors[s._SU].copy(),
        "down": vectors[s._SD].copy(),
        "vt": vectors[s._VT].copy(),
        "vr": vectors[s._VR].copy(),
        "mu": mu,
        "weight": weight,
    }


def henyey_greenstein(g, count=64):
    return g ** np.arange(count)


@pytest.mark.parametrize("tau", [1e-6, 0.01, 1.0, 30.0, 1e4])
@pytest.mark.parametrize("g", [0.0, 0.85])
def test_a_layer_that_does_not_absorb_conserves_flux(tau, g):
    a = layer(tau, 1.0, henyey_greenstein(g))
    np.testing.assert_allclose((a["t"] + a["r"]) @ a["one"] @ a["one"], a["one"] @ a["one"], rtol=1e-6)
    assert np.abs(a["up"]).max() < 1e-9  # and emits nothing


@pytest.mark.parametrize("reflectance", [0.0, 1.0])
def test_flux_is_conserved_over_black_and_white_ground(reflectance):
    a = layer(3.0, 1.0, henyey_greenstein(0.8))
    falling = a["one"]  # isotropic light from above
    # light at the ground after all reflections between ground and layer
    bounce = a["one"] @ a["r"] @ a["one"] / (a["one"] @ a["one"])
    ground = (a["one"] @ a["t"] @ falling) / (1.0 - reflectance * bounce)
    rising = reflectance * ground / (a["one"] @ a["one"]) * a["one"]
    out = a["one"] @ (a["r"] @ falling + a["t"] @ rising)
    absorbed = (1.0 - reflectance) * ground
    assert out + absorbed == pytest.approx(a["one"] @ falling, rel=1e-6)


@pytest.mark.parametrize("albedo", [1e-6, 0.3, 0.9, 0.9999, 1.0 - 1e-10])
@pytest.mark.parametrize("tau", [1e-5, 0.1, 2.0, 50.0, 1e4])
def test_a_layer_in_an_enclosure_of_its_temperature_cannot_be_seen(albedo, tau):
    b = 7.0
    a = layer(tau, albedo, henyey_greenstein(0.85), above=b, below=b)
    around = b * a["one"]
    np.testing.assert_allclose(a["up"] + a["t"] @ around + a["r"] @ around, around, rtol=1e-7)
    seen = a["seen"] + (a["vt"] + a["vr"]) @ around + a["direct"] * b
    assert seen == pytest.approx(b, rel=1e-6)  # at 300 K and 10 um 1e-6 is below 0.0001 K


def test_without_scattering_the_formal_solution_comes_out():
    rng = np.random.default_rng(2)
    tau, planck_level = rng.uniform(0.0, 1.0, 12), rng.uniform(1.0, 5.0, 13)
    moments, zero = np.tile(henyey_greenstein(0.8, 8), (12, 1)), np.zeros(12)
    bend = rng.uniform(-0.1, 0.1, 12)
    for albedo in (0.0, 1e-8):  # the second goes through the scattering layers
        got = s.thermal_radiance(
            tau,
            np.full(12, 1.4),
            np.full(12, 0.3),
            np.full(12, albedo),
            moments,
            planck_level,
            bend if albedo == 0.0 else zero,
            4.0,
            1.0,
            0.0,
            1 / 1.4,
            s.quadrature(2),
            s.work_arrays(2),
            np.zeros(2),
        )
        truth, _ = absorbing_radiance((tau + 0.3) * 1.4, planck_level, bend if albedo == 0.0 else zero, 4.0, 1.0)
        assert got == pytest.approx(truth, rel=1e-6)


def test_splitting_a_layer_changes_nothing():
    chi = henyey_greenstein(0.8, 8)

    def radiance(cuts):
        tau = np.full(cuts, 2.0 / cuts)
        return s.thermal_radiance(
            np.full(cuts, 0.5 / cuts),
            np.full(cuts, 1.3),
            tau,
            np.full(cuts, 0.8),
            np.tile(chi, (cuts, 1)),
            np.linspace(2.0, 4.0, cuts + 1),
            np.zeros(cuts),
            5.0,
            0.9,
            0.0,
            1 / 1.3,
            s.quadrature(3),
            s.work_arrays(3),
            np.zeros(2),
        )

    assert radiance(1) == pytest.approx(radiance(7), rel=1e-10)


def chandrasekhar_h(mu, points=200):
    """H-function for conservative isotropic scattering from Chandrasekhar's integral equation (1950, ch. V)."""
    x, w = np.polynomial.legendre.leggauss(points)
    x, w = 0.5 * (x + 1.0), 0.5 * w
    h = np.ones(points)
    for _ in range(400):  # 1 / H = sqrt(1 - 2 psi0) + integral of psi H mu' / (mu + mu'), psi = 1 / 2
        h = 0.5 * h + 0.5 / (0.5 * ((w * x * h) / (x[:, None] + x)).sum(axis=1))
    return 1.0 / (0.5 * ((w * x * h) / (np.asarray(mu)[:, None] + x)).sum(axis=1))


def test_h_function_of_the_table():
    # Chandrasekhar 1950, table XI: H(1) = 2.9078, H(0.5) = 2.0128 for isotropic conservative scattering
    np.testing.assert_allclose(chandrasekhar_h([0.5, 1.0]), [2.0128, 2.9078], rtol=2e-3)


def test_reflection_of_a_very_thick_conservative_layer():
    # Chandrasekhar 1950: R(mu, mu0) = H(mu) H(mu0) / (4 (mu + mu0)) for a semi-infinite isotropic medium
    a = layer(1e5, 1.0, np.eye(64)[0], streams=16)
    mu, root = a["mu"], np.sqrt(a["weight"] * a["mu"])
    ours = a["r"] / (2.0 * root[:, None] * root[None, :])
    h = chandrasekhar_h(mu)
    truth = h[:, None] * h[None, :] / (4.0 * (mu[:, None] + mu[None, :]))
    inner = slice(3, None)  # close to grazing the quadrature itself is the limit
    np.testing.assert_allclose(ours[inner, inner], truth[inner, inner], rtol=0.01)


@pytest.mark.parametrize(
    "channel, rms, worst",
    [
        ("10.4", 0.15, 0.6),
        ("12.3", 0.15, 0.6),
        ("6.3", 0.15, 0.6),
        ("8.6", 0.15, 0.6),
        ("13.3", 0.15, 0.6),
        ("3.85", 0.25, 1.0),
    ],
)
def test_against_pythonic_disort(channel, rms, worst):
    """Random cloudy columns with the default streams; the whole sample: tests/benchmarks/scattering_accuracy.py."""
    pytest.importorskip("PythonicDISORT")
    error = differences(channel, 40, 5, 2)
    assert np.sqrt(np.mean(error**2)) <= rms and np.abs(error).max() <= worst


def test_many_streams_agree_closely_with_pythonic_disort():
    pytest.importorskip("PythonicDISORT")
    for channel in ("10.4", "3.85"):
        assert np.abs(differences(channel, 12, 6, 8)).max() < 0.01


def test_finite_and_bounded_whatever_comes():
    rng = np.random.default_rng(1)
    quad, work, state = s.quadrature(2), s.work_arrays(2), np.zeros(2)
    for _ in range(3000):
        n = rng.integers(1, 12)
        g = rng.uniform(0.0, 0.98, n)
        value = s.thermal_radiance(
            10 ** rng.uniform(-9, 5, n),
            np.full(n, 1.3),
            np.where(rng.random(n) < 0.6, 10 ** rng.uniform(-6, 3, n), 0.0),
            rng.choice([0.3, 0.6, 0.9, 0.99, 0.9999, 1 - 1e-12, 1.0], n),
            g[:, None] ** np.arange(6),
            np.full(n + 1, 5.0),
            np.zeros(n),
            5.0,
            1.0,
            0.0,
            1 / 1.3,
            quad,
            work,
            state,
        )
        assert 0.0 <= value <= 5.0 + 1e-9


def test_compiled_and_plain_solver_agree():
    column = random_column(np.random.default_rng(3), "10.4", layers=20)
    n = column["gas"].size
    arguments = (
        column["gas"],
        np.full(n, 1.2),
        column["tau"],
        column["albedo"],
        column["moments"],
        column["planck"],
        np.zeros(n),
        column["skin"],
        0.95,
        1.0,
        1 / 1.2,
        s.quadrature(2),
    )
    compiled = s.thermal_radiance(*arguments, s.work_arrays(2), np.zeros(2))
    assert s.thermal_radiance.py_func(*arguments, s.work_arrays(2), np.zeros(2)) == pytest.approx(compiled, rel=1e-12)


def test_small_matrices_against_numpy():
    rng = np.random.default_rng(0)
    for n in (1, 2, 5, 8):
        a = rng.normal(size=(n, n))
        positive = a @ a.T + n * np.eye(n)
        lower, out, vectors = np.zeros((n, n)), np.zeros((n, n)), np.zeros((n, n))
        cholesky(positive, n, lower)
        np.testing.assert_allclose(lower, np.linalg.cholesky(positive), rtol=1e-10)
        lower_inverse_transposed(lower, n, out)
        np.testing.assert_allclose(out, np.linalg.inv(lower).T, atol=1e-12)
        inverse(a.copy(), n, out)
        np.testing.assert_allclose(out, np.linalg.inv(a), rtol=1e-6, atol=1e-9)
        work = positive.copy()
        symmetric_eigen(work, n, vectors)
        np.testing.assert_allclose(np.sort(np.diag(work)), np.linalg.eigvalsh(positive), rtol=1e-10)
        np.testing.assert_allclose(vectors @ np.diag(np.diag(work)) @ vectors.T, positive, rtol=1e-9)
