"""The law of propagation for models with several quantities."""

import math

import numpy as np
import pytest
import uncertainties
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp
from scipy.stats import multivariate_normal

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.correlations import Correlation
from budgets.errors import BudgetsError, ComponentError, CorrelationError, ModelError, NotSupportedError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts, combined, compiled
from budgets.reading_patterns import ReadingPattern

ONCE = Procedure(Count(1, 1, 9), Count(1, 1, 9))


def line(code, quantity, u, nu=math.inf, level="lot", **changes):
    members = {"terms": (Term(1.0, MeanSquare(code, u * u, nu)),), "evaluation_type": "A"}
    return Component(code=code, quantity=quantity, level=level, **{**members, **changes})


def joint(code, names, matrix, nu, level="reading", **changes):
    square = MeanSquareMatrix(code, names, tuple(map(tuple, matrix)), nu)
    members = {"matrix_terms": (MatrixTerm(1.0, square),), "quantities": names, "terms": ()}
    return Component(code=code, quantity="", level=level, evaluation_type="A", **{**members, **changes})


def a_budget(expression, components, *, given=None, correlations=(), box=None, **changes):
    given = given or {}
    names = [name for item in components for name in item.inputs if name not in given]
    quantities = [Quantity(name) for name in dict.fromkeys(names)]
    quantities += [Quantity(name, source="given", estimate=value) for name, value in given.items()]
    model = MeasurementModel(expression, tuple(quantities))
    members = {"procedure": ONCE, "coverage_probability": 0.95, "bias": None, "bias_treatment": "corrected"}
    members |= {"validated_range": (-1e9, 1e9), "model": model, "validated_box": box or {}}
    return Budget(components=tuple(components), correlations=tuple(correlations), **{**members, **changes})


def refused(kind, where, *arguments, **options):
    with pytest.raises(kind) as caught:
        a_budget(*arguments, **options)
    assert caught.value.each()[0].where == where
    return caught.value


def test_correlated_inputs_with_their_own_degrees_of_freedom():
    """Computed and simulated for the project's rules: 16.96, simulated 16.8; without correlation 43.9."""
    components = (line("a", "x", 0.1, 5), line("b", "y", 0.2, 12))
    budget = a_budget("x + y", components, correlations=[Correlation(("a", "b"), "lot", 0.8)])
    result = combined(budget, Counts((1,)), estimates={"x": 1.0, "y": 2.0})
    assert result.effective_degrees_of_freedom == pytest.approx(16.96, abs=0.005)
    assert result.variance == pytest.approx(0.01 + 0.04 + 2 * 0.8 * 0.02)
    assert sum(part.share_of_variance for part in result.contributions) == pytest.approx(1)
    assert result.estimate == 3.0


def test_errors_that_cancel_leave_a_difference_better_known():
    components = (line("a", "x", 0.2), line("b", "y", 0.2))
    correlation = [Correlation(("a", "b"), "lot", 0.9)]
    budget = a_budget("x - y", components, correlations=correlation)
    result = combined(budget, Counts((1,)), estimates={"x": 1, "y": 2})
    assert result.variance == pytest.approx(0.08 - 2 * 0.9 * 0.04)
    cancelled = a_budget("x - y", components, correlations=[Correlation(("a", "b"), "lot", 1.0)])
    with pytest.raises(ComponentError, match="their correlations cancel"):
        combined(cancelled, Counts((1,)), estimates={"x": 1, "y": 2})


def test_the_covariance_of_a_scan_agrees_with_a_simulation():
    """Reading noise of two channels correlated, errors of their references not: sum over levels."""
    noise = [[0.04, 0.018], [0.018, 0.01]]
    components = (
        joint("scan", ("protein", "moisture"), noise, 20),
        line("p", "protein", 0.15, 30, "lot"),
        line("m", "moisture", 0.05, 30, "calibration"),
    )
    budget = a_budget("protein/(1 - moisture/100)", components)
    at = {"protein": 25.0, "moisture": 4.0}
    counts = Counts((2, 3))
    result = combined(budget, counts, estimates=at)
    generator = np.random.default_rng(11)
    scans = multivariate_normal([0, 0], noise).rvs((100_000, 5), random_state=generator)
    mean = (scans[:, :2].mean(axis=1) + scans[:, 2:].mean(axis=1)) / 2
    protein = 25 + mean[:, 0] + generator.normal(0, 0.15, 100_000)
    moisture = 4 + mean[:, 1] + generator.normal(0, 0.05, 100_000)
    simulated = (protein / (1 - moisture / 100)).std()
    assert result.standard_uncertainty == pytest.approx(simulated, rel=0.01)
    assert result.contributions[0].sensitivity_coefficient is None
    assert result.contributions[0].degrees_of_freedom == 20
    c = np.array([1 / 0.96, 25 / 100 / 0.96**2])
    assert result.contributions[0].contribution == pytest.approx(
        math.sqrt((1 / 4 * (1 / 2 + 1 / 3)) * c @ np.array(noise) @ c)
    )


def test_a_mean_square_shared_by_a_matrix_and_a_number_is_one():
    """Taken out of the matrix at the lot and back at the reading, it cancels before dof are taken."""
    shared = MeanSquare("rep", 0.04, 10)
    whole = MeanSquareMatrix("sep", ("x", "y"), ((0.3, 0.0), (0.0, 0.2)), 59)
    alone = MeanSquareMatrix("rep", ("x", "y"), ((0.04, 0.0), (0.0, 0.0)), 10)
    rest = joint("rest", ("x", "y"), ((1, 0), (0, 1)), 1, level="lot")
    rest = Component(
        code="rest", quantity="", level="lot", terms=(), evaluation_type="A", quantities=("x", "y"),
        matrix_terms=(MatrixTerm(1.0, whole), MatrixTerm(-1.0, alone)),
    )  # fmt: skip
    reading = Component("r", "x", "reading", (Term(1.0, shared),), "A")
    result = combined(a_budget("x + y", (rest, reading)), Counts((1,)), estimates={"x": 0, "y": 0})
    assert result.variance == pytest.approx(0.5)
    assert result.effective_degrees_of_freedom == pytest.approx(59)


def test_given_quantities_are_not_averaged():
    components = (line("r", "x", 0.2, level="reading"), line("b", "b", 0.1, level="sample"))
    budget = a_budget("x - b", components, given={"b": 0.5})
    result = combined(budget, Counts((1, 1, 1, 1)), estimates={"x": 3.0})
    assert result.variance == pytest.approx(0.04 / 4 + 0.01)
    assert result.estimate == 2.5


def test_a_pattern_of_readings_takes_the_place_of_counts():
    budget = a_budget("x", (line("i", "x", 0.2, level="instrument"),))
    pattern = ReadingPattern({"sample": ("1", "2"), "instrument": ("a", "b")})
    assert combined(budget, pattern, estimates={"x": 1.0}).variance == pytest.approx(0.02)


def test_parts_proportional_to_the_value():
    s1 = (Term(1.0, MeanSquare("s1", 0.02**2, 8)),)
    own = line("p", "x", 0.05, 20, relative_terms=s1)
    other = Component("q", "y", "lot", (), "B", relative_terms=s1, relative_to="x")
    budget = a_budget("x + y", (own, other))
    result = combined(budget, Counts((1,)), estimates={"x": 5.0, "y": 1.0})
    assert result.variance == pytest.approx(0.05**2 + 2 * (0.02 * 5) ** 2)
    expected = result.variance**2 / (0.05**4 / 20 + (2 * 0.1**2) ** 2 / 8)
    assert result.effective_degrees_of_freedom == pytest.approx(expected)


def test_a_proportional_part_without_a_model_is_one_of_the_estimate():
    s1 = (Term(1.0, MeanSquare("s1", 0.02**2, 8)),)
    components = (
        line("r", "moisture", 0.05, 20, level="reading"),
        Component("p", "bias", "reference", (), "B", relative_terms=s1),
        line("b", "bias", 0.01, level="calibration"),
    )
    budget = Budget(components, ONCE, 0.95, 0.1, "corrected", (1.0, 6.0))
    result = combined(budget, Counts((1,)), estimates={"moisture": 5.0})
    assert result.variance == pytest.approx(0.05**2 + (0.02 * 5) ** 2 + 0.0001)
    for wrong in (None, {"bias": 1.0}, {"moisture": 5.0, "bias": 0.0}):
        with pytest.raises(ModelError) as caught:
            combined(budget, Counts((1,)), estimates=wrong)
        assert caught.value.where == ("estimates", "moisture")
    with pytest.raises(ComponentError) as caught:
        odd = Component("p", "bias", "reference", (), "B", relative_terms=s1, relative_to="fat")
        Budget((components[0], odd), ONCE, 0.95, 0.1, "corrected", (1.0, 6.0))
    assert caught.value.where == ("components", 1, "relative_to")


PANEL = [
    ("x*exp(-x) + y**2", {"x": 1.0 + 1e-7, "y": 1e-6}, {"x": 0.5, "y": 0.1}),
    ("x**2 - 2*x + y", {"x": 1.0 + 1e-10, "y": 1.0}, {"x": 1.0, "y": 1e-9}),
    ("exp(x)/(y - 1)", {"x": 3.0, "y": 1 + 1e-8}, {"x": 2.9, "y": 0.9}),
    ("sqrt(x**2 + y**2) - x", {"x": 1e7, "y": 1e-3}, {"x": 1.0, "y": 1e-3}),
    (
        " + ".join(f"x{i}**2*{10.0 ** (i % 13 - 6)}" for i in range(30)),
        {f"x{i}": 1.0 + i / 7 for i in range(30)},
        {f"x{i}": 10.0 ** (-(i % 13)) for i in range(30)},
    ),
]


@pytest.mark.parametrize(("expression", "at", "u"), PANEL)
def test_combined_standard_uncertainties_agree_with_mpmath(expression, at, u):
    """Mpmath with 60 digits: within 1e-12, relative, for derivatives near zero and components far apart."""
    budget = a_budget(expression, [line(f"c-{name}", name, u[name], 10) for name in u])
    result = combined(budget, Counts((1,)), estimates=at)
    with mp.workdps(60):
        inputs = {name: mp.mpf(x) for name, x in at.items()}
        functions = {"exp": mp.exp, "sqrt": mp.sqrt}
        parts = []
        for name in u:
            slope = mp.diff(
                lambda x, n=name: eval(expression, {"__builtins__": {}}, {**functions, **inputs, n: x}),
                inputs[name],
            )
            parts.append((slope * mp.mpf(u[name])) ** 2)
        exact = mp.sqrt(mp.fsum(parts))
        freedom = mp.fsum(parts) ** 2 / mp.fsum(p**2 / 10 for p in parts)
        assert abs(result.standard_uncertainty / exact - 1) < 1e-12
        assert abs(result.effective_degrees_of_freedom / freedom - 1) < 1e-11


def test_the_package_uncertainties_finds_the_same_with_correlations():
    components = [line("a", "x", 0.1), line("b", "y", 0.2), line("c", "z", 0.3)]
    correlations = [Correlation(("a", "b"), "lot", 0.6), Correlation(("b", "c"), "lot", -0.4)]
    budget = a_budget("x*y/(z - sin(x))", components, correlations=correlations)
    at = {"x": 1.2, "y": 3.4, "z": 5.6}
    covariance = [[0.01, 0.012, 0], [0.012, 0.04, -0.024], [0, -0.024, 0.09]]
    x, y, z = uncertainties.correlated_values(list(at.values()), covariance)
    expected = budget.model.uncertain_value({"x": x, "y": y, "z": z})
    result = combined(budget, Counts((1,)), estimates=at)
    assert result.standard_uncertainty == pytest.approx(expected.std_dev, rel=1e-12)
    assert result.estimate == pytest.approx(expected.nominal_value, rel=1e-15)


def a_rich_budget():
    s1 = (Term(1.0, MeanSquare("s1", 0.02**2, 8)),)
    noise = ((0.04, 0.018, 0.0), (0.018, 0.01, 0.002), (0.0, 0.002, 0.02))
    return a_budget(
        "x*y/(z - b) + ln(x)",
        [
            joint("scan", ("x", "y", "z"), noise, 20),
            line("x1", "x", 0.1, 7, relative_terms=s1),
            line("y1", "y", 0.2, 9),
            line("z1", "z", 0.2, 11, level="sample"),
            line("b1", "b", 0.05, 12, level="calibration"),
        ],
        given={"b": 0.5},
        correlations=[Correlation(("x1", "y1"), "lot", 0.5)],
    )


def test_arrays_give_what_single_sets_give():
    budget = a_rich_budget()
    law = compiled(budget, Counts((2, 1)))
    generator = np.random.default_rng(2)
    at = {
        "x": generator.uniform(1, 2, 40),
        "y": generator.uniform(1, 2, 40),
        "z": generator.uniform(3, 4, 40),
    }
    many = law.at_many(at)
    for i in range(40):
        one = law.at({name: values[i] for name, values in at.items()})
        assert many.estimates[i] == pytest.approx(one.estimate, rel=1e-13)
        assert many.standard_uncertainties[i] == pytest.approx(one.standard_uncertainty, rel=1e-12)
        assert many.effective_degrees_of_freedom[i] == pytest.approx(
            one.effective_degrees_of_freedom, rel=1e-11
        )


def test_what_if_a_component_were_halved_or_left_out():
    budget = a_budget("x + y", (line("a", "x", 0.3), line("b", "y", 0.4)))
    law = compiled(budget, Counts((1,)))
    found = law.at_many({"x": 1.0, "y": 2.0}, uncertainty_factors={"a": [1.0, 0.5, 0.0]})
    assert found.standard_uncertainties == pytest.approx([0.5, math.hypot(0.15, 0.4), 0.4])
    assert found.effective_degrees_of_freedom.tolist() == [math.inf] * 3
    for factors in ({"x": 1.0}, {"a": -1.0}, {"a": math.inf}):
        with pytest.raises(ModelError):
            law.at_many({"x": 1.0, "y": 2.0}, uncertainty_factors=factors)
    with pytest.raises(ComponentError, match="not above zero"):
        law.at_many({"x": 1.0, "y": 2.0}, uncertainty_factors={"a": 0.0, "b": 0.0})


def test_a_measurand_that_nothing_moves_has_no_combined_uncertainty():
    components = (line("a", "x", 0.1), line("b", "y", 0.1))
    with pytest.raises(ComponentError, match="no component moves the measurand"):
        combined(a_budget("x**2 + y**2", components), Counts((1,)), estimates={"x": 0.0, "y": 0.0})
    correlated = a_budget("x**2 + y", components, correlations=[Correlation(("a", "b"), "lot", 0.5)])
    result = combined(correlated, Counts((1,)), estimates={"x": 0.0, "y": 1.0})
    assert result.variance == pytest.approx(0.01)


ORDERS = st.permutations(range(4))


@settings(max_examples=30)
@given(ORDERS, st.floats(1e-3, 1e3), st.floats(0.3, 3))
def test_order_scale_and_empty_components_change_nothing(order, scale, x):
    """Laws: the order of the components; the unit; a component that weighs nothing."""
    components = [
        line("a", "x", 0.1, 5),
        line("b", "x", 0.2, 9, "reading"),
        line("c", "y", 0.1, 7),
        line("d", "y", 0.3),
    ]
    at = {"x": x, "y": 1.5}
    first = combined(a_budget("x*y", components), Counts((2,)), estimates=at)
    moved = combined(a_budget("x*y", [components[i] for i in order]), Counts((2,)), estimates=at)
    assert moved.standard_uncertainty == pytest.approx(first.standard_uncertainty, rel=1e-14)
    assert moved.effective_degrees_of_freedom == pytest.approx(first.effective_degrees_of_freedom, rel=1e-13)
    factors = {"x": scale, "y": 1.0}
    scaled = [
        line(c.code, c.quantity, c.standard_uncertainty * factors[c.quantity], c.degrees_of_freedom, c.level)
        for c in components
    ]
    other = combined(a_budget("x*y", scaled), Counts((2,)), estimates={"x": x * scale, "y": 1.5})
    assert other.standard_uncertainty == pytest.approx(first.standard_uncertainty * scale, rel=1e-12)
    assert other.effective_degrees_of_freedom == pytest.approx(first.effective_degrees_of_freedom, rel=1e-11)
    empty = line("e", "x", 0.5, covered_weight=1.0, contains=("repeatability",))
    whole = line("w", "x", 0.1, 5, contains=("repeatability", "remainder"))
    with_it = combined(a_budget("x*y", [whole, empty, *components[2:]]), Counts((2,)), estimates=at)
    without = combined(a_budget("x*y", [whole, *components[2:]]), Counts((2,)), estimates=at)
    assert with_it.standard_uncertainty == without.standard_uncertainty
    assert with_it.effective_degrees_of_freedom == without.effective_degrees_of_freedom


@settings(max_examples=30)
@given(st.floats(0.01, 2), st.floats(0.01, 2))
def test_more_variance_at_fixed_degrees_of_freedom_widens(u, more):
    narrow = a_budget("x", [line("a", "x", u, 9)])
    wide = a_budget("x", [line("a", "x", math.hypot(u, more), 9)])
    at = {"x": 1.0}
    one, two = (combined(b, Counts((1,)), estimates=at) for b in (narrow, wide))
    assert two.standard_uncertainty > one.standard_uncertainty
    assert two.effective_degrees_of_freedom == one.effective_degrees_of_freedom


def test_second_order_of_a_rectangular_component():
    """The rectangular check of the rules, .040403, and the warning that the model curves."""
    budget = a_budget("x + 0.3*x**2 + 0.05*x**3", [line("a", "x", 0.2, distribution="rectangular")])
    result = combined(budget, Counts((1,)), estimates={"x": 0.0}, second_order=True)
    assert result.variance == pytest.approx(0.040403, abs=5e-7)
    assert result.second_order.shift_of_mean == pytest.approx(0.012)
    assert [warning.code for warning in result.warnings] == ["second-order-matters"]
    straight = a_budget("2*x", [line("a", "x", 0.2)])
    assert combined(straight, Counts((1,)), estimates={"x": 0.0}, second_order=True).warnings == ()
    assert combined(straight, Counts((1,)), estimates={"x": 0.0}).second_order is None


def test_averaged_draws_come_nearer_to_the_normal_distribution():
    """Simulated: the mean of four rectangular errors through a curved model."""
    budget = a_budget("x**2 + x", [line("a", "x", 0.5, level="reading", distribution="rectangular")])
    result = combined(budget, Counts((4,)), estimates={"x": 0.0}, second_order=True)
    errors = np.random.default_rng(4).uniform(-1, 1, (400_000, 4)).mean(axis=1) * 0.5 * math.sqrt(3)
    assert result.variance == pytest.approx((errors**2 + errors).var(), rel=0.005)


def test_second_order_is_refused_where_it_does_not_hold():
    components = [line("a", "x", 0.2), line("b", "y", 0.2)]
    correlated = a_budget("x*y", components, correlations=[Correlation(("a", "b"), "lot", 0.5)])
    scan = a_budget("x*y", [joint("s", ("x", "y"), ((1, 0.5), (0.5, 1)), 9)])
    same = (Term(1.0, MeanSquare("same", 0.04, 9)),)
    shared = a_budget("x*y", [line("a", "x", 1, terms=same), line("b", "y", 1, terms=same)])
    at = {"x": 1.0, "y": 1.0}
    for budget in (correlated, scan, shared):
        with pytest.raises(CorrelationError, match="independent inputs"):
            combined(budget, Counts((1,)), estimates=at, second_order=True)
    odd = a_budget("x*y", [line("a", "x", 0.2, distribution="trapezoidal"), components[1]])
    with pytest.raises(ComponentError, match="needs its ratio"):
        combined(odd, Counts((1,)), estimates=at, second_order=True)


def test_second_order_may_leave_nothing():
    budget = a_budget("sin(x)", [line("a", "x", 3.0)])
    with pytest.raises(ComponentError, match="second order"):
        combined(budget, Counts((1,)), estimates={"x": 0.0}, second_order=True)


def test_a_budget_and_its_model_fit_together():
    a, b = line("a", "x", 0.1), line("b", "y", 0.1)
    refused(ModelError, ("bias",), "x", [a], bias=0.1)
    refused(NotSupportedError, ("bias_treatment",), "x", [a], bias_treatment="in_guard_band")
    refused(ComponentError, ("components",), "x - y", [a], given={"y": 1.0})
    refused(ModelError, ("validated_box", "y"), "x", [a], box={"y": (0.0, 1.0)})
    refused(ModelError, ("validated_box", "x"), "x", [a], box={"x": (1.0, 1.0)})
    wrong = line("a", "x", 0.1, relative_to="q")
    refused(ComponentError, ("components", 0, "relative_to"), "x", [wrong])
    scan = joint("s", ("x", "y"), ((1, 0), (0, 1)), 9)
    refused(ComponentError, ("components", 0, "quantities"), "x - y", [scan], given={"y": 1.0})
    unknown = [Correlation(("s", "t"), "lot", 0.1)]
    refused(CorrelationError, ("correlations", 0, "between"), "x - y", [scan], correlations=unknown)
    model = MeasurementModel("x", (Quantity("x"),))
    with pytest.raises(ComponentError) as caught:
        Budget((a, b), ONCE, 0.95, None, "corrected", (0.0, 1.0), model)
    assert caught.value.where == ("components", 1, "quantity")
    with pytest.raises(BudgetsError, match="needs a measurement model"):
        Budget((scan,), ONCE, 0.95, None, "corrected", (0.0, 1.0))


def test_the_noise_of_a_scan_is_counted_once():
    scan = joint("s", ("x", "y"), ((1, 0), (0, 1)), 9, contains=("repeatability",))
    refused(
        ComponentError, ("components", 1), "x - y", [scan, line("a", "x", 0.1, contains=("repeatability",))]
    )
    rest = joint("rest", ("x", "y"), ((1, 0), (0, 1)), 9, level="lot", taken_out=("repeatability",))
    refused(ComponentError, ("components", 0), "x - y", [rest])
    assert a_budget("x - y", [rest, scan]).components == (rest, scan)


@pytest.mark.parametrize(
    ("changes", "where"),
    [
        ({"terms": (Term(1.0, MeanSquare("q", 1.0, 9)),)}, ("quantities",)),
        ({"quantities": ("x",)}, ("quantities",)),
        ({"quantities": ("x", "x")}, ("quantities",)),
        (
            {"matrix_terms": tuple(
                MatrixTerm(1.0, MeanSquareMatrix(code, (code, "y"), ((1, 0), (0, 1)), 9)) for code in "xz"
            )},
            ("matrix_terms",),
        ),
    ],
)  # fmt: skip
def test_a_component_of_several_quantities_is_checked(changes, where):
    with pytest.raises(ComponentError) as caught:
        joint("s", ("x", "y"), ((1, 0), (0, 1)), 9, **changes)
    assert caught.value.where == where


@pytest.mark.parametrize("matrix", [((1, 2), (2, 1)), ((0, 0), (0, 0))])
def test_a_covariance_matrix_that_cannot_be_is_no_component(matrix):
    with pytest.raises(ComponentError, match="not positive semi-definite, or zero"):
        joint("s", ("x", "y"), matrix, 9)


@pytest.mark.parametrize("scale", [1e80, 1e-80, 1e200])
@pytest.mark.parametrize("together", [False, True])
def test_readings_out_of_all_proportion_are_refused_or_computed(scale, together):
    """The degrees of freedom do not depend on the scale; a variance that no double can hold is refused."""
    matrix = ((0.01, 0.002), (0.002, 0.04))
    components = (
        (joint("ab", ("x", "y"), matrix, 9), line("c", "x", 0.1, 5))
        if together
        else (line("a", "x", 0.1, 5), line("b", "y", 0.2, 12))
    )
    law = compiled(a_budget(f"{scale!r} * (x - y)", components), Counts((1,)))
    if scale > 1e150:
        with pytest.raises(BudgetsError, match="too large"):
            law.at({"x": 1.0, "y": 1.0})
        return
    plain = compiled(a_budget("x - y", components), Counts((1,))).at({"x": 1.0, "y": 1.0})
    found = law.at({"x": 1.0, "y": 1.0})
    assert found.standard_uncertainty == pytest.approx(scale * plain.standard_uncertainty, rel=1e-12)
    assert found.effective_degrees_of_freedom == pytest.approx(plain.effective_degrees_of_freedom, rel=1e-12)


def test_rounding_is_no_uncertainty_where_correlated_errors_cancel():
    """0.3 - 0.1 - 0.2 is 0 by arithmetic and 3e-17 in a computer."""
    components = (line("a", "x", 0.3, 5), line("b", "y", 0.1, 5), line("c", "z", 0.2, 5))
    pairs = {("a", "b"): -1.0, ("a", "c"): -1.0, ("b", "c"): 1.0}
    correlations = [Correlation(pair, "lot", r) for pair, r in pairs.items()]
    law = compiled(a_budget("x + y + z", components, correlations=correlations), Counts((1,)))
    with pytest.raises(ComponentError, match="cancel"):
        law.at({"x": 1.0, "y": 1.0, "z": 1.0})
