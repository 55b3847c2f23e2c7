"""Sunlight in random cloudy columns, and the same by PythonicDISORT, an independent discrete-ordinate package."""

import warnings

import numpy as np
from scattering_samples import ours as night_ours
from scattering_samples import random_column, view_cosines
from scattering_samples import theirs as night_theirs

from chansim.planck import planck
from chansim.transfer.scattering import quadrature
from chansim.transfer.sunlight import solar_radiance, work_arrays
from chansim.view.solar_irradiance import solar_irradiance

CHANNEL = "3.85"
STREAMS = 16  # of the independent solver, for each half-sphere


def random_sun(rng):
    """Cosine of the solar zenith angle (0-80 degrees), azimuth between imager and sun [degrees]."""
    return np.cos(np.radians(rng.uniform(0.0, 80.0))), rng.uniform(0.0, 180.0)


def phase_function(column, mu, sun, azimuth):
    """Phase function of each layer, summed from all its moments."""
    cosine = -mu * sun - np.sqrt((1.0 - mu * mu) * (1.0 - sun * sun)) * np.cos(np.radians(azimuth))
    degree = np.arange(column["moments"].shape[1])
    return np.polynomial.legendre.legval(cosine, ((2 * degree + 1) * column["moments"]).T)


def ours(column, mu, sun, azimuth, streams):
    """Radiance for unit irradiance; the ground reflects diffusely [sr-1]."""
    n, reflectance = column["gas"].size, 1.0 - column["emissivity"]
    return solar_radiance(
        column["gas"], np.full(n, 1.0 / mu), column["tau"], column["albedo"], column["moments"],
        phase_function(column, mu, sun, azimuth), sun, np.cos(np.radians(azimuth)), reflectance, reflectance / np.pi,
        mu, quadrature(streams), work_arrays(streams, n))  # fmt: skip


def theirs(column, mu, sun, azimuth):
    """The same by PythonicDISORT with 32 streams and the correction for light scattered once [sr-1]."""
    from PythonicDISORT import pydisort

    total = column["gas"] + column["tau"]
    albedo = np.minimum(column["tau"] * column["albedo"] / total, 1.0 - 1e-9)
    moments = np.minimum(column["moments"], 1.0 - 1e-12)
    moments[:, 0] = 1.0
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        result = pydisort(
            np.cumsum(total), albedo, 2 * STREAMS, moments, sun, 1.0, 0.0, NLeg=2 * STREAMS, NFourier=2 * STREAMS,
            f_arr=moments[:, 2 * STREAMS].copy(), NT_cor=True, BDRF_Fourier_modes=[1.0 - column["emissivity"]],
        )  # fmt: skip
    radiance = np.ravel(result[4](0.0, np.radians(180.0 - azimuth)))
    return float(radiance[int(np.argmin(np.abs(quadrature(STREAMS)[0] - mu)))])


def relative_errors(count, seed, streams):
    """Relative error of the radiance by day, thermal and solar, of random columns [1]."""
    rng = np.random.default_rng(seed)
    cosines = view_cosines(STREAMS)
    out = []
    for _ in range(count):
        column = random_column(rng, CHANNEL)
        mu = cosines[column["angle"] % cosines.size]
        sun, azimuth = random_sun(rng)
        nu = column["wavenumber"]
        irradiance = float(solar_irradiance(nu))
        ours_total = irradiance * ours(column, mu, sun, azimuth, streams) + planck(nu, night_ours(column, mu, 2))
        theirs_total = irradiance * theirs(column, mu, sun, azimuth) + planck(nu, night_theirs(column, mu))
        out.append(ours_total / theirs_total - 1.0)
    return np.array(out)
