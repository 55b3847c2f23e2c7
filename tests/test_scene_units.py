"""Units of model files. Factors: SI brochure (9th ed.), the udunits-2 manual's notation, NIST SP 811."""

import numpy as np
import pytest

import chansim  # noqa: F401
from chansim.errors import SceneError
from chansim.scene.units import convert, is_convertible, linear_conversion
from chansim.scene.variables import VARIABLES


@pytest.mark.parametrize(
    ("units", "target", "slope", "offset"),
    [
        ("kg kg-1", "kg kg-1", 1.0, 0.0),  # udunits
        ("kg kg**-1", "kg kg-1", 1.0, 0.0),  # GRIB tables
        ("kg.kg-1", "kg kg-1", 1.0, 0.0),  # udunits with a dot for the product
        ("kg kg^-1", "kg kg-1", 1.0, 0.0),
        ("g/kg", "kg kg-1", 1e-3, 0.0),
        ("mg kg-1", "kg kg-1", 1e-6, 0.0),
        ("hPa", "Pa", 100.0, 0.0),
        ("mb", "Pa", 100.0, 0.0),
        ("millibars", "Pa", 100.0, 0.0),
        ("kPa", "Pa", 1e3, 0.0),
        ("degC", "K", 1.0, 273.15),
        ("C", "K", 1.0, 273.15),
        ("deg C", "K", 1.0, 273.15),
        ("celsius", "K", 1.0, 273.15),
        ("degF", "K", 5.0 / 9.0, 459.67 * 5.0 / 9.0),  # NIST SP 811, B.8
        ("Kelvin", "K", 1.0, 0.0),
        ("deg_K", "K", 1.0, 0.0),
        ("%", "1", 0.01, 0.0),
        ("(0 - 1)", "1", 1.0, 0.0),  # GRIB table of ECMWF
        ("Proportion", "1", 1.0, 0.0),
        ("1e-6", "1", 1e-6, 0.0),
        ("ppmv", "1", 1e-6, 0.0),
        ("ppb", "1", 1e-9, 0.0),
        ("1e-9 mol mol-1", "1", 1e-9, 0.0),
        ("10^-6 mol/mol", "1", 1e-6, 0.0),
        ("gpm", "m", 1.0, 0.0),
        ("dam", "m", 10.0, 0.0),
        ("m**2 s**-2", "m2 s-2", 1.0, 0.0),
        ("J kg-1", "m2 s-2", 1.0, 0.0),
        ("um", "m", 1e-6, 0.0),
        ("microns", "m", 1e-6, 0.0),
        ("0.01 m", "m", 0.01, 0.0),
        ("knots", "m s-1", 1852.0 / 3600.0, 0.0),
        ("# kg-1", "kg-1", 1.0, 0.0),
        ("g-1", "kg-1", 1e3, 0.0),
        ("cm-3", "m-3", 1e6, 0.0),
    ],
)
def test_known_conversions(units, target, slope, offset):
    found = linear_conversion(units, target)
    assert found == pytest.approx((slope, offset), rel=1e-12, abs=1e-300 if offset == 0 else 1e-9)


@pytest.mark.parametrize("variable", [v for v in VARIABLES.values() if v.units], ids=lambda v: v.name)
def test_canonical_units_are_understood(variable):
    assert linear_conversion(variable.units, variable.units) == (1.0, 0.0)


def test_agrees_with_the_udunits_library():
    cf_units = pytest.importorskip("cf_units", reason="cf-units (the udunits-2 library) is not installed")
    for units, target in [("kg m-2 s-1", "g cm-2 day-1"), ("W m-2", "kW km-2"), ("degC", "K"), ("hPa", "Pa")]:
        slope, offset = linear_conversion(units, target)
        reference = cf_units.Unit(units)
        for value in (0.0, 1.0, 37.0):
            assert slope * value + offset == pytest.approx(reference.convert(value, target), rel=1e-9)


def test_single_precision_stays_single():
    values = np.array([10.0, 20.0], dtype=np.float32)
    converted = convert(values, "degC", "K")
    assert converted.dtype == np.float32
    np.testing.assert_allclose(converted, [283.15, 293.15], rtol=1e-6)


@pytest.mark.parametrize("units", ["furlongs per fortnight!", "kg kg-", "hectoquux", ")("])
def test_unknown_units_name_the_variable_and_the_unit(units):
    with pytest.raises(SceneError, match="T2.*") as caught:
        linear_conversion(units, "K", "T2")
    assert units in str(caught.value)


def test_other_dimension_is_refused():
    with pytest.raises(SceneError, match="measures something else"):
        linear_conversion("Pa", "K", "t")
    assert not is_convertible("kg", "m")


def test_missing_units_are_only_accepted_for_a_fraction():
    assert linear_conversion(None, "1") == (1.0, 0.0)
    with pytest.raises(SceneError, match="no units"):
        linear_conversion(None, "K", "t")
