import json
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.conformity import Tolerance, tails
from budgets.correlations import Correlation
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import EmptyAcceptanceError, LimitsError, ModelError, NotSupportedError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.level_dependence import (
    LevelDependence,
    level_dependent_acceptance,
    lower_acceptance_limit,
    upper_acceptance_limit,
)
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts, coverage_factor
from budgets.release import ReleaseRule
from budgets.reporting import statement

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
FACTOR = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=2)
U = LevelDependence(0.05, 0.02)


def test_computed_check_values():
    """Computed for the project's rules: T = 5, k = 2."""
    assert upper_acceptance_limit(5, 2, U) == pytest.approx(4.784083515826, abs=5e-13)
    assert lower_acceptance_limit(5, 2, U) == pytest.approx(5.231942125200, abs=5e-13)
    assert upper_acceptance_limit(5, 2, LevelDependence(0.05, 0.5)) == pytest.approx(2.499, abs=5e-4)
    assert lower_acceptance_limit(5, 2, LevelDependence(0.05, 0.5)) is None
    assert upper_acceptance_limit(0.0, 0.0, U) == 0.0


@settings(max_examples=60)
@given(st.floats(0.1, 100), st.floats(0.1, 5), st.floats(1e-6, 10), st.floats(1e-6, 3))
def test_limits_solve_their_equation(limit, k, s0, s1):
    """Mpmath: the residual of ``T - y = k u(y)`` at the limit, relative to its slope."""
    with mp.workdps(40):
        exact = {name: mp.mpf(value) for name, value in {"T": limit, "k": k, "s0": s0, "s1": s1}.items()}
        for sign, found in (
            (1, upper_acceptance_limit(limit, k, LevelDependence(s0, s1))),
            (-1, lower_acceptance_limit(limit, k, LevelDependence(s0, s1))),
        ):
            if found is None or found < 0:
                continue
            ks1 = exact["k"] * exact["s1"]
            root = exact["k"] * mp.sqrt(exact["s0"] ** 2 * (1 - ks1**2) + (exact["s1"] * exact["T"]) ** 2)
            if abs(1 - ks1) < 1e-3:
                continue  # the quadratic turns linear: its textbook form is of no use here
            right = (exact["T"] - sign * root) / (1 - ks1**2)
            assert abs(found - right) <= mp.mpf("1e-12") * max(abs(right), exact["T"], root)


def test_the_limits_hold_the_specific_risk_of_both_tails():
    tolerance = Tolerance(4.6, 5.0)
    wide = LevelDependence(0.05, 0.012)
    for nu in (math.inf, 6.0):
        accepted = level_dependent_acceptance(RISK, tolerance, wide, StudentT(nu))
        for limit in (accepted.lower, accepted.upper):
            assert sum(tails(limit, wide.at(limit), StudentT(nu), tolerance)) == pytest.approx(
                0.05, rel=1e-11
            )
        assert accepted.guard_band_upper == pytest.approx(5.0 - accepted.upper)
    far = level_dependent_acceptance(RISK, Tolerance(1.0, 50.0), U, StudentT(math.inf))
    assert far.upper == pytest.approx(upper_acceptance_limit(50.0, coverage_factor(0.9, math.inf), U))


def test_one_limit_and_a_factor():
    accepted = level_dependent_acceptance(FACTOR, Tolerance(None, 5.0), U, StudentT(9.0))
    k = coverage_factor(0.95, 9.0)
    assert accepted.upper + k * U.at(accepted.upper) == pytest.approx(5.0, rel=1e-14)
    assert accepted.lower is None
    accepted = level_dependent_acceptance(FACTOR, Tolerance(5.0, None), U, StudentT(9.0), bias=0.1)
    assert accepted.lower - k * U.at(accepted.lower) == pytest.approx(5.1, rel=1e-14)
    both = level_dependent_acceptance(FACTOR, Tolerance(4.0, 5.0), U, StudentT(9.0))
    assert both.upper + k * U.at(both.upper) == pytest.approx(5.0)
    simple = DecisionRule("simple", largest_standard_uncertainty=0.2)
    assert level_dependent_acceptance(simple, Tolerance(None, 5.0), U, StudentT(9.0)).upper == 5.0


@pytest.mark.parametrize(
    ("rule", "tolerance", "dependence", "kind"),
    [
        (RISK, Tolerance(-1.0, 5.0), U, NotSupportedError),
        (RISK, Tolerance(4.9, 5.0), U, EmptyAcceptanceError),
        (RISK, Tolerance(4.63, 5.0), LevelDependence(0.05, 0.018), EmptyAcceptanceError),
        (RISK, Tolerance(5.0, None), LevelDependence(0.05, 0.9), EmptyAcceptanceError),
        (RISK, Tolerance(None, 0.01), U, EmptyAcceptanceError),
        (DecisionRule("simple", largest_standard_uncertainty=0.1), Tolerance(None, 5.0), U, LimitsError),
    ],
)
def test_what_cannot_be_accepted_is_refused(rule, tolerance, dependence, kind):
    with pytest.raises(kind):
        level_dependent_acceptance(rule, tolerance, dependence, StudentT(20.0))


def test_a_single_estimate_may_be_all_that_is_accepted():
    """One-sided limits that meet: the risk of both tails decides."""
    tolerance = Tolerance(1.0, 1.0 + 2 * 1.6448536269514722 * 0.1)
    with pytest.raises(EmptyAcceptanceError):
        level_dependent_acceptance(RISK, tolerance, LevelDependence(0.1, 0), StudentT(math.inf))


def a_budget(**changes):
    members = {
        "components": (
            Component("r", "moisture", "reading", (Term(1.0, MeanSquare("r", 0.0016, 30)),), "A"),
            Component(
                "p", "moisture", "lot", (), "B", relative_terms=(Term(1.0, MeanSquare("p", 4e-4, 12)),)
            ),
            Component("b", "bias", "calibration", (Term(1.0, MeanSquare("b", 0.0004, 59)),), "A"),
        ),
        "procedure": Procedure(Count(1, 1, 3), Count(1, 2, 4)),
        "coverage_probability": 0.95,
        "bias": 0.03,
        "bias_treatment": "corrected",
        "validated_range": (1.5, 5.5),
    }
    return Budget(**{**members, **changes})


def test_a_rule_for_an_uncertainty_that_depends_on_the_estimate():
    tolerance = Tolerance(2.0, 4.0)
    rule = ReleaseRule.compile(a_budget(), Counts((2,)), tolerance, RISK)
    s0, s1 = rule.constant_standard_uncertainty, rule.proportional_standard_uncertainty
    assert (s0, s1) == (pytest.approx(math.sqrt(0.0008 + 0.0004)), pytest.approx(0.02))
    assert rule.combined_standard_uncertainty == pytest.approx(math.hypot(s0, 0.02 * 4.0))
    assert rule.acceptance_limits == "fixed"
    # Each verdict with the uncertainty at its own estimate.
    verdict = rule.judge(3.0)
    below, above = tails(3.0, math.hypot(s0, 0.06), rule.error_distribution, tolerance)
    assert (verdict.risk_below, verdict.risk_above) == (pytest.approx(below), pytest.approx(above))
    assert verdict.combined_standard_uncertainty == pytest.approx(math.hypot(s0, 0.06))
    for limit in (rule.lower_acceptance_limit, rule.upper_acceptance_limit):
        assert rule.judge(limit).specific_consumers_risk == pytest.approx(0.05, rel=1e-9)
        assert rule.judge(limit).outcome == "release"
    assert rule.largest_specific_risk == pytest.approx(0.05)
    estimates = np.linspace(1.5, 4.5, 301)
    many = rule.judge_many(estimates)
    for estimate, outcome, probability in zip(
        estimates, many.outcomes, many.conformance_probability, strict=True
    ):
        one = rule.judge(float(estimate))
        assert ("release", "hold", "reject")[outcome] == one.outcome
        assert probability == pytest.approx(one.conformance_probability, abs=2e-10)
    assert ReleaseRule.from_document(json.loads(json.dumps(rule.to_document()))) == rule
    text = statement(characteristic="moisture", unit="%", estimate=3.0, rule=rule, judgement=verdict)
    # U at this estimate, not the larger one at the limit.
    assert f"± {rule.coverage_factor * math.hypot(s0, 0.06):.2f})" in text
    assert "Outcome: release" in text


def test_rules_of_the_first_version_still_load():
    budget = a_budget(components=(a_budget().components[0], a_budget().components[2]))
    plain = ReleaseRule.compile(budget, Counts((2,)), Tolerance(None, 4.0), RISK)
    document = plain.to_document()
    del document["constant_standard_uncertainty"], document["proportional_standard_uncertainty"]
    assert ReleaseRule.from_document(document) == plain
    assert plain.standard_uncertainty_at(3.0) == plain.combined_standard_uncertainty


def test_what_a_fixed_rule_cannot_do_is_refused():
    first, second, third = a_budget().components
    other = Component("q", "moisture", "lot", (Term(1.0, MeanSquare("q", 1e-4, 12)),), "B")
    correlated = a_budget(
        components=(first, second, other, third), correlations=(Correlation(("p", "q"), "lot", 0.5),)
    )
    with pytest.raises(NotSupportedError, match="correlations beside"):
        ReleaseRule.compile(correlated, Counts((2,)), Tolerance(None, 4.0), RISK)
    model = MeasurementModel("moisture", (Quantity("moisture"),))
    derived = a_budget(components=(first,), bias=None, model=model)
    with pytest.raises(ModelError, match="no fixed acceptance limits"):
        ReleaseRule.compile(derived, Counts((2,)), Tolerance(None, 4.0), RISK)


def test_an_estimate_of_zero_is_not_known_exactly(a_budget, a_component):
    square = MeanSquare("relative", 0.02**2, 25)
    wholly = a_component("wholly", terms=(), relative_terms=(Term(1.0, square),))
    budget = a_budget(components=(wholly,), bias=None, validated_range=(0.0, 10.0))
    rule = ReleaseRule.compile(
        budget,
        Counts((2,)),
        Tolerance(None, 5.0),
        DecisionRule("guarded_by_specific_risk", largest_risk=0.05),
    )
    with pytest.raises(ModelError, match="exactly"):
        rule.judge(0.0)
    with pytest.raises(ModelError, match="exactly"):
        rule.judge_many([1.0, 0.0])


def test_the_rule_at_an_estimate_has_the_uncertainty_there():
    tolerance = Tolerance(None, 4.0)
    rule = ReleaseRule.compile(a_budget(), Counts((2,)), tolerance, RISK)
    here = rule.at(3.0)
    assert here.combined_standard_uncertainty == rule.standard_uncertainty_at(3.0)
    assert here.expanded_uncertainty == rule.coverage_factor * rule.standard_uncertainty_at(3.0)
    assert here.upper_acceptance_limit == rule.upper_acceptance_limit
    assert here.judge(3.0) == rule.judge(3.0)
    constant = replace(rule, constant_standard_uncertainty=None, proportional_standard_uncertainty=0.0)
    assert constant.at(3.0) is constant


def test_at_zero_without_a_constant_part_there_is_nothing_to_guard():
    assert upper_acceptance_limit(0.0, 2.0, LevelDependence(0.0, 0.1)) == 0.0
