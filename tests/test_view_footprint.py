"""Footprint, noise and counts against sums by hand, statistics and plain convolution."""

import numpy as np
import pytest
import xarray as xr
from scipy.ndimage import convolve

from chansim import load_imager
from chansim.errors import ViewError
from chansim.view.footprint import (
    add_noise,
    average_footprint,
    average_pixels,
    footprint_weights,
    noise_radiance,
    quantise,
)

CHANNELS = load_imager("tarn").channels
WINDOW = next(c for c in CHANNELS if c.id == "ir104")
SHORT = next(c for c in CHANNELS if c.kind == "shortwave")


def picture(temperature, channels=(WINDOW,)):
    """What `simulate` gives, with nothing but what is needed."""
    temperature = np.broadcast_to(np.asarray(temperature, dtype=float), (len(channels), *np.shape(temperature)[-2:]))
    radiance = np.stack([c.radiance(t) for c, t in zip(channels, temperature)])
    rows, columns = temperature.shape[-2:]
    latitude, longitude = np.meshgrid(np.linspace(10, 20, rows), np.linspace(175, 185, columns), indexing="ij")
    dims = ("channel", "y", "x")
    return xr.Dataset(
        {
            "brightness_temperature": (dims, temperature.astype("f4"), {"units": "K"}),
            "brightness_temperature_clear": (dims, temperature.astype("f4")),
            "radiance": (dims, radiance.astype("f4")),
            "land_fraction": (dims[1:], np.zeros((rows, columns), "f4")),
        },
        coords={
            "channel": [c.id for c in channels],
            "y": np.arange(rows) * 1.0,
            "x": np.arange(columns) * 2.0,
            "latitude": (dims[1:], latitude),
            "longitude": (dims[1:], longitude),
        },
        attrs={"title": "made up"},
    )


def test_box_averages_radiance_not_temperature():
    """Half of a pixel at 220 K, half at 300 K: the radiance is the mean of the two, the temperature well above
    260 K (Planck's law is convex)."""
    fine = picture(np.tile([[220.0, 300.0], [220.0, 300.0]], (3, 4)))
    coarse = average_footprint(fine, CHANNELS, 2)
    assert coarse["brightness_temperature"].shape == (1, 3, 4)
    expected = 0.5 * float(WINDOW.radiance(220.0) + WINDOW.radiance(300.0))
    np.testing.assert_allclose(coarse["radiance"], expected, rtol=1e-6)
    np.testing.assert_allclose(coarse["brightness_temperature"], WINDOW.brightness_temperature(expected), atol=1e-3)
    np.testing.assert_allclose(coarse["brightness_temperature_clear"], coarse["brightness_temperature"], atol=1e-3)
    assert float(coarse["brightness_temperature"][0, 0, 0]) > 265.0
    assert coarse.attrs["title"] == "made up" and "2 x 2" in coarse.attrs["footprint"]
    np.testing.assert_allclose(coarse["x"], [1.0, 5.0, 9.0, 13.0])
    np.testing.assert_allclose(coarse["latitude"][:, 0], fine["latitude"][:, 0].values.reshape(3, 2).mean(1), atol=0.02)
    np.testing.assert_allclose(coarse["longitude"][0], fine["longitude"][0].values.reshape(4, 2).mean(1), atol=1e-6)


def test_averaging_keeps_the_mean_and_a_uniform_scene():
    rng = np.random.default_rng(0)
    values = rng.uniform(50.0, 120.0, (2, 30, 24))
    mean = average_pixels(values, 6, footprint_weights(6))
    np.testing.assert_allclose(mean.mean(axis=(1, 2)), values.mean(axis=(1, 2)))
    np.testing.assert_allclose(mean[1, 2, 3], values[1, 12:18, 18:24].mean())
    for factor in (1, 2, 5):
        weights = footprint_weights(factor, "gaussian", 1.5)
        np.testing.assert_allclose(average_pixels(np.full((20, 10), 7.0), factor, weights), 7.0)


def test_gaussian_against_plain_convolution():
    """scipy's direct convolution with the outer product of the weights, sampled at the pixel centres."""
    rng = np.random.default_rng(1)
    values = rng.uniform(0.0, 1.0, (45, 60))
    weights = footprint_weights(3, "gaussian", 1.2)
    assert weights.size % 2 == 1 and weights.sum() == pytest.approx(1.0)
    full = convolve(values, np.outer(weights, weights), mode="constant")
    share = convolve(np.ones_like(values), np.outer(weights, weights), mode="constant")
    np.testing.assert_allclose(average_pixels(values, 3, weights), (full / share)[1::3, 1::3], rtol=1e-12)


def test_width_of_the_gaussian():
    """At half the full width at half maximum the weight is half of that at the centre."""
    weights = footprint_weights(100, "gaussian", 1.0)
    offset = (np.arange(weights.size) - (weights.size - 1) / 2.0) / 100.0
    assert np.interp(0.5, offset, weights / weights.max()) == pytest.approx(0.5, abs=0.001)
    assert footprint_weights(4, "gaussian").size % 2 == 0  # symmetric about the centre of an even pixel


def test_missing_values():
    """Less than half of a footprint missing: mean of the rest; more: missing."""
    values = np.full((2, 4), 10.0)
    values[0, 0] = np.nan
    values[:, 2] = values[0, 3] = np.nan
    np.testing.assert_array_equal(average_pixels(values, 2, footprint_weights(2)), [[10.0, np.nan]])


def test_noise_has_the_size_asked_for():
    """Standard deviation of the brightness temperature of a scene at the reference temperature is NEdT; a scene at
    220 K is noisier by the ratio of dB/dT (about 2.3 at 10.4 um, far more at 3.85 um)."""
    channels = (WINDOW, SHORT)
    noisy = add_noise(picture(np.full((300, 300), 300.0), channels), CHANNELS, 0.1, seed=3)
    deviation = noisy["brightness_temperature"].std(("y", "x")).values
    np.testing.assert_allclose(deviation, 0.1, rtol=0.02)  # 300 x 300 values: standard error 0.24 %
    np.testing.assert_allclose(noisy["brightness_temperature"].mean(("y", "x")), 300.0, atol=0.003)
    cold = add_noise(picture(np.full((300, 300), 220.0), channels), CHANNELS, 0.1, seed=3)
    ratio = float(cold["brightness_temperature"].std(("y", "x"))[0]) / 0.1
    slope = [float(WINDOW.radiance(t + 0.05) - WINDOW.radiance(t - 0.05)) for t in (300.0, 220.0)]
    assert ratio == pytest.approx(slope[0] / slope[1], rel=0.02)
    assert noise_radiance(WINDOW, 0.2, 300.0) == pytest.approx(2 * slope[0], rel=1e-4)
    assert "ir104 0.1 K" in noisy.attrs["noise"] and "seed 3" in noisy.attrs["noise"]


def test_noise_is_repeatable():
    """The same seed gives the same noise, whatever other channels are there; another seed another."""
    both = add_noise(picture(np.full((20, 20), 280.0), (SHORT, WINDOW)), CHANNELS, {"ir104": 0.1, SHORT.id: 0.2})
    alone = add_noise(picture(np.full((20, 20), 280.0)), CHANNELS, 0.1)
    np.testing.assert_array_equal(both["radiance"].sel(channel="ir104"), alone["radiance"].sel(channel="ir104"))
    other = add_noise(picture(np.full((20, 20), 280.0)), CHANNELS, 0.1, seed=1)
    assert not np.allclose(alone["radiance"], other["radiance"])


def test_cold_scene_without_signal():
    """At 3.85 um a cloud top at 190 K gives less than the noise: negative radiances stay, temperatures end at 100 K
    and are counted; missing values stay missing."""
    temperature = np.full((50, 50), 190.0)
    temperature[0, 0] = np.nan
    noisy = add_noise(picture(temperature, (SHORT,)), CHANNELS, 0.2)
    assert (noisy["radiance"] < 0.0).any()
    found = noisy["brightness_temperature"].values[0]
    assert np.isnan(found[0, 0]) and np.isfinite(found).sum() == 2499
    assert found[np.isfinite(found)].min() == pytest.approx(100.0, abs=0.01)
    assert "without signal" in noisy.attrs["noise"]


def test_quantisation():
    """12 bits from 0 to the radiance of 330 K: at most half a step away; warmer saturates."""
    temperature = np.linspace(200.0, 340.0, 1000).reshape(20, 50)
    counted = quantise(picture(temperature), CHANNELS, 12, warmest=330.0)
    step = float(WINDOW.radiance(330.0)) / 4095
    exact = WINDOW.radiance(temperature)
    inside = temperature < 330.0
    assert np.abs(counted["radiance"].values[0] - exact)[inside].max() < 0.501 * step
    np.testing.assert_allclose(counted["radiance"].values[0] / step % 1.0 + 1e-3, 1e-3, atol=2e-3)
    assert counted["brightness_temperature"].max() == pytest.approx(330.0, abs=1e-3)
    assert f"{int((~inside).sum())} values saturated" in counted.attrs["quantisation"]
    assert np.unique(counted["radiance"]).size < 1000


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda p: average_footprint(p, CHANNELS, 3), "cannot be divided"),
        (lambda p: average_footprint(p, CHANNELS, 2, spread="triangle"), "unknown spread"),
        (lambda p: average_footprint(p, CHANNELS, 2, spread="gaussian", width=0.0), "width"),
        (lambda p: average_footprint(p, [], 2), "ir104"),
        (lambda p: footprint_weights(1.5), "whole number"),
        (lambda p: add_noise(p, CHANNELS, -0.1), "nedt"),
        (lambda p: add_noise(p, CHANNELS, {"other": 0.1}), "no value for channel ir104"),
        (lambda p: add_noise(p, CHANNELS, 0.1, reference_temperature=30.0), "150 to 400"),
        (lambda p: quantise(p, CHANNELS, 30), "bits"),
        (lambda p: quantise(p, CHANNELS, 10, warmest=20.0), "warmest"),
    ],
)
def test_bad_input(call, message):
    with pytest.raises(ViewError, match=message):
        call(picture(np.full((4, 4), 280.0)))
