"""The Voigt profile and the far-wing corrections, compiled."""

import math

import numpy as np
from numba import njit

# Weideman 1994 (SIAM J. Numer. Anal. 31, 1497), N = 32: w(z) as a polynomial in Z = (L + iz)/(L - iz)
_WEIDEMAN_TERMS = 32


def _weideman_coefficients(n):
    m = 2 * n
    k = np.arange(-m + 1, m)
    length = math.sqrt(n / math.sqrt(2.0))
    t = length * np.tan(k * math.pi / m / 2.0)
    f = np.concatenate(([0.0], np.exp(-t * t) * (length**2 + t * t)))
    a = np.real(np.fft.fft(np.fft.fftshift(f))) / (2 * m)
    return np.flipud(a[1 : n + 1]).copy(), length


_COEFFICIENTS, _LENGTH = _weideman_coefficients(_WEIDEMAN_TERMS)


@njit(cache=True)
def faddeeva_real(x, y):
    """Real part of w(x + iy), y >= 0, relative error below 1e-5 [1].

    Continued fraction far from the origin (Humlicek 1982, JQSRT 27, 437),
    Weideman's rational series near it.
    """
    s = x * x + y * y
    if s > 1600.0:  # w = i z / sqrt(pi) / (z^2 - 1/2)
        re = x * x - y * y - 0.5
        im = 2.0 * x * y
        return (x * im - y * re) / (re * re + im * im) * 0.5641895835477563
    z = complex(x, y)
    if s > 144.0:  # one fraction deeper: i (z^2 - 1) / (z (z^2 - 3/2)) / sqrt(pi)
        q = z * z
        return (1j * (q - 1.0) / (z * (q - 1.5))).real * 0.5641895835477563
    denominator = _LENGTH - 1j * z
    u = (_LENGTH + 1j * z) / denominator
    p = complex(0.0, 0.0)
    for i in range(_COEFFICIENTS.size):
        p = p * u + _COEFFICIENTS[i]
    return (2.0 * p / (denominator * denominator) + 0.5641895835477563 / denominator).real


@njit(cache=True)
def voigt(distance, doppler_width, lorentz_width):
    """Voigt profile at a distance from the line centre [cm].

    distance : [cm-1]; doppler_width, lorentz_width : half-widths at half maximum [cm-1]
    """
    scale = 0.8325546111576977 / doppler_width  # sqrt(ln 2)
    return faddeeva_real(abs(distance) * scale, lorentz_width * scale) * scale * 0.5641895835477563


@njit(cache=True)
def chi_perrin_hartmann(distance, temperature):
    """Sub-Lorentzian factor for CO2 in N2 (Perrin & Hartmann 1989, JQSRT 42, 311) [1].

    distance : |nu - nu0| [cm-1]; temperature [K]. The exponents are those of
    the published 193-296 K fit for CO2-N2.
    """
    if distance < 3.0:
        return 1.0
    b1 = 0.416 - 0.354 * math.exp(-0.00386 * temperature)
    if distance < 10.0:
        return math.exp(-b1 * (distance - 3.0))
    b2 = 0.00167 + 0.0421 * math.exp(-0.00248 * temperature)
    if distance < 70.0:
        return math.exp(-7.0 * b1 - b2 * (distance - 10.0))
    return math.exp(-7.0 * b1 - 60.0 * b2 - 0.02 * (distance - 70.0))


@njit(cache=True)
def chi_cousin(distance, temperature):
    """Sub-Lorentzian factor for CO2 in N2 at 296 K (Cousin et al. 1985, Appl. Opt. 24, 897) [1]."""
    if distance < 0.5:
        return 1.0
    if distance < 23.0:
        return 1.069 * math.exp(-0.133 * distance)
    if distance < 50.0:
        return 0.050
    if distance < 135.0:
        return 0.171 * math.exp(-0.0246 * distance)
    return 0.080 * math.exp(-0.0190 * distance)


WING_FORMS = {"cut": 0, "lorentz": 1, "perrin-hartmann": 2, "cousin": 3}


@njit(cache=True)
def wing_factor(form, distance, temperature):
    """Far-wing factor of the named form (see `WING_FORMS`) [1]."""
    if form == 2:
        return chi_perrin_hartmann(distance, temperature)
    if form == 3:
        return chi_cousin(distance, temperature)
    return 1.0
