"""Guarded rejection: mirrored acceptance, and what lies between the two."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import ndtri

from budgets.conformity import Tolerance, conformance_probability
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT, Tabulated
from budgets.errors import EmptyAcceptanceError
from budgets.judgements import OUTCOMES
from budgets.level_dependence import LevelDependence
from budgets.release import ReleaseRule
from budgets.uncertainty_at_limits import UncertaintyAtLimits

UPPER, LOWER, BOTH = Tolerance(None, 4.0), Tolerance(2.0, None), Tolerance(2.0, 4.0)
RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05, rejection="guarded")
FACTOR = DecisionRule(
    "guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=2, rejection="guarded"
)


def a_rule(rule=RISK, tolerance=BOTH, u=0.1, nu=12.0, dependence=None, tabulated=None, **options):
    uncertain = UncertaintyAtLimits(u, nu, dependence)
    return ReleaseRule.of_uncertainty(uncertain, tolerance, rule, 0.95, tabulated, **options)


@given(
    st.sampled_from([UPPER, LOWER, BOTH]),
    st.floats(0.001, 0.4),
    st.floats(0.01, 0.5),
    st.floats(1.0, 300.0),
)
def test_beyond_a_rejection_limit_conformance_is_no_likelier_than_the_risk(tolerance, r, u, nu):
    rule = replace(RISK, largest_risk=r)
    try:
        compiled = a_rule(rule, tolerance, u, nu)
    except EmptyAcceptanceError:
        return
    for limit, end in ((compiled.lower_rejection_limit, 2.0), (compiled.upper_rejection_limit, 4.0)):
        if limit is None:
            continue
        found = conformance_probability(limit, u, StudentT(nu), tolerance)
        assert found == pytest.approx(r, rel=1e-9) or (limit == end and found <= r)
        outward = math.inf if end == 4.0 else -math.inf
        assert compiled.judge(limit).outcome == "hold"
        assert compiled.judge(math.nextafter(limit, outward)).outcome == "reject"


def test_rejection_mirrors_acceptance_at_a_single_limit():
    for rule in (RISK, FACTOR):
        upper, lower = a_rule(rule, UPPER), a_rule(rule, LOWER)
        assert upper.upper_rejection_limit - 4.0 == pytest.approx(4.0 - upper.upper_acceptance_limit)
        assert 2.0 - lower.lower_rejection_limit == pytest.approx(lower.lower_acceptance_limit - 2.0)
        assert upper.lower_rejection_limit is None
    # ISO 14253-1 (from memory): beyond the limit by U, with k = 2.179 for 12 degrees of freedom.
    assert a_rule(FACTOR, UPPER).upper_rejection_limit == pytest.approx(4.2179, abs=5e-5)


def test_between_the_limits_a_lot_is_held():
    compiled = a_rule()
    many = compiled.judge_many([2.99, 3.99, 4.01, 4.17, 4.2, 1.99, 1.7])
    assert [OUTCOMES[i] for i in many.outcomes] == [
        "release", "hold", "hold", "hold", "reject", "hold", "reject",
    ]  # fmt: skip
    assert [compiled.judge(x).outcome for x in (4.01, 4.2)] == ["hold", "reject"]


@given(st.floats(0.0, 6.0), st.sampled_from([UPPER, LOWER, BOTH]), st.sampled_from([RISK, FACTOR]))
def test_arrays_are_judged_like_their_members(estimate, tolerance, rule):
    compiled = a_rule(rule, tolerance)
    edges = [
        compiled.lower_rejection_limit, compiled.upper_rejection_limit,
        compiled.lower_acceptance_limit, compiled.upper_acceptance_limit, estimate,
    ]  # fmt: skip
    values = [x for x in edges if x is not None]
    many = compiled.judge_many(values).outcomes
    assert [OUTCOMES[i] for i in many] == [compiled.judge(x).outcome for x in values]


def test_an_uncorrected_bias_never_helps_a_rejection():
    plain, high, low = (a_rule(tolerance=BOTH, bias=b) for b in (0.0, 0.2, -0.2))
    # A reading that is 0.2 too high proves less that the true value is above, nothing else about below.
    assert high.upper_rejection_limit == pytest.approx(plain.upper_rejection_limit + 0.2, abs=1e-6)
    assert high.lower_rejection_limit == pytest.approx(plain.lower_rejection_limit, abs=1e-6)
    assert low.lower_rejection_limit == pytest.approx(plain.lower_rejection_limit - 0.2, abs=1e-6)


def test_a_strict_limit_is_not_released_at():
    rule = replace(RISK, largest_risk=0.4999999999)
    compiled = a_rule(rule, Tolerance(None, 4.0, upper_inclusive=False), u=1e-9)
    assert compiled.judge(4.0).outcome == "hold"


@pytest.mark.parametrize("tolerance", [Tolerance(None, 5.0), Tolerance(3.0, None), Tolerance(3.0, 5.0)])
def test_limits_for_an_uncertainty_that_depends_on_the_estimate(tolerance):
    dependence = LevelDependence(0.05, 0.02)
    compiled = a_rule(RISK, tolerance, dependence.at(5.0), 12.0, dependence)
    for limit in (compiled.lower_rejection_limit, compiled.upper_rejection_limit):
        if limit is not None:
            found = conformance_probability(limit, dependence.at(limit), StudentT(12.0), tolerance)
            assert found == pytest.approx(0.05, rel=1e-9)
    by_factor = a_rule(FACTOR, tolerance, dependence.at(5.0), 12.0, dependence)
    if by_factor.upper_rejection_limit is not None:
        limit = by_factor.upper_rejection_limit
        assert limit - by_factor.coverage_factor * dependence.at(limit) == pytest.approx(5.0)


def test_where_no_estimate_proves_that_a_limit_is_missed_nothing_is_rejected():
    # The uncertainty grows as fast as the value: k s1 = 1.1.
    steep = LevelDependence(0.01, 1.1 / StudentT(12.0).upper_quantile(0.05))
    compiled = a_rule(RISK, Tolerance(None, 5.0), steep.at(5.0), 12.0, steep)
    assert compiled.upper_rejection_limit is None
    assert compiled.judge(1e6).outcome == "hold"
    # Near zero not even an estimate of zero proves that the value is below the limit.
    low = LevelDependence(0.1, 0.01)
    compiled = a_rule(RISK, Tolerance(0.1, None), low.at(0.1), 12.0, low)
    assert compiled.lower_rejection_limit is None
    assert a_rule(RISK, Tolerance(0.0, None), low.at(0.0), 12.0, low).lower_rejection_limit is None


def test_an_asymmetric_distribution_changes_sides():
    p = np.concatenate([np.geomspace(1e-4, 0.4, 40), [0.5], 1 - np.geomspace(0.4, 1e-4, 40)])
    q = np.exp(0.4 * ndtri(p)) - 1  # log-normal: a long tail upwards
    table = Tabulated(tuple(p), tuple(q), 1_000_000)
    compiled = a_rule(RISK, UPPER, tabulated=table)
    assert compiled.upper_acceptance_limit == pytest.approx(
        4 - 0.1 * (math.exp(0.4 * 1.6448536) - 1), abs=1e-4
    )
    assert compiled.upper_rejection_limit == pytest.approx(
        4 - 0.1 * (math.exp(-0.4 * 1.6448536) - 1), abs=1e-4
    )
    two = a_rule(RISK, BOTH, u=0.5, tabulated=table)
    for limit in (two.lower_acceptance_limit, two.upper_acceptance_limit):
        assert two.judge(limit).specific_consumers_risk == pytest.approx(0.05, rel=1e-9)
    with pytest.raises(EmptyAcceptanceError, match=r"would have to be at most 1\.239\."):
        a_rule(RISK, BOTH, u=5.0, tabulated=table)
    many = two.judge_many(np.linspace(1.0, 5.0, 9))
    single = [two.judge(x).conformance_probability for x in np.linspace(1.0, 5.0, 9)]
    assert many.conformance_probability == pytest.approx(single, abs=1e-15)
    assert ReleaseRule.from_document(json.loads(json.dumps(two.to_document()))) == two
    assert two.coverage_factor == pytest.approx(math.exp(0.4 * 1.959964) - 1, abs=2e-3)
