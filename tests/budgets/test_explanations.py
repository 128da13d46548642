import math

import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.comparisons import compare
from budgets.components import Component
from budgets.conformity import Tolerance
from budgets.correlations import Correlation
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import Tabulated
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.explanations import Limits, explain
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.planned_looks import risk_per_look_of
from budgets.propagation import Counts, combined, expanded_uncertainty
from budgets.release import ReleaseRule

TOLERANCE = Tolerance(2.0, 4.0)
RULE = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)


def without(budget, code):
    return tuple(item for item in budget.components if item.code != code)


def test_what_is_said_is_what_the_changed_budget_gives(a_budget, a_component):
    """Each "without" and "halved" against a budget that is really built that way, and its release rule."""
    budget = a_budget(bias_treatment="in_guard_band")
    counts = Counts((2,))
    explained = explain(budget, counts, tolerance=TOLERANCE, rule=RULE, domain=(0.0, 100.0))
    rule = ReleaseRule.compile(budget, counts, TOLERANCE, RULE)
    assert explained.acceptance_limits == Limits(rule.lower_acceptance_limit, rule.upper_acceptance_limit)
    assert explained.expanded_uncertainty == rule.expanded_uncertainty
    smaller = a_budget(components=without(budget, "remainder"), bias_treatment="in_guard_band")
    line = explained.components[1]
    other = ReleaseRule.compile(smaller, counts, TOLERANCE, RULE)
    assert line.without.expanded_uncertainty == pytest.approx(other.expanded_uncertainty)
    assert line.without.effective_degrees_of_freedom == pytest.approx(other.effective_degrees_of_freedom)
    assert line.without.acceptance_limits.upper == pytest.approx(other.upper_acceptance_limit)
    half = a_component("remainder", 0.025, 40, level="lot")
    halved = a_budget(
        components=(budget.components[0], half, budget.components[2]), bias_treatment="in_guard_band"
    )
    other = ReleaseRule.compile(halved, counts, TOLERANCE, RULE)
    assert line.halved.combined_standard_uncertainty == pytest.approx(other.combined_standard_uncertainty)
    assert line.halved.acceptance_limits.lower == pytest.approx(other.lower_acceptance_limit)
    assert line.remark == ""


def test_subtotals_by_level_add_up(a_budget):
    explained = explain(a_budget(), Counts((2,)))
    assert [part.level for part in explained.subtotals] == ["reading", "lot", "calibration"]
    assert sum(part.share_of_variance for part in explained.subtotals) == pytest.approx(1)
    total = math.fsum(part.contribution**2 for part in explained.subtotals)
    assert total == pytest.approx(explained.result.variance)
    assert explained.acceptance_limits is None
    assert explained.components[0].without.acceptance_limits is None


def test_it_is_said_why_the_expanded_uncertainty_rises_without_a_well_known_component(a_budget, a_component):
    """Computed for the project's rules: u = 1, nu = 2: U = 4.30; with 0.7 known added 3.26."""
    poor, good = a_component("poor", 1.0, 2), a_component("good", 0.7, level="lot")
    explained = explain(a_budget(components=(poor, good), bias=None), Counts((1,)))
    assert explained.expanded_uncertainty == pytest.approx(3.26, abs=0.005)
    line = explained.components[1]
    assert line.without.expanded_uncertainty == pytest.approx(4.30, abs=0.005)
    assert "rests on 2 instead of 4.44 degrees of freedom" in line.remark
    assert explained.components[0].remark == ""
    assert [warning.code for warning in explained.warnings] == ["few-degrees-of-freedom"]


def test_without_the_only_component_nothing_is_left(a_budget, a_component):
    budget = a_budget(components=(a_component(),), bias=None)
    (line,) = explain(budget, Counts((1,)), tolerance=TOLERANCE, rule=RULE).components
    assert line.without.expanded_uncertainty is None
    assert line.without.acceptance_limits is None
    assert line.halved.combined_standard_uncertainty == pytest.approx(0.02)


def test_a_rule_that_accepts_nothing_has_no_limits(a_budget, a_component):
    budget = a_budget(components=(a_component(), a_component("rest", 2.0, level="lot")), bias=None)
    explained = explain(budget, Counts((1,)), tolerance=TOLERANCE, rule=RULE)
    limits = explained.acceptance_limits
    assert (limits.lower, limits.upper) == (None, None)
    assert "the guard bands" in limits.detail
    assert explained.components[1].without.acceptance_limits.detail == ""
    assert explained.components[1].without.acceptance_limits.upper < 4.0


def a_difference(coefficient):
    components = tuple(
        Component(code, code, "lot", (Term(1.0, MeanSquare(code, u * u, 50)),), "A")
        for code, u in (("x", 0.2), ("y", 0.2))
    )
    once = Procedure(Count(1, 1, 1), Count(1, 1, 1))
    model = MeasurementModel("x - y", (Quantity("x"), Quantity("y")))
    correlations = (Correlation(("x", "y"), "lot", coefficient),)
    return Budget(components, once, 0.95, None, "corrected", (-9.0, 9.0), model, correlations)


def test_it_is_said_when_errors_cancel():
    explained = explain(a_difference(0.9), Counts((1,)), estimates={"x": 1.0, "y": 2.0})
    assert "their errors partly cancel" in explained.components[0].remark
    assert explained.components[0].without.combined_standard_uncertainty == pytest.approx(0.2)
    assert explained.result.estimate == -1.0
    assert explained.components[1].contribution.sensitivity_coefficient == -1.0


def test_two_versions_line_by_line(a_budget, a_component):
    old = a_budget()
    new = a_budget(
        components=(old.components[0], a_component("bias", 0.01, 59, level="calibration", quantity="bias"),
                    a_component("new", 0.03, 20, level="session"))
    )  # fmt: skip
    before, after = (explain(b, Counts((2,)), tolerance=TOLERANCE, rule=RULE) for b in (old, new))
    comparison = compare(before, after)
    assert [change.code for change in comparison.changes] == ["repeatability", "remainder", "bias", "new"]
    same, gone, other, added = comparison.changes
    assert [change.changed for change in comparison.changes] == [False, True, True, True]
    assert (same.moves_upper_limit_by, same.moves_lower_limit_by) == (pytest.approx(0), pytest.approx(0))
    assert gone.after is None and added.before is None
    limit = ReleaseRule.compile(
        a_budget(components=without(old, "remainder")), Counts((2,)), TOLERANCE, RULE
    ).upper_acceptance_limit
    assert gone.moves_upper_limit_by == pytest.approx(limit - before.acceptance_limits.upper)
    assert added.moves_upper_limit_by < 0 < other.moves_upper_limit_by
    more = explain(old, Counts((3,)), tolerance=TOLERANCE, rule=RULE)
    assert [change.changed for change in compare(before, more).changes] == [True, False, False]


def test_a_comparison_without_a_rule_or_over_a_new_quantity_moves_no_limit(a_budget):
    plain = explain(a_budget(), Counts((2,)))
    assert compare(plain, plain).changes[0].moves_upper_limit_by is None
    model = explain(
        a_difference(0.1), Counts((1,)), estimates={"x": 3.0, "y": 0.0}, tolerance=TOLERANCE, rule=RULE
    )
    change = compare(explain(a_budget(), Counts((2,)), tolerance=TOLERANCE, rule=RULE), model).changes[-1]
    assert (change.code, change.acceptance_limits, change.moves_upper_limit_by) == ("y", None, None)
    one_sided = explain(a_budget(), Counts((2,)), tolerance=Tolerance(None, 4.0), rule=RULE)
    assert compare(one_sided, one_sided).changes[0].moves_lower_limit_by is None


def test_the_explained_uncertainty_is_the_combined_one(a_budget):
    budget = a_budget()
    result = combined(budget, Counts((3,)))
    explained = explain(budget, Counts((3,)))
    assert explained.result == result
    assert explained.expanded_uncertainty == expanded_uncertainty(
        result.standard_uncertainty, 0.95, result.effective_degrees_of_freedom
    )


@pytest.mark.parametrize(
    ("expression", "codes"), [("x**2", ["second-order-matters"]), ("3*x", []), ("abs(x)", [])]
)
def test_a_model_that_curves_is_warned_of(expression, codes):
    components = (Component("x", "x", "lot", (Term(1.0, MeanSquare("x", 0.04, 50)),), "A"),)
    once = Procedure(Count(1, 1, 1), Count(1, 1, 1))
    model = MeasurementModel(expression, (Quantity("x"),))
    budget = Budget(components, once, 0.95, None, "corrected", (-9.0, 9.0), model)
    explained = explain(budget, Counts((1,)), estimates={"x": 0.5})
    assert [warning.code for warning in explained.warnings] == codes


@pytest.mark.parametrize("at", [2.0, 5.5])
def test_limits_of_a_proportional_uncertainty_are_those_of_the_release_rule(a_budget, a_component, at):
    """Wherever the budget is explained: y + k u(y) = T holds at the limit, not at the middle of a range."""
    square = MeanSquare("sampling/relative", 0.02**2, 25)
    sampling = a_component("sampling", terms=(), relative_terms=(Term(1.0, square),), level="sample")
    budget = a_budget(components=(*a_budget().components, sampling))
    counts, tolerance = Counts((2,)), Tolerance(None, 5.0)
    explained = explain(budget, counts, estimates={"moisture": at}, tolerance=tolerance, rule=RULE)
    rule = ReleaseRule.compile(budget, counts, tolerance, RULE)
    assert explained.acceptance_limits == Limits(None, rule.upper_acceptance_limit)
    plain = ReleaseRule.compile(a_budget(), counts, tolerance, RULE)
    assert explained.components[-1].without.acceptance_limits.upper == pytest.approx(
        plain.upper_acceptance_limit
    )


def test_limits_of_a_rule_of_two_rounds_are_those_of_the_release_rule(a_budget, a_component):
    budget = a_budget()
    twice = DecisionRule("guarded_by_specific_risk", largest_risk=0.05, rounds=2)
    per_look = risk_per_look_of(budget, TOLERANCE, twice)
    explained = explain(budget, Counts((2,)), tolerance=TOLERANCE, rule=twice)
    rule = ReleaseRule.compile(budget, Counts((2,)), TOLERANCE, twice, risk_per_look=per_look)
    assert explained.acceptance_limits == Limits(rule.lower_acceptance_limit, rule.upper_acceptance_limit)
    once = explain(budget, Counts((2,)), tolerance=TOLERANCE, rule=RULE)
    assert explained.acceptance_limits.upper < once.acceptance_limits.upper


@pytest.mark.parametrize("rounds", [1, 2])
def test_limits_by_quantiles_are_those_of_the_release_rule(a_budget, rounds):
    z = (-4.0, -1.8, 0.1, 2.2, 4.5)
    tabulated = Tabulated((0.001, 0.05, 0.5, 0.95, 0.999), z, 100_000)
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05, rounds=rounds)
    budget, counts = a_budget(), Counts((2,))
    explained = explain(budget, counts, tolerance=TOLERANCE, rule=rule, tabulated=tabulated)
    # Whatever the quantiles, the risks of the looks add up to no more than the largest risk.
    each = None if rounds == 1 else 0.025
    compiled = ReleaseRule.compile(
        budget, counts, TOLERANCE, rule, distribution=tabulated, risk_per_look=each
    )
    assert explained.acceptance_limits == Limits(
        compiled.lower_acceptance_limit, compiled.upper_acceptance_limit
    )


def test_limits_by_quantiles_where_the_uncertainty_depends_on_the_value(a_budget, a_component):
    tabulated = Tabulated((0.001, 0.05, 0.5, 0.95, 0.999), (-4.0, -1.8, 0.1, 2.2, 4.5), 100_000)
    square = MeanSquare("relative", 0.01**2, math.inf)
    part = a_component("r", 0.03, relative_terms=(Term(1.0, square),))
    budget, counts = a_budget(components=(part,), bias=None), Counts((2,))
    at = {"moisture": 3.0}
    explained = explain(budget, counts, estimates=at, tolerance=TOLERANCE, rule=RULE, tabulated=tabulated)
    compiled = ReleaseRule.compile(budget, counts, TOLERANCE, RULE, distribution=tabulated)
    assert explained.acceptance_limits == Limits(
        compiled.lower_acceptance_limit, compiled.upper_acceptance_limit
    )


def test_by_global_risk_it_is_said_that_limits_need_the_production(a_budget):
    rule = DecisionRule("guarded_by_global_risk", largest_risk=0.01, specific_risk_cap=0.1)
    explained = explain(a_budget(), Counts((2,)), tolerance=TOLERANCE, rule=rule)
    assert explained.acceptance_limits.upper is None
    assert "production" in explained.acceptance_limits.detail
