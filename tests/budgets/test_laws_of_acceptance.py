"""Laws that any decision rule must keep: what a worse measurement, a mirror or another unit may change."""

import math
from dataclasses import replace

import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from mpmath import mp

from budgets.acceptance import acceptance_interval
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import EmptyAcceptanceError
from budgets.level_dependence import LevelDependence, level_dependent_acceptance
from budgets.release import ReleaseRule
from budgets.uncertainty_at_limits import UncertaintyAtLimits

TOLERANCES = st.sampled_from([Tolerance(None, 4.0), Tolerance(2.0, None), Tolerance(2.0, 4.0)])
RISKS = st.floats(1e-4, 0.499)
U = st.floats(1e-3, 0.6)
NU = st.one_of(st.floats(1.0, 500.0), st.just(math.inf))
BIAS = st.floats(-0.2, 0.2)


def risk(r, **members):
    return DecisionRule("guarded_by_specific_risk", largest_risk=r, **members)


def factor(multiple, p=0.95):
    return DecisionRule("guarded_by_factor", multiple=multiple, coverage_probability=p, sides=2)


def ends(rule, tolerance, u, nu, **options):
    """Return the acceptance limits, infinite where there is none; None where nothing is accepted."""
    try:
        found = acceptance_interval(rule, tolerance, u, StudentT(nu), **options)
    except EmptyAcceptanceError:
        return None
    return (
        -math.inf if found.lower is None else found.lower,
        math.inf if found.upper is None else found.upper,
    )


def no_wider(inner, outer, room=1e-12):
    return inner is None or (
        outer is not None and inner[0] >= outer[0] - room and inner[1] <= outer[1] + room
    )


@given(TOLERANCES, RISKS, U, NU, BIAS, st.floats(1.0, 3.0))
def test_a_larger_uncertainty_accepts_no_more(tolerance, r, u, nu, bias, times):
    for rule in (risk(r), factor(1.0)):
        wide = ends(rule, tolerance, u, nu, bias=bias)
        assert no_wider(ends(rule, tolerance, u * times, nu, bias=bias), wide)


@given(TOLERANCES, RISKS, st.floats(0.05, 1.0), U, NU)
def test_a_smaller_risk_or_a_larger_coverage_accepts_no_more(tolerance, r, share, u, nu):
    assert no_wider(ends(risk(r * share), tolerance, u, nu), ends(risk(r), tolerance, u, nu))
    assert no_wider(ends(factor(1.0, 0.99), tolerance, u, nu), ends(factor(1.0, 0.9), tolerance, u, nu))
    assert no_wider(ends(factor(1.5), tolerance, u, nu), ends(factor(1.0), tolerance, u, nu))


@given(RISKS, st.floats(0.001, 0.2), st.floats(0.0, 0.1), NU, st.floats(1.0, 2.0))
@settings(max_examples=40)
def test_a_larger_uncertainty_that_depends_on_the_level_accepts_no_more(r, s0, s1, nu, times):
    def limits(dependence):
        try:
            return level_dependent_acceptance(risk(r), Tolerance(2.0, 4.0), dependence, StudentT(nu))
        except EmptyAcceptanceError:
            return None

    wide, narrow = limits(LevelDependence(s0, s1)), limits(LevelDependence(s0 * times, s1 * times))
    if narrow is not None:
        assert wide is not None
        assert narrow.upper <= wide.upper + 1e-9
        assert narrow.lower >= wide.lower - 1e-9


@given(TOLERANCES, RISKS, U, NU, BIAS)
def test_the_mirror_changes_nothing_but_the_sides(tolerance, r, u, nu, bias):
    mirrored = Tolerance(
        None if tolerance.upper is None else -tolerance.upper,
        None if tolerance.lower is None else -tolerance.lower,
    )
    for rule in (risk(r), factor(1.0)):
        here = ends(rule, tolerance, u, nu, bias=bias)
        there = ends(rule, mirrored, u, nu, bias=-bias)
        if here is None or there is None:
            assert here is there
        else:
            assert there == (pytest.approx(-here[1], abs=1e-12), pytest.approx(-here[0], abs=1e-12))


@given(TOLERANCES, RISKS, U, NU, st.sampled_from([1e-3, 0.01, 10.0, 4096.0]), st.floats(0.0, 5.0))
def test_another_unit_changes_no_verdict(tolerance, r, u, nu, scale, estimate):
    scaled = Tolerance(
        None if tolerance.lower is None else tolerance.lower * scale,
        None if tolerance.upper is None else tolerance.upper * scale,
    )

    def judged(limits, unit):
        uncertain = UncertaintyAtLimits(u * unit, nu, None)
        return ReleaseRule.of_uncertainty(uncertain, limits, risk(r, rejection="guarded"), 0.95)

    try:
        first = judged(tolerance, 1.0)
    except EmptyAcceptanceError:
        with pytest.raises(EmptyAcceptanceError):
            judged(scaled, scale)
        return
    second = judged(scaled, scale)
    limits = (first.lower_acceptance_limit, first.upper_acceptance_limit, first.upper_rejection_limit)
    assume(all(x is None or abs(estimate - x) > 1e-9 for x in limits))
    assume(first.lower_rejection_limit is None or abs(estimate - first.lower_rejection_limit) > 1e-9)
    here, there = first.judge(estimate), second.judge(estimate * scale)
    assert here.outcome == there.outcome
    assert here.conformance_probability == pytest.approx(there.conformance_probability, rel=1e-9, abs=1e-14)


@given(TOLERANCES, RISKS, NU, st.floats(0.0, 6.0))
def test_without_uncertainty_every_rule_is_simple(tolerance, r, nu, estimate):
    edges = [x for x in (tolerance.lower, tolerance.upper) if x is not None]
    # Student's t of one degree of freedom has quantiles of thousands of u.
    assume(all(abs(estimate - edge) > 1e-5 for edge in edges))
    for rule in (risk(r), replace(risk(r), rejection="guarded"), factor(1.0)):
        uncertain = UncertaintyAtLimits(1e-12, nu, None)
        found = ReleaseRule.of_uncertainty(uncertain, tolerance, rule, 0.95).judge(estimate)
        assert found.outcome == ("release" if tolerance.holds(estimate) else "reject")


@given(TOLERANCES, RISKS, U, NU)
def test_acceptance_and_rejection_never_meet(tolerance, r, u, nu):
    try:
        rule = ReleaseRule.of_uncertainty(
            UncertaintyAtLimits(u, nu, None), tolerance, risk(r, rejection="guarded"), 0.95
        )
    except EmptyAcceptanceError:
        return
    if rule.upper_rejection_limit is not None:
        assert rule.upper_acceptance_limit <= 4.0 <= rule.upper_rejection_limit
    if rule.lower_rejection_limit is not None:
        assert rule.lower_acceptance_limit >= 2.0 >= rule.lower_rejection_limit


def exact_tail(z, nu):
    if math.isinf(nu):
        return mp.ncdf(-z)
    tail = mp.betainc(mp.mpf(nu) / 2, mp.mpf(1) / 2, 0, nu / (nu + z * z), regularized=True) / 2
    return tail if z >= 0 else 1 - tail


@pytest.mark.parametrize("nu", [1.0, 3.3, 41.2, 1e6, math.inf])
@pytest.mark.parametrize("limit", [4.0, 1e-6, 3e5])
@pytest.mark.parametrize("u", [1e-9, 0.1, 250.0])
def test_limits_agree_with_mpmath_over_orders_of_magnitude(nu, limit, u):
    """Within 1e-12 of the larger of limit and uncertainty, one limit and two."""
    r = 0.037
    with mp.workdps(40):
        start = StudentT(nu).upper_quantile(r)
        z = mp.findroot(lambda x: exact_tail(x, nu) - mp.mpf(r), mp.mpf(start))
        one = acceptance_interval(risk(r), Tolerance(None, limit), u, StudentT(nu))
        assert abs(one.upper - (mp.mpf(limit) - z * mp.mpf(u))) <= 1e-12 * max(abs(limit), u)
        # Limits near enough for both tails to count.
        both = Tolerance(limit - 2.5 * start * u, limit)
        assume_wide = both.upper - both.lower > 2 * StudentT(nu).upper_quantile(r / 2) * u
        if not assume_wide or abs((both.upper - both.lower) / u / start - 2.5) > 1e-3:
            return
        two = acceptance_interval(risk(r), both, u, StudentT(nu))
        width = (mp.mpf(both.upper) - mp.mpf(both.lower)) / mp.mpf(u)
        root = mp.findroot(
            lambda x: exact_tail(x, nu) + exact_tail(width - x, nu) - mp.mpf(r),
            (z, width / 2),
            solver="ridder",
            maxsteps=200,
        )
        assert abs(two.upper - (mp.mpf(limit) - root * mp.mpf(u))) <= 1e-12 * max(abs(limit), u)
