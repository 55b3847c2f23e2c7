"""Scattering by spheres averaged over sizes (used when the tables are built).

The Mie coefficients come from the general-purpose library `miepython`
(compiled); this module sums them over angles and averages over a size
distribution. Bohren and Huffman (1983), Absorption and Scattering of Light by
Small Particles, chapter 4, is followed throughout. Lengths are in um here,
since only ratios to the wavelength matter.
"""

import os
from dataclasses import dataclass

import numpy as np
from numpy.polynomial.legendre import leggauss

os.environ.setdefault("MIEPYTHON_USE_JIT", "1")  # read by miepython when it is imported
import miepython  # noqa: E402

# Beyond this size parameter a sphere is given the efficiencies and the phase
# function of a sphere of this size: the geometric-optics limit, where only the
# width of the diffraction peak still changes. There Q_ext = 2 + 1.99 x^(-2/3)
# (Nussenzveig and Wiscombe 1980, Phys. Rev. Lett. 45, 1490), that is 2.0126
# instead of something between 2 and 2.0126: at most 0.6 % too much extinction.
LARGEST_SIZE_PARAMETER = 2000.0
LOG_RADIUS_STEP = 0.0075


@dataclass(frozen=True)
class AngleGrid:
    """Scattering angles with quadrature weights.

    mu : (n,) cosine of the scattering angle, descending from near 1 to near -1
    weight : (n,) weights for an integral over mu from -1 to 1
    """

    mu: np.ndarray
    weight: np.ndarray


def angle_grid(nodes_per_panel=8):
    """Composite Gauss-Legendre grid in scattering angle, dense near forward.

    Panels grow from 0.05 to 2.5 degrees towards 5 degrees and keep 2.5 degrees
    from there, so that the diffraction peak of millimetre particles and the
    Legendre polynomials up to degree 100 are both resolved.
    """
    forward = np.concatenate([[0.0], np.geomspace(0.05, 5.0, 11)])
    edges = np.deg2rad(np.concatenate([forward, np.linspace(5.0, 180.0, 71)[1:]]))
    node, weight = leggauss(nodes_per_panel)
    half = 0.5 * np.diff(edges)[:, None]
    angle = (0.5 * (edges[:-1] + edges[1:])[:, None] + half * node).ravel()
    return AngleGrid(np.cos(angle), (half * weight).ravel() * np.sin(angle))


def radius_grid(smallest_um, largest_um):
    """Radii [um], evenly spaced in their logarithm by LOG_RADIUS_STEP."""
    count = int(np.ceil(np.log(largest_um / smallest_um) / LOG_RADIUS_STEP)) + 1
    return np.geomspace(smallest_um, largest_um, count)


def angular_functions(mu, n_terms):
    """Sum and difference of the Mie angular functions pi_n and tau_n.

    Parameters
    ----------
    mu : (n_angle,) cosine of the scattering angle
    n_terms : highest order

    Returns
    -------
    (plus, minus), each (n_terms, n_angle): (2n+1)/(n(n+1)) (pi_n +- tau_n)

    Source: Bohren and Huffman (1983), eq. 4.47.
    """
    plus = np.empty((n_terms, mu.size))
    minus = np.empty((n_terms, mu.size))
    before, current = np.zeros_like(mu), np.ones_like(mu)
    for n in range(1, n_terms + 1):
        tau = n * mu * current - (n + 1) * before
        scale = (2 * n + 1) / (n * (n + 1))
        plus[n - 1] = scale * (current + tau)
        minus[n - 1] = scale * (current - tau)
        before, current = current, ((2 * n + 1) * mu * current - (n + 1) * before) / n
    return plus, minus


def sphere_efficiencies(index, size_parameter):
    """Extinction and scattering efficiency and asymmetry of single spheres.

    Parameters
    ----------
    index : complex refractive index [1]
    size_parameter : (n,) circumference over wavelength [1]

    Returns
    -------
    (extinction, scattering, asymmetry), each (n,) [1]
    """
    extinction, scattering, _, asymmetry = miepython.efficiencies_mx(
        complex(index.real, -abs(index.imag)), np.minimum(size_parameter, LARGEST_SIZE_PARAMETER)
    )
    return extinction, scattering, asymmetry


def sphere_intensity(index, size_parameter, functions, block=48):
    """Scattered intensity |S1|^2 + |S2|^2 of single spheres.

    Parameters
    ----------
    index : complex refractive index [1]
    size_parameter : (n,) ascending [1]
    functions : result of `angular_functions`, with enough orders

    Returns
    -------
    (n, n_angle) [1]; the phase function (mean 1 over the sphere) is 2/(x^2 Q_sca) times this
    """
    plus, minus = functions
    index = complex(index.real, -abs(index.imag))
    size_parameter = np.minimum(size_parameter, LARGEST_SIZE_PARAMETER)
    result = np.empty((size_parameter.size, plus.shape[1]))
    for start in range(0, size_parameter.size, block):
        sizes = size_parameter[start : start + block]
        n_terms = series_terms(sizes[-1])
        total = np.zeros((sizes.size, n_terms), dtype=complex)
        difference = np.zeros_like(total)
        for row, x in enumerate(sizes):
            a, b = miepython.an_bn(index, float(x), 0)
            total[row, : a.size] = a + b
            difference[row, : a.size] = a - b
        result[start : start + block] = 0.5 * (
            _squared_sum(total, plus[:n_terms]) + _squared_sum(difference, minus[:n_terms])
        )
    return result


def _squared_sum(coefficients, functions):
    # two real products: BLAS would otherwise turn the angular functions complex
    return (coefficients.real @ functions) ** 2 + (coefficients.imag @ functions) ** 2


def series_terms(size_parameter):
    """Number of terms of the Mie series (Wiscombe 1980, Appl. Opt. 19, 1505)."""
    return int(size_parameter + 4.05 * size_parameter**0.33333 + 2.0)


def gamma_number(radius, effective_radius, effective_variance):
    """Relative number of particles per radius, n(r) of Hansen and Travis (1974).

    n(r) ~ r^((1-3b)/b) exp(-r/(a b)) with effective radius a and effective
    variance b (Space Sci. Rev. 16, 527-610, eq. 2.56). b = 1/3 is the exponential
    distribution of Marshall and Palmer (1948).
    """
    a, b = effective_radius, effective_variance
    exponent = (1.0 - 3.0 * b) / b
    return np.exp(exponent * np.log(radius / a) - (radius - a) / (a * b))


def area_weights(radius, effective_radius, effective_variance):
    """Share of the total cross-sectional area that each grid radius carries.

    Parameters
    ----------
    radius : (n,) evenly spaced in its logarithm [um]
    effective_radius : (m,) [um]

    Returns
    -------
    (weights, actual_effective_radius): (m, n) with rows that sum to 1, and (m,) [um]
    the effective radius of the discrete, truncated distribution
    """
    number = gamma_number(radius[None, :], np.asarray(effective_radius)[:, None], effective_variance)
    area = number * radius**3  # r^2 and one r more from d(ln r)
    area[:, [0, -1]] *= 0.5
    weights = area / area.sum(axis=1, keepdims=True)
    return weights, weights @ radius


@dataclass(frozen=True)
class SphereSet:
    """Single spheres of one material at one wavenumber.

    radius : (n,) [um]; extinction, scattering : (n,) efficiencies [1]; asymmetry : (n,) [1]
    phase : (n, n_angle) phase function with mean 1 over the sphere, or None
    """

    radius: np.ndarray
    extinction: np.ndarray
    scattering: np.ndarray
    asymmetry: np.ndarray
    phase: np.ndarray


def spheres(index, wavenumber, radius, functions):
    """Solve all spheres of a radius grid [um] at one wavenumber [cm-1] -> SphereSet."""
    size_parameter = 2.0 * np.pi * radius * wavenumber * 1e-4
    extinction, scattering, asymmetry = sphere_efficiencies(index, size_parameter)
    n_solved = int(np.searchsorted(size_parameter, LARGEST_SIZE_PARAMETER)) + 1
    solved = np.minimum(size_parameter[:n_solved], LARGEST_SIZE_PARAMETER)
    phase = np.empty((radius.size, functions[0].shape[1]))
    phase[:n_solved] = 2.0 * sphere_intensity(index, solved, functions) / (solved**2 * scattering[:n_solved])[:, None]
    phase[n_solved:] = phase[min(n_solved, radius.size) - 1]
    return SphereSet(radius, extinction, scattering, asymmetry, phase)


@dataclass(frozen=True)
class BulkOptics:
    """Optics of a size distribution, one row per effective radius.

    extinction : (m,) mass extinction [m2 kg-1]; albedo, asymmetry : (m,) [1]
    phase : (m, n_angle) phase function with mean 1 over the sphere [1]
    """

    extinction: np.ndarray
    albedo: np.ndarray
    asymmetry: np.ndarray
    phase: np.ndarray


def average_over_sizes(sphere_set, effective_radius, effective_variance, density):
    """Average single spheres over gamma distributions.

    Mass extinction is 3 <Q_ext> / (4 density effective_radius), exact when <Q_ext>
    is the area-weighted mean efficiency.

    Parameters
    ----------
    sphere_set : SphereSet
    effective_radius : (m,) [um]
    effective_variance : [1]
    density : of the particle material [kg m-3]
    """
    weights, actual = area_weights(sphere_set.radius, effective_radius, effective_variance)
    extinction = weights @ sphere_set.extinction
    scattering_weights = weights * sphere_set.scattering
    scattering = scattering_weights.sum(axis=1)
    return BulkOptics(
        extinction=0.75 * extinction / (density * actual * 1e-6),
        albedo=scattering / extinction,
        asymmetry=scattering_weights @ sphere_set.asymmetry / scattering,
        phase=scattering_weights @ sphere_set.phase / scattering[:, None],
    )


def legendre_moments(phase, grid, n_moments):
    """Legendre moments chi_l = 1/2 integral p(mu) P_l(mu) dmu of phase functions.

    With this normalisation p(mu) = sum (2l+1) chi_l P_l(mu), chi_0 = 1, chi_1 = asymmetry.

    Parameters
    ----------
    phase : (m, n_angle) on `grid`
    grid : AngleGrid
    n_moments : number of moments, l = 0 ... n_moments - 1

    Returns
    -------
    (m, n_moments), divided by the zeroth moment (quadrature error removed)
    """
    weighted = 0.5 * phase * grid.weight
    moments = np.empty((phase.shape[0], n_moments))
    before, current = np.zeros_like(grid.mu), np.ones_like(grid.mu)
    for degree in range(n_moments):
        moments[:, degree] = weighted @ current
        before, current = current, ((2 * degree + 1) * grid.mu * current - degree * before) / (degree + 1)
    return moments / moments[:, :1]
