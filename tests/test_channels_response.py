"""Response files as people send them."""

import numpy as np
import pytest
import xarray as xr

from chansim.channels.response import make_response, read_response
from chansim.errors import ResponseError

WAVELENGTH = np.linspace(10.0, 11.0, 41)
RESPONSE = np.exp(-(((WAVELENGTH - 10.45) / 0.2) ** 4))


def write(path, coordinate, response, comment="# made up", separator=" "):
    rows = [f"{a:.6f}{separator}{b:.6f}" for a, b in zip(coordinate, response)]
    path.write_text("\n".join([comment, *rows]) + "\n")
    return path


@pytest.mark.parametrize("unit, convert", [("um", lambda w: w), ("nm", lambda w: w * 1e3), ("cm-1", lambda w: 1e4 / w)])
@pytest.mark.parametrize("order", [1, -1])
@pytest.mark.parametrize("scale", [1.0, 87.3])
def test_units_order_and_normalisation_do_not_matter(tmp_path, unit, convert, order, scale):
    response = read_response(write(tmp_path / "r.txt", convert(WAVELENGTH)[::order], scale * RESPONSE[::order]))
    assert (np.diff(response.wavenumber) > 0).all() and response.response.max() == pytest.approx(1.0)
    reference = make_response(WAVELENGTH, RESPONSE, "r", "um")
    assert response.central_wavenumber == pytest.approx(reference.central_wavenumber, rel=1e-5)
    assert response.bandwidth == pytest.approx(reference.bandwidth, rel=1e-3)


@pytest.mark.parametrize(
    "comment, separator", [("! wavelength (nm)", ","), ("Wavelength [nm]; RSR", ";"), ("% nm", "\t")]
)
def test_comment_styles_and_separators(tmp_path, comment, separator):
    response = read_response(write(tmp_path / "r.csv", WAVELENGTH * 1e3, RESPONSE, comment, separator))
    assert 1e4 / response.central_wavenumber == pytest.approx(10.45, abs=0.01)


def dataset(units="um", name="wavelength"):
    coordinate = xr.DataArray(
        WAVELENGTH, dims="spectral", attrs={"units": units, "standard_name": "radiation_wavelength"}
    )
    return xr.Dataset(
        {"response": (("channel", "spectral"), np.stack([RESPONSE, RESPONSE**2]))},
        coords={name: coordinate, "channel": ["a", "b"]},
    )


def test_cf_netcdf(tmp_path):
    dataset().to_netcdf(tmp_path / "r.nc")
    assert read_response(tmp_path / "r.nc", "b").bandwidth < read_response(tmp_path / "r.nc", "a").bandwidth
    with pytest.raises(ResponseError, match="name one of: a, b"):
        read_response(tmp_path / "r.nc")
    dataset(units="furlong").to_netcdf(tmp_path / "odd.nc")
    with pytest.raises(ResponseError, match="furlong"):
        read_response(tmp_path / "odd.nc", "a")


@pytest.mark.parametrize(
    "coordinate, response, words",
    [
        ([], [], "no data"),
        ([10.0], [1.0], "1 point"),
        (WAVELENGTH, -RESPONSE, "nowhere positive"),
        (WAVELENGTH, np.where(WAVELENGTH > 10.9, -0.2, RESPONSE), "negative"),
        (WAVELENGTH, np.where(WAVELENGTH > 10.9, np.nan, RESPONSE), "not a finite number"),
        (WAVELENGTH * 0.0 + 10.0, RESPONSE, "occurs twice"),
        (WAVELENGTH / 20.0, RESPONSE, "fit no infrared unit"),
        (WAVELENGTH + 5.0, RESPONSE, "lies outside|does not overlap"),
        (WAVELENGTH[:-1], RESPONSE, "pair up"),
    ],
)
def test_impossible_responses_say_why(coordinate, response, words):
    with pytest.raises(ResponseError, match=words):
        make_response(coordinate, response, "r")


def test_visible_response_does_not_overlap():
    with pytest.raises(ResponseError, match="does not overlap"):
        make_response(np.linspace(0.6, 0.7, 20), np.ones(20), "red", "um")


def test_small_noise_is_clipped_and_noted():
    response = make_response(WAVELENGTH, np.where(WAVELENGTH > 10.9, -0.002, RESPONSE), "r", "um")
    assert response.response.min() == 0.0 and "negative" in response.notes[0]


@pytest.mark.parametrize(
    "text, words",
    [("", "no data"), ("10.0 abc\n", "two numbers"), ("\x00\x01\x02", "neither"), ("# only words\n", "no data")],
)
def test_files_that_are_no_tables(tmp_path, text, words):
    (tmp_path / "r.txt").write_text(text)
    with pytest.raises(ResponseError, match=words):
        read_response(tmp_path / "r.txt")


def test_missing_and_corrupt_files(tmp_path):
    with pytest.raises(ResponseError, match="no such file"):
        read_response(tmp_path / "nothing.txt")
    (tmp_path / "broken.nc").write_bytes(b"CDF\x01" + b"\xff" * 50)
    with pytest.raises(ResponseError, match="netCDF"):
        read_response(tmp_path / "broken.nc")
