"""Probabilities within the natural domain, against mpmath and against draws that are thrown away."""

import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from mpmath import mp

from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import EmptyAcceptanceError, LimitsError, NotSupportedError
from budgets.level_dependence import LevelDependence
from budgets.natural_bounds import truncated_probabilities
from budgets.release import ReleaseRule
from budgets.uncertainty_at_limits import UncertaintyAtLimits

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
NORMAL = StudentT(math.inf)
PERCENT = (0.0, 100.0)


def a_rule(tolerance, u=0.1, nu=math.inf, rule=RISK, dependence=None, domain=PERCENT, **options):
    return ReleaseRule.of_uncertainty(
        UncertaintyAtLimits(u, nu, dependence),
        tolerance,
        rule,
        0.95,
        domain=domain,
        truncated=True,
        **options,
    )


@pytest.mark.parametrize("y", [0.0, 0.05, 0.2, 0.31])
def test_the_share_that_cannot_be_is_left_out(y):
    with mp.workdps(40):

        def cdf(x):
            return mp.ncdf((mp.mpf(x) - mp.mpf(y)) / mp.mpf(0.1))

        exact = (cdf(0.3) - cdf(0)) / (1 - cdf(0))
    _, within, above = truncated_probabilities(y, 0.1, NORMAL, Tolerance(None, 0.3), (0.0, None))
    assert within == pytest.approx(float(exact), rel=1e-12)
    assert above == pytest.approx(1 - float(exact), rel=1e-9)


TOLERANCES = (Tolerance(None, 0.4), Tolerance(99.6, None), Tolerance(0.1, 0.5), Tolerance(None, 120.0))


@given(
    st.sampled_from(TOLERANCES),
    st.floats(-1, 101), st.floats(0.01, 3), st.sampled_from([4.0, math.inf]),
)  # fmt: skip
def test_the_three_probabilities_add_up_to_one(tolerance, y, u, nu):
    found = truncated_probabilities(y, u, StudentT(nu), tolerance, PERCENT)
    assert sum(found) == pytest.approx(1, abs=1e-9)
    many = truncated_probabilities(np.array([y, 50.0]), u, StudentT(nu), tolerance, PERCENT)
    assert [part[0] for part in many] == list(found)


@pytest.mark.parametrize("tolerance", [Tolerance(None, 0.3), Tolerance(99.7, None), Tolerance(0.05, 0.6)])
@pytest.mark.parametrize("nu", [8.0, math.inf])
def test_at_the_limits_the_risk_within_the_domain_is_the_largest_allowed(tolerance, nu):
    compiled = a_rule(tolerance, u=0.1 if tolerance.lower != 0.05 else 0.08, nu=nu)
    for limit, end in (
        (compiled.lower_acceptance_limit, tolerance.lower),
        (compiled.upper_acceptance_limit, tolerance.upper),
    ):
        if limit is not None:
            risk = compiled.judge(limit).specific_consumers_risk
            assert risk == pytest.approx(0.05, rel=1e-9) or (limit == end and risk < 0.05)
    assert compiled.largest_specific_risk <= 0.05 * (1 + 1e-9)
    estimates = np.linspace(0.0, 0.6, 31)
    many = compiled.judge_many(estimates).conformance_probability
    assert many == pytest.approx([compiled.judge(x).conformance_probability for x in estimates], abs=1e-15)
    assert ReleaseRule.from_document(json.loads(json.dumps(compiled.to_document()))) == compiled


def test_far_from_the_bound_nothing_changes():
    near = a_rule(Tolerance(2.0, 4.0))
    plain = ReleaseRule.of_uncertainty(
        UncertaintyAtLimits(0.1, math.inf, None), Tolerance(2.0, 4.0), RISK, 0.95, domain=PERCENT
    )
    assert near.upper_acceptance_limit == pytest.approx(plain.upper_acceptance_limit, rel=1e-14)
    assert near.lower_acceptance_limit == pytest.approx(plain.lower_acceptance_limit, rel=1e-14)
    one = a_rule(Tolerance(None, 4.0), domain=(None, 100.0))
    assert one.upper_acceptance_limit == pytest.approx(4 - 0.1 * 1.6448536269514722, rel=1e-14)
    low = a_rule(Tolerance(2.0, None), domain=(0.0, None))
    assert low.lower_acceptance_limit == pytest.approx(2 + 0.1 * 1.6448536269514722, rel=1e-14)


def test_near_the_bound_an_upper_limit_is_stricter():
    # A half-normal value is known less well than a normal one with its centre at the bound.
    compiled = a_rule(Tolerance(None, 0.2), u=0.1)
    assert 0 < compiled.upper_acceptance_limit < 0.2 - 0.1 * 1.6448536269514722
    with pytest.raises(EmptyAcceptanceError, match=r"best estimate in the natural domain.*at most 0\.102\."):
        a_rule(Tolerance(None, 0.2), u=0.11)


def test_all_of_the_domain_may_conform():
    # A limit so near to full purity that what lies beyond it has hardly any room left.
    compiled = a_rule(Tolerance(None, 99.9), u=10.0)
    assert compiled.upper_acceptance_limit == 99.9


@pytest.mark.parametrize(
    ("options", "kind", "words"),
    [
        ({"domain": (None, None)}, LimitsError, "no end"),
        ({"bias": 0.1}, NotSupportedError, "uncorrected bias"),
        (
            {"rule": DecisionRule("guarded_by_specific_risk", largest_risk=0.05, rejection="guarded")},
            NotSupportedError,
            "guarded rejection",
        ),
        (
            {
                "rule": DecisionRule("guarded_by_specific_risk", largest_risk=0.05, rounds=2),
                "risk_per_look": 0.03,
            },
            NotSupportedError,
            "further rounds",
        ),
        ({"dependence": LevelDependence(0.05, 0.01)}, NotSupportedError, "parts proportional"),
    ],
)
def test_what_is_not_built_beside_it_is_refused(options, kind, words):
    with pytest.raises(kind, match=words):
        a_rule(Tolerance(None, 4.0), **options)


def test_a_rule_by_factor_keeps_its_limits():
    factor = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=2)
    compiled = a_rule(Tolerance(None, 0.3), rule=factor)
    assert compiled.upper_acceptance_limit == pytest.approx(0.3 - 0.1 * 1.959963984540054)
    assert compiled.judge(0.05).risk_above > StudentT(math.inf).upper_tail(2.5)
