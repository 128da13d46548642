"""The slope test against scipy's regression, and the direction against simulation."""

import math

import numpy as np
import pytest
from scipy import stats

from budgets.evidence.slope_test import slope_test


def test_slope_intercept_and_t_are_those_of_an_ordinary_regression():
    generator = np.random.default_rng(1)
    x = generator.uniform(2, 5, 30)
    y = 0.2 + 0.93 * x + generator.normal(0, 0.1, 30)
    found, reference = slope_test(x, y), stats.linregress(x, y)
    assert (found.slope, found.intercept) == pytest.approx((reference.slope, reference.intercept))
    assert found.slope_standard_uncertainty == pytest.approx(reference.stderr)
    assert found.intercept_standard_uncertainty == pytest.approx(reference.intercept_stderr)
    t = abs(reference.slope - 1) / reference.stderr
    assert found.statistic == pytest.approx(t)
    assert found.p_value == pytest.approx(2 * stats.t.sf(t, 28))
    reach = stats.t.ppf(0.975, 28) * reference.stderr
    assert found.interval == pytest.approx((reference.slope - reach, reference.slope + reach))
    # ISO 12099 (from memory): t = |slope - 1| sqrt(s_x^2 (n - 1) / s_res^2)
    residual = np.std(y - reference.intercept - reference.slope * x, ddof=2)
    assert found.statistic == pytest.approx(
        abs(reference.slope - 1) * math.sqrt(np.var(x, ddof=1) * 29 / residual**2)
    )


def test_the_right_way_round_a_shrunken_predictor_has_a_slope_of_one():
    """The best predictor of a truth shrinks; only the reference on the reading shows that it is right."""
    generator = np.random.default_rng(2)
    truth = generator.normal(0, 1, 4000)
    signal = truth + generator.normal(0, 0.485, 4000)
    prediction = signal / (1 + 0.485**2)
    assert slope_test(prediction, truth).slope == pytest.approx(1.0, abs=0.03)
    assert slope_test(truth, prediction).slope == pytest.approx(0.81, abs=0.03)


def test_where_there_is_no_slope():
    assert slope_test([1.0, 2.0], [1.0, 2.0]) is None
    assert slope_test([3.0, 3.0, 3.0], [1.0, 2.0, 3.0]) is None


def test_pairs_on_a_line_exactly_have_no_doubt():
    found = slope_test([1.0, 2.0, 3.0], [2.0, 4.0, 6.0])
    assert found.statistic == math.inf and found.p_value == 0.0
    assert found.to_document()["t_statistic"] is None


def test_the_size_of_the_test():
    generator = np.random.default_rng(3)
    rejected = 0
    for _ in range(1000):
        x = generator.uniform(2, 5, 12)
        rejected += slope_test(x, x + generator.normal(0, 0.1, 12)).p_value < 0.05
    # 5 %, +- 3 standard errors of 1,000 studies
    assert 0.029 < rejected / 1000 < 0.071


def test_a_large_offset_costs_no_digits():
    generator = np.random.default_rng(4)
    x = np.round(generator.uniform(2, 5, 20), 6)
    y = np.round(x + generator.normal(0, 0.1, 20), 6)
    assert slope_test(x + 2**20, y + 2**20).slope == pytest.approx(slope_test(x, y).slope, rel=1e-8)
