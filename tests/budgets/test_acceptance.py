import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from mpmath import mp

from budgets.acceptance import acceptance_interval
from budgets.conformity import Tolerance, tails
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT
from budgets.errors import EmptyAcceptanceError, LimitsError
from budgets.propagation import upper_quantile

NORMAL = StudentT(math.inf)
UPPER, LOWER, BOTH = Tolerance(None, 4.0), Tolerance(2.0, None), Tolerance(2.0, 4.0)


def risk(r):
    return DecisionRule("guarded_by_specific_risk", largest_risk=r)


def factor(multiple=1.0, p=0.95, sides=2):
    return DecisionRule("guarded_by_factor", multiple=multiple, coverage_probability=p, sides=sides)


SIMPLE = DecisionRule("simple", largest_standard_uncertainty=10.0)


def exact_root(r, nu, u, half_width):
    """Return the guard band of both tails at once, in forty digits by mpmath's own root finder."""

    def tail(z):
        if math.isinf(nu):
            return mp.ncdf(-z)
        value = mp.betainc(mp.mpf(nu) / 2, mp.mpf(1) / 2, 0, nu / (nu + z * z), regularized=True) / 2
        return value if z >= 0 else 1 - value

    half = mp.mpf(half_width) / mp.mpf(u)
    return mp.findroot(
        lambda z: tail(z) + tail(2 * half - z) - mp.mpf(r), (0, half), solver="ridder", maxsteps=200
    )


@pytest.mark.parametrize("nu", [2.5, 9.0, 41.2, math.inf])
@pytest.mark.parametrize(("r", "u"), [(0.05, 0.07), (0.05, 0.3), (0.01, 0.2), (0.2, 0.6)])
def test_limits_agree_with_mpmath(nu, r, u):
    half = 1.0
    with mp.workdps(40):
        try:
            accepted = acceptance_interval(risk(r), BOTH, u, StudentT(nu))
        except EmptyAcceptanceError:
            below, above = tails(3.0, u, StudentT(nu), BOTH)
            assert below + above > r
            return
        z = exact_root(r, nu, u, half)
        assert abs(accepted.upper / (4 - z * mp.mpf(u)) - 1) < 1e-12
        assert abs(accepted.lower / (2 + z * mp.mpf(u)) - 1) < 1e-12


@given(
    st.sampled_from([UPPER, LOWER, BOTH]),
    st.floats(1e-4, 0.45),
    st.floats(0.01, 0.8),
    st.floats(1.0, 500.0),
    st.floats(-0.2, 0.2),
)
def test_the_specific_risk_at_the_limits_is_the_largest_allowed(tolerance, r, u, nu, bias):
    try:
        accepted = acceptance_interval(risk(r), tolerance, u, StudentT(nu), bias=bias)
    except EmptyAcceptanceError:
        lower, upper = 2.0 + max(0.0, bias), 4.0 - max(0.0, -bias)
        assert sum(tails((lower + upper) / 2, u, StudentT(nu), tolerance, bias=bias)) > r
        return
    for limit in (accepted.lower, accepted.upper):
        if limit is not None:
            assert sum(tails(limit, u, StudentT(nu), tolerance, bias=bias)) == pytest.approx(r, rel=1e-9)


@pytest.mark.parametrize(
    ("rule", "z"),
    [(factor(), 1.959963984540054), (factor(0.5), 0.979981992270027), (factor(sides=1), 1.6448536269514722)],
)
def test_the_guard_band_is_a_multiple_of_the_expanded_uncertainty(rule, z):
    accepted = acceptance_interval(rule, BOTH, 0.1, NORMAL)
    assert accepted.guard_band_upper == pytest.approx(0.1 * z, rel=1e-12)
    assert accepted.guard_band_lower == pytest.approx(0.1 * z, rel=1e-12)
    one = acceptance_interval(rule, UPPER, 0.1, NORMAL)
    assert (one.lower, one.guard_band_lower) == (None, None)
    assert one.upper == pytest.approx(4 - 0.1 * z, rel=1e-14)


def test_simple_acceptance_has_no_guard_band_but_that_of_an_uncorrected_bias():
    accepted = acceptance_interval(SIMPLE, BOTH, 0.1, StudentT(10))
    assert (accepted.lower, accepted.upper) == (2.0, 4.0)
    biased = acceptance_interval(SIMPLE, BOTH, 0.1, StudentT(10), bias=-0.05)
    assert (biased.lower, biased.upper) == (2.0, 3.95)
    with pytest.raises(LimitsError, match="simple acceptance was agreed"):
        acceptance_interval(SIMPLE, BOTH, 11.0, StudentT(10))


@pytest.mark.parametrize("rule", [risk(0.05), factor(), factor(2.0, 0.9, 1)])
@pytest.mark.parametrize("nu", [4.0, math.inf])
def test_an_empty_interval_says_what_would_open_it(rule, nu):
    with pytest.raises(EmptyAcceptanceError) as caught:
        acceptance_interval(rule, BOTH, 2.0, StudentT(nu))
    error = caught.value
    assert error.capability_index == 0.25
    assert "cannot prove this specification" in error.message
    needed = float(error.remedy.split()[-1].rstrip("."))
    acceptance_interval(rule, BOTH, needed * 0.999, StudentT(nu))
    with pytest.raises(EmptyAcceptanceError):
        acceptance_interval(rule, BOTH, needed * 1.001, StudentT(nu))


def test_a_bias_that_uses_up_the_tolerance_says_so():
    with pytest.raises(EmptyAcceptanceError, match="the uncorrected bias alone"):
        acceptance_interval(risk(0.05), BOTH, 0.01, NORMAL, bias=2.5)
    with pytest.raises(EmptyAcceptanceError, match="Correct the bias"):
        acceptance_interval(SIMPLE, BOTH, 0.01, NORMAL, bias=-2.5)


def test_a_single_acceptable_point_is_not_empty():
    accepted = acceptance_interval(factor(), BOTH, 1.0 / 1.959963984540054, NORMAL)
    assert accepted.lower == pytest.approx(3.0)
    assert accepted.lower <= accepted.upper
    with pytest.raises(EmptyAcceptanceError):
        acceptance_interval(factor(), BOTH, 1.0001 / 1.959963984540054, NORMAL)


@pytest.mark.parametrize("rule", [factor(), risk(0.05)], ids=lambda rule: rule.kind)
def test_rounding_never_crosses_the_limits_of_a_single_point(rule):
    quantile = 1.959963984540054
    for tenths in range(1, 400):
        tolerance = Tolerance(tenths / 10, tenths / 10 + tenths / 7)
        u = (tolerance.upper - tolerance.lower) / 2 / quantile
        for nearby in (u, math.nextafter(u, 0)):
            try:
                accepted = acceptance_interval(rule, tolerance, nearby, NORMAL)
            except EmptyAcceptanceError:
                continue
            assert tolerance.lower < accepted.lower <= accepted.upper < tolerance.upper


@pytest.mark.parametrize("r", [0.01, 0.05, 0.2])
def test_the_last_point_that_is_left_has_the_largest_allowed_risk(r):
    for tenths in range(11, 300):
        nu = tenths / 10
        u = 1.0 / upper_quantile(r / 2, nu)
        try:
            accepted = acceptance_interval(risk(r), BOTH, u, StudentT(nu))
        except EmptyAcceptanceError:
            continue
        assert 3 - 1e-6 <= accepted.lower <= accepted.upper <= 3 + 1e-6
        assert sum(tails(accepted.upper, u, StudentT(nu), BOTH)) == pytest.approx(r, rel=1e-9)


def test_domain_and_validated_range_are_no_limits_but_must_leave_something():
    ranges = {"domain": (0.0, 100.0), "validated_range": (1.5, 5.5)}
    accepted = acceptance_interval(risk(0.05), UPPER, 0.1, NORMAL, **ranges)
    assert accepted.lower is None
    with pytest.raises(EmptyAcceptanceError, match=r"\(up to 3\.8.*outside of the validated range") as caught:
        acceptance_interval(risk(0.05), UPPER, 0.1, NORMAL, validated_range=(4.5, 5.5))
    assert caught.value.capability_index is None
    with pytest.raises(EmptyAcceptanceError, match=r"\(from 2\.1.*outside of the natural domain"):
        acceptance_interval(risk(0.05), LOWER, 0.1, NORMAL, domain=(0.0, 1.0))


@given(st.floats(0.01, 0.5), st.floats(1, 100))
def test_a_larger_uncertainty_never_accepts_more(u, nu):
    wide = acceptance_interval(risk(0.05), UPPER, u, StudentT(nu))
    narrow = acceptance_interval(risk(0.05), UPPER, u * 1.1, StudentT(nu))
    assert narrow.upper <= wide.upper
