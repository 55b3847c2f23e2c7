"""Channels: Planck function, band correction, nodes, cache; a real sensor's published constants."""

import numpy as np
import pytest
from scipy.optimize import curve_fit

from chansim import constants, planck
from chansim.channels import channel as channels
from chansim.channels.imager import load_imager
from chansim.channels.response import make_response
from chansim.errors import DataError, ResponseError


def test_constants_are_codata():
    # CODATA 2018 / SI 2019 through astropy
    from astropy import constants as codata

    assert constants.PLANCK == codata.h.value and constants.BOLTZMANN == codata.k_B.value
    assert constants.LIGHT_SPEED == codata.c.value and constants.AVOGADRO == codata.N_A.value


def test_planck_function_against_astropy():
    from astropy import units as u
    from astropy.modeling.models import BlackBody

    nu = np.array([700.0, 1000.0, 1600.0, 2600.0])
    for t in (190.0, 250.0, 310.0):
        flux = BlackBody(temperature=t * u.K)((nu / u.cm).to(u.Hz, u.spectral()))
        per_wavenumber = flux.to(u.W / u.m**2 / u.sr / u.Hz).value * constants.LIGHT_SPEED * 100.0 * 1e3
        np.testing.assert_allclose(planck.planck(nu, t), per_wavenumber, rtol=1e-9)


def test_wien_and_stefan_boltzmann():
    # Wien's law in wavenumber: nu_max = 1.961 cm-1 K-1 x T (handbook, e.g. Liou 2002); Stefan-Boltzmann constant CODATA
    nu = np.linspace(1.0, 6000.0, 60000)
    b = planck.planck(nu, 288.0)
    assert nu[b.argmax()] == pytest.approx(1.96100 * 288.0, rel=1e-3)
    assert np.pi * np.trapezoid(b, nu) * 1e-3 == pytest.approx(5.670374419e-8 * 288.0**4, rel=1e-4)


def test_brightness_temperature_inverts_planck():
    t = np.linspace(150.0, 350.0, 21)
    np.testing.assert_allclose(planck.brightness_temperature(900.0, planck.planck(900.0, t)), t, rtol=1e-12)
    slope = (planck.planck(900.0, 300.01) - planck.planck(900.0, 299.99)) / 0.02
    assert planck.planck_temperature_slope(900.0, 300.0) == pytest.approx(slope, rel=1e-7)


# U.S. Geological Survey, Landsat 8 Data Users Handbook: thermal constants K1 [W m-2 sr-1 um-1], K2 [K]
LANDSAT = {"10": (774.8853, 1321.0789), "11": (480.8883, 1201.1442)}


@pytest.mark.parametrize("band", ["10", "11"])
def test_published_thermal_constants_of_a_real_sensor(band):
    wavelength_um, response = pyrsr_band(band)
    made = make_response(wavelength_um, response, f"band {band}", "um")
    t = np.arange(240.0, 321.0, 5.0)
    nu, r = channels._refined(made.wavenumber, made.response)
    # per um: the response-weighted radiance per wavelength
    width_um = abs(np.trapezoid(r, 1e4 / nu))
    radiance = np.trapezoid(r * planck.planck(nu, t[:, None]), nu) * 1e-3 / width_um
    k1, k2 = LANDSAT[band]
    np.testing.assert_allclose(k2 / np.log(k1 / radiance + 1.0), t, atol=0.2)  # an independent trial gave 0.11-0.13 K
    (f1, f2), _ = curve_fit(lambda x, a, b: b / np.log(a / x + 1.0), radiance, t, p0=(k1, k2))
    np.testing.assert_allclose(f2 / np.log(f1 / radiance + 1.0), t, atol=0.01)


def pyrsr_band(band):
    from pyrsr import RSR

    rsr = RSR("Landsat-8", "OLI_TIRS", wvl_unit="nanometers")
    return np.asarray(rsr.rsrs_wvl, dtype=float) * 1e-3, np.asarray(rsr.rsrs[band], dtype=float)


def test_all_ten_channels_are_well_fitted(tarn):
    assert len(tarn.channels) == 10
    counts = [c.node_wavenumber.size for c in tarn.channels]
    assert max(counts) <= 20 and np.median(counts) <= 10
    for c in tarn.channels:
        assert c.fit_error < 0.035, c.id
        assert (c.node_weight > 0).all()


@pytest.mark.parametrize("index", range(10))
def test_channel_contract(tarn, index):
    """What every channel must do."""
    c = tarn.channels[index]
    t = np.array([180.0, 220.0, 260.0, 300.0, 320.0])
    # exact inverse
    np.testing.assert_allclose(c.brightness_temperature(c.radiance(t)), t, atol=1e-6)
    # the nodes carry the Planck function of the response
    nu, r = channels._refined(c.response_wavenumber, c.response)
    truth = channels.band_average(nu, r, planck.planck(nu, t[:, None]))
    scale = channels.band_average(nu, r, planck.planck_temperature_slope(nu, t[:, None]))
    assert np.abs((c.radiance(t) - truth) / scale)[1:].max() < 0.02
    # the linear band correction
    equivalent = planck.brightness_temperature(c.central_wavenumber, truth)
    assert np.abs((equivalent - c.band_offset) / c.band_slope - t).max() <= c.band_residual + 1e-3 < 0.02
    assert c.node_wavenumber.min() >= c.response_wavenumber[0] - 10.0
    assert c.node_wavenumber.max() <= c.response_wavenumber[-1] + 10.0
    assert np.isnan(c.brightness_temperature(-1.0))


def test_ramp_projection_keeps_area_and_centre():
    nu = np.linspace(900.0, 980.0, 161)
    r = np.exp(-(((nu - 941.0) / 22.0) ** 4))
    knots = np.arange(650.0, 2851.0, 5.0)
    values = channels.ramp_projection(nu, r, knots)
    fine = np.linspace(880.0, 1000.0, 12001)
    back = np.interp(fine, knots, values)
    assert np.trapezoid(back, fine) == pytest.approx(np.trapezoid(r, nu), rel=1e-3)
    assert np.trapezoid(back * fine, fine) / np.trapezoid(back, fine) == pytest.approx(
        np.trapezoid(r * nu, nu) / np.trapezoid(r, nu), abs=0.02
    )


def test_cache_gives_the_same_channel(tmp_path, monkeypatch):
    monkeypatch.setenv("CHANSIM_CACHE", str(tmp_path))
    response = make_response(np.linspace(10.9, 11.3, 21), np.hanning(21) + 1e-3, "narrow", "um")
    first = channels.ready_channel(response)
    files = list(tmp_path.rglob("*.npz"))
    assert len(files) == 1
    again = channels.ready_channel(response)
    np.testing.assert_array_equal(first.log_tables, again.log_tables)
    assert again.id == first.id and again.notes == first.notes and again.fit_error == first.fit_error
    files[0].write_bytes(b"damaged")
    np.testing.assert_array_equal(channels.ready_channel(response).node_weight, first.node_weight)


def test_unwritable_cache_warns_and_goes_on(tmp_path, monkeypatch):
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("CHANSIM_CACHE", str(tmp_path / "file"))
    response = make_response(np.linspace(10.9, 11.3, 21), np.hanning(21) + 1e-3, "narrow", "um")
    with pytest.warns(UserWarning, match="CHANSIM_CACHE"):
        assert channels.ready_channel(response).node_wavenumber.size > 1


def test_unknown_channel_and_imager_list_what_exists(tarn):
    with pytest.raises(ResponseError, match="wv063, wv069"):
        load_imager(tarn, ["ir999"])
    with pytest.raises(ResponseError, match="tarn"):
        load_imager("no such imager")


def test_imager_from_arrays_and_folder(tmp_path):
    wavelength = np.linspace(10.9, 11.3, 21)
    imager = load_imager({"mine": (wavelength, np.hanning(21) + 1e-3)})
    assert imager.channels[0].id == "mine"
    (tmp_path / "r.txt").write_text("\n".join(f"{a} {b}" for a, b in zip(wavelength, np.hanning(21) + 1e-3)))
    (tmp_path / "imager.toml").write_text('id = "own"\n[[channel]]\nid = "a"\nresponse = "r.txt"\n')
    assert load_imager(tmp_path).channel("a").central_wavelength_um == pytest.approx(11.1, abs=0.02)
    (tmp_path / "imager.toml").write_text("id = 1\n[[channel]]\n")
    with pytest.raises(ResponseError, match="not an imager description"):
        load_imager(tmp_path)


def test_missing_and_damaged_atlas(tmp_path):
    from chansim.channels.atlas import load_atlas

    with pytest.raises(DataError, match="chansim.spectra.atlas"):
        load_atlas(tmp_path / "none.nc")
    (tmp_path / "bad.nc").write_bytes(b"\x89HDF not really")
    with pytest.raises(DataError, match="damaged"):
        load_atlas(tmp_path / "bad.nc")
