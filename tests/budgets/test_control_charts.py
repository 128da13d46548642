import math

import numpy as np
import pytest
from scipy import stats

from budgets.control_charts import chart_factors
from budgets.errors import EvidenceError


def test_two_values_have_a_range_with_a_closed_form():
    """|x1 - x2| is half normal: mean 2/sqrt(pi), variance 2 - 4/pi."""
    factors = chart_factors(2)
    assert factors.d2 == pytest.approx(2 / math.sqrt(math.pi), rel=1e-12)
    assert factors.d3 == pytest.approx(math.sqrt(2 - 4 / math.pi), rel=1e-10)
    assert factors.c4 == pytest.approx(math.sqrt(2 / math.pi), rel=1e-12)


@pytest.mark.parametrize("number", [5, 12, 100])
def test_the_factors_are_those_of_a_simulation(number):
    draws = np.random.default_rng(number).standard_normal((40_000, number))
    ranges, deviations = np.ptp(draws, axis=1), draws.std(axis=1, ddof=1)
    factors = chart_factors(number)
    assert factors.d2 == pytest.approx(ranges.mean(), abs=4 * factors.d3 / 200)
    assert factors.d3 == pytest.approx(ranges.std(), rel=0.02)
    assert factors.c4 == pytest.approx(deviations.mean(), abs=4 * deviations.std() / 200)
    # The mean of s over sigma by the chi distribution of the library
    assert factors.c4 == pytest.approx(stats.chi.mean(number - 1) / math.sqrt(number - 1), rel=1e-9)
    assert factors.range_lower < 1 < factors.range_upper


@pytest.mark.parametrize("number", [1, 101])
def test_other_numbers_have_no_factors(number):
    with pytest.raises(EvidenceError, match="2 to 100"):
        chart_factors(number)
