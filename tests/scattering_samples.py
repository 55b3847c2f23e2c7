"""Random cloudy columns and their radiance by PythonicDISORT, an independent discrete-ordinate package."""

import warnings

import numpy as np

from chansim.planck import brightness_temperature, planck
from chansim.transfer.scattering import quadrature, thermal_radiance, work_arrays

# wavenumber [cm-1], (albedo, asymmetry) of droplets and of ice, roughly those of the tables
CHANNELS = {
    "3.85": (2597.0, (0.90, 0.80), (0.75, 0.86)),
    "6.3": (1587.0, (0.70, 0.90), (0.62, 0.93)),
    "8.6": (1163.0, (0.72, 0.91), (0.62, 0.93)),
    "10.4": (957.0, (0.50, 0.92), (0.45, 0.95)),
    "12.3": (813.0, (0.40, 0.92), (0.52, 0.94)),
    "13.3": (752.0, (0.42, 0.91), (0.54, 0.93)),
}
_GAS = {  # total optical depth range (logarithmic) and scale height [km]
    "3.85": (0.03, 0.6, 3.0), "6.3": (3.0, 60.0, 1.7), "13.3": (0.5, 10.0, 3.8),
}  # fmt: skip
MOMENTS = 128


def random_column(rng, channel, layers=60):
    """One column: dict of arrays for `ours` and `theirs`."""
    nu, liquid, ice = CHANNELS[channel]
    z = np.concatenate([np.linspace(65.0, 20.0, 16)[:-1], np.linspace(20.0, 0.0, layers - 14)])
    ground = rng.uniform(255.0, 303.0)
    tropopause = 9.0 + 8.0 * (ground - 255.0) / 48.0
    t = np.maximum(np.where(z < tropopause, ground - 6.5 * z, ground - 6.5 * tropopause), 195.0)
    t = t + np.clip(z - 20.0, 0.0, 28.0) * 1.8 - np.clip(z - 48.0, 0.0, None) * 2.2
    low, high, scale = _GAS.get(channel, (0.02, 1.3, 1.3))
    gas = np.diff(np.exp(rng.uniform(np.log(low), np.log(high))) * np.exp(-z / scale))
    gas = np.maximum(gas, 1e-5)  # thinner layers with a slope of the source lose digits in the independent package
    middle = 0.5 * (z[1:] + z[:-1])
    tau, scattered, moments = np.zeros(gas.size), np.zeros(gas.size), np.zeros((gas.size, MOMENTS))
    kind = rng.choice(["liquid", "ice", "mixed", "multi"])
    thickness = 10 ** rng.uniform(-2.0, np.log10(50.0))
    parts = {"liquid": [("liquid", 1.0, 1.0, 3.5)], "ice": [("ice", 1.0, 7.0, tropopause)],
             "mixed": [("liquid", 0.6, 3.0, 6.0), ("ice", 0.4, 3.5, 7.0)],
             "multi": [("liquid", 0.5, 0.8, 2.0), ("ice", 0.5, 8.0, tropopause)]}[kind]  # fmt: skip
    for phase, share, base, top in parts:
        inside = (middle > base) & (middle < max(top, base + 1.0))
        weight = inside * rng.uniform(0.3, 1.0, gas.size)
        albedo, g = liquid if phase == "liquid" else ice
        albedo, g = albedo + rng.uniform(-0.07, 0.07), g + rng.uniform(-0.03, 0.03)
        part = thickness * share * weight / weight.sum()
        tau += part
        scattered += part * albedo
        moments += (part * albedo)[:, None] * g ** np.arange(MOMENTS)
    cloud = tau > 0.0
    albedo = np.where(cloud, scattered / np.where(cloud, tau, 1.0), 0.0)
    moments[cloud] /= scattered[cloud, None]
    return {"wavenumber": nu, "gas": gas, "tau": tau, "albedo": albedo, "moments": moments,
            "planck": planck(nu, t), "skin": planck(nu, ground + rng.normal(0.0, 5.0)),
            "emissivity": rng.uniform(0.85, 1.0), "angle": rng.integers(0, 1000)}  # fmt: skip


def view_cosines(streams):
    """Cosines of a discrete-ordinate grid with zenith below 65 degrees: there both give radiance without interpolation."""
    mu = quadrature(streams)[0]
    return mu[mu > np.cos(np.radians(65.0))]


def ours(column, mu, streams):
    """Brightness temperature by the scattering solver [K]."""
    n = column["gas"].size
    radiance = thermal_radiance(
        column["gas"], np.full(n, 1.0 / mu), column["tau"], column["albedo"], column["moments"], column["planck"],
        np.zeros(n), column["skin"], column["emissivity"], 0.0, mu, quadrature(streams), work_arrays(streams),
        np.zeros(2))  # fmt: skip
    return brightness_temperature(column["wavenumber"], radiance)


def theirs(column, mu, streams=16):
    """The same by PythonicDISORT with 2 x streams streams [K]."""
    from PythonicDISORT import pydisort

    total = column["gas"] + column["tau"]
    albedo = np.minimum(column["tau"] * column["albedo"] / total, 1.0 - 1e-9)
    bottom = np.cumsum(total)
    slope = np.diff(column["planck"]) / total
    source = np.stack([column["planck"][:-1] - slope * (bottom - total), slope], axis=1)
    moments = np.minimum(column["moments"], 1.0 - 1e-12)
    moments[:, 0] = 1.0
    reflectance = 1.0 - column["emissivity"]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        result = pydisort(bottom, albedo, 2 * streams, moments[:, : 2 * streams], 0.5, 0.0, 0.0, NFourier=1,
                          f_arr=moments[:, 2 * streams].copy(), b_pos=column["emissivity"] * column["skin"],
                          BDRF_Fourier_modes=[reflectance], s_poly_coeffs=source)  # fmt: skip
    radiance = result[3](0.0)[int(np.argmin(np.abs(quadrature(streams)[0] - mu)))]
    return brightness_temperature(column["wavenumber"], float(radiance))


def differences(channel, count, seed, streams):
    """Our brightness temperature minus theirs for random columns [K]."""
    rng = np.random.default_rng(seed)
    cosines = view_cosines(16)
    out = []
    for _ in range(count):
        column = random_column(rng, channel)
        mu = cosines[column["angle"] % cosines.size]
        out.append(ours(column, mu, streams) - theirs(column, mu))
    return np.array(out)
