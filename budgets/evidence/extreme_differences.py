"""Differences that stand out: the generalised test of extreme Studentized deviates, for several at once."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from scipy.special import stdtrit

from budgets.evidence.sums import mean, sum_of_squares

# The critical values hold well from here on.
LEAST_VALUES = 15
_MOST_EXTREMES = 10
_SIGNIFICANCE = 0.05


@dataclass(frozen=True)
class Deviate:
    """The value that stood out most at one step.

    Parameters
    ----------
    index : int
        Of the value in the sequence given.
    value : float
    statistic, critical_value : float
    """

    index: int
    value: float
    statistic: float
    critical_value: float


def critical_deviate(number: int, step: int, alpha: float = _SIGNIFICANCE) -> float:
    """Return the critical value of a step of the test.

    Parameters
    ----------
    number : int
        Number of values at the start.
    step : int
        From 1 up; values left over at this step are ``number - step + 1``.
    alpha : float
        Significance level.

    Returns
    -------
    float

    Notes
    -----
    Source: Rosner, Technometrics 25 (1983) 165 (from memory).
    """
    left = number - step + 1
    t = -float(stdtrit(left - 2, alpha / (2 * left)))
    return (left - 1) * t / math.sqrt((left - 2 + t * t) * left)


def extreme_deviates(values: Sequence[float], most: int) -> tuple[Deviate, ...]:
    """Return the value that stands out most at each step, outlying or not.

    Parameters
    ----------
    values : sequence of float, shape (n,)
    most : int
        Number of steps.

    Returns
    -------
    tuple of Deviate
        Fewer than asked for where the values left over are equal.
    """
    left = list(range(len(values)))
    found: list[Deviate] = []
    for step in range(1, most + 1):
        kept = [values[i] for i in left]
        centre = mean(kept)
        squares = sum_of_squares(kept)
        if squares == 0:
            break
        distance, worst = max((abs(values[i] - centre), i) for i in left)
        statistic = distance / math.sqrt(squares / (len(kept) - 1))
        found.append(Deviate(worst, values[worst], statistic, critical_deviate(len(values), step)))
        left.remove(worst)
    return tuple(found)


def extremes(values: Sequence[float]) -> tuple[Deviate, ...]:
    """Return the values that stand out at the 5 % level.

    Parameters
    ----------
    values : sequence of float, shape (n,)
        Fewer than 15 are not tested. One in ten, and no more than ten, can be found.

    Returns
    -------
    tuple of Deviate
        All up to the last step whose statistic exceeds its critical value: two that hide each other are both
        found.
    """
    number = len(values)
    if number < LEAST_VALUES:
        return ()
    steps = extreme_deviates(values, min(_MOST_EXTREMES, number // 10))
    outlying = [i for i, step in enumerate(steps) if step.statistic > step.critical_value]
    return steps[: outlying[-1] + 1] if outlying else ()
