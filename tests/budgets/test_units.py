import pytest
from hypothesis import given
from hypothesis import strategies as st

from budgets.errors import UnitsError
from budgets.units import conversion, convert


@pytest.mark.parametrize(
    ("start", "end", "factor", "offset"),
    [
        ("%", "g/kg", 10.0, 0.0),
        ("g/100 g", "%", 1.0, 0.0),
        ("g/100g", "%", 1.0, 0.0),
        ("mg/kg", "%", 1e-4, 0.0),
        ("\u00b5g/g", "mg/kg", 1.0, 0.0),
        ("g/100 mL", "mg/L", 1e4, 0.0),
        ("m^2", "cm**2", 1e4, 0.0),
        ("kg·m/s^2", "N", 1.0, 0.0),
        ("s^-1", "Hz", 1.0, 0.0),
        # The Celsius and Fahrenheit scales: NIST SP 811, B.8 (from memory).
        ("degC", "K", 1.0, 273.15),
        ("degC", "degF", 1.8, 32.0),
        ("K", "degC", 1.0, -273.15),
    ],
)
def test_conversions(start, end, factor, offset):
    found = conversion(start, end)
    assert (found.factor, found.offset) == (factor, offset)


def test_differences_of_temperatures_have_no_offset():
    assert conversion("degC", "degF").of_difference(10.0) == 18.0
    assert convert(10.0, "degC", "degF") == 50.0


@given(st.integers(1, 99_999))
def test_what_is_equal_in_print_stays_equal(thousandths):
    assert convert(thousandths / 100, "g/kg", "%") == thousandths / 1000


@pytest.mark.parametrize(
    "unit",
    [
        "",
        " ",
        "g per cup",
        "9**9**9",
        "1/cm",
        "% m/m",
        "/g",
        "g//kg",
        "foo",
        "degC/s",
        "m*degC",
        "g" * 41,
        "m^99",
    ],
)
def test_what_is_no_unit(unit):
    with pytest.raises(UnitsError):
        conversion(unit, "%")


def test_different_dimensions_name_both_units():
    with pytest.raises(UnitsError, match="g/100 mL cannot be converted to %"):
        conversion("g/100 mL", "%")
