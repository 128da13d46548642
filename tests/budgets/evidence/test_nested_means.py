import math

import numpy as np
import pytest
from scipy import stats

from budgets.evidence.mean_square_intervals import variance_interval
from budgets.evidence.nested_means import component_estimate, component_interval, nested_components


def of(labels, values, names=("days", "replicates")):
    return nested_components("s", names, labels, values)


def test_balanced_groups_give_the_one_way_analysis_of_variance():
    values = np.random.default_rng(1).normal(3, 0.1, (6, 4)) + np.arange(6)[:, None] / 10
    labels = [[i for i in range(6) for _ in range(4)]]
    days, replicates = of(labels, values.ravel().tolist())
    f, _ = stats.f_oneway(*values)
    within = values.var(axis=1, ddof=1).mean()
    assert replicates.mean_square.value == pytest.approx(within)
    assert replicates.f_statistic is None and replicates.is_significant
    assert days.f_statistic == pytest.approx(f)
    assert days.f_critical_value == pytest.approx(stats.f.isf(0.05, 5, 18))
    assert days.is_significant == (f > stats.f.isf(0.05, 5, 18))
    assert [term.coefficient for term in days.terms] == [1, -0.25]
    # s_I^2 = MS_B/n + (1 - 1/n) MS_W (mathematics of the balanced case)
    assert days.terms[0].mean_square.value == pytest.approx(values.mean(axis=1).var(ddof=1))


def test_three_levels_of_unequal_size_are_unbiased():
    generator = np.random.default_rng(7)
    lots, samples = [], []
    for lot, sizes in enumerate([(1, 2, 3), (2,), (1, 1), (4, 2), (3, 3, 1)]):
        for sample, size in enumerate(sizes):
            lots += [lot] * size
            samples += [sample] * size
    found = []
    for _ in range(1500):
        of_lots = generator.normal(0, 0.3, 5)
        of_samples = generator.normal(0, 0.2, (5, 3))
        values = [
            of_lots[i] + of_samples[i, j] + generator.normal(0, 0.1)
            for i, j in zip(lots, samples, strict=True)
        ]
        components = of([lots, samples], values, ("lots", "samples", "readings"))
        found.append([component_estimate("x", c.terms, ("lot",), ()).variance for c in components])
    error = np.std(found, axis=0) / math.sqrt(len(found))
    assert np.all(np.abs(np.mean(found, axis=0) - [0.09, 0.04, 0.01]) < 4 * error)


def test_a_level_without_repetition_is_part_of_the_one_above():
    (days,) = of([[1, 2, 3]], [3.0, 3.1, 3.3])
    assert days.name == "days"
    assert days.mean_square.value == pytest.approx(np.var([3.0, 3.1, 3.3], ddof=1))
    assert days.f_statistic is None


def test_the_interval_is_that_of_the_mean_squares_clipped_at_zero():
    days, _ = of([[1, 1, 2, 2, 3, 3]], [3.0, 3.4, 3.1, 3.5, 3.0, 3.3])
    interval = component_interval(days.terms)
    lower, upper = variance_interval(days.terms)
    assert lower < 0
    assert (interval.lower, interval.upper) == (0, math.sqrt(max(0, upper)))
    estimate = component_estimate("between_days", days.terms, ("session",), ("days",))
    assert not estimate.usable and estimate.variance < 0
    assert not days.is_significant


def test_components_that_cancel_leave_nothing_to_test_against():
    """Replicates that all agree expect a mean square of zero above them."""
    days, replicates = of([[1, 1, 2, 2]], [3.0, 3.0, 3.1, 3.1])
    assert replicates.mean_square.value == 0
    assert days.f_statistic is None and days.is_significant
