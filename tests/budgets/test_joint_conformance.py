"""Joint conformance against mpmath, the multivariate distributions of scipy, and exact cases."""

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import ndtri
from scipy.stats import multivariate_normal, multivariate_t
from scipy.stats import t as student

from budgets.errors import CorrelationError, LimitsError
from budgets.joint_conformance import JointConformance, both_exceed, joint_conformance

TAILS = st.tuples(st.floats(0, 0.4), st.floats(0, 0.4))


def upper_corner(one, other, correlation):
    """P(X > h, Y > k) by mpmath, from the two tail probabilities."""
    with mpmath.workdps(30):
        h, k = (mpmath.mpf(float(-ndtri(p))) for p in (one, other))
        r = mpmath.mpf(correlation)
        scale = mpmath.sqrt(1 - r * r)
        breaks = sorted({h, h + 1, h + 4, h + 40} | ({k / r} if r and h < k / r < h + 40 else set()))
        return float(
            mpmath.quad(
                lambda x: mpmath.npdf(x) * mpmath.erfc((k - r * x) / scale / mpmath.sqrt(2)) / 2, breaks
            )
        )


@pytest.mark.parametrize("correlation", [-0.999, -0.6, 0.0, 0.3, 0.95, 0.9999])
@pytest.mark.parametrize(
    ("one", "other"), [(0.05, 0.05), (1e-9, 2e-9), (0.3, 1e-6), (0.7, 0.02), (0.5, 0.01), (0.8, 0.9)]
)
def test_two_tails_at_once_agree_with_mpmath(one, other, correlation):
    expected = upper_corner(one, other, correlation)
    assert abs(both_exceed(one, other, correlation) - expected) < 4e-15 * max(one, other)


def test_orthant_probabilities_in_closed_form():
    """Sheppard 1899 (from memory): P(X > 0, Y > 0) = 1/4 + asin(r)/(2 pi)."""
    for r in (-0.9, 0.0, 0.25, 0.8):
        assert both_exceed(0.5, 0.5, r) == pytest.approx(0.25 + math.asin(r) / (2 * math.pi), abs=1e-15)


def test_errors_that_are_one_and_errors_that_are_opposite():
    assert both_exceed(0.02, 0.03, 1.0) == 0.02
    assert both_exceed(0.02, 0.03, -1.0) == 0.0
    assert both_exceed(0.8, 0.7, -1.0) == pytest.approx(0.5)


def test_what_cannot_happen_and_what_always_does():
    assert both_exceed(0.0, 0.3, 0.5) == 0.0
    assert both_exceed(1.0, 0.3, 0.5) == pytest.approx(0.3)


def test_independent_errors_multiply():
    joint = joint_conformance([(0.01, 0.02), (0.0, 0.04)], np.eye(2))
    assert joint.conformance_probability == pytest.approx(0.97 * 0.96, abs=1e-15)
    three = joint_conformance([(0.01, 0.02), (0.0, 0.04), (0.005, 0.0)], np.eye(3))
    assert three.conformance_probability == pytest.approx(0.97 * 0.96 * 0.995, abs=1e-9)


def test_small_risks_keep_their_digits():
    """Taken from one, a risk of 1e-13 would be noise."""
    joint = joint_conformance([(0.0, 1e-13), (0.0, 2e-13)], [[1, 0.5], [0.5, 1]])
    assert joint.risk is not None
    assert joint.risk == pytest.approx(3e-13 - upper_corner(1e-13, 2e-13, 0.5), rel=1e-12)


def test_a_box_of_two_agrees_with_scipy():
    generator = np.random.default_rng(5)
    for _ in range(20):
        risks = [tuple(10 ** generator.uniform(-4, -0.7, 2)) for _ in range(2)]
        r = generator.uniform(-0.98, 0.98)
        lower, upper = (
            np.array([sign * ndtri(pair[side]) for pair in risks]) for side, sign in enumerate((1, -1))
        )
        box = multivariate_normal([0, 0], [[1, r], [r, 1]])
        expected = 1 - box.cdf(upper, lower_limit=lower)
        assert joint_conformance(risks, [[1, r], [r, 1]]).risk == pytest.approx(expected, abs=1e-7)


@pytest.mark.parametrize(("number", "relative"), [(3, 2e-5), (4, 0.01), (6, 0.01)])
def test_boxes_of_three_and_more_agree_with_scipy(number, relative):
    generator = np.random.default_rng(number)
    for _ in range(4):
        factors = generator.normal(size=(number, number + 1))
        matrix = np.corrcoef(factors)
        matrix = (matrix + matrix.T) / 2
        np.fill_diagonal(matrix, 1.0)
        risks = [tuple(10 ** generator.uniform(-3, -1, 2)) for _ in range(number)]
        lower, upper = (
            np.array([sign * ndtri(pair[side]) for pair in risks]) for side, sign in enumerate((1, -1))
        )
        box = multivariate_normal(np.zeros(number), matrix, maxpts=400_000, abseps=1e-7, releps=1e-7, seed=1)
        expected = 1 - box.cdf(upper, lower_limit=lower)
        assert joint_conformance(risks, matrix).risk == pytest.approx(expected, rel=relative)


def test_one_error_behind_all_characteristics_leaves_the_largest_risk():
    for number in (2, 3, 4):
        risks = [(0.0, 0.01 * (i + 1)) for i in range(number)]
        joint = joint_conformance(risks, np.ones((number, number)))
        # three and more of one piece are sampled
        assert joint.risk == pytest.approx(joint.smallest_risk, rel=1e-12 if number == 2 else 2e-3)


def test_a_characteristic_computed_from_the_others_is_no_obstacle():
    """The third error is the difference of the first two: a matrix without an inverse."""
    half = math.sqrt(0.5)
    matrix = [[1, 0, half], [0, 1, -half], [half, -half, 1]]
    generator = np.random.default_rng(2)
    first, second = generator.normal(size=(2, 400_000))
    limit = -float(ndtri(0.05))
    missed = (first > limit) | (second > limit) | ((first - second) * half > limit)
    share = float(np.mean(missed))
    found = joint_conformance([(0.0, 0.05)] * 3, matrix).risk
    assert found is not None
    assert abs(found - share) < 4 * math.sqrt(share / 400_000)


@pytest.mark.parametrize("nu", [4.0, 15.0])
def test_shared_degrees_of_freedom_are_met_on_the_cautious_side(nu):
    """Each keeps its own t risk; the multivariate t, which shares one deviation, misses a little less."""
    limits = np.array([2.2, 1.9])
    risks = [(0.0, float(student.sf(limit, nu))) for limit in limits]
    for r in (0.0, 0.4, 0.8):
        matrix = [[1, r], [r, 1]]
        found = joint_conformance(risks, matrix).risk
        # scipy integrates by a seeded lattice, good to about 1e-5
        exact = 1 - multivariate_t(shape=matrix, df=nu, seed=1).cdf(limits, maxpts=200_000)
        assert found is not None
        assert exact - 2e-5 < found < exact * 1.12


@settings(max_examples=60, deadline=None)
@given(risks=st.lists(TAILS, min_size=2, max_size=4), shared=st.floats(0, 0.999))
def test_the_risk_lies_between_its_bounds_whatever_is_shared(risks, shared):
    number = len(risks)
    matrix = np.full((number, number), shared)
    np.fill_diagonal(matrix, 1.0)
    joint = joint_conformance(risks, matrix)
    assert joint.risk is not None
    assert max(a + b for a, b in risks) <= joint.smallest_risk + 1e-15
    assert joint.smallest_risk <= joint.risk <= joint.largest_risk
    assert joint.cautious_risk == joint.risk


def test_unknown_correlations_leave_the_bounds():
    joint = joint_conformance([(0.01, 0.02), (0.0, 0.04)])
    assert joint == JointConformance(0.04, pytest.approx(0.07))
    assert joint.cautious_risk == joint.largest_risk
    assert joint.conformance_probability is None
    assert 1 - joint.largest_risk == pytest.approx(0.93)
    assert 1 - joint.smallest_risk == pytest.approx(0.96)


def test_a_single_characteristic_has_its_own_risk():
    joint = joint_conformance([(0.01, 0.02)])
    assert (joint.smallest_risk, joint.risk, joint.largest_risk) == (0.03, 0.03, 0.03)


def test_risks_that_add_up_to_more_than_one():
    joint = joint_conformance([(0.6, 0.5), (0.2, 0.4)])
    assert (joint.smallest_risk, joint.largest_risk) == (1.0, 1.0)


def test_more_certain_than_not_to_miss():
    """Tails beyond a half, one of them certain: the box is as small as it gets."""
    joint = joint_conformance([(0.0, 0.9), (0.8, 0.0), (0.0, 1.0)], np.eye(3))
    assert joint.risk == 1.0


@pytest.mark.parametrize("risks", [[], [(0.0, 1.1)], [(-0.1, 0.0)], [(math.nan, 0.0)], [(0.0, 0.1)] * 101])
def test_what_is_no_risk_is_refused(risks):
    with pytest.raises(LimitsError, match="risks from 0 to 1"):
        joint_conformance(risks)


def test_what_is_no_correlation_matrix_is_refused():
    risks = [(0.0, 0.1), (0.0, 0.1)]
    with pytest.raises(CorrelationError):
        joint_conformance(risks, [[1, 1.2], [1.2, 1]])
    with pytest.raises(LimitsError, match="each two"):
        joint_conformance(risks, np.eye(3))


@pytest.mark.parametrize(
    "far", [(0.0, 1e-18), (1e-17, 3e-18), (0.0, 0.0), (0.0, 4e-17)], ids=lambda pair: f"{sum(pair):g}"
)
def test_characteristics_far_inside_change_no_digit_and_cost_nothing(far):
    matrix = np.array([[1, 0.6, 0.3, 0.5], [0.6, 1, 0.2, 0.1], [0.3, 0.2, 1, 0], [0.5, 0.1, 0, 1]])
    near = [(0.0, 0.03), (0.01, 0.0)]
    of_two = joint_conformance(near, matrix[:2, :2]).risk
    assert joint_conformance([*near, far, far], matrix).risk == pytest.approx(of_two, rel=1e-13)
    assert joint_conformance([far, near[0], far], matrix[:3, :3]).risk == pytest.approx(0.03, rel=1e-13)
    # The exact way for three says the same of a risk that is small, but counts.
    counted = joint_conformance([*near, (0.0, 1e-11)], matrix[:3, :3]).risk
    assert counted == pytest.approx(of_two, abs=1.1e-11)
