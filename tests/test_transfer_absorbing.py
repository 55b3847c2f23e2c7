"""The absorbing column solver: analytic cases, fine layers, line-by-line."""

import math
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scipy.integrate import quad
from scipy.optimize import brentq
from transfer_samples import solve_profile

from chansim.channels.channel import _refined, band_average
from chansim.planck import planck
from chansim.transfer import absorbing
from chansim.transfer.columns import hydrostatic_heights, layer_amounts, layer_secants

REFERENCE = Path(__file__).parent / "data" / "reference_radiances.nc"


@pytest.fixture(scope="module")
def reference():
    with xr.open_dataset(REFERENCE, engine="netcdf4") as data:
        return data.load()


def source_integral(tau, near, far, bend=0.0):
    """Emission of a layer toward the near side by numerical quadrature."""

    def integrand(t):
        f = t / tau
        return (near + (far - near) * f + bend * f * (1.0 - f)) * math.exp(-t)

    return quad(integrand, 0.0, tau, epsabs=0.0, epsrel=1e-12, limit=200)[0]


@pytest.mark.parametrize("tau", [1e-8, 1e-5, 9e-5, 1.1e-4, 9e-4, 1.1e-3, 0.049, 0.051, 0.7, 5.0, 60.0])
def test_layer_weights_against_quadrature(tau):
    absorbed = absorbing.absorbed_fraction(tau)
    assert absorbed == pytest.approx(-math.expm1(-tau), rel=1e-9)
    emission = absorbed * (3.0 + (5.0 - 3.0) * absorbing.far_weight(tau, absorbed))
    assert emission == pytest.approx(source_integral(tau, 3.0, 5.0), rel=1e-6)
    bent = emission + 0.8 * absorbing.bend_weight(tau, absorbed)
    assert bent == pytest.approx(source_integral(tau, 3.0, 5.0, 0.8), rel=1e-6)


def test_isothermal_column_reads_its_temperature():
    b = 42.0
    for emissivity in (0.3, 1.0):
        for tau in (1e-4, 1.0, 30.0):
            path = np.full(7, tau)
            value, through = absorbing.absorbing_radiance(path, np.full(8, b), np.zeros(7), b, 1.0)
            assert value == pytest.approx(b, rel=1e-12)
            assert through == pytest.approx(math.exp(-7 * tau), rel=1e-9)
            # under a black, equally warm sky a grey surface cannot be told from a black one
            thick = np.append(path, 60.0)
            value, _ = absorbing.absorbing_radiance(thick, np.full(9, b), np.zeros(8), b, emissivity)
            assert value == pytest.approx(b, rel=1e-12)


def test_two_layers_and_a_grey_surface_by_hand():
    # formal solution (e.g. Liou 2002, An Introduction to Atmospheric Radiation, eq. 4.2.x), sources by quadrature
    tau, b, surface, e = [0.4, 1.3], [2.0, 3.0, 5.0], 6.0, 0.9
    t1, t2 = math.exp(-tau[0]), math.exp(-tau[1])
    up = source_integral(tau[0], b[0], b[1]) + t1 * source_integral(tau[1], b[1], b[2])
    down = source_integral(tau[0], b[1], b[0]) * t2 + source_integral(tau[1], b[2], b[1])
    truth = up + t1 * t2 * (e * surface + (1 - e) * down)
    value, _ = absorbing.absorbing_radiance(np.array(tau), np.array(b), np.zeros(2), surface, e)
    assert value == pytest.approx(truth, rel=1e-6)


def test_compiled_and_plain_solver_agree():
    rng = np.random.default_rng(1)
    arguments = (rng.uniform(0, 2, 9), rng.uniform(1, 5, 10), rng.uniform(-0.2, 0.2, 9), 4.0, 0.95)
    assert absorbing.absorbing_radiance(*arguments) == pytest.approx(
        absorbing.absorbing_radiance.py_func(*arguments), rel=1e-12
    )


def test_bend_vanishes_without_gradient_and_for_even_absorption():
    assert absorbing.source_bend(3.0, 3.0, 1.0, 0.7) == pytest.approx(0.0, abs=1e-12)
    b1, b2 = planck(900.0, 250.0), planck(900.0, 252.0)
    middle = absorbing.middle_factor(900.0, 250.0, 252.0)
    assert math.sqrt(b1 * b2) * middle == pytest.approx(planck(900.0, 251.0), rel=1e-6)
    assert absorbing.density_slope(1.0, 1.0, 1.0) == 0.0
    # absorption that starts within a layer: steep, but finite
    assert math.isfinite(absorbing.source_bend(b1, b2, middle, absorbing.STEEPEST))


def test_secants_over_a_round_earth():
    # sin(zenith at z) = R sin(zenith) / (R + z): at 70 degrees and 10 km, by hand with R = 6371.0088 km
    z = np.array([10100.0, 9900.0, 0.0])
    secant = np.zeros(2)
    layer_secants(3, z, 0.0, math.cos(math.radians(70.0)), secant)
    sine = math.sin(math.radians(70.0)) * 6371.0088 / 6381.0088
    assert secant[0] == pytest.approx(1.0 / math.sqrt(1.0 - sine**2), rel=1e-9)


def test_heights_and_amounts_of_the_standard_atmosphere():
    # US Standard Atmosphere 1976 through the ussa1976 package: pressure at geometric heights
    import ussa1976

    z = np.arange(0.0, 30001.0, 500.0)
    standard = ussa1976.compute(z=z, variables=["p", "t"])
    p, t = standard.p.values[::-1].copy(), standard.t.values[::-1].copy()
    x = np.zeros((1, p.size))
    height = np.zeros(p.size)
    hydrostatic_heights(p.size, p, t, x, 0.0, height)
    np.testing.assert_allclose(height[::-1], z, atol=15.0)
    amount, where_p, where_t = np.zeros((3, p.size - 1)), np.zeros((2, p.size - 1)), np.zeros((2, p.size - 1))
    layer_amounts(p.size, p, t, x, height, amount, where_p, where_t)
    # 2.15e25 molecules of air over a square centimetre at sea level (handbook value), the part below 30 km
    assert amount[0].sum() == pytest.approx(2.15e25 * (1.0 - p[0] / p[-1]), rel=5e-3)
    assert ((where_p[0] > p[:-1]) & (where_p[0] < p[1:])).all()


def brightness(channel, radiance):
    """Brightness temperature by the response function itself."""
    nu, r = _refined(channel.response_wavenumber, channel.response)
    return brentq(lambda t: band_average(nu, r, planck(nu, t)) - radiance, 150.0, 350.0, xtol=1e-6)


def test_atlas_and_nodes_against_line_by_line(tarn, reference):
    """AFGL 1986 and MIPAS 2007, not used in training; recipe: tests/data/make_reference_radiances.py."""
    errors = np.zeros(reference["radiance"].shape)
    skin_excess, emissivity = reference.attrs["skin_excess"], reference.attrs["emissivity"]
    for a in range(reference.sizes["atmosphere"]):
        one = reference.isel(atmosphere=a)
        got = solve_profile(
            tarn.channels,
            one.pressure.values,
            one.temperature.values,
            one.mole_fraction.values,
            reference.zenith.values,
            one.temperature.values[-1] + skin_excess,
            emissivity,
        )
        for c, channel in enumerate(tarn.channels):
            truth = [brightness(channel, r) for r in one.radiance.values[c]]
            errors[a, c] = channel.brightness_temperature(got["radiance"][c]) - truth
    rms = np.sqrt((errors**2).mean(axis=(0, 2)))
    print("\nrms [K] " + " ".join(f"{c.id} {r:.4f}" for c, r in zip(tarn.channels, rms)), "worst", np.abs(errors).max())
    assert np.sqrt((errors**2).mean()) <= 0.03
    assert (rms <= 0.03).all()
    assert np.abs(errors).max() <= 0.15


@pytest.mark.parametrize(
    "name",
    ["tropical", "midlatitude_summer", "midlatitude_winter", "subarctic_summer", "subarctic_winter", "us_standard"],
)
def test_sixty_levels_against_ten_times_finer_layers(tarn, reference, name):
    one = reference.sel(atmosphere=f"afgl_1986-{name}")
    native = np.log(one.pressure.values)
    p = np.geomspace(10.0, one.pressure.values[-1], 60)
    t = np.interp(np.log(p), native, one.temperature.values)
    x = np.exp([np.interp(np.log(p), native, np.log(row)) for row in one.mole_fraction.values])
    fine = np.exp(np.interp(np.arange(0, 59.05, 0.1), np.arange(60), np.log(p)))
    fine_t = np.interp(np.log(fine), np.log(p), t)
    fine_x = np.stack([np.exp(np.interp(np.log(fine), np.log(p), np.log(row))) for row in x])
    zenith = np.array([0.0, 60.0])
    coarse = solve_profile(tarn.channels, p, t, x, zenith, t[-1] + 1.0)["radiance"]
    truth = solve_profile(tarn.channels, fine, fine_t, fine_x, zenith, t[-1] + 1.0)["radiance"]
    difference = np.array(
        [c.brightness_temperature(a) - c.brightness_temperature(b) for c, a, b in zip(tarn.channels, coarse, truth)]
    )
    print("\n", name, dict(zip([c.id for c in tarn.channels], np.round(difference, 4).tolist())))
    assert np.abs(difference).max() <= 0.02


def test_threads_do_not_change_the_result(tarn, reference):
    one = reference.isel(atmosphere=2)
    arguments = (
        tarn.channels[:2],
        one.pressure.values,
        one.temperature.values,
        one.mole_fraction.values,
        np.linspace(0.0, 70.0, 37),
        280.0,
    )
    np.testing.assert_array_equal(
        solve_profile(*arguments, threads=1)["radiance"], solve_profile(*arguments, threads=3)["radiance"]
    )
