"""How long the risk of several looks takes: found once, at approval; beside one multivariate normal.

What a decision does with it is a look-up; what is said of a further look costs one tail per way to read it.
"""

import math

import numpy as np
import pytest
from scipy.stats import multivariate_normal, norm

from budgets.chosen_looks import risk_per_chosen_look
from budgets.looks import overall_risk, power_of_a_further_look

STEPS = (0.5**0.5, (2 / 3) ** 0.5)


def test_bare_one_call_of_the_multivariate_normal(benchmark):
    matrix = np.array(
        [[math.prod(STEPS[min(i, j) : max(i, j)]) for j in range(3)] for i in range(3)],
    )
    law = multivariate_normal(cov=matrix, abseps=1e-6, releps=1e-6)
    found = 1 - benchmark(law.cdf, [norm.isf(0.05)] * 3)
    assert found == pytest.approx(overall_risk(STEPS, 0.05, rejection=None), abs=1e-5)


@pytest.mark.parametrize("nu", [math.inf, 40.0], ids=["normal", "t"])
def test_the_overall_risk_of_three_looks(benchmark, nu):
    assert 0.09 < benchmark(overall_risk, STEPS, 0.05, nu) < 0.1


@pytest.mark.parametrize("rounds", [2, 3])
def test_the_risk_per_look_whatever_is_read(benchmark, rounds):
    steps = [(step, 1.0) for step in STEPS[: rounds - 1]]
    assert 0.02 < benchmark(risk_per_chosen_look, steps, 0.05) < 0.03


def test_the_power_of_a_further_look(benchmark):
    covariance = ((0.01, 0.0068), (0.0068, 0.0068))
    assert benchmark(power_of_a_further_look, 3.05, covariance, (-math.inf, 3.046), 40.0) < 0.5
