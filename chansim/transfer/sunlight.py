"""Sunlight in a column with condensate: the scattering solver driven by the solar beam, azimuth mode by azimuth mode.

Same layer operators as the thermal solver (scattering.py). Light scattered once uses the exact phase function on the
delta-scaled path (TMS correction, Nakajima & Tanaka 1988, J. Quant. Spectrosc. Radiat. Transfer 40, 51); the modes
carry the light scattered more often, and stop when the next ones no longer matter. Within scattering layers the beam
has the true local zenith angle, so that the term vanishes smoothly at the terminator.
"""

import math

import numpy as np
from numba import njit

from chansim.optics.surface import glint_reflectance
from chansim.transfer.scattering import (
    _D,
    _GD,
    _GS,
    _K,
    _R,
    _SD,
    _STACK,
    _SU,
    _T,
    _VR,
    _VT,
    _WV,
    _X,
    _Y,
    _surface,
    add_scattering_layer,
    associated_legendre,
    begin_column,
    delta_scaled,
    layer_operators,
    mean_exponential,
)
from chansim.transfer.scattering import work_arrays as scattering_work_arrays

_SMALLEST_MODE = 2e-3  # of the sum so far: where the series over azimuth modes stops
_DEEPEST = 8.0  # e-foldings of diffuse light: what lies deeper cannot be seen
_ALIKE = 0.005  # in albedo and asymmetry: neighbouring layers that may become one
# rows of the vector work space that scattering.py leaves free
_UP_TOP, _DOWN_TOP, _UP_BOTTOM, _DOWN_BOTTOM, _ODD, _EVEN = range(23, 29)


@njit(cache=True)
def sun_airmass(sun_cosine):
    """Path of the beam through a spherical atmosphere over the vertical one [1].

    Kasten & Young 1989, Appl. Opt. 28, 4735.
    """
    zenith = math.degrees(math.acos(sun_cosine))
    return 1.0 / (sun_cosine + 0.50572 * (96.07995 - zenith) ** -1.6364)


@njit(cache=True)
def solar_source(n, m, tau, albedo, moments, mu, weight, legendre, sun_legendre, q, slant, beam, matrices, vectors):
    """Diffuse light that a layer sends out when only the solar beam falls on it (mode m).

    tau, albedo, moments : delta-scaled; the operators of the layer are in the work space
    q : secant of the beam; beam : irradiance across the beam at the top of the layer

    Returns
    -------
    radiance toward the imager at the top of the layer, light scattered once left out
    """
    x, y = matrices[_X], matrices[_Y]
    factor = albedo * beam * (1.0 if m == 0 else 2.0) / (2.0 * math.pi)
    for i in range(n):
        vectors[_ODD, i] = vectors[_EVEN, i] = 0.0
        for degree in range(m, 2 * n):
            part = factor * (2.0 * degree + 1.0) * moments[degree] * legendre[degree, i] * sun_legendre[degree]
            row = _EVEN if (degree - m) % 2 == 0 else _ODD
            vectors[row, i] += part * math.sqrt(weight[i] / mu[i])
        vectors[_UP_TOP, i] = vectors[_DOWN_TOP, i] = vectors[_UP_BOTTOM, i] = vectors[_DOWN_BOTTOM, i] = 0.0
    seen = 0.0
    for k in range(n):
        rate = vectors[_K, k]
        secant = q
        if abs(rate - q) < 1e-4 * q:  # resonance: move the beam of this mode aside, by less than it matters
            secant = rate * (1.0 + 1e-4)
        odd, even = 0.0, 0.0
        for i in range(n):
            odd += y[i, k] * vectors[_ODD, i]
            even += x[i, k] * vectors[_EVEN, i]
        a = (even + secant * odd) / (rate * rate - secant * secant)
        b = -secant * a - odd
        below = math.exp(-secant * tau)
        seen += (vectors[_GS, k] * a + vectors[_GD, k] * b) * slant * tau * mean_exponential((slant + secant) * tau)
        for i in range(n):
            total, net = x[i, k] * a, y[i, k] * b
            vectors[_UP_TOP, i] += 0.5 * (total + net)
            vectors[_DOWN_TOP, i] += 0.5 * (total - net)
            vectors[_UP_BOTTOM, i] += 0.5 * (total + net) * below
            vectors[_DOWN_BOTTOM, i] += 0.5 * (total - net) * below
    for i in range(n):
        up, down = vectors[_UP_TOP, i], vectors[_DOWN_BOTTOM, i]
        for j in range(n):
            up -= matrices[_R, i, j] * vectors[_DOWN_TOP, j] + matrices[_T, i, j] * vectors[_UP_BOTTOM, j]
            down -= matrices[_R, i, j] * vectors[_UP_BOTTOM, j] + matrices[_T, i, j] * vectors[_DOWN_TOP, j]
        vectors[_SU, i], vectors[_SD, i] = up, down
        seen -= vectors[_VR, i] * vectors[_DOWN_TOP, i] + vectors[_VT, i] * vectors[_UP_BOTTOM, i]
    return seen


@njit(cache=True)
def _scattering_layers(tau_gas, secant, cloud_tau, cloud_albedo, moments, airmass, count, layers, scaled):
    """The layers that scatter and the clear gaps above each.

    Neighbours with nearly the same properties become one layer; what lies below a depth that light does not come back
    from is left out.

    layers : (layers + 1, 6) result: scaled optical thickness, scaled albedo, secant of the view, gap: optical depth,
        along the view, along the beam; one more row holds the gap above the ground
    scaled : (layers, count) result, moments

    Returns
    -------
    number of scattering layers, whether the ground matters
    """
    found, gap, gap_view, gap_sun, depth = 0, 0.0, 0.0, 0.0, 0.0
    for j in range(tau_gas.size):
        total = tau_gas[j] + cloud_tau[j]
        albedo = cloud_tau[j] * cloud_albedo[j] / total if total > 0.0 else 0.0
        if albedo <= 1e-9:
            gap += total
            gap_view += total * secant[j]
            gap_sun += total * airmass
            continue
        if depth > _DEEPEST:
            return found, False
        tau, albedo, _ = delta_scaled(total, albedo, moments[j], count, scaled[found])
        g = scaled[found, 1]
        depth += tau * math.sqrt(3.0 * (1.0 - albedo) * (1.0 - albedo * g))
        if found > 0 and gap == 0.0:
            above = layers[found - 1]
            if abs(above[1] - albedo) < _ALIKE and abs(scaled[found - 1, 1] - g) < _ALIKE:
                both = above[0] + tau
                bright = above[0] * above[1] + tau * albedo
                for degree in range(count):
                    scaled[found - 1, degree] = (
                        above[0] * above[1] * scaled[found - 1, degree] + tau * albedo * scaled[found, degree]
                    ) / bright
                above[2] = (above[0] * above[2] + tau * secant[j]) / both
                above[0], above[1] = both, bright / both
                continue
        row = layers[found]
        row[0], row[1], row[2], row[3], row[4], row[5] = tau, albedo, secant[j], gap, gap_view, gap_sun
        gap, gap_view, gap_sun = 0.0, 0.0, 0.0
        found += 1
    layers[found, 3], layers[found, 4], layers[found, 5] = gap, gap_view, gap_sun
    return found, True


@njit(cache=True)
def scattered_once(tau_gas, secant, cloud_tau, cloud_albedo, moments, phase, count, sun_cosine):
    """Light scattered once toward the imager, and the scaled transmittance of the way down and up.

    See `solar_radiance` for the parameters; count : 2 streams, the moment that delta scaling takes as forward fraction

    Returns
    -------
    radiance for unit irradiance [sr-1], transmittance
    """
    airmass = sun_airmass(sun_cosine)
    seen, through = 0.0, 1.0
    for j in range(tau_gas.size):
        total = tau_gas[j] + cloud_tau[j]
        if cloud_tau[j] * cloud_albedo[j] <= 1e-9 * total:
            through *= math.exp(-total * (secant[j] + airmass))
            continue
        albedo = cloud_tau[j] * cloud_albedo[j] / total
        kept = 1.0 - albedo * moments[j, count]
        path = total * kept * (secant[j] + 1.0 / sun_cosine)
        seen += through * albedo * phase[j] / (4.0 * math.pi) * secant[j] * total * mean_exponential(path)
        through *= math.exp(-path)
    return seen, through


@njit(cache=True)
def _add_gap(n, tau, along, mu, stack, vectors, state):
    """Put a layer that absorbs and does not emit under the stack."""
    for i in range(n):
        through = math.exp(-tau / mu[i])
        vectors[_D, i] *= through
        vectors[_WV, i] *= through
        for j in range(n):
            stack[i, j] *= through
            stack[j, i] *= through
    state[1] *= math.exp(-along)


@njit(cache=True)
def _one_mode(n, m, found, layers, scaled, sun_cosine, reflectance, view_cosine, quad, at_view, at_sun, work, state):
    """Radiance of mode m at the top, light scattered once and light of the ground alone left out."""
    mu, weight, legendre = quad
    matrices, vectors = work
    stack, sun_secant, beam = matrices[_STACK], 1.0 / sun_cosine, 1.0
    begin_column(n, mu, weight, matrices, vectors, state)
    for s in range(found + 1):
        if layers[s, 3] > 0.0:
            _add_gap(n, layers[s, 3], layers[s, 4], mu, stack, vectors, state)
            beam *= math.exp(-layers[s, 5])
        if s == found:
            break
        tau, albedo, slant = layers[s, 0], layers[s, 1], layers[s, 2]
        direct = layer_operators(
            n, tau, albedo, scaled[s], m, mu, weight, legendre[m], at_view, slant, matrices, vectors
        )
        seen = solar_source(
            n, m, tau, albedo, scaled[s], mu, weight, legendre[m], at_sun, sun_secant, slant, beam, matrices, vectors
        )
        add_scattering_layer(n, direct, seen, stack, matrices, vectors, state)
        beam *= math.exp(-tau * sun_secant)
    if m == 0 and reflectance > 0.0:
        reflected = reflectance * sun_cosine * beam / math.pi
        _surface(n, 0.0, reflectance, reflected, 0.0, mu, view_cosine, stack, vectors, state)
    return state[0]


@njit(cache=True)
def scattered_more(
    tau_gas, secant, cloud_tau, cloud_albedo, moments, sun_cosine, azimuth_cosine, reflectance, view_cosine, quad, work
):  # fmt: skip
    """Light scattered more than once, or scattered and reflected by the ground, for unit irradiance [sr-1].

    See `solar_radiance` for the parameters.
    """
    n = quad[0].size
    operators, layers, scaled, state = work
    airmass = sun_airmass(sun_cosine)
    found, ground = _scattering_layers(
        tau_gas, secant, cloud_tau, cloud_albedo, moments, airmass, 2 * n, layers, scaled
    )
    at_view, at_sun = np.empty(2 * n), np.empty(2 * n)
    if not ground:
        reflectance = 0.0
        layers[found, 3] = layers[found, 4] = layers[found, 5] = 0.0
    # cosine of m times the azimuth between beam and view; the beam travels away from the sun
    before, cosine, total = 1.0, -azimuth_cosine, 0.0
    for m in range(2 * n if found > 0 else 0):
        associated_legendre(m, 2 * n, view_cosine, at_view)
        associated_legendre(m, 2 * n, sun_cosine, at_sun)
        value = _one_mode(
            n, m, found, layers, scaled, sun_cosine, reflectance, view_cosine, quad, at_view, at_sun, operators, state
        )
        total += value * (1.0 if m == 0 else cosine)
        if m > 0:
            before, cosine = cosine, -2.0 * azimuth_cosine * cosine - before
            if abs(value) < _SMALLEST_MODE * abs(total):
                break
    return total


@njit(cache=True)
def solar_radiance(
    tau_gas, secant, cloud_tau, cloud_albedo, moments, phase, sun_cosine, azimuth_cosine, reflectance, toward_imager,
    view_cosine, quad, work
):  # fmt: skip
    """Reflected and scattered sunlight at the top of one column at one wavenumber, for unit irradiance.

    Parameters
    ----------
    tau_gas : (layers,) vertical absorption optical depth of gases, top -> surface
    secant : (layers,) of the view direction
    cloud_tau, cloud_albedo : (layers,) extinction optical thickness and single-scattering albedo of condensate
    moments : (layers, > 2 streams) Legendre moments of its phase function, moments[:, 0] = 1
    phase : (layers,) its phase function at the angle between beam and view (mean over the sphere: 1)
    sun_cosine : cosine of the solar zenith angle, > 0
    azimuth_cosine : of the difference between the azimuths of the directions to imager and sun
    reflectance : of the surface for diffuse light and for the beam (Lambertian) [1]
    toward_imager : bidirectional reflectance for the beam toward the imager [sr-1]
    view_cosine : at the surface
    quad : from `scattering.quadrature`; work : from `work_arrays`

    Returns
    -------
    radiance [sr-1], per unit irradiance across the beam
    """
    once, through = scattered_once(
        tau_gas, secant, cloud_tau, cloud_albedo, moments, phase, 2 * quad[0].size, sun_cosine
    )
    more = scattered_more(
        tau_gas, secant, cloud_tau, cloud_albedo, moments, sun_cosine, azimuth_cosine, reflectance, view_cosine, quad,
        work
    )  # fmt: skip
    return once + more + through * sun_cosine * toward_imager


@njit(cache=True)
def work_arrays(streams, layers):
    """Work space of `solar_radiance`: (operators, layers, scaled moments, state)."""
    operators = scattering_work_arrays(streams)
    return operators, np.zeros((layers + 1, 6)), np.zeros((layers + 1, 2 * streams)), np.zeros(2)


@njit(cache=True)
def toward_imager(view_cosine, sun_cosine, azimuth_cosine, wind_speed, index, sea_share, reflectance):
    """Bidirectional reflectance of the ground [sr-1]: glint on the sea, diffuse elsewhere.

    index : (2,) refractive index of water, real and imaginary; reflectance : 1 - emissivity
    """
    value = (1.0 - sea_share) * reflectance / math.pi
    if sea_share > 0.0 and view_cosine > 0.0:
        azimuth = math.acos(min(max(azimuth_cosine, -1.0), 1.0))
        value += sea_share * glint_reflectance(view_cosine, sun_cosine, azimuth, wind_speed, index[0], index[1])
    return value


@njit(cache=True)
def clear_sunlight(layers, tau, secant, sun_cosine, ground, irradiance, weight, first, last):
    """Channel radiance of sunlight that the ground reflects through clear air.

    tau : (layers, nodes of the channel); ground : (nodes of the channel,) from `toward_imager` [sr-1]
    irradiance, weight : (all nodes,)
    """
    airmass = sun_airmass(sun_cosine)
    radiance = 0.0
    for i in range(last - first):
        path = 0.0
        for j in range(layers):
            path += tau[j, i] * (secant[j] + airmass)
        radiance += weight[first + i] * irradiance[first + i] * sun_cosine * ground[i] * math.exp(-path)
    return radiance


@njit(cache=True)
def cloudy_sunlight(
    layers, tau, secant, cloud_tau, cloud_albedo, moments, phase, geometry, ground, reflectance, irradiance, weight,
    first, last, quad, work
):  # fmt: skip
    """Channel radiance of sunlight from a column with condensate.

    tau, cloud_tau, cloud_albedo : (layers, nodes of the channel)
    moments : (nodes, layers, > 2 streams), phase : (nodes, layers)
    geometry : cosines of sun, azimuth between sun and imager, view
    """
    sun_cosine, azimuth_cosine, view_cosine = geometry
    radiance = 0.0
    for i in range(last - first):
        value = solar_radiance(
            tau[:layers, i], secant[:layers], cloud_tau[:layers, i], cloud_albedo[:layers, i], moments[i, :layers],
            phase[i, :layers], sun_cosine, azimuth_cosine, reflectance, ground[i], view_cosine, quad, work
        )  # fmt: skip
        radiance += weight[first + i] * irradiance[first + i] * value
    return radiance
