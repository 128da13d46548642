"""Values and derivatives of measurement models against mpmath and against the package `uncertainties`."""

import math

import numpy as np
import pytest
import uncertainties
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp

from budgets.errors import BudgetsError, ModelError, UnitsError
from budgets.expressions import parse
from budgets.measurement_models import MeasurementModel, Quantity

MPMATH = {
    "sqrt": mp.sqrt, "exp": mp.exp, "ln": mp.log, "lg": mp.log10, "sin": mp.sin, "cos": mp.cos, "tan": mp.tan,
    "abs": abs, "min": min, "max": max,
}  # fmt: skip


def a_model(expression, *names, **given):
    quantities = [Quantity(name) for name in names]
    quantities += [Quantity(name, source="given", estimate=value) for name, value in given.items()]
    return MeasurementModel(expression, tuple(quantities))


def reference(expression):
    """Return the expression as a function of mpmath numbers (the test may evaluate its own texts)."""
    return lambda **inputs: eval(expression, {"__builtins__": {}}, {**MPMATH, **inputs})


def slope(function, inputs, name, order=1):
    def along(x):
        return function(**{**inputs, name: x})

    return mp.diff(along, inputs[name], order)


# Expressions where derivatives are small differences, curve strongly, or span many orders of magnitude.
PANEL = [
    ("x*exp(-x)", {"x": 1.0 + 1e-7}),
    ("x*exp(-x)", {"x": 1.0}),
    ("x**2 - 2*x + y", {"x": 1.0 + 1e-10, "y": 1e-9}),
    ("cos(x)", {"x": 1e-9}),
    ("sin(x)*y", {"x": math.pi / 2, "y": 1e-3}),
    ("(x - y)**3", {"x": 1.0, "y": 1.0 - 2**-30}),
    ("exp(exp(x))", {"x": 3.1}),
    ("x**y", {"x": 0.3, "y": -7.5}),
    ("1/(1 - x)", {"x": 1 - 1e-9}),
    ("ln(x)/x", {"x": 2.718281828}),
    ("tan(x)", {"x": 1.5707}),
    ("sqrt(x**2 + y**2) - x", {"x": 1e6, "y": 1e-2}),
    ("protein/(100 - moisture - fat)*100", {"protein": 25.0, "moisture": 3.1, "fat": 26.0}),
    ("lg(x) + abs(y) + min(x, y, 5) - max(x, y)", {"x": 2.5, "y": -1.5}),
    ("-x**2 + sin(100000*y) - 3**0.5*x", {"x": 2.5, "y": 12345.678}),
    (" + ".join(f"x{i}**2*{10.0 ** (i % 13)}" for i in range(30)), {f"x{i}": 1.0 + i / 7 for i in range(30)}),
]


@pytest.mark.parametrize(("expression", "estimates"), PANEL)
def test_sensitivity_coefficients_agree_with_mpmath(expression, estimates):
    """Mpmath (differences with 60 digits): each within 1e-12, relative."""
    model = a_model(expression, *estimates)
    value, slopes = model.linearised(estimates)
    with mp.workdps(60):
        inputs = {name: mp.mpf(x) for name, x in estimates.items()}
        function = reference(expression)
        assert abs(value - function(**inputs)) <= 1e-14 * abs(function(**inputs))
        for name in estimates:
            exact = slope(function, inputs, name)
            assert abs(slopes[name] - exact) <= max(1e-12 * abs(exact), mp.mpf("1e-25")), name


@pytest.mark.parametrize(("expression", "estimates"), PANEL)
def test_arrays_and_automatic_differentiation_agree_with_the_digits_of_a_double(expression, estimates):
    """The package `uncertainties` differentiates on its own; only cancellation sets the two apart."""
    model = a_model(expression, *estimates)
    value, slopes = model.linearised(estimates)
    many, many_slopes = model.linearised_many({name: [x, x] for name, x in estimates.items()})
    assert many == pytest.approx([value, value], rel=1e-6, abs=1e-9)
    inputs = {name: uncertainties.ufloat(x, 1.0) for name, x in estimates.items()}
    uncertain = model.uncertain_value(inputs)
    assert uncertain.nominal_value == pytest.approx(value, rel=1e-6, abs=1e-9)
    size = max(map(abs, slopes.values())) + 1e-3
    for name, number in inputs.items():
        assert uncertain.derivatives[number] == pytest.approx(slopes[name], rel=1e-5, abs=1e-9 * size)
        assert many_slopes[name] == pytest.approx([slopes[name]] * 2, rel=1e-5, abs=1e-9 * size)


@pytest.mark.parametrize(
    ("expression", "estimates"),
    [
        ("x*exp(-x)*y", {"x": 1.0, "y": 0.5}),
        ("sqrt(x)/ln(y) - lg(x*y)", {"x": 1.3, "y": 2.2}),
        ("sin(x)*cos(y) + tan(x - y)", {"x": 0.4, "y": 1.1}),
        ("x**y + x**3 + abs(x)*y - abs(-y)", {"x": 1.4, "y": 0.6}),
        ("max(x, y)**2*min(x, y) + y**0 + x**1 + (x - 1.4)**2", {"x": 1.4, "y": 0.6}),
        ("-x/(1 - y/100)", {"x": 1.4, "y": 0.6}),
    ],
)
def test_terms_of_second_order_agree_with_mpmath(expression, estimates):
    """JCGM 100, 5.1.2 note (from memory), all derivatives by mpmath with 50 digits."""
    model = a_model(expression, *estimates)
    variances = {"x": 0.01, "y": 0.04}
    found = model.second_order(estimates, variances)
    with mp.workdps(50):
        function = reference(expression)
        point = tuple(mp.mpf(v) for v in estimates.values())

        def d(i, j):
            return mp.diff(lambda x, y: function(x=x, y=y), point, (i, j)) if i + j else 0

        u2 = (mp.mpf("0.01"), mp.mpf("0.04"))
        exact = (d(2, 0) ** 2 / 2 + d(1, 0) * d(3, 0)) * u2[0] ** 2
        exact += (d(0, 2) ** 2 / 2 + d(0, 1) * d(0, 3)) * u2[1] ** 2
        exact += (d(1, 1) ** 2 + d(1, 0) * d(1, 2) + d(0, 1) * d(2, 1)) * u2[0] * u2[1]
        shift = (d(2, 0) * u2[0] + d(0, 2) * u2[1]) / 2
    assert found.variance == pytest.approx(float(exact), rel=1e-12)
    assert found.shift_of_mean == pytest.approx(float(shift), rel=1e-12)


def test_the_fourth_moment_of_a_rectangle_counts():
    """Simulated for the project's rules: .040391; the rectangular form .040403, the normal one .040768."""
    model = a_model("x + 0.3*x**2 + 0.05*x**3", "x")
    rectangular = model.second_order({"x": 0.0}, {"x": 0.04}, fourth_moments={"x": 1.8 * 0.04**2})
    assert 0.04 + rectangular.variance == pytest.approx(0.040403, abs=5e-7)
    assert 0.04 + model.second_order({"x": 0.0}, {"x": 0.04}).variance == pytest.approx(0.040768, abs=5e-7)
    assert rectangular.shift_of_mean == pytest.approx(0.3 * 0.04)


def test_without_curvature_there_is_no_second_order():
    assert a_model("x - y", "x", "y").second_order({"x": 1.0, "y": 2.0}, {"x": 0.1}).variance == 0.0


@settings(max_examples=40)
@given(st.floats(0.01, 3), st.floats(0.2, 3), st.floats(0.1, 2))
def test_scaling_the_model_scales_value_and_coefficients(x, y, factor):
    estimates = {"x": x, "y": y}
    value, slopes = a_model("sin(x)*y + x/y", "x", "y").linearised(estimates)
    scaled, scaled_slopes = a_model("(sin(x)*y + x/y)*f", "x", "y", f=factor).linearised(estimates)
    assert scaled == pytest.approx(value * factor, rel=1e-13, abs=1e-300)
    for name in estimates:
        assert scaled_slopes[name] == pytest.approx(slopes[name] * factor, rel=1e-13, abs=1e-300)
    assert scaled_slopes["f"] == pytest.approx(value, rel=1e-13, abs=1e-300)


@pytest.mark.parametrize(
    ("expression", "estimates"),
    [
        ("ln(x)", {"x": -0.5}),
        ("ln(x)", {"x": 0.0}),
        ("1/x", {"x": 0.0}),
        ("x/x", {"x": 0.0}),
        ("sqrt(x)", {"x": -1.0}),
        ("x**0.5", {"x": -1.0}),
        ("x**(-1)", {"x": 0.0}),
        ("exp(x)", {"x": 1e9}),
        ("exp(exp(x))", {"x": 7.0}),
        ("sin(x)", {"x": 1e16}),
        ("sqrt(x)", {"x": 0.0}),
        ("abs(x)", {"x": 0.0}),
        ("min(x, 1)", {"x": 1.0}),
        ("x**y", {"x": -2.0, "y": 2.0}),
        ("x**0.5", {"x": 0.0}),
    ],
)
def test_a_model_that_fails_at_the_estimates_is_refused(expression, estimates):
    model = a_model(expression, *estimates)
    with pytest.raises(ModelError) as caught:
        model.linearised(estimates)
    assert caught.value.where == ("estimates",)
    with pytest.raises(ModelError):
        model.second_order(estimates, dict.fromkeys(estimates, 0.1))
    if "sin" not in expression:
        with pytest.raises(ModelError) as caught:
            model.linearised_many({name: [x, 2.0] for name, x in estimates.items()})
        assert caught.value.where == ("estimates",)


@pytest.mark.parametrize(("expression", "x"), [("ln(x)", -1.0), ("x**0.5", -1.0), ("1/x", 0.0)])
def test_uncertain_numbers_outside_of_the_domain_are_refused(expression, x):
    with pytest.raises(ModelError, match="has no value"):
        a_model(expression, "x").uncertain_value({"x": uncertainties.ufloat(x, 0.1)})
    with pytest.raises(ModelError, match="has no value"):
        a_model(expression, "x").uncertain_value({"x": x})


def test_given_estimates_stand_in_for_what_is_not_read():
    model = a_model("x - bias", "x", bias=0.25)
    assert (model.read, model.given) == (("x",), {"bias": 0.25})
    assert model.value({"x": 3.0}) == 2.75
    assert model.value({"x": 3.0, "bias": 1.0}) == 2.0
    assert model.values({"x": np.array([1.0, 2.0])}).tolist() == [0.75, 1.75]
    assert model.uncertain_value({"x": 3.0}) == 2.75


@pytest.mark.parametrize(
    ("estimates", "where"),
    [
        ({}, ("estimates", "x")),
        ({"x": math.nan}, ("estimates", "x")),
        ({"x": 1.0, "y": 2.0}, ("estimates", "y")),
    ],
)
def test_estimates_that_do_not_fit_the_model_are_named(estimates, where):
    model = a_model("x", "x")
    with pytest.raises(ModelError) as caught:
        model.value(estimates)
    assert caught.value.where == where
    with pytest.raises(ModelError) as caught:
        model.values(estimates)
    assert caught.value.where == where


@pytest.mark.parametrize(
    ("members", "where"),
    [
        ({"name": "solids not fat"}, ("name",)),
        ({"name": "sin"}, ("name",)),
        ({"name": "x", "source": "elsewhere"}, ("source",)),
        ({"name": "x", "source": "given"}, ("estimate",)),
        ({"name": "x", "estimate": 1.0}, ("estimate",)),
        ({"name": "x", "source": "given", "estimate": math.inf}, ("estimate",)),
    ],
)
def test_a_quantity_is_checked(members, where):
    with pytest.raises(ModelError) as caught:
        Quantity(**members)
    assert caught.value.where == where


def test_quantities_are_unique_used_and_not_too_many():
    with pytest.raises(ModelError) as caught:
        a_model("x", "x", "x")
    assert caught.value.where == ("quantities", 1, "name")
    with pytest.raises(ModelError, match="does not use 'y'"):
        a_model("x", "x", "y")
    with pytest.raises(ModelError, match="more than 60"):
        a_model("x", *(f"x{i}" for i in range(61)))


UNITS = {"m": "%", "g": "g/kg", "l": "mm", "t": "degC", "s": "degC", "k": "K", "a": "m**2", "r": "1/m"}


@pytest.mark.parametrize(
    ("expression", "unit"),
    [
        ("m/(1 - m/100)", "%"),
        ("m*100/(100 - m)", "%"),
        ("t - 2*(k - k)", "degC"),
        ("t - s", "K"),
        ("t + k", "degC"),
        ("sqrt(a)*2", "m"),
        ("a**0.5", "m"),
        ("a**(1/2)", "m"),
        ("a**(-1)*a*sqrt(a)", "m"),
        ("abs(-l)*l", "mm**2"),
        ("l/k", "mm/K"),
        ("exp(l/l)*m", "%"),
        ("2**(m/100)*l", "mm"),
        ("max(l, 2*l)", "mm"),
        ("2/2*l", "mm"),
    ],
)
def test_units_that_fit(expression, unit):
    used = parse(expression, tuple(UNITS)).names
    model = MeasurementModel(expression, tuple(Quantity(name, UNITS[name]) for name in used), unit)
    assert model.unit == unit


@pytest.mark.parametrize(
    ("expression", "names", "unit", "message"),
    [
        ("m + g", "mg", "%", "different units"),
        ("l + k", "lk", "mm", "different units"),
        ("l + 1", "l", "mm", "give a number that has a unit as a quantity"),
        ("l", "l", "m", "does not give m"),
        ("l", "l", "kg", "does not give kg"),
        ("t + s", "ts", "degC", "cannot be added"),
        ("2*t", "t", "degC", "take kelvin"),
        ("exp(l)", "l", "%", "plain number"),
        ("sin(m)", "m", "%", "plain number"),
        ("l**m", "lm", "mm", "must be a plain number"),
        ("l**(m/100)", "lm", "mm", "needs a number as exponent"),
        ("l**(m/m - 1 + 2)", "lm", "mm", "needs a number as exponent"),
        ("l**(1/0)", "l", "mm", "needs a number as exponent"),
        ("l**-(m/m)", "lm", "mm", "needs a number as exponent"),
        ("l**((1+1)/2)", "l", "mm", "needs a number as exponent"),
        ("l*m", "lm", "mm", "does not give mm"),
    ],
)
def test_units_that_do_not_fit(expression, names, unit, message):
    with pytest.raises(UnitsError, match=message) as caught:
        MeasurementModel(expression, tuple(Quantity(name, UNITS[name]) for name in names), unit)
    assert caught.value.where == ("expression",)


def test_units_are_stated_for_all_or_for_none():
    with pytest.raises(UnitsError, match="either every quantity"):
        MeasurementModel("x - y", (Quantity("x", "%"), Quantity("y")), "%")
    with pytest.raises(UnitsError, match="either every quantity"):
        MeasurementModel("x", (Quantity("x", "%"),))
    with pytest.raises(BudgetsError, match="is no unit that is known"):
        MeasurementModel("x", (Quantity("x", "g per cup"),), "%")


def test_the_larger_and_the_smaller_of_uncertain_numbers():
    small, large = uncertainties.ufloat(1.0, 0.1), uncertainties.ufloat(2.0, 0.2)
    model = a_model("max(x, y) - 3*min(x, y)", "x", "y")
    for x, y in ((small, large), (large, small)):
        found = model.uncertain_value({"x": x, "y": y})
        assert (found - (large - 3 * small)).std_dev == 0


def test_every_element_of_an_array_must_be_finite():
    with pytest.raises(ModelError) as caught:
        a_model("x", "x").values({"x": [1.0, math.inf]})
    assert caught.value.where == ("estimates", "x")


@pytest.mark.parametrize("expression", ["c - a*b", "-(a*b) + c", "c - abs(-(a*b))", "c + c/(-c)*(a*b)"])
def test_a_sign_costs_no_digits(expression):
    """(1 + e)(1 - e) = 1 - e^2: a sign that rounded to fewer digits than the product would leave nothing."""
    e = 2.0**-50
    model = MeasurementModel(expression, tuple(map(Quantity, "abc")))
    assert model.value({"a": 1 + e, "b": 1 - e, "c": 1.0}) == pytest.approx(e * e, rel=1e-8)


@pytest.mark.parametrize(("expression", "slope"), [("x**1 + x", 2.0), ("(x + 2)**0 + x", 1.0)])
def test_powers_of_zero_and_one_have_their_slopes(expression, slope):
    assert MeasurementModel(expression, (Quantity("x"),)).linearised({"x": 0.0})[1]["x"] == slope
