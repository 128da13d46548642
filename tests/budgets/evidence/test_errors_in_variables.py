"""Lines with errors on both sides, against general minimisers, special cases, laws and simulation."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize, stats

from budgets.errors import ConvergenceError, EvidenceError
from budgets.evidence.errors_in_variables import line_with_known_ratio, line_with_uncertainties


def simulated(seed, n=25, slope=1.1, u_x=0.1, u_y=0.15):
    generator = np.random.default_rng(seed)
    truth = generator.uniform(2, 5, n)
    x = truth + generator.normal(0, u_x, n)
    return x, 0.3 + slope * truth + generator.normal(0, u_y, n)


@pytest.mark.parametrize("seed", range(4))
def test_individual_uncertainties_minimise_the_weighted_sum(seed):
    generator = np.random.default_rng(seed)
    x, y = simulated(seed)
    u_x, u_y = generator.uniform(0.05, 0.2, (2, 25))

    def weighted(parameters):
        a, b = parameters
        return np.sum((y - a - b * x) ** 2 / (u_y**2 + b**2 * u_x**2))

    reference = optimize.minimize(weighted, (0.0, 1.0), method="Nelder-Mead", options={"xatol": 1e-9})
    line = line_with_uncertainties(x, y, u_x, u_y)
    assert (line.intercept, line.slope) == pytest.approx(tuple(reference.x), abs=1e-5)
    assert line.sum_of_squares == pytest.approx(reference.fun, rel=1e-8)
    assert line.degrees_of_freedom == 23


def test_without_errors_of_x_it_is_an_ordinary_regression():
    x, y = simulated(1, u_x=0)
    line, reference = line_with_uncertainties(x, y, np.zeros(25), np.full(25, 0.15)), stats.linregress(x, y)
    assert (line.slope, line.intercept) == pytest.approx((reference.slope, reference.intercept))
    assert line.slope_standard_uncertainty == pytest.approx(0.15 / np.sqrt(np.sum((x - x.mean()) ** 2)))


def test_equal_uncertainties_are_a_known_ratio():
    x, y = simulated(2)
    whole = line_with_uncertainties(x, y, np.full(25, 0.1), np.full(25, 0.15))
    known = line_with_known_ratio(x, y, 0.15**2 / 0.1**2)
    assert (known.slope, known.intercept) == pytest.approx((whole.slope, whole.intercept), rel=1e-9)


def test_the_ends_of_the_ratio_are_the_two_regressions():
    x, y = simulated(3)
    assert line_with_known_ratio(x, y, 1e12).slope == pytest.approx(stats.linregress(x, y).slope, rel=1e-6)
    assert line_with_known_ratio(x, y, 1e-12).slope == pytest.approx(
        1 / stats.linregress(y, x).slope, rel=1e-6
    )


def test_the_test_of_a_slope_is_that_of_a_correlation():
    """At the true slope y - x and delta x + y are uncorrelated: scipy's Pearson test with delta = 1."""
    x, y = simulated(4, u_x=0.1, u_y=0.1)
    assert line_with_known_ratio(x, y, 1.0).p_value == pytest.approx(stats.pearsonr(y - x, x + y).pvalue)
    exact = line_with_known_ratio([1.0, 2.0, 3.0], [1.0, 2.0, 3.0], 1.0)
    assert exact.p_value == pytest.approx(1.0) and exact.slope == pytest.approx(1.0)
    assert line_with_known_ratio([1.0, 2.0, 3.0], [2.0, 4.0, 6.0], 1.0).p_value < 1e-6


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 10**6), st.floats(-50, 50), st.floats(0.01, 100))
def test_laws_of_shift_scale_order_and_exchange(seed, shift, factor):
    x, y = simulated(seed)
    known, order = line_with_known_ratio(x, y, 2.25), np.random.default_rng(seed).permutation(25)
    moved = line_with_known_ratio(x[order] * factor + shift, y[order] * factor, 2.25)
    assert moved.slope == pytest.approx(known.slope, rel=1e-8)
    assert (moved.lower, moved.upper) == pytest.approx((known.lower, known.upper), rel=1e-7)
    assert line_with_known_ratio(y, x, 1 / 2.25).slope == pytest.approx(1 / known.slope, rel=1e-8)
    u_x, u_y = np.random.default_rng(seed).uniform(0.05, 0.2, (2, 25))
    line = line_with_uncertainties(x, y, u_x, u_y)
    moved = line_with_uncertainties(x[order] + shift, y[order], u_x[order], u_y[order])
    assert (moved.slope, moved.intercept) == pytest.approx(
        (line.slope, line.intercept - line.slope * shift), abs=1e-7
    )
    assert line_with_uncertainties(y, x, u_y, u_x).slope == pytest.approx(1 / line.slope, rel=1e-8)


def test_an_open_slope_has_no_interval():
    generator = np.random.default_rng(5)
    x, y = generator.normal(0, 1, (2, 6))
    line = line_with_known_ratio(x, y, 1.0)
    assert (line.lower, line.upper) == (None, None)
    steep = line_with_known_ratio([1.0, 1.01, 0.99, 1.02], [1.0, 2.0, 3.0, 4.1], 1.0)
    assert (steep.lower, steep.upper) == (None, None)
    assert line_with_known_ratio([1.0, 2.0], [1.0, 2.0], 1.0) is None
    assert line_with_known_ratio([1e-90, 2e-90, 3e-90], [1e-90, 2.1e-90, 3e-90], 1.0) is None
    assert line_with_known_ratio([1.0, 2.0, 1.0, 2.0], [1.0, 1.0, 2.0, 2.0], 1.0) is None


@pytest.mark.parametrize(
    ("points", "match"),
    [
        (([1, 2], [1, 2], [1, 1], [1, 1]), "three points"),
        (([1, 2, 3], [1, 2, 3], [1, 1], [1, 1, 1]), "three points"),
        (([1, 1, 1], [1, 2, 3], [1, 1, 1], [1, 1, 1]), "the same x"),
        (([1, 2, 3], [1, 2, 3], [1, -1, 1], [1, 1, 1]), "above zero"),
        (([1, 2, 3], [1, 2, 3], [1, 1, 1], [1, 0, 1]), "above zero"),
    ],
)
def test_points_that_make_no_line_are_refused(points, match):
    with pytest.raises(EvidenceError, match=match):
        line_with_uncertainties(*points)


def test_a_vertical_line_is_an_error():
    """Points that lie along the vertical: the line has no finite slope."""
    with pytest.raises(ConvergenceError):
        line_with_uncertainties([0.0, 1e-3, 0.0, -1e-3], [1.0, 2.0, 3.0, 2.0], [1.0] * 4, [1.0] * 4)


@pytest.mark.slow
def test_coverage_of_the_interval_of_the_slope():
    """2,000 studies of 10 points: exact where the ratio is known; 500 where all uncertainties are."""
    held, reach = [0, 0], stats.norm.ppf(0.975)
    for seed in range(2000):
        x, y = simulated(seed, n=10, slope=1.1, u_x=0.1, u_y=0.1)
        line = line_with_known_ratio(x, y, 1.0)
        held[0] += line.lower <= 1.1 <= line.upper
        if seed < 500:
            whole = line_with_uncertainties(x, y, [0.1] * 10, [0.1] * 10)
            held[1] += abs(whole.slope - 1.1) <= reach * whole.slope_standard_uncertainty
    assert 0.935 <= held[0] / 2000 <= 0.965, held
    assert 0.92 <= held[1] / 500 <= 0.98, held
