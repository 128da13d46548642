"""The generalised test of extreme deviates; the published table stands in tests/published."""

import numpy as np
import pytest
from scipy import stats

from budgets.evidence.extreme_differences import critical_deviate, extreme_deviates, extremes
from budgets.evidence.screening import grubbs_critical_value


def test_the_first_step_is_the_test_for_one_value():
    # The same t quantile and the same form, so the critical values are equal to the last digits.
    for number in (15, 40, 200):
        assert critical_deviate(number, 1) == pytest.approx(grubbs_critical_value(0.05, number), rel=1e-12)
    t = stats.t.ppf(1 - 0.05 / (2 * 28), 26)
    assert critical_deviate(30, 3) == pytest.approx(27 * t / np.sqrt((26 + t**2) * 28), rel=1e-9)


def test_two_that_hide_each_other_are_both_found():
    values = [*np.random.default_rng(1).normal(0, 1, 38), 9.0, 9.1]
    found = extremes(values)
    assert {item.index for item in found} == {38, 39}
    assert all(item.value == values[item.index] for item in found)


def test_few_values_are_not_tested_and_equal_ones_end_it():
    assert extremes([0.0] * 13 + [9.0]) == ()
    steps = extreme_deviates([0.0] * 29 + [9.0], 3)
    assert [step.value for step in steps] == [9.0]
    assert len(extremes([0.0] * 29 + [9.0])) == 1


def test_clean_values_stand_out_in_one_study_of_twenty():
    generator = np.random.default_rng(2)
    share = np.mean([bool(extremes(list(generator.normal(0, 1, 40)))) for _ in range(1000)])
    # 5 %, +- 3 standard errors of 1,000 studies
    assert 0.029 < share < 0.075


def test_order_shift_and_scale_change_nothing():
    values = np.array([*np.random.default_rng(3).normal(0, 1, 38), 7.0, 7.5])
    moved = extremes(list(4 - 0.5 * values[::-1]))
    assert [39 - item.index for item in moved] == [item.index for item in extremes(list(values))]
    assert [m.statistic for m in moved] == pytest.approx([e.statistic for e in extremes(list(values))])
