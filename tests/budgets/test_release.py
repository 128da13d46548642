import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from budgets.conformity import Tolerance, conformance_probability
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import EmptyAcceptanceError, ModelError, ProcedureError
from budgets.judgements import OUTCOMES
from budgets.propagation import Counts, combined
from budgets.release import ReleaseRule
from budgets.rounded_comparison import rounded_tolerance

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
FACTOR = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=2)
SIMPLE = DecisionRule("simple", largest_standard_uncertainty=1.0)
TOLERANCES = (
    Tolerance(None, 4.0),
    Tolerance(2.0, None),
    Tolerance(2.0, 4.0),
    Tolerance(2.0, 4.0, False, False),
)


def known(component):
    """Return the same component with infinite degrees of freedom."""
    from dataclasses import replace

    return replace(
        component,
        terms=tuple(
            replace(t, mean_square=replace(t.mean_square, degrees_of_freedom=math.inf))
            for t in component.terms
        ),
    )


@pytest.fixture(params=["normal", "t"])
def budget(request, a_budget):
    made = a_budget()
    return made if request.param == "t" else a_budget(components=tuple(map(known, made.components)))


@pytest.mark.parametrize("rule", [RISK, FACTOR, SIMPLE], ids=lambda rule: rule.kind)
@pytest.mark.parametrize("tolerance", TOLERANCES)
def test_many_are_judged_as_each_alone(budget, tolerance, rule):
    compiled = ReleaseRule.compile(budget, Counts((2,)), tolerance, rule, domain=(0.0, 100.0))
    edges = [2.0, 4.0, compiled.lower_acceptance_limit, compiled.upper_acceptance_limit]
    exactly = [x for x in edges if x is not None]
    estimates = np.concatenate([np.linspace(1.5, 4.5, 601), exactly, np.nextafter(exactly, 9)])
    many = compiled.judge_many(estimates)
    single = [compiled.judge(x) for x in estimates.tolist()]
    assert [OUTCOMES[i] for i in many.outcomes] == [j.outcome for j in single]
    exact = [j.conformance_probability for j in single]
    assert np.abs(many.conformance_probability - exact).max() < 1e-10
    for judgement in single:
        assert judgement.specific_consumers_risk == pytest.approx(1 - judgement.conformance_probability)


def test_a_rule_survives_its_document_to_the_last_bit(budget):
    compiled = ReleaseRule.compile(budget, Counts((2,)), TOLERANCES[2], RISK)
    document = json.loads(json.dumps(compiled.to_document(), allow_nan=False))
    assert ReleaseRule.from_document(document) == compiled
    assert (document["effective_degrees_of_freedom"] is None) == math.isinf(
        compiled.effective_degrees_of_freedom
    )


def test_the_numbers_of_a_rule_are_those_of_the_budget(a_budget):
    budget = a_budget()
    compiled = ReleaseRule.compile(budget, Counts((2,)), TOLERANCES[0], RISK)
    result = combined(budget, Counts((2,)))
    assert compiled.combined_standard_uncertainty == result.standard_uncertainty
    assert compiled.effective_degrees_of_freedom == result.effective_degrees_of_freedom
    assert compiled.expanded_uncertainty == compiled.coverage_factor * result.standard_uncertainty
    assert compiled.largest_specific_risk == pytest.approx(0.05, rel=1e-9)
    assert compiled.bias_shift == 0.0
    assert compiled.measurement_capability_index is None


def test_the_specific_risk_of_a_rule_by_factor_is_shown(a_budget):
    # JCGM 106:2012, 8.3.2 (from memory): w = U with k = 2 and one limit leaves about 2.3 %.
    components = tuple(map(known, a_budget().components))
    rule = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.9545, sides=2)
    compiled = ReleaseRule.compile(a_budget(components=components), Counts((2,)), TOLERANCES[0], rule)
    assert compiled.largest_specific_risk == pytest.approx(0.023, abs=5e-4)


def test_outcomes_from_the_inside_out(a_budget):
    compiled = ReleaseRule.compile(a_budget(), Counts((2,)), Tolerance(2.0, 4.0), RISK)
    lower, upper = compiled.lower_acceptance_limit, compiled.upper_acceptance_limit
    assert compiled.judge(3.0).outcome == "release"
    # Exactly at an acceptance limit counts as accepted.
    assert compiled.judge(upper).outcome == compiled.judge(lower).outcome == "release"
    assert compiled.judge(math.nextafter(upper, 9)).outcome == "hold"
    assert compiled.judge(math.nextafter(lower, 0)).outcome == "hold"
    assert compiled.judge(4.0).outcome == compiled.judge(2.0).outcome == "hold"
    assert compiled.judge(4.001).outcome == compiled.judge(1.999).outcome == "reject"
    opened = ReleaseRule.compile(a_budget(), Counts((2,)), Tolerance(2.0, 4.0, False, False), SIMPLE)
    assert opened.judge(4.0).outcome == opened.judge(2.0).outcome == "reject"


def test_an_uncorrected_bias_moves_limit_and_probability_alike(a_budget):
    budget = a_budget(bias=-0.1, bias_treatment="in_guard_band")
    compiled = ReleaseRule.compile(budget, Counts((2,)), Tolerance(None, 4.0), RISK)
    corrected = ReleaseRule.compile(a_budget(bias=-0.1), Counts((2,)), Tolerance(None, 4.0), RISK)
    assert compiled.upper_acceptance_limit == pytest.approx(corrected.upper_acceptance_limit - 0.1)
    assert compiled.bias_shift == -0.1
    judgement = compiled.judge(compiled.upper_acceptance_limit)
    assert judgement.specific_consumers_risk == pytest.approx(0.05)
    crossed = ReleaseRule.from_document(
        {**compiled.to_document(), "lower_tolerance_limit": 3.95, "lower_acceptance_limit": 3.95}
    )
    assert crossed.judge_many([3.9]).conformance_probability[0] == 0.0
    unbiased = a_budget(components=a_budget().components[:2], bias=None, bias_treatment="in_guard_band")
    assert ReleaseRule.compile(unbiased, Counts((2,)), Tolerance(None, 4.0), RISK).bias_shift == 0.0


def test_what_cannot_be_compiled(a_budget):
    with pytest.raises(ProcedureError):
        ReleaseRule.compile(a_budget(), Counts((5,)), TOLERANCES[0], RISK)
    with pytest.raises(EmptyAcceptanceError):
        ReleaseRule.compile(a_budget(), Counts((2,)), Tolerance(2.0, 2.1), RISK)
    with pytest.raises(EmptyAcceptanceError, match="validated range"):
        ReleaseRule.compile(a_budget(), Counts((2,)), Tolerance(None, 1.0), RISK)


@pytest.mark.parametrize("estimate", [math.nan, math.inf, -math.inf])
def test_an_estimate_that_is_no_number_is_refused(a_budget, estimate):
    compiled = ReleaseRule.compile(a_budget(), Counts((2,)), TOLERANCES[0], RISK)
    with pytest.raises(ModelError):
        compiled.judge(estimate)
    with pytest.raises(ModelError):
        compiled.judge_many([3.0, estimate])


def test_arrays_of_any_length_and_shape(a_budget):
    compiled = ReleaseRule.compile(a_budget(), Counts((2,)), TOLERANCES[0], RISK)
    assert compiled.judge_many([]).outcomes.shape == (0,)
    estimates = np.linspace(3, 5, 20_001)
    many = compiled.judge_many(estimates[::2])
    assert many.outcomes.shape == (10_001,)
    nu, u = compiled.effective_degrees_of_freedom, compiled.combined_standard_uncertainty
    exact = conformance_probability(estimates[::2], u, StudentT(nu), TOLERANCES[0])
    assert np.abs(many.conformance_probability - exact).max() < 1e-10


@given(st.floats(0.0, 8.0), st.floats(0.0, 8.0))
def test_a_worse_estimate_has_no_better_outcome(first, second):
    low, high = sorted((first, second))
    compiled = ReleaseRule.from_document(COMPILED)
    order = OUTCOMES.index
    assert order(compiled.judge(low).outcome) <= order(compiled.judge(high).outcome)
    assert compiled.judge(low).conformance_probability >= compiled.judge(high).conformance_probability


COMPILED = {
    "lower_tolerance_limit": None,
    "upper_tolerance_limit": 4.0,
    "lower_inclusive": True,
    "upper_inclusive": True,
    "lower_acceptance_limit": None,
    "upper_acceptance_limit": 3.88,
    "guard_band_lower": None,
    "guard_band_upper": 0.12,
    "combined_standard_uncertainty": 0.07,
    "effective_degrees_of_freedom": 41.2,
    "coverage_probability": 0.95,
    "coverage_factor": 2.02,
    "expanded_uncertainty": 0.1414,
    "bias_shift": 0.0,
    "decision_rule": {"kind": "guarded_by_specific_risk", "largest_risk": 0.05},
    "measurement_capability_index": None,
    "largest_specific_risk": 0.05,
}


@pytest.mark.parametrize("nu_known", [False, True])
def test_a_rule_that_compares_rounded_keeps_what_was_stated(a_budget, nu_known):
    budget = a_budget(components=tuple(map(known, a_budget().components))) if nu_known else a_budget()
    tolerance = rounded_tolerance(2.0, 3.9, decimals=1)
    compiled = ReleaseRule.compile(budget, Counts((2,)), tolerance, RISK)
    assert (compiled.upper_tolerance_limit, compiled.stated_limits.upper) == (3.95, 3.9)
    assert ReleaseRule.from_document(json.loads(json.dumps(compiled.to_document()))) == compiled
    # 3.95 would be shown as 4.0, 3.9499 as 3.9; a verdict and its probability use the same limit.
    assert [compiled.judge(x).outcome for x in (3.949, 3.95)] == ["hold", "reject"]
    assert compiled.judge(3.95).risk_above == pytest.approx(0.5)
    assert compiled.judge(compiled.upper_acceptance_limit).specific_consumers_risk == pytest.approx(0.05)
