"""Results as files: CF-1.11, placed by general readers, times on one scale."""

import numpy as np
import pyproj
import pytest
import xarray as xr
from cf_checks import complaints
from imaging_samples import MAPPINGS, make_result
from satellite_samples import disk_picture, sector_picture
from view_samples import scene_on

import chansim
from chansim.errors import OutputError
from chansim.output import cf_ready, write_dataset
from chansim.view.fixed_grid import grid_of_file


def as_simulated(kind):
    """A result by the whole way, on one of the kinds of model grids."""
    settings = chansim.Settings(solver="absorbing", subcolumns=1)
    return chansim.simulate(scene_on(kind, step=2.0), "tarn", channels=["ir104"], settings=settings)


@pytest.mark.parametrize("kind", ["sector", "disk", "regular", "lambert", "curvilinear", "cells"])
def test_cf_checker_has_nothing_to_say(tmp_path, kind):
    pictures = {"sector": sector_picture, "disk": disk_picture}
    result = pictures[kind]() if kind in pictures else as_simulated(kind)
    path = write_dataset(result, tmp_path / "a.nc")
    assert not complaints(path)


def test_cf_checker_does_see_faults(tmp_path):
    wrong = sector_picture().copy()
    wrong["radiance"] = wrong["radiance"].assign_attrs(standard_name="toa_glow", units="glowworms")
    assert any("glow" in m for m in complaints(write_dataset(wrong, tmp_path / "a.nc")))


@pytest.mark.parametrize("suffix", [".nc", ".zarr"])
def test_every_field_on_the_pixels_names_its_grid_mapping(tmp_path, suffix):
    path = write_dataset(sector_picture(), tmp_path / f"a{suffix}")
    engine = {"engine": "netcdf4"} if suffix == ".nc" else {"engine": "zarr", "consolidated": False}
    with xr.open_dataset(path, decode_coords=False, **engine) as raw:
        fields = [
            n for n, v in raw.variables.items() if v.dims[-2:] == ("y", "x") and n not in ("latitude", "longitude")
        ]
        assert {"view_zenith_angle", "view_azimuth_angle", "land_fraction", "brightness_temperature"} <= set(fields)
        for name in fields:
            assert raw[name].attrs["grid_mapping"] == "grid_mapping"
            assert {"latitude", "longitude"} <= set(raw[name].attrs["coordinates"].split())
        for name in ("x", "y"):
            assert "_FillValue" not in raw[name].attrs and raw[name].attrs["units"] == "rad"
            assert raw[name].attrs["standard_name"] == f"projection_{name}_angular_coordinate"
        assert raw["time"].encoding["units"].startswith("seconds since 1970-01-01") and raw["time"].ndim == 0
        assert raw.attrs["Conventions"].startswith("CF-1.11") and "not an observation" in raw.attrs["summary"]
        assert raw.attrs["time_coverage_start"] == "2026-01-21T00:00:00Z"
        assert raw.attrs["geospatial_lat_min"] == pytest.approx(float(sector_picture().latitude.min()))


@pytest.mark.parametrize("sweep", ["x", "y"])
def test_general_libraries_find_the_pixels(tmp_path, sweep):
    path = write_dataset(sector_picture(sweep), tmp_path / "a.nc")
    with xr.open_dataset(path, engine="netcdf4") as read:
        crs = pyproj.CRS.from_cf(read["grid_mapping"].attrs)
        height = read["grid_mapping"].attrs["perspective_point_height"]
        x, y = np.meshgrid(read["x"] * height, read["y"] * height)
        longitude, latitude = pyproj.Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform(x, y)
        seen = np.isfinite(read["latitude"].values)
        np.testing.assert_allclose(latitude[seen], read["latitude"].values[seen], atol=1e-8)
        np.testing.assert_allclose(longitude[seen], read["longitude"].values[seen], atol=1e-8)
        grid = grid_of_file(read)
    assert grid.sweep == sweep and grid.longitude == 40.0
    np.testing.assert_array_equal(grid.x, sector_picture(sweep).x)


@pytest.mark.parametrize("kind", MAPPINGS)
def test_grid_mappings_survive(tmp_path, kind):
    result = make_result(kind)
    with xr.open_dataset(write_dataset(result, tmp_path / "a.nc"), engine="netcdf4") as read:
        before, after = (pyproj.CRS.from_cf(d["grid_mapping"].attrs) for d in (result, read))
        assert before == after
        xr.testing.assert_equal(read["brightness_temperature"], result["brightness_temperature"])


def test_the_result_itself_is_left_alone():
    result = sector_picture()
    before = dict(result.attrs), dict(result["latitude"].attrs)
    ready = cf_ready(result)
    assert (dict(result.attrs), dict(result["latitude"].attrs)) == before
    assert ready["channel"].attrs["standard_name"] == "sensor_band_identifier"


def test_a_folder_that_cannot_be_written(tmp_path, monkeypatch):
    import chansim.output

    def refuse(**options):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(chansim.output.tempfile, "mkdtemp", refuse)
    with pytest.raises(OutputError, match="a.nc: cannot be written .Permission denied"):
        write_dataset(sector_picture(), tmp_path / "a.nc")
    monkeypatch.setattr(chansim.output.os, "access", lambda *a: False)
    with pytest.raises(OutputError, match="is not writable"):
        write_dataset(sector_picture(), tmp_path / "a.nc")
