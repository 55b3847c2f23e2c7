"""Pictures on the pixels of a geostationary imager."""

import numpy as np
import pytest
from satellite_samples import FAST, demo_scene, disk_picture, sector_picture

import chansim
import chansim.satellite
from chansim.errors import ViewError
from chansim.satellite import Detector, memory_needed, simulate_on_grid
from chansim.view.fixed_grid import full_disk, grid_of_file, sector
from chansim.view.slant import scene_on_grid


def small(resolution=250e3):
    return sector(40.0, resolution, west=25.0, east=55.0, south=0.0, north=30.0)


def simulate_small(**options):
    return simulate_on_grid(demo_scene(), small(), channels=["ir104"], settings=FAST, **options)


def test_sector_is_what_the_steps_give_one_by_one():
    pixels = scene_on_grid(demo_scene(), small())
    by_hand = chansim.simulate(pixels, "tarn", channels=["ir104"], view=pixels, settings=FAST)
    picture = simulate_small()
    np.testing.assert_array_equal(picture.brightness_temperature, by_hand.brightness_temperature)
    assert picture.attrs["view"].startswith("geostationary fixed grid, sub-satellite longitude 40 degrees east")
    assert picture.attrs["view"].endswith("slanted columns of the scene, nearest")
    assert {"view_zenith_angle", "view_azimuth_angle"} <= set(picture.data_vars)


def test_slanted_columns_differ_from_vertical_ones():
    slanted, vertical = sector_picture(), simulate_on_grid(
        demo_scene(), grid_of_file(sector_picture()), channels=["wv063", "ir104"], settings=FAST, columns="vertical"
    )  # fmt: skip
    assert "vertical columns" in vertical.attrs["view"]
    difference = np.abs(slanted.brightness_temperature - vertical.brightness_temperature).sel(channel="ir104")
    assert float(difference.max()) > 5.0


def test_space_and_what_lies_outside_the_domain_are_missing_and_counted_apart():
    picture = disk_picture()
    space = ~np.isfinite(picture.latitude.values)
    seen = np.isfinite(picture.brightness_temperature.values[0])
    assert space.any() and seen.any() and not (space & seen).any()
    assert picture.attrs["space_pixels"] == space.sum()
    assert picture.attrs["masked_columns"] == (~space & ~seen).sum()
    inside = (picture.latitude > 0.0) & (picture.latitude < 40.0) & (abs(picture.longitude - 40.0) < 25.0)
    assert seen[inside.values].all()


@pytest.mark.parametrize("spread", [None, 1.5])
def test_footprint_in_blocks_is_the_footprint_of_the_whole(monkeypatch, spread):
    """The blocks know their neighbours: the same picture from one block and from blocks of two rows."""
    detector = Detector(subpixels=2, point_spread=spread)
    whole = simulate_small(detector=detector)
    monkeypatch.setattr(chansim.satellite, "SUBPIXELS_AT_ONCE", 2 * 4 * small().shape[1])
    blocks = simulate_small(detector=detector)
    for name in ("brightness_temperature", "radiance", "view_zenith_angle"):
        np.testing.assert_allclose(blocks[name], whole[name], rtol=1e-5)
    assert float(np.isfinite(whole.brightness_temperature).mean()) > 0.8
    np.testing.assert_array_equal(whole.x, small().x)
    one_ray = simulate_small()
    assert float(np.abs(whole.brightness_temperature - one_ray.brightness_temperature).max()) > 1.0
    assert grid_of_file(whole).shape == small().shape


def test_noise_and_counts():
    plain = simulate_small()
    noisy = simulate_small(detector=Detector(noise={"ir104": 0.5}, seed=3, bits=8))
    spread = (noisy.brightness_temperature - plain.brightness_temperature).values
    warm = plain.brightness_temperature.values > 285.0
    assert 0.25 < np.nanstd(spread[warm]) < 0.9
    assert "seed 3" in noisy.attrs["noise"] and "8 bits" in noisy.attrs["quantisation"]


@pytest.mark.parametrize(
    "detector, words",
    [
        (Detector(point_spread=1.2), "needs sub-pixels"),
        (Detector(subpixels=0), "1 to 20"),
        (Detector(noise={"wv063": 1.0}), "no value for channel ir104"),
        (Detector(bits=3), "6 to 16"),
    ],
)
def test_impossible_detectors(detector, words):
    with pytest.raises(ViewError, match=words):
        simulate_small(detector=detector)


def test_satellite_that_does_not_see_the_domain_is_told_a_better_place():
    with pytest.raises(ViewError, match=r"sees no part of the scene; sub-satellite longitudes from .* 4\d degrees"):
        simulate_on_grid(demo_scene(), full_disk(-140.0, 200e3), channels=["ir104"], settings=FAST)


def test_a_lazy_picture_is_not_traced_twice(monkeypatch):
    """Everything of the result is there when it is made; a large picture stays lazy until then."""
    monkeypatch.setattr("chansim.view.slant._IN_MEMORY", 0.0)
    lazy = simulate_small()
    assert not any(v.chunks for v in lazy.variables.values())
    monkeypatch.undo()
    np.testing.assert_array_equal(lazy.brightness_temperature, simulate_small().brightness_temperature)
    np.testing.assert_array_equal(lazy.land_fraction, simulate_small().land_fraction)
    assert lazy.attrs["masked_columns"] == simulate_small().attrs["masked_columns"]


def test_large_pictures_say_what_they_need():
    disk = full_disk(40.0, 4e3)
    assert 7e6 < np.prod(disk.shape) < 8e6
    # measured: 2.0 GB beside the scene for three channels
    assert memory_needed(disk, 3) == pytest.approx(2.0e9, rel=0.25)
    assert memory_needed(disk, 10, 3) > 1.5 * memory_needed(disk, 10)
