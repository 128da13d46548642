"""What the lot as a whole and the replicates of a sample cost, beside the bare functions that they need.

`pytest tests/benchmarks/test_joint_conformance.py --benchmark-enable` shows the times.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture
from scipy.special import owens_t
from scipy.stats import multivariate_normal, studentized_range

from budgets.joint_conformance import joint_conformance
from budgets.replicates import critical_range_factor

RISKS = [(0.0, 0.03), (0.01, 0.02), (0.0, 0.04)]
MATRIX = np.array([[1.0, 0.3, 0.5], [0.3, 1.0, 0.2], [0.5, 0.2, 1.0]])


@pytest.mark.parametrize("number", [2, 3])
def test_the_joint_risk_of_characteristics(benchmark: BenchmarkFixture, number: int) -> None:
    joint = benchmark(joint_conformance, RISKS[:number], MATRIX[:number, :number])
    assert joint.smallest_risk < joint.risk < joint.largest_risk


def test_the_bare_tails_of_two(benchmark: BenchmarkFixture) -> None:
    """Four corners, two values of T each."""
    h = np.full((2, 2, 2), 1.8)
    assert benchmark(owens_t, h, 0.7).shape == (2, 2, 2)


def test_the_box_of_three_by_scipy(benchmark: BenchmarkFixture) -> None:
    box = multivariate_normal([0, 0, 0], MATRIX, seed=1)
    assert benchmark(box.cdf, [1.9, 2.0, 1.8]) < 1


def test_a_critical_difference_for_the_first_time(benchmark: BenchmarkFixture) -> None:
    def first() -> float:
        critical_range_factor.cache_clear()
        return critical_range_factor(4, 0.99, 31.4)

    assert benchmark(first) == pytest.approx(4.82, abs=0.05)


def test_the_same_by_scipy(benchmark: BenchmarkFixture) -> None:
    assert benchmark(studentized_range.ppf, 0.99, 4, 31.4) == pytest.approx(4.82, abs=0.05)
    assert math.isfinite(studentized_range.ppf(0.99, 4, 31.4))
