"""Robust standard deviations that a few outlying values cannot carry away, and how much they know.

Algorithm S is for standard deviations of small groups, algorithm A for the mean and spread of single values.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import chdtr, chdtrc, chdtri

_TAIL = 0.10  # share of groups that algorithm S winsorises in clean normal data
_LIMIT = 1.5  # multiple of the standard deviation at which algorithm A winsorises
_STEPS = 100  # algorithm A gains a digit in a few steps


@dataclass(frozen=True)
class RobustScale:
    """A robust standard deviation, and the degrees of freedom with which it knows it.

    Parameters
    ----------
    standard_deviation : float, unit of the characteristic
    degrees_of_freedom : float
        ``1 / (2 Var ln s)`` for clean normal data and many values.
    """

    standard_deviation: float
    degrees_of_freedom: float


def algorithm_s(deviations: Sequence[float], degrees_of_freedom: int) -> RobustScale:
    """Return the robust pooled value of standard deviations.

    Parameters
    ----------
    deviations : sequence of float, shape (p,), unit of the characteristic
    degrees_of_freedom : int
        Of each of them.

    Returns
    -------
    RobustScale
        A standard deviation of 0 when too many of the deviations are 0.

    Notes
    -----
    ``s = xi sqrt(sum min(w_i, eta s)^2 / p)`` with ``eta^2 nu`` the 90 % quantile of chi-square and xi such
    that clean data give sigma. Source: ISO 5725-5:1998, 3.4 and Table 2 (algorithm S); ISO 13528:2015, C.4
    (from memory).

    Examples
    --------
    >>> round(algorithm_s([1.0, 1.2, 0.8, 0.9, 30.0], 1).standard_deviation, 4)
    1.6375
    """
    nu, count = degrees_of_freedom, len(deviations)
    limit = float(chdtri(nu, _TAIL)) / nu
    factor = 1 / _clipped_mean(nu, limit)
    freedom = count * _information(nu, limit)
    squares = [w * w for w in deviations]
    # ISO 5725-5, 3.4: v = xi^2 mean min(w^2, eta^2 v). The right side is concave in v and 0 at 0, so with too
    # many zeros among the deviations its slope there leaves no other solution.
    if factor * limit * sum(square > 0 for square in squares) <= count:
        return RobustScale(0.0, freedom)
    # Newton's steps from above meet the solution after finitely many: the right side is straight by pieces.
    variance, kept = factor * math.fsum(squares) / count, count
    while (inside := sum(square <= limit * variance for square in squares)) < kept:
        kept = inside
        unclipped = math.fsum(square for square in squares if square <= limit * variance)
        variance = factor * unclipped / (count - factor * limit * (count - kept))
    return RobustScale(math.sqrt(variance), freedom)


def algorithm_a(values: Sequence[float]) -> tuple[float, RobustScale]:
    """Return the robust mean and standard deviation of single values.

    Parameters
    ----------
    values : sequence of float, shape (p,), unit of the characteristic
        At least two.

    Returns
    -------
    tuple of (float, RobustScale)
        The robust mean, and the robust standard deviation of the values around it.

    Notes
    -----
    Values are winsorised at 1.5 s* around x*, and x*, s* found again, until nothing changes. Source: ISO
    5725-5:1998, 6.2; ISO 13528:2015, C.3.1 (algorithm A, there with the rounded factor 1.134; from memory).

    Examples
    --------
    >>> centre, scale = algorithm_a([1.0, 1.1, 0.9, 1.05, 0.95, 30.0])
    >>> round(centre, 4), round(scale.standard_deviation, 4)
    (1.0434, 0.1448)
    """
    x = np.asarray(values, dtype=float)
    limit = _LIMIT**2
    factor = 1 / _clipped_mean(1, limit)
    centre = float(np.median(x))
    scale = 1.4826 * float(np.median(np.abs(x - centre))) or float(x.std())
    for _ in range(_STEPS):
        winsorised = np.clip(x, centre - _LIMIT * scale, centre + _LIMIT * scale)
        centre = float(winsorised.mean())
        scale = math.sqrt(factor * float(np.sum((winsorised - centre) ** 2)) / (len(x) - 1))
    return centre, RobustScale(scale, (len(x) - 1) * _information(1, limit))


def _clipped_mean(nu: int, limit: float) -> float:
    """Return E min(u, limit) for u a chi-square over its degrees of freedom."""
    return float(chdtr(nu + 2, nu * limit)) + limit * float(chdtrc(nu, nu * limit))


def _information(nu: int, limit: float) -> float:
    """Return 1 / (2 Var ln s) per standard deviation of nu degrees of freedom: an M-estimator of scale."""
    mean = _clipped_mean(nu, limit)
    square = (nu + 2) / nu * float(chdtr(nu + 4, nu * limit)) + limit**2 * float(chdtrc(nu, nu * limit))
    slope = float(chdtr(nu + 2, nu * limit))
    # Var ln s = Var min(u, limit) / (4 E[u; u < limit]^2)
    return 2 * slope**2 / (square - mean**2)
