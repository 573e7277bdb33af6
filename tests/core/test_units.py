"""Units at the door: what is understood, what is refused, and that the size of a unit is right."""

import math
import subprocess
import sys

import pytest
from hypothesis import given
from hypothesis import strategies as st

from wakeledger.core.errors import InputError
from wakeledger.core.names import PLANE_VARIABLES, ROWS, VARIABLES
from wakeledger.core.units import DIMENSIONS, UnitError, conversion, split, to_si

# Exact by definition where no source is named: the inch is 0.0254 m, the pound 0.45359237 kg, the standard gravity
# 9.80665 m/s² (NIST SP 811, appendix B); the knot is 1852/3600 m/s.
POUND = 0.45359237
GRAVITY = 9.80665
FOOT = 0.3048
QUANTITIES = [
    ("42.0 m/s", "m s-1", 42.0),
    ("42.0 m s-1", "m s-1", 42.0),
    ("42.0 m.s-1", "m s-1", 42.0),
    ("42.0 m s⁻¹", "m s-1", 42.0),
    ("42.0 m s^-1", "m s-1", 42.0),
    ("151.2 km/h", "m s-1", 42.0),
    ("82 kt", "m s-1", 82 * 1852 / 3600),
    ("100 ft/s", "m s-1", 30.48),
    ("3 deg", "rad", math.pi / 60),
    ("3°", "rad", math.pi / 60),
    ("-3 degrees", "rad", -math.pi / 60),
    ("−3 deg", "rad", -math.pi / 60),
    ("6 arcmin", "rad", math.pi / 1800),
    ("2 mrad", "rad", 0.002),
    ("0.1 %", "1", 0.001),
    ("5%", "1", 0.05),
    ("0.3", "1", 0.3),
    ("231 counts", "1", 0.0231),
    ("1 count", "1", 1e-4),
    ("12 degC", "K", 285.15),
    ("12 °C", "K", 285.15),
    ("12 ° C", "K", 285.15),
    ("12 deg C", "K", 285.15),
    ("59 degF", "K", 288.15),
    ("288.15 K", "K", 288.15),
    ("1013 hPa", "Pa", 101300.0),
    ("1013 mbar", "Pa", 101300.0),
    ("100.6 kPa", "Pa", 100600.0),
    # Conventional water at 4 °C and mercury at 0 °C as SP 811 has them: 9.80665 Pa, 249.089 Pa, 3386.389 Pa.
    ("1 mmH2O", "Pa", 9.80665),
    ("1 inH2O", "Pa", 249.089),
    ("1 inHg", "Pa", 3386.389),
    ("1 psi", "Pa", POUND * GRAVITY / 0.0254**2),
    ("1 lbf/ft^2", "Pa", POUND * GRAVITY / FOOT**2),
    ("1 psf", "Pa", POUND * GRAVITY / FOOT**2),
    ("0.002378 slug/ft^3", "kg m-3", 0.002378 * (POUND * GRAVITY / FOOT) / FOOT**3),
    ("1.185 kg/m^3", "kg m-3", 1.185),
    ("1.185 kg/m3", "kg m-3", 1.185),
    ("1.185 kg m-3", "kg m-3", 1.185),
    ("0.180 m²", "m2", 0.18),
    ("2 ft^2", "m2", 2 * FOOT**2),
    ("10 in", "m", 0.254),
    ("1.5 ft", "m", 0.4572),
    ("4.2 N m", "N m", 4.2),
    ("4.2 N·m", "N m", 4.2),
    ("2 lbf", "N", 2 * POUND * GRAVITY),
    ("3 m^2/s^2", "m2 s-2", 3.0),
    ("40 ms", "s", 0.040),
    ("1.8e-5 Pa s", "Pa s", 1.8e-5),
    ("3.1 N/m", "N/m", 3.1),
]


@pytest.mark.parametrize(("text", "si_unit", "expected"), QUANTITIES)
def test_quantities_have_their_published_size(text, si_unit, expected):
    # 1e-12: a few roundings; the three fluid columns are published to six digits.
    tolerance = 2e-6 if "H2O" in text or "Hg" in text else 1e-12
    assert to_si(text, si_unit) == pytest.approx(expected, rel=tolerance)


@pytest.mark.parametrize(
    ("text", "si_unit", "word", "remedy"),
    [
        ("42.0", "m s-1", "no unit", "'42.0 m/s'"),
        ("3", "rad", "no unit", "'3 deg'"),
        ("3 m", "rad", "a length", "an angle"),
        ("3 %", "rad", "a pure number", "an angle"),
        ("3 deg", "1", "an angle", "a pure number"),
        ("12 C", "K", "'C'", "degC"),
        ("12 ° C", "m", "a temperature", "a length"),
        ("4.2 Nm", "N m", "'Nm'", "'N m', with a space"),
        ("14.7 psia", "Pa", "gauge or absolute", "relative_to"),
        ("2 psig", "Pa", "gauge or absolute", "ambient pressure"),
        ("3 lb", "N", "a mass", "lbf"),
        ("1 lb/ft^2", "Pa", "'lb/ft^2'", "lbf"),
        ("1013 mb", "Pa", "'mb'", "mbar"),
        ("4,2 m", "m", "cannot be read", "decimal point"),
        ("1 000 Pa", "Pa", "cannot be read", "thousands"),
        ("fast", "m s-1", "begin with a number", "number and its unit"),
        ("", "m", "begin with a number", "number and its unit"),
        ("nan m", "m", "begin with a number", "number and its unit"),
        ("1e999 m", "m", "not a finite number", "number and its unit"),
        ("3 parsnips", "m", "not known", "a length"),
        ("3 m/", "m", "not known", "a length"),
        ("3 m^9^9^9^9", "m", "not known", "a length"),
        ("3 m*(9**9**9**9)", "m", "not known", "a length"),
        ("3 m**99", "m", "not known", "a length"),
        ("3 dB", "1", "logarithmic", "a pure number"),
        ("3 degC/m", "K", "'degC/m'", "a temperature"),
        ("3 " + "m " * 60, "m", "too long", "a length"),
    ],
)
def test_refused_text_says_what_is_needed(text, si_unit, word, remedy):
    with pytest.raises(UnitError) as caught:
        to_si(text, si_unit)
    assert isinstance(caught.value, InputError)
    assert word in caught.value.found
    assert remedy in caught.value.remedy


def test_a_difference_of_temperatures_has_no_zero_point():
    assert to_si("9 degF", "K", difference=True) == pytest.approx(5.0, rel=1e-14)
    assert to_si("2 degC", "K", difference=True) == 2.0
    assert conversion("degC", "K") == (1.0, 273.15)


def test_every_unit_of_the_names_tables_is_its_own():
    for table in (VARIABLES, PLANE_VARIABLES, ROWS):
        for variable in table.values():
            assert conversion(variable.unit, variable.unit) == (1.0, 0.0)


@given(
    value=st.floats(min_value=-1e6, max_value=1e6, allow_subnormal=False),
    size=st.sampled_from([("ft", 0.3048), ("in", 0.0254), ("mm", 1e-3), ("km", 1e3), ("nmi", 1852.0), ("yd", 0.9144)]),
)
def test_the_same_length_in_any_unit_is_the_same(value, size):
    unit, metres = size
    # 1e-12: decimal text carries 17 digits, the rest is a handful of roundings.
    assert to_si(f"{value / metres!r} {unit}", "m") == pytest.approx(value, rel=1e-12, abs=1e-300)


@given(
    value=st.floats(min_value=1e-3, max_value=1e6),
    si_unit=st.sampled_from([unit for unit in DIMENSIONS if unit not in ("1", "rad")]),
)
def test_text_in_si_is_read_as_it_stands(value, si_unit):
    assert to_si(f"{value!r} {si_unit}", si_unit) == value


@given(celsius=st.floats(min_value=-100.0, max_value=500.0))
def test_temperature_scales_agree(celsius):
    # 1e-13 of an absolute temperature: the text's and the offset's rounding.
    fahrenheit = 1.8 * celsius + 32.0
    assert to_si(f"{fahrenheit!r} degF", "K") == pytest.approx(to_si(f"{celsius!r} degC", "K"), rel=1e-13)


@given(text=st.text(max_size=40))
def test_no_text_escapes_as_another_error(text):
    try:
        split(text)
        assert math.isfinite(to_si(text, "m"))
    except UnitError as error:
        assert error.remedy


@given(text=st.text(alphabet="mskgNPa /*^-+.()%°0123456789_", max_size=30))
def test_no_unit_escapes_as_another_error(text):
    try:
        conversion(text, "m s-1")
    except UnitError as error:
        assert "a velocity" in error.remedy


def test_the_units_library_waits_for_the_first_conversion():
    code = "import sys, wakeledger.core.units; sys.exit('pint' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
