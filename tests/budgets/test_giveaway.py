import math

import pytest

from budgets.errors import LimitsError
from budgets.giveaway import giveaway
from budgets.money import Money

MONEY = Money(25.0, 2000.0, 120.0, 300.0, 40.0, 20_000.0)


def test_released_lots_give_away_their_distance_to_what_was_needed():
    found = giveaway([2.80, 2.90, 3.00], 2.95, "upper", MONEY)
    assert found.true_mean == pytest.approx(2.90)
    assert found.distance == pytest.approx(0.05)
    assert found.value == pytest.approx(3 * 0.05 * 25 * 120)
    assert found.value_per_lot == pytest.approx(0.05 * 25 * 120)
    assert found.lots_nearer_than_needed == 1


def test_it_counts_against_the_true_mean_and_towards_the_limit_that_is_meant():
    upper = giveaway([2.8, 2.9], 2.95, "upper", MONEY, residual_bias=0.03)
    assert upper.distance == pytest.approx(0.13)
    lower = giveaway([-2.8, -2.9], -2.95, "lower", MONEY, residual_bias=-0.03)
    assert lower.value == pytest.approx(upper.value)


def test_the_common_error_does_not_average_out():
    known = giveaway([2.9] * 100, 2.95, "upper", MONEY, random_standard_uncertainty=0.06)
    common = giveaway(
        [2.9] * 100, 2.95, "upper", MONEY, common_standard_uncertainty=0.05, random_standard_uncertainty=0.06
    )
    per_unit = 100 * 25 * 120
    assert known.standard_uncertainty == pytest.approx(0.006 * per_unit)
    assert common.standard_uncertainty == pytest.approx(math.hypot(0.05, 0.006) * per_unit)


def test_nothing_released_and_nothing_worth_are_refused():
    with pytest.raises(LimitsError, match="no lot was released"):
        giveaway([], 2.95, "upper", MONEY)
    with pytest.raises(LimitsError, match="without a value"):
        giveaway([2.9], 2.95, "upper", Money(25.0, 2000.0, 0.0, 300.0, 0.0, 0.0))
