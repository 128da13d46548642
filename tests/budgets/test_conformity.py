import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from mpmath import mp

from budgets.conformity import (
    Tolerance,
    conformance_probability,
    measurement_capability_index,
    shifted,
    tails,
)
from budgets.error_distributions import StudentT
from budgets.errors import LimitsError

NORMAL = StudentT(math.inf)


def exact_tail(z, nu):
    """Student's t in hundreds of digits by mpmath; the incomplete beta function for the tail itself."""
    z = mp.mpf(float(z))
    if math.isinf(nu):
        return mp.ncdf(-z)
    nu = mp.mpf(nu)
    tail = mp.betainc(nu / 2, mp.mpf(1) / 2, 0, nu / (nu + z * z), regularized=True) / 2
    return tail if z >= 0 else 1 - tail


@pytest.mark.parametrize(
    ("limits", "where"),
    [
        ((None, None), "upper_tolerance_limit"),
        ((math.nan, 3.0), "lower_tolerance_limit"),
        ((1.0, math.inf), "upper_tolerance_limit"),
        ((4.0, 3.0), "lower_tolerance_limit"),
        ((3.0, 3.0), "lower_tolerance_limit"),
    ],
)
def test_impossible_limits_are_refused(limits, where):
    with pytest.raises(LimitsError) as caught:
        Tolerance(*limits)
    assert caught.value.where == (where,)


def test_each_limit_is_inclusive_or_not():
    closed, opened = Tolerance(2.0, 4.0), Tolerance(2.0, 4.0, False, False)
    for value in (2.0, 4.0):
        assert closed.holds(value)
        assert not opened.holds(value)
    for tolerance in (closed, opened):
        assert tolerance.holds(3.0)
        assert not tolerance.holds(1.9)
        assert not tolerance.holds(4.1)
    assert Tolerance(None, 4.0).holds(-1e9)
    assert Tolerance(2.0, None).holds(1e9)


@pytest.mark.parametrize("nu", [3.7, math.inf])
@pytest.mark.parametrize("estimate", [-20.0, 1.9, 2.0, 2.7, 3.0, 4.0, 4.4, 30.0])
def test_conformance_probability_agrees_with_mpmath_far_outside_too(nu, estimate):
    with mp.workdps(400):
        u = mp.mpf(0.25)
        exact = exact_tail((2 - mp.mpf(estimate)) / u, nu) - exact_tail((4 - mp.mpf(estimate)) / u, nu)
        found = conformance_probability(estimate, 0.25, StudentT(nu), Tolerance(2.0, 4.0))
        assert found == pytest.approx(float(exact), rel=1e-11, abs=1e-300)


TOLERANCES = st.sampled_from([Tolerance(2.0, 4.0), Tolerance(None, 4.0), Tolerance(2.0, None)])


@given(TOLERANCES, st.floats(0, 6), st.floats(0.01, 2), st.floats(1, 300), st.floats(-0.5, 0.5))
def test_risks_and_conformance_add_up_to_one(tolerance, estimate, u, nu, bias):
    below, above = tails(estimate, u, StudentT(nu), tolerance, bias=bias)
    probability = conformance_probability(estimate, u, StudentT(nu), tolerance, bias=bias)
    assert below + above + probability == pytest.approx(1, abs=1e-12)


def test_an_uncorrected_bias_counts_in_its_harmful_direction_only():
    tolerance = Tolerance(2.0, 4.0)
    assert shifted(tolerance, -0.1) == (2.0, 3.9)
    assert shifted(tolerance, 0.1) == (2.1, 4.0)
    assert shifted(Tolerance(None, 4.0), 0.1) == (None, 4.0)
    _, above = tails(3.8, 0.1, NORMAL, tolerance, bias=-0.1)
    assert above == pytest.approx(float(NORMAL.upper_tail(1.0)))
    below, _ = tails(2.2, 0.1, NORMAL, tolerance, bias=0.1)
    assert below == pytest.approx(float(NORMAL.upper_tail(1.0)))


def test_limits_that_an_uncorrected_bias_crosses_leave_no_probability():
    assert conformance_probability(3.0, 0.1, NORMAL, Tolerance(2.0, 2.1), bias=-0.5) == 0.0


def test_arrays_are_judged_like_their_members():
    estimates = np.array([1.5, 2.5, 3.5, 4.5])
    for tolerance in (Tolerance(2.0, 4.0), Tolerance(None, 4.0), Tolerance(2.0, None)):
        for nu in (1, 6.5, math.inf):
            many = conformance_probability(estimates, 0.3, StudentT(nu), tolerance)
            assert list(many) == [conformance_probability(x, 0.3, StudentT(nu), tolerance) for x in estimates]


def test_the_capability_index_needs_two_limits():
    assert measurement_capability_index(Tolerance(2.0, 4.0), 0.25) == 2.0
    assert measurement_capability_index(Tolerance(None, 4.0), 0.25) is None
    assert measurement_capability_index(Tolerance(2.0, None), 0.25) is None
