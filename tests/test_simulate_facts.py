"""What every forecaster knows about these channels (common practice, unless a source is named)."""

import numpy as np
import pytest

import chansim
from chansim.scene.reference_atmosphere import reference_profile
from chansim.spectra.lineshape import WING_FORMS

P = np.concatenate([np.geomspace(100.0, 10000.0, 20)[:-1], np.linspace(10000.0, 101000.0, 45)])


def profile(kind="tropical"):
    """An AFGL 1986 atmosphere (packaged through joseki): temperature [K], specific humidity, ozone on P."""
    latitude, day = {"tropical": (0.0, 100), "winter": (65.0, 15), "summer": (45.0, 196)}[kind]
    reference = reference_profile(np.array([latitude]), day)

    def at(name):
        return np.interp(np.log(P), np.log(reference["pressure"]), reference[name][0])

    return at("temperature"), at("water_mole_fraction") * 0.622, at("ozone_mole_fraction")


def scene(
    kind="tropical", *, humidity=None, temperature=None, skin=None, surface=101000.0, land=0.0, latitude=0.0, **more
):
    t, q, o3 = profile(kind)
    t = t if temperature is None else temperature
    q = q if humidity is None else humidity
    return chansim.scene_from_profile(
        P,
        t,
        specific_humidity=q,
        ozone_mole_fraction=o3,
        latitude=latitude,
        longitude=0.0,
        surface_pressure=surface,
        skin_temperature=float(t[-1] + 1.0 if skin is None else skin),
        land_fraction=land,
        **more,
    )


def brightness(a_scene, tarn, field="brightness_temperature", **options):
    result = chansim.simulate(a_scene, tarn, **options)
    return {str(c): float(v) for c, v in zip(result.channel.values, result[field].values.reshape(-1))}


def layer(top_hpa, bottom_hpa, value):
    return np.where((P >= top_hpa * 100.0) & (P <= bottom_hpa * 100.0), value, 0.0)


def test_windows_over_warm_moist_sea(tarn):
    clear = brightness(scene(skin=300.7), tarn)
    assert 2.0 < 300.7 - clear["ir104"] < 7.0
    assert clear["ir104"] - clear["ir123"] > 1.0  # more water-vapour continuum at 12 um
    assert clear["sw038"] > clear["ir123"]


def test_water_vapour_channels_see_layers_in_order(tarn):
    for kind in ("tropical", "summer", "winter"):
        clear = brightness(scene(kind), tarn)
        assert 215.0 < clear["wv063"] < clear["wv069"] < clear["wv073"] < 270.0


def test_dry_subsiding_air_is_warmer_than_moist_ascent(tarn):
    _, q, _ = profile()
    dry, moist = (brightness(scene(humidity=np.where(P < 60000.0, factor * q, q)), tarn) for factor in (0.15, 1.6))
    assert dry["wv063"] > moist["wv063"] + 10.0 and dry["wv073"] > moist["wv073"] + 5.0
    assert abs(dry["ir104"] - moist["ir104"]) < 1.0


def test_low_water_cloud_reads_its_top(tarn):
    t, _, _ = profile()
    cloud = scene(cloud_liquid=layer(840.0, 900.0, 3e-4))
    top = np.interp(84000.0, P, t)
    got = brightness(cloud, tarn)
    assert got["ir104"] == pytest.approx(top, abs=2.5)
    assert got["wv063"] == pytest.approx(brightness(scene(), tarn)["wv063"], abs=0.1)  # hidden under vapour


def test_thick_high_cloud_is_cold_in_all_channels(tarn):
    t, _, _ = profile()
    got = brightness(scene(cloud_ice=layer(180.0, 450.0, 5e-4)), tarn)
    top = np.interp(18000.0, P, t)
    for channel in ("ir085", "ir104", "ir112", "ir123", "wv063", "wv069", "wv073"):
        assert top - 3.0 < got[channel] < top + 12.0, channel


def test_thin_cirrus_reads_warmer_than_itself(tarn):
    t, _, _ = profile()
    cirrus = scene(cloud_ice=layer(200.0, 260.0, 6e-6))
    got, clear = brightness(cirrus, tarn), brightness(scene(), tarn)
    assert got["ir104"] < clear["ir104"] - 2.0
    assert got["ir104"] > np.interp(22000.0, P, t) + 20.0
    # split window: the difference grows in thin cirrus
    assert got["ir104"] - got["ir123"] > clear["ir104"] - clear["ir123"]


def test_centre_of_the_carbon_dioxide_band_sees_the_stratosphere():
    narrow = {"co2_centre": (np.linspace(14.95, 15.05, 21), np.hanning(21) + 1e-3)}
    for kind in ("tropical", "summer"):
        assert 205.0 < brightness(scene(kind), narrow)["co2_centre"] < 245.0


def test_cold_plateau_under_warmer_air(tarn):
    t, q, _ = profile("winter")
    cold = scene("winter", skin=200.0, surface=65000.0, land=1.0, latitude=70.0)
    got = brightness(cold, tarn)
    assert got["co133"] > got["ir104"] + 3.0


def test_doubling_carbon_dioxide(tarn):
    once, twice = (brightness(scene(), tarn, settings=chansim.Settings(gases={"co2": x})) for x in (420e-6, 840e-6))
    assert -6.0 < twice["co133"] - once["co133"] < -1.0
    assert abs(twice["ir112"] - once["ir112"]) < 0.2
    # the weak CO2 bands at 9.4 and 10.4 um (where CO2 lasers work) reach into the 10.45 um channel
    assert -1.0 < twice["ir104"] - once["ir104"] < 0.0


def test_colder_toward_the_limb(tarn):
    down, slant = brightness(scene(), tarn), brightness(scene(), tarn, view=65.0)
    for channel in ("wv063", "wv073", "ir123", "co133", "ir104"):
        assert slant[channel] < down[channel] - 0.5, channel


def test_every_temperature_alike_reads_that_temperature(tarn):
    """An isothermal column over an equally warm black surface, cloud or none."""
    t = np.full(P.size, 270.0)
    # the air above the model top is the reference atmosphere; keep it out by a thick black cloud at the top
    for more in ({}, {"cloud_liquid": layer(300.0, 900.0, 5e-4)}):
        # absorbing: a scattering cloud mirrors a little of the cold sky
        got = brightness(
            scene(temperature=t, skin=270.0, **more),
            tarn,
            emissivity=np.ones(10),
            settings=chansim.Settings(solver="absorbing"),
        )
        for channel in ("ir104", "ir112"):
            assert got[channel] == pytest.approx(270.0, abs=0.15), channel


def test_subcolumns_bracket_clear_and_overcast(tarn):
    overcast = brightness(scene(cloud_liquid=layer(840.0, 900.0, 3e-4)), tarn)["ir104"]
    half = brightness(scene(cloud_liquid=layer(840.0, 900.0, 1.5e-4), cloud_fraction=layer(840.0, 900.0, 0.5)), tarn)[
        "ir104"
    ]
    clear = brightness(scene(), tarn)["ir104"]
    assert overcast < half < clear
    assert half == pytest.approx(0.5 * (overcast + clear), abs=0.5)


def test_water_cloud_at_night_reads_colder_in_the_shortwave(tarn):
    """Droplets emit less at 3.9 um than at 10-11 um: the way fog and stratus are seen at night."""
    got = brightness(scene(cloud_liquid=layer(860.0, 930.0, 3e-4)), tarn)
    assert -9.0 < got["sw038"] - got["ir104"] < -1.0


def test_thin_cirrus_at_night_reads_warmer_in_the_shortwave(tarn):
    """At 3.9 um the warm ground shines through thin cirrus more."""
    got = brightness(scene(cloud_ice=layer(200.0, 260.0, 1e-5)), tarn)
    clear = brightness(scene(), tarn)
    assert (got["sw038"] - got["ir112"]) - (clear["sw038"] - clear["ir112"]) > 3.0


def test_split_window_is_small_for_thick_cloud(tarn):
    thin, thick = (brightness(scene(cloud_ice=layer(200.0, 300.0, q)), tarn) for q in (1.5e-5, 8e-4))
    assert thin["ir104"] - thin["ir123"] > 2.0
    assert abs(thick["ir104"] - thick["ir123"]) < 1.5


def test_opaque_cloud_hides_the_ground_and_wisps_do_not(tarn):
    def effect(q):
        warm, cold = (
            brightness(scene(cloud_ice=layer(200.0, 300.0, q), skin=t), tarn)["ir104"] for t in (300.0, 295.0)
        )
        return warm - cold

    assert effect(1e-3) < 0.01 and effect(3e-6) > 1.5


def test_scattering_against_absorption(tarn):
    """Scattering makes every cloud look a little colder, at 3.9 um by kelvins."""
    cloud = scene(cloud_liquid=layer(860.0, 930.0, 3e-4))
    scattered, absorbed = (
        brightness(cloud, tarn, settings=chansim.Settings(solver=s)) for s in ("scattering", "absorbing")
    )
    assert -2.5 < scattered["ir104"] - absorbed["ir104"] < 0.0
    assert scattered["sw038"] - absorbed["sw038"] < -1.5
    many = brightness(cloud, tarn, settings=chansim.Settings(streams=8))
    # two streams a half-sphere: 0.2 K off in this cloud (docs/solvers.md)
    assert scattered["ir104"] == pytest.approx(many["ir104"], abs=0.25)


def test_subcolumns_converge(tarn):
    fraction = layer(300.0, 400.0, 0.3) + layer(840.0, 900.0, 0.6)
    cloud = scene(
        cloud_ice=layer(300.0, 400.0, 6e-5), cloud_liquid=layer(840.0, 900.0, 1.5e-4), cloud_fraction=fraction
    )
    got = {
        n: brightness(cloud, tarn, channels=["ir104"], settings=chansim.Settings(subcolumns=n))["ir104"]
        for n in (10, 20, 100, 400)
    }
    assert abs(got[100] - got[400]) < 0.2 and abs(got[20] - got[400]) < 1.0
    overlaps = {
        name: brightness(cloud, tarn, channels=["ir104"], settings=chansim.Settings(overlap=name, subcolumns=100))[
            "ir104"
        ]
        for name in ("maximum", "random", "maximum-random", "exponential-random")
    }
    # clouds that lie over each other cover least: maximum overlap is warmest
    assert overlaps["maximum"] == max(overlaps.values())
    # random overlap shuffles the levels within each cloud as well and covers most
    assert overlaps["random"] == min(overlaps.values())


def test_pure_lorentz_wings_make_the_shortwave_window_colder(line_folder):
    """Line by line at 2400-2420 cm-1, beyond the 4.3 um band head."""
    from chansim.spectra import absorption
    from chansim.spectra.lines import read_line_list

    lines = absorption.lines_acting_on(read_line_list(line_folder / "co2.par"), 2400.0, 2420.0, "lorentz")
    prepared = absorption.PreparedLines(lines, 270.0)
    mean = {
        form: absorption.cross_section(prepared, 2400.0, 2420.0, 20, 70000.0, 0.0, form).mean() for form in WING_FORMS
    }
    assert mean["lorentz"] > 3.0 * mean["perrin-hartmann"]  # more absorption aloft: emission from colder air
    assert mean["lorentz"] > 3.0 * mean["cousin"]
