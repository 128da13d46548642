"""Factors of control charts for samples of normal values."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import gammaln, ndtr

from budgets.errors import EvidenceError

_LARGEST_SAMPLE = 100
# Beyond so many standard deviations the range of 100 values has no probability left (1e-18).
_REACH = 9.0
_NODES = 200


@dataclass(frozen=True)
class ChartFactors:
    """Factors by which centre lines and three-sigma limits follow from means, ranges and standard deviations.

    Parameters
    ----------
    d2, d3 : float
        Mean and standard deviation of the range, over sigma.
    c4 : float
        Mean of the standard deviation, over sigma.
    a2, a3 : float
        Limits of a mean, over the mean range and over the mean standard deviation.
    range_lower, range_upper : float
        Limits of a range, over the mean range (D3, D4).
    deviation_lower, deviation_upper : float
        Limits of a standard deviation, over the mean one (B3, B4).
    """

    d2: float
    d3: float
    c4: float
    a2: float
    a3: float
    range_lower: float
    range_upper: float
    deviation_lower: float
    deviation_upper: float


@lru_cache(maxsize=64)
def chart_factors(number: int) -> ChartFactors:
    """Return the factors for samples of a given number of values.

    Parameters
    ----------
    number : int
        2 to 100.

    Returns
    -------
    ChartFactors

    Raises
    ------
    EvidenceError
        If the number is outside of its range.

    Notes
    -----
    Source: ISO 7870-2:2013, the table of factors (from memory), computed from the distribution of the range.

    Examples
    --------
    >>> round(chart_factors(2).d2, 4), round(chart_factors(5).range_upper, 3)
    (1.1284, 2.114)
    """
    if not 2 <= number <= _LARGEST_SAMPLE:
        raise EvidenceError(f"factors exist for 2 to {_LARGEST_SAMPLE} values", where=("number",))
    d2, d3 = _range_moments(number)
    c4 = math.sqrt(2 / (number - 1)) * math.exp(float(gammaln(number / 2) - gammaln((number - 1) / 2)))
    of_range, of_deviation = 3 * d3 / d2, 3 * math.sqrt(1 - c4 * c4) / c4
    return ChartFactors(
        d2=d2,
        d3=d3,
        c4=c4,
        a2=3 / (d2 * math.sqrt(number)),
        a3=3 / (c4 * math.sqrt(number)),
        range_lower=max(0.0, 1 - of_range),
        range_upper=1 + of_range,
        deviation_lower=max(0.0, 1 - of_deviation),
        deviation_upper=1 + of_deviation,
    )


def _range_moments(number: int) -> tuple[float, float]:
    """Return mean and standard deviation of the range of standard normal values."""
    points, weights = np.polynomial.legendre.leggauss(_NODES)
    x, w = _REACH * points, _REACH * weights
    below = ndtr(x)
    # E R = int 1 - Phi^n - (1 - Phi)^n dx
    first = float(w @ (1 - below**number - ndtr(-x) ** number))
    # E R^2 = 2 int int_{x < y} 1 - Phi(y)^n - (1 - Phi(x))^n + (Phi(y) - Phi(x))^n dx dy, y = x + t
    t, wt = _REACH * (points + 1), _REACH * weights
    lower, upper = x[:, None], x[:, None] + t[None, :]
    inside = 1 - ndtr(upper) ** number - ndtr(-lower) ** number + (ndtr(upper) - ndtr(lower)) ** number
    second = 2 * float(w @ inside @ wt)
    return first, math.sqrt(second - first * first)
