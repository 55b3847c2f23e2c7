"""The scattering solver: discrete ordinates with layer operators, radiance along the view by source integration.

Streams are Gauss points on each half-sphere. The equations of the sum and the
difference of up- and downward radiance are symmetrised, so that one symmetric
eigenproblem gives transmission and reflection of a layer without growing
exponentials (the eigenvalue form of Nakajima & Tanaka 1986, JQSRT 35, 13);
layers are added from the top (Plass, Kattawar & Catchings 1973, Appl. Opt. 12,
314). The radiance toward the imager follows from the source function inside
each layer. Phase functions are delta-M scaled (Wiscombe 1977, J. Atmos. Sci.
34, 1408); sunlight that is scattered once uses the exact phase function (the
TMS correction of Nakajima & Tanaka 1988, JQSRT 40, 51).

Everything is per azimuth mode m; radiances of stream i carry the factor
sqrt(weight mu). `streams` is the number per half-sphere.
"""

import math

import numpy as np
from numba import njit

from chansim.transfer.absorbing import absorbed_fraction, bend_weight, far_weight
from chansim.transfer.small_matrices import cholesky, inverse, lower_inverse_transposed, symmetric_eigen


def quadrature(streams):
    """Gauss points and weights on (0, 1) and the normalised associated Legendre functions there.

    Returns
    -------
    mu, weight : (streams,); legendre : (modes, 2 streams, streams), modes = 2 streams
    """
    x, w = np.polynomial.legendre.leggauss(streams)
    mu, weight = 0.5 * (x + 1.0), 0.5 * w
    table = np.zeros((2 * streams, 2 * streams, streams))
    column = np.zeros(2 * streams)
    for m in range(2 * streams):
        for i in range(streams):
            associated_legendre(m, 2 * streams, mu[i], column)
            table[m, :, i] = column
    return mu, weight, table


@njit(cache=True)
def associated_legendre(m, count, x, out):
    """sqrt((l - m)! / (l + m)!) P_l^m(x) for l = 0 .. count - 1 (zero for l < m)."""
    for degree in range(count):
        out[degree] = 0.0
    sine = math.sqrt(max(0.0, 1.0 - x * x))
    start = 1.0
    for i in range(1, m + 1):
        start *= sine * math.sqrt((2.0 * i - 1.0) / (2.0 * i))
    if m < count:
        out[m] = start
    if m + 1 < count:
        out[m + 1] = math.sqrt(2.0 * m + 1.0) * x * start
    for degree in range(m + 2, count):
        before = math.sqrt((degree - 1.0 + m) * (degree - 1.0 - m)) * out[degree - 2]
        out[degree] = ((2.0 * degree - 1.0) * x * out[degree - 1] - before) / math.sqrt(
            (degree - m) * (degree + 1.0 * m)
        )


@njit(cache=True)
def work_arrays(streams):
    """Work space of the solver: (matrices, vectors)."""
    return np.zeros((20, streams, streams)), np.zeros((32, streams))


@njit(cache=True)
def mean_exponential(x):
    """(1 - exp(-x)) / x [1]."""
    return 1.0 - 0.5 * x if abs(x) < 1e-8 else -math.expm1(-x) / x


@njit(cache=True)
def delta_scaled(extinction, albedo, moments, count, scaled):
    """Delta-M scaling: (extinction, albedo, forward fraction); scaled : (count,) moments.

    moments : (> count,) with moments[count] the forward fraction
    """
    forward = moments[count] if albedo > 0.0 else 0.0
    kept = 1.0 - albedo * forward
    for degree in range(count):
        scaled[degree] = (moments[degree] - forward) / (1.0 - forward)
    return extinction * kept, albedo * (1.0 - forward) / kept, forward


# rows of the matrix work space
_T, _R, _X, _Y, _GE, _GO, _A, _B, _L, _V, _M1, _M2, _STACK, _G, _M = range(15)
# rows of the vector work space
_K, _TH, _ONE, _GS, _GD, _I1, _I2, _VT, _VR, _VE, _VO, _SU, _SD, _U1, _U2, _U3, _D, _WV, _MM, _EK, _NEW = range(21)


@njit(cache=True)
def layer_operators(n, tau, albedo, moments, m, mu, weight, legendre, view_legendre, slant, matrices, vectors):
    """Transmission, reflection and view response of one homogeneous layer, into the work space.

    tau, albedo, moments : delta-scaled; m : azimuth mode; view_legendre : (2 n,) at the view cosine
    slant : secant of the view direction

    Returns
    -------
    direct transmittance along the view
    """
    a_matrix, b_matrix = matrices[_A], matrices[_B]
    for i in range(n):
        vectors[_ONE, i] = math.sqrt(weight[i] * mu[i])
        vectors[_GS, i], vectors[_GD, i] = 0.0, 0.0
        for j in range(n):
            a_matrix[i, j] = b_matrix[i, j] = 1.0 / mu[i] if i == j else 0.0
    for degree in range(m, 2 * n):
        c = albedo * (2.0 * degree + 1.0) * moments[degree]
        even = (degree - m) % 2 == 0
        for i in range(n):
            left = c * legendre[degree, i] * math.sqrt(weight[i] / mu[i])
            for j in range(n):
                term = left * legendre[degree, j] * math.sqrt(weight[j] / mu[j])
                if even:
                    b_matrix[i, j] -= term
                else:
                    a_matrix[i, j] -= term
            toward = 0.5 * c * view_legendre[degree] * legendre[degree, i] * weight[i] / vectors[_ONE, i]
            if even:
                vectors[_GS, i] += toward
            else:
                vectors[_GD, i] += toward
    _eigen_form(n, matrices, vectors)
    return _operators(n, tau, slant, matrices, vectors)


@njit(cache=True)
def _eigen_form(n, matrices, vectors):
    """s' = A d, d' = B s -> X, Y, k; the view couplings become couplings to the modes."""
    lower, x, y, v, m1, m2 = matrices[_L], matrices[_X], matrices[_Y], matrices[_V], matrices[_M1], matrices[_M2]
    cholesky(matrices[_A], n, lower)
    for i in range(n):
        for j in range(n):
            m1[i, j] = 0.0
            for k in range(n):
                m1[i, j] += matrices[_B, i, k] * lower[k, j]
    for i in range(n):
        for j in range(n):
            m2[i, j] = 0.0
            for k in range(n):
                m2[i, j] += lower[k, i] * m1[k, j]
    for i in range(n):
        for j in range(i):
            m2[i, j] = m2[j, i] = 0.5 * (m2[i, j] + m2[j, i])
    symmetric_eigen(m2, n, v)
    lower_inverse_transposed(lower, n, m1)
    for j in range(n):
        vectors[_K, j] = math.sqrt(max(m2[j, j], 1e-16))
        for i in range(n):
            x[i, j], y[i, j] = 0.0, 0.0
            for k in range(n):
                x[i, j] += lower[i, k] * v[k, j]
                y[i, j] += m1[i, k] * v[k, j]
    for j in range(n):
        vectors[_U1, j], vectors[_U2, j] = 0.0, 0.0
        for i in range(n):
            vectors[_U1, j] += vectors[_GS, i] * x[i, j]
            vectors[_U2, j] += vectors[_GD, i] * y[i, j]
    for j in range(n):
        vectors[_GS, j], vectors[_GD, j] = vectors[_U1, j], vectors[_U2, j]


@njit(cache=True)
def _operators(n, tau, slant, matrices, vectors):
    """From the eigen form to transmission, reflection, view responses; returns the direct transmittance."""
    x, y, m1, m2 = matrices[_X], matrices[_Y], matrices[_M1], matrices[_M2]
    for k in range(n):
        vectors[_TH, k] = math.tanh(0.5 * vectors[_K, k] * tau)
        vectors[_EK, k] = math.exp(-vectors[_K, k] * tau)
    for i in range(n):
        for j in range(n):
            odd = even = 1.0 if i == j else 0.0
            for k in range(n):
                odd += x[i, k] * vectors[_TH, k] / vectors[_K, k] * x[j, k]
                even += y[i, k] * vectors[_K, k] * vectors[_TH, k] * y[j, k]
            m1[i, j], m2[i, j] = even, odd
    inverse(m1, n, matrices[_GE])
    inverse(m2, n, matrices[_GO])
    direct = math.exp(-tau * slant)
    for i in range(n):
        for j in range(n):
            matrices[_T, i, j] = matrices[_GE, i, j] + matrices[_GO, i, j] - (1.0 if i == j else 0.0)
            matrices[_R, i, j] = matrices[_GE, i, j] - matrices[_GO, i, j]
    for k in range(n):
        rate, ek = vectors[_K, k], vectors[_EK, k]
        from_top = slant * tau * mean_exponential((slant + rate) * tau)
        if slant > rate:
            from_bottom = slant * tau * ek * mean_exponential((slant - rate) * tau)
        else:
            from_bottom = slant * tau * direct * mean_exponential((rate - slant) * tau)
        vectors[_I1, k], vectors[_I2, k] = from_top, from_bottom
        cosh = (from_top + from_bottom) / (1.0 + ek)
        sinh = (from_bottom - from_top) / (1.0 + ek)
        vectors[_U1, k] = vectors[_GS, k] * cosh + vectors[_GD, k] * rate * sinh
        vectors[_U2, k] = vectors[_GS, k] * sinh / rate + vectors[_GD, k] * cosh
    for i in range(n):
        vectors[_VE, i], vectors[_VO, i] = 0.0, 0.0
        for k in range(n):
            vectors[_VE, i] += y[i, k] * vectors[_U1, k]
            vectors[_VO, i] += x[i, k] * vectors[_U2, k]
    for j in range(n):
        even, odd = 0.0, 0.0
        for i in range(n):
            even += 2.0 * vectors[_VE, i] * matrices[_GE, i, j]
            odd += 2.0 * vectors[_VO, i] * matrices[_GO, i, j]
        vectors[_U1, j], vectors[_U2, j] = even, odd
    for j in range(n):
        vectors[_VE, j], vectors[_VO, j] = vectors[_U1, j], vectors[_U2, j]
        vectors[_VT, j] = 0.5 * (vectors[_VE, j] + vectors[_VO, j])
        vectors[_VR, j] = 0.5 * (vectors[_VE, j] - vectors[_VO, j])
    return direct


@njit(cache=True)
def thermal_source(n, tau, albedo, slant, direct, above, below, matrices, vectors):
    """Emission of the layer: up at its top and down at its bottom (into the work space); returns it along the view.

    above, below : Planck function at the top and at the bottom, linear in optical depth between
    """
    one, x, y = vectors[_ONE], matrices[_X], matrices[_Y]
    mean, rise = 0.5 * (above + below), below - above
    for k in range(n):  # X (th / (k x) * (Y^T one))
        total = 0.0
        for i in range(n):
            total += y[i, k] * one[i]
        vectors[_U1, k] = total * vectors[_TH, k] / max(0.5 * vectors[_K, k] * tau, 1e-300)
        vectors[_U3, k] = total
    isotropic, slope_part = 0.0, 0.0
    for i in range(n):
        vectors[_U2, i] = one[i]
        for k in range(n):
            vectors[_U2, i] -= x[i, k] * vectors[_U1, k]
    for i in range(n):
        even, odd = one[i], 0.0
        for j in range(n):
            even -= matrices[_GE, i, j] * one[j]
            odd += matrices[_GO, i, j] * vectors[_U2, j]
        vectors[_SU, i] = 2.0 * mean * even - rise * odd
        vectors[_SD, i] = 2.0 * mean * even + rise * odd
    for k in range(n):  # d of the particular solution: A^-1 one 2 rise / tau, in modes Y Y^T one
        slope_part += vectors[_GD, k] * vectors[_U3, k]
    scale = 2.0 * rise / tau
    reach = slant * tau
    if reach > 1e-3:
        linear = (1.0 - direct) / reach - direct - 0.5 * (1.0 - direct)
    else:
        linear = -reach * reach / 12.0 * (1.0 - 0.5 * reach)
    # the view coupling of `one` through the sum field: g_s X^-1 one = g_s Y^T one
    coupled = 0.0
    for k in range(n):
        coupled += vectors[_GS, k] * vectors[_U3, k]
    seen = (2.0 * coupled + (1.0 - albedo)) * rise * linear + slope_part * scale * (1.0 - direct)
    for j in range(n):
        isotropic += (vectors[_VT, j] + vectors[_VR, j]) * one[j]
        particular = rise * one[j]
        inside = 0.0
        for k in range(n):
            inside += y[j, k] * vectors[_U3, k]
        seen -= vectors[_VO, j] * 0.5 * (particular + scale * inside)
    return mean * (1.0 - direct - isotropic) + seen


@njit(cache=True)
def begin_column(n, mu, weight, matrices, vectors, state):
    """An empty stack of layers: nothing seen yet, nothing in the way."""
    for i in range(n):
        vectors[_ONE, i] = math.sqrt(weight[i] * mu[i])
        vectors[_D, i], vectors[_WV, i] = 0.0, 0.0
        for j in range(n):
            matrices[_STACK, i, j] = 0.0
    state[0], state[1] = 0.0, 1.0


@njit(cache=True)
def add_clear_layer(n, tau, slant, above, below, bend, mu, one, stack, scattering, matrices, vectors, state):
    """Put an absorbing layer under the stack. state : view radiance, direct transmittance."""
    path = tau * slant
    absorbed = absorbed_fraction(path)
    along = absorbed * (above + (below - above) * far_weight(path, absorbed)) + bend * bend_weight(path, absorbed)
    state[0] += state[1] * along
    for i in range(n):
        depth = tau / mu[i]
        taken = absorbed_fraction(depth)
        far = far_weight(depth, taken)
        bent = bend * bend_weight(depth, taken)
        up = one[i] * (taken * (above + (below - above) * far) + bent)
        down = one[i] * (taken * (below + (above - below) * far) + bent)
        through = 1.0 - taken
        vectors[_U1, i] = through
        vectors[_U2, i] = up
        vectors[_U3, i] = down
        if scattering:
            state[0] += vectors[_WV, i] * up
            vectors[_WV, i] *= through
    for i in range(n):
        total = vectors[_D, i]
        if scattering:
            for j in range(n):
                total += stack[i, j] * vectors[_U2, j]
        vectors[_NEW, i] = vectors[_U1, i] * total + vectors[_U3, i]
    for i in range(n):
        vectors[_D, i] = vectors[_NEW, i]
        if scattering:
            for j in range(n):
                stack[i, j] *= vectors[_U1, i] * vectors[_U1, j]
    state[1] *= 1.0 - absorbed


@njit(cache=True)
def add_scattering_layer(n, direct, seen, stack, matrices, vectors, state):
    """Put the layer in the work space (operators and sources) under the stack."""
    t, r, g, m, m1 = matrices[_T], matrices[_R], matrices[_G], matrices[_M], matrices[_M1]
    for i in range(n):
        for j in range(n):
            m1[i, j] = 1.0 if i == j else 0.0
            for k in range(n):
                m1[i, j] -= r[i, k] * stack[k, j]
    inverse(m1, n, g)
    for i in range(n):
        vectors[_U1, i] = vectors[_SU, i]
        for k in range(n):
            vectors[_U1, i] += r[i, k] * vectors[_D, k]
    for i in range(n):
        vectors[_MM, i] = 0.0
        for j in range(n):
            vectors[_MM, i] += g[i, j] * vectors[_U1, j]
            m[i, j] = 0.0
            for k in range(n):
                m[i, j] += g[i, k] * t[k, j]
    gain = seen
    for i in range(n):
        gain += vectors[_VR, i] * vectors[_D, i]
        vectors[_U2, i] = vectors[_WV, i]
        for k in range(n):
            vectors[_U2, i] += state[1] * stack[k, i] * vectors[_VR, k]
    state[0] += state[1] * gain
    for i in range(n):
        state[0] += vectors[_U2, i] * vectors[_MM, i]
    for j in range(n):
        vectors[_WV, j] = state[1] * vectors[_VT, j]
        for i in range(n):
            vectors[_WV, j] += vectors[_U2, i] * m[i, j]
    for i in range(n):
        vectors[_U3, i] = vectors[_D, i]
        for k in range(n):
            vectors[_U3, i] += stack[i, k] * vectors[_MM, k]
    for i in range(n):
        vectors[_NEW, i] = vectors[_SD, i]
        for k in range(n):
            vectors[_NEW, i] += t[i, k] * vectors[_U3, k]
    for i in range(n):  # stack <- T stack M + R
        for j in range(n):
            m1[i, j] = 0.0
            for k in range(n):
                m1[i, j] += stack[i, k] * m[k, j]
    for i in range(n):
        vectors[_D, i] = vectors[_NEW, i]
        for j in range(n):
            stack[i, j] = r[i, j]
            for k in range(n):
                stack[i, j] += t[i, k] * m1[k, j]
    state[1] *= direct


@njit(cache=True)
def _interpolation_weights(n, mu, x, out):
    """Lagrange weights from the streams to the cosine x."""
    for i in range(n):
        out[i] = 1.0
        for j in range(n):
            if j != i:
                out[i] *= (x - mu[j]) / (mu[i] - mu[j])


@njit(cache=True)
def _surface(n, emitted, reflectance, beam, mirror, mu, view_cosine, stack, vectors, state):
    """Close the column with a surface that reflects diffusely.

    mirror : share of the downwelling that the view's direct path sees reflected like in a mirror (sea) [1]
    beam : radiance of reflected sunlight; what of it goes straight to the view is left to the caller
    """
    one = vectors[_ONE]
    down, back = 0.0, 0.0
    for i in range(n):
        down += one[i] * vectors[_D, i]
        for j in range(n):
            back += one[i] * stack[i, j] * one[j]
    up = (emitted + beam + 2.0 * reflectance * down) / (1.0 - 2.0 * reflectance * back)
    seen = up - beam
    if mirror > 0.0:
        _interpolation_weights(n, mu, view_cosine, vectors[_U1])
        falling = 0.0
        for i in range(n):
            total = vectors[_D, i]
            for j in range(n):
                total += stack[i, j] * one[j] * up
            falling += vectors[_U1, i] * total / one[i]
        seen += mirror * (emitted + reflectance * max(falling, 0.0) - seen)
    state[0] += state[1] * seen
    for i in range(n):
        state[0] += vectors[_WV, i] * one[i] * up


@njit(cache=True)
def thermal_radiance(
    tau_gas, secant, cloud_tau, cloud_albedo, moments, planck_level, bend, planck_surface, emissivity, mirror,
    view_cosine, quad, work, state
):  # fmt: skip
    """Thermal radiance at the top of one column at one wavenumber, with multiple scattering.

    Parameters
    ----------
    tau_gas : (layers,) vertical absorption optical depth of gases, top -> surface
    secant : (layers,) of the view direction
    cloud_tau, cloud_albedo : (layers,) extinction optical thickness and single-scattering albedo of condensate
    moments : (layers, > 2 streams) Legendre moments of its phase function, moments[:, 0] = 1
    planck_level : (layers + 1,); bend : (layers,) of the source in clear layers (see absorbing.source_bend)
    planck_surface, emissivity : of the surface
    mirror : 0 for a surface that reflects diffusely, 1 where the direct path sees a mirror (sea)
    view_cosine : at the surface
    quad : from `quadrature`; work : from `work_arrays`; state : (2,) work

    Returns
    -------
    radiance
    """
    mu, weight, legendre = quad
    matrices, vectors = work
    n = mu.size
    stack, scaled = matrices[_STACK], np.empty(2 * n)
    view_legendre = np.empty(2 * n)
    associated_legendre(0, 2 * n, view_cosine, view_legendre)
    begin_column(n, mu, weight, matrices, vectors, state)
    scattering = False
    for j in range(tau_gas.size):
        total = tau_gas[j] + cloud_tau[j]
        albedo = cloud_tau[j] * cloud_albedo[j] / total if total > 0.0 else 0.0
        if albedo > 1e-9:
            tau, albedo, _ = delta_scaled(total, albedo, moments[j], 2 * n, scaled)
            direct = layer_operators(
                n, tau, albedo, scaled, 0, mu, weight, legendre[0], view_legendre, secant[j], matrices, vectors
            )
            seen = thermal_source(
                n, tau, albedo, secant[j], direct, planck_level[j], planck_level[j + 1], matrices, vectors
            )
            add_scattering_layer(n, direct, seen, stack, matrices, vectors, state)
            scattering = True
        elif total > 0.0:
            add_clear_layer(
                n, total, secant[j], planck_level[j], planck_level[j + 1], bend[j], mu, vectors[_ONE], stack,
                scattering, matrices, vectors, state
            )  # fmt: skip
    emitted = emissivity * planck_surface
    _surface(n, emitted, 1.0 - emissivity, 0.0, mirror, mu, view_cosine, stack, vectors, state)
    return state[0]
