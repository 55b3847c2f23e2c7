"""The solar term: conservation, published solutions, an independent package, limits."""

import numpy as np
import pytest
from scattering_samples import random_column
from sunlight_samples import ours, relative_errors

from chansim.transfer import scattering as s
from chansim.transfer import sunlight as d

# Chandrasekhar 1960, Radiative Transfer, table XI: H(1) and H(0.5) of isotropic scattering; from memory, and the
# integral equation below gives them independently
PUBLISHED_H = {1.0: (2.9078, 2.0128)}


def h_function(albedo, points=96):
    """H of isotropic scattering from 1 / H = sqrt(1 - albedo) + albedo / 2 int x H(x) / (mu + x) dx: callable."""
    x, w = np.polynomial.legendre.leggauss(points)
    x, w = 0.5 * (x + 1.0), 0.5 * w
    h = np.ones(points)
    for _ in range(2000):
        new = 1.0 / (np.sqrt(1.0 - albedo) + 0.5 * albedo * (w * x * h / (x[:, None] + x)).sum(axis=1))
        if np.abs(new - h).max() < 1e-13:
            break
        h = 0.5 * (h + new)  # the plain iteration swings when nothing is absorbed

    def at(mu):
        return 1.0 / (np.sqrt(1.0 - albedo) + 0.5 * albedo * np.sum(w * x * h / (mu + x)))

    return at


def one_layer(tau, albedo, g, mu, sun, azimuth=0.0, streams=8, reflectance=0.0):
    """Radiance of a homogeneous layer with a Henyey-Greenstein phase function, unit irradiance."""
    moments = g ** np.arange(2.0 * streams + 1.0)[None, :]
    cosine = -mu * sun - np.sqrt((1 - mu * mu) * (1 - sun * sun)) * np.cos(np.radians(azimuth))
    phase = np.array([(1 - g * g) / (1 + g * g - 2 * g * cosine) ** 1.5])
    return d.solar_radiance(
        np.zeros(1), np.array([1.0 / mu]), np.array([tau]), np.array([albedo]), moments, phase, sun,
        np.cos(np.radians(azimuth)), reflectance, reflectance / np.pi, mu, s.quadrature(streams),
        d.work_arrays(streams, 1))  # fmt: skip


def test_h_function_as_published():
    h = h_function(1.0)
    assert h(1.0) == pytest.approx(PUBLISHED_H[1.0][0], abs=2e-3)
    assert h(0.5) == pytest.approx(PUBLISHED_H[1.0][1], abs=2e-3)


@pytest.mark.parametrize("albedo", [0.3, 0.8, 0.95])
@pytest.mark.parametrize("mu, sun", [(0.9, 0.5), (0.4, 0.8), (1.0, 0.2)])
def test_reflection_of_an_endless_layer(albedo, mu, sun):
    """Chandrasekhar 1960: I = albedo F / (4 pi) sun / (mu + sun) H(mu) H(sun), F the irradiance across the beam."""
    h = h_function(albedo)
    expected = albedo / (4.0 * np.pi) * sun / (mu + sun) * h(mu) * h(sun)
    assert one_layer(1000.0, albedo, 0.0, mu, sun) == pytest.approx(expected, rel=2e-3)


@pytest.mark.parametrize("reflectance", [0.0, 1.0])
@pytest.mark.parametrize("tau, g", [(0.05, 0.8), (3.0, 0.8), (30.0, 0.0)])
def test_flux_is_conserved(tau, g, reflectance):
    """No absorption: what falls on the layer comes back or reaches the ground, to 1e-6."""
    n, sun = 8, 0.6
    mu, weight, legendre = s.quadrature(n)
    matrices, vectors = s.work_arrays(n)
    scaled, at_sun, at_view = np.empty(2 * n), np.empty(2 * n), np.empty(2 * n)
    tau, albedo, _ = s.delta_scaled(tau, 1.0, g ** np.arange(2.0 * n + 1.0), 2 * n, scaled)
    s.associated_legendre(0, 2 * n, sun, at_sun)
    s.associated_legendre(0, 2 * n, 0.9, at_view)
    s.layer_operators(n, tau, albedo, scaled, 0, mu, weight, legendre[0], at_view, 1.1, matrices, vectors)
    d.solar_source(n, 0, tau, albedo, scaled, mu, weight, legendre[0], at_sun, 1 / sun, 1.1, 1.0, matrices, vectors)
    one = vectors[s._ONE]
    direct = sun * np.exp(-tau / sun)
    up, down = 2 * np.pi * one @ vectors[s._SU], 2 * np.pi * one @ vectors[s._SD] + direct
    flux = 0.5 / (one @ one)  # of isotropic light of unit radiance, over pi: 1 for enough streams
    # the ground sends back what it gets, as often as the layer returns it
    back = (one @ matrices[s._R] @ one) / (one @ one)
    on_ground = down / (1.0 - reflectance * back)
    out = up + reflectance * on_ground * (one @ matrices[s._T] @ one) / (one @ one)
    assert flux == pytest.approx(1.0, rel=1e-9)
    assert out + (1.0 - reflectance) * on_ground == pytest.approx(sun, rel=1e-6)


def test_thin_layer_scatters_once():
    """First order in optical thickness: I = albedo P tau / (4 pi mu)."""
    mu, sun, g, tau = 0.7, 0.5, 0.8, 1e-5
    cosine = -mu * sun - np.sqrt((1 - mu * mu) * (1 - sun * sun)) * np.cos(np.radians(120.0))
    phase = (1 - g * g) / (1 + g * g - 2 * g * cosine) ** 1.5
    assert one_layer(tau, 0.9, g, mu, sun, 120.0) == pytest.approx(0.9 * phase * tau / (4 * np.pi * mu), rel=1e-4)


def test_clear_air_over_a_diffuse_ground():
    """I = reflectance sun / pi exp(-tau (1 / mu + airmass)); airmass 1 / sun for a high sun."""
    n = 3
    got = d.solar_radiance(
        np.array([0.05, 0.1, 0.2]), np.full(n, 1.25), np.zeros(n), np.zeros(n), np.zeros((n, 17)), np.zeros(n), 0.8,
        1.0, 0.3, 0.3 / np.pi, 0.8, s.quadrature(8), d.work_arrays(8, n))  # fmt: skip
    assert got == pytest.approx(0.3 * 0.8 / np.pi * np.exp(-0.35 * 2.5), rel=1e-3)


def test_air_mass_against_pvlib():
    airmass = pytest.importorskip("pvlib").atmosphere.get_relative_airmass
    for zenith in (0.0, 60.0, 85.0, 90.0):
        expected = airmass(zenith, model="kastenyoung1989")
        assert d.sun_airmass(np.cos(np.radians(zenith))) == pytest.approx(expected, rel=1e-6)


def test_no_jump_where_beam_and_mode_decay_alike():
    n = 4
    mu, weight, legendre = s.quadrature(n)
    matrices, vectors = s.work_arrays(n)
    scaled = 0.7 ** np.arange(2.0 * n)
    at_view = np.ones(2 * n)
    s.layer_operators(n, 1.0, 0.9, scaled, 0, mu, weight, legendre[0], at_view, 1.2, matrices, vectors)
    rate = vectors[s._K, 0]
    values = [
        one_layer(1.0, 0.9, 0.7, 0.8, 1.0 / (rate * (1.0 + shift)), streams=n)
        for shift in (-2e-3, -1e-6, 0.0, 1e-6, 2e-3)
    ]
    assert 1.0 / rate < 1.0
    assert np.ptp(values[1:4]) < 1e-4 * values[2]
    assert values[2] == pytest.approx(0.5 * (values[0] + values[4]), rel=1e-4)


def test_light_vanishes_smoothly_at_the_horizon():
    cosines = np.cos(np.radians([85.0, 88.0, 89.0, 89.5, 89.9, 89.94]))
    values = np.array([one_layer(10.0, 0.9, 0.8, 0.8, c, 90.0, reflectance=0.1) for c in cosines])
    assert (np.diff(values) < 0.0).all() and (values > 0.0).all()
    assert values[-1] < 0.02 * values[0]


def test_backward_and_forward_are_told_apart():
    """Azimuth 0: imager and sun on the same side. A forward scatterer is brighter when they face each other."""
    same, opposite = (one_layer(1.0, 0.9, 0.8, 0.5, 0.5, azimuth) for azimuth in (0.0, 180.0))
    assert opposite > 3.0 * same


def test_dark_below_a_deep_cloud():
    bright, dark = (one_layer(400.0, 0.9, 0.8, 0.8, 0.6, reflectance=r) for r in (0.9, 0.0))
    assert bright == pytest.approx(dark, rel=1e-6)


def test_more_streams_agree_with_each_other():
    rng = np.random.default_rng(3)
    for _ in range(5):
        column = random_column(rng, "3.85")
        assert ours(column, 0.8, 0.6, 70.0, 12) == pytest.approx(ours(column, 0.8, 0.6, 70.0, 16), rel=2e-2)


def test_glint_on_a_calm_sea():
    """Cox & Munk 1954 at the specular point, by hand: rho P / (4 mu sun), P = 1 / (pi (0.003 + 0.00512 wind))."""
    cosine = np.cos(np.radians(30.0))
    index = np.array([1.36, 0.0036])
    got = d.toward_imager(cosine, cosine, -1.0, 5.0, index, 1.0, 0.3)
    n = complex(*index)
    inside = np.sqrt(1.0 - (0.5 / n) ** 2)
    rho = 0.5 * (
        abs((n * cosine - inside) / (n * cosine + inside)) ** 2
        + abs((cosine - n * inside) / (cosine + n * inside)) ** 2
    )
    assert got == pytest.approx(rho / (np.pi * 0.0286) / (4 * cosine**2), rel=1e-6)
    assert d.toward_imager(cosine, cosine, 1.0, 5.0, index, 1.0, 0.3) < 1e-3 * got  # sun behind the imager
    assert d.toward_imager(cosine, cosine, -1.0, 5.0, index, 0.0, 0.3) == pytest.approx(0.3 / np.pi)


def test_against_an_independent_package():
    """200 random cloudy columns, solar zenith 0-80, all azimuths: asked rms 1 %, worst 4 % of the radiance by day."""
    pytest.importorskip("PythonicDISORT")
    error = relative_errors(200, 5, 8)
    assert np.sqrt(np.mean(error**2)) < 0.01
    assert np.abs(error).max() < 0.04
