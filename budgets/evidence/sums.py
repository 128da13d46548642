"""Means and sums of squares that keep their digits next to a large offset, and chi-square intervals."""

from __future__ import annotations

import math
import sys
from collections.abc import Hashable, Iterable, Sequence
from typing import TypeVar

from scipy.special import chdtri, fdtri

from budgets.evidence.evaluation import Interval

Key = TypeVar("Key", bound=Hashable)

CONFIDENCE = 0.95


def grouped(keys: Sequence[Key], values: Sequence[float]) -> dict[Key, list[float]]:
    """Return the values of each key, keys in order of first appearance."""
    groups: dict[Key, list[float]] = {}
    for key, value in zip(keys, values, strict=True):
        groups.setdefault(key, []).append(value)
    return groups


def mean(values: Sequence[float]) -> float:
    """Return the mean, computed from the first value on so that a large common offset costs no digits."""
    first = values[0]
    return first + math.fsum(value - first for value in values) / len(values)


def sum_of_squares(values: Sequence[float]) -> float:
    """Return the sum of squared deviations from the mean."""
    first = values[0]
    shifted = [value - first for value in values]
    centre = math.fsum(shifted) / len(shifted)
    return math.fsum((value - centre) ** 2 for value in shifted)


def is_rounding(square: float, values: Iterable[float]) -> bool:
    """Say whether a scatter of differences is no more than what binary numbers leave of decimal ones.

    Parameters
    ----------
    square : float, unit squared
        Variance of differences of the values.
    values : iterable of float, not empty
        What was subtracted.

    Returns
    -------
    bool

    Notes
    -----
    3.1 - 3.0 and 3.2 - 3.1 differ by 2e-16, and are the same: a value is off by half a unit of its last place
    at most, a difference by as much of either and of its own.

    Examples
    --------
    >>> is_rounding(sum_of_squares([3.1 - 3.0, 3.2 - 3.1]), [3.0, 3.1, 3.2])
    True
    """
    return math.sqrt(square) <= 2 * sys.float_info.epsilon * max(map(abs, values))


def f_quantile(tail: float, first: float, second: float) -> float:
    """Return the value that F exceeds with probability ``tail``.

    Parameters
    ----------
    tail : float
    first, second : float
        Degrees of freedom; ``math.inf`` allowed in both.

    Returns
    -------
    float
    """
    if math.isinf(first) and math.isinf(second):
        return 1.0
    if math.isinf(second):
        return float(chdtri(first, tail)) / first
    if math.isinf(first):
        return second / float(chdtri(second, 1 - tail))
    return float(fdtri(first, second, 1 - tail))


def standard_deviation_factors(
    degrees_of_freedom: float, *, confidence: float = CONFIDENCE
) -> tuple[float, float]:
    """Return by which factors the interval of a standard deviation lies around its estimate.

    Parameters
    ----------
    degrees_of_freedom : float
        Finite.
    confidence : float

    Returns
    -------
    tuple of float

    Notes
    -----
    Source: ISO 2854:1976, table on the variance (from memory): nu s^2/sigma^2 is chi-square.

    Examples
    --------
    >>> lower, upper = standard_deviation_factors(9)
    >>> round(lower, 3), round(upper, 3)
    (0.688, 1.826)
    """
    tail = (1 - confidence) / 2
    nu = degrees_of_freedom
    return math.sqrt(nu / float(chdtri(nu, tail))), math.sqrt(nu / float(chdtri(nu, 1 - tail)))


def standard_deviation_interval(standard_deviation: float, degrees_of_freedom: float) -> Interval:
    """Return the chi-square interval of a standard deviation with finite degrees of freedom."""
    lower, upper = standard_deviation_factors(degrees_of_freedom)
    return Interval(standard_deviation * lower, standard_deviation * upper, CONFIDENCE, "chi-square")
