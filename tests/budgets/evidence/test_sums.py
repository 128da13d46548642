import math
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from budgets.evidence.evaluation import MeanSquare, Term
from budgets.evidence.mean_square_intervals import variance_interval
from budgets.evidence.sums import f_quantile, grouped, mean, sum_of_squares


@given(st.lists(st.floats(-1e3, 1e3), min_size=1, max_size=20), st.sampled_from([0.0, 1e6, 1e12]))
def test_sums_agree_with_rational_arithmetic_next_to_a_large_offset(values, offset):
    shifted = [offset + value for value in values]
    exact = [Fraction(value) for value in shifted]
    centre = sum(exact) / len(exact)
    squares = sum((value - centre) ** 2 for value in exact)
    assert mean(shifted) == pytest.approx(float(centre), rel=1e-15, abs=1e-12)
    assert sum_of_squares(shifted) == pytest.approx(float(squares), rel=1e-9, abs=1e-20)


def test_groups_keep_the_order_of_first_appearance():
    assert grouped(["b", "a", "b"], [1.0, 2.0, 3.0]) == {"b": [1.0, 3.0], "a": [2.0]}


@pytest.mark.parametrize("tail", [0.025, 0.05, 0.975])
def test_quantiles_of_f_agree_with_a_reference_library(tail):
    """scipy.stats; the limits of infinite degrees of freedom by chi-square."""
    assert f_quantile(tail, 7, 31.5) == pytest.approx(stats.f.isf(tail, 7, 31.5), rel=1e-10)
    assert f_quantile(tail, 7, math.inf) == pytest.approx(stats.chi2.isf(tail, 7) / 7, rel=1e-10)
    assert f_quantile(tail, math.inf, 7) == pytest.approx(7 / stats.chi2.ppf(tail, 7), rel=1e-10)
    assert f_quantile(tail, math.inf, math.inf) == 1


def terms(*parts):
    return [Term(c, MeanSquare(str(i), ms, nu)) for i, (c, ms, nu) in enumerate(parts)]


def test_intervals_of_differences():
    # Computed independently for the project's rules, from Ting et al. 1990.
    lower, upper = variance_interval(terms((1, 0.09, 59), (-0.5, 0.0144, 20)))
    assert (lower, upper) == pytest.approx((0.056664, 0.126818), abs=5e-7)
    lower, upper = variance_interval(terms((1, 0.09, 59), (-0.5, 0.04, 20), (-0.5, 0.01, 30)))
    assert (lower, upper) == pytest.approx((0.032345, 0.109865), abs=5e-7)


def test_one_mean_square_has_the_chi_square_interval():
    lower, upper = variance_interval(terms((1, 0.09, 12)))
    assert lower == pytest.approx(0.09 * 12 / stats.chi2.isf(0.025, 12), rel=1e-9)
    assert upper == pytest.approx(0.09 * 12 / stats.chi2.ppf(0.025, 12), rel=1e-9)


def test_known_terms_only_shift_an_interval():
    lower, upper = variance_interval(terms((1, 0.09, 12), (-1, 0.02, math.inf), (-1, 0.01, math.inf)))
    alone = variance_interval(terms((1, 0.09, 12)))
    assert (lower, upper) == pytest.approx((alone[0] - 0.03, alone[1] - 0.03), rel=1e-9)


@pytest.mark.parametrize("remainder", [0.005, 0.03])
def test_the_interval_covers_as_often_as_it_says(remainder):
    """Simulation: SEP^2 with 39 degrees of freedom less half a mean square with 15."""
    import numpy as np

    generator = np.random.default_rng(5)
    noise, size = 0.03, 1500
    whole = (remainder + noise / 2) * generator.chisquare(39, size) / 39
    part = noise * generator.chisquare(15, size) / 15
    hits = 0
    for a, b in zip(whole, part, strict=True):
        lower, upper = variance_interval(terms((1, a, 39), (-0.5, b, 15)))
        hits += lower <= remainder <= upper
    assert 0.93 <= hits / size <= 0.98
