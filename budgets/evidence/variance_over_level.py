"""Variances that grow with the level: ``v(x) = s0^2 + s1^2 x^2`` fitted to sample variances.

Least squares on standard deviations would weigh a pair like a set of ten and see a trend in chance alone, so
the fit is by maximum likelihood of the sample variances, each with its own degrees of freedom.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from scipy.special import chdtri

from budgets.errors import EvidenceError
from budgets.evidence.evaluation import json_able
from budgets.evidence.sums import standard_deviation_factors

LEAST_LEVELS = 5
LEAST_DEGREES_OF_FREEDOM = 10
# With the highest level nearer to the lowest than this, the two parts cannot be told apart.
LEAST_RATIO_OF_LEVELS = 1.5
# Below it the squares of variances, which the information is made of, have no digits left.
_LEAST_VARIANCE = 1e-100
# s1 = 0 lies on the edge of what is possible: half of the probability is at zero, so 5 % is the 10 % point.
CRITICAL_VALUE = float(chdtri(1, 0.10))

_Array = NDArray[np.float64]


@dataclass(frozen=True)
class VarianceOverLevel:
    """A fitted variance function.

    Parameters
    ----------
    constant : float, unit of the characteristic
        s0.
    proportional : float
        s1.
    likelihood_ratio : float
        Of the test of s1 = 0.
    covariance : tuple of tuple of float, shape (2, 2)
        Of the estimates of s0^2 and s1^2.
    levels : tuple of float, unit of the characteristic
        Levels that were fitted, in ascending order.
    """

    constant: float
    proportional: float
    likelihood_ratio: float
    covariance: tuple[tuple[float, float], tuple[float, float]]
    levels: tuple[float, ...]

    @property
    def significant(self) -> bool:
        """Whether the variance depends on the level, at 5 %."""
        return self.likelihood_ratio > CRITICAL_VALUE

    def variance(self, level: float) -> float:
        """Return the variance at a level, unit squared."""
        return self.constant**2 + (self.proportional * level) ** 2

    def degrees_of_freedom(self, level: float) -> float:
        """Return the degrees of freedom of the variance at a level: ``2 v^2 / Var(v)``."""
        (a, c), (_, b) = self.covariance
        return 2 * self.variance(level) ** 2 / (a + 2 * c * level**2 + b * level**4)

    @property
    def parts(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """The variance and the degrees of freedom of either part: s0^2 first, then s1^2.

        Taken as independent they understate what is known: the two estimates are negatively correlated, so
        the degrees of freedom of their sum by the rule for independent mean squares are never too many.
        """
        squares = self.constant**2, self.proportional**2
        (a, _), (_, b) = self.covariance
        return (squares[0], 2 * squares[0] ** 2 / a), (squares[1], 2 * squares[1] ** 2 / b)

    def to_document(self) -> dict[str, Any]:
        """Return the fit as JSON-able members, with the standard deviation at three levels."""
        shown = (self.levels[0], self.levels[len(self.levels) // 2], self.levels[-1])
        document: dict[str, Any] = json_able(
            {
                "constant": self.constant,
                "proportional": self.proportional,
                "likelihood_ratio": self.likelihood_ratio,
                "critical_value": CRITICAL_VALUE,
                "significant": self.significant,
                "levels": len(self.levels),
                "standard_deviations": [self._at(level) for level in shown],
            }
        )
        return document

    def _at(self, level: float) -> dict[str, float]:
        deviation, nu = math.sqrt(self.variance(level)), self.degrees_of_freedom(level)
        lower, upper = standard_deviation_factors(nu)
        return {
            "level": level,
            "standard_deviation": deviation,
            "degrees_of_freedom": nu,
            "lower": deviation * lower,
            "upper": deviation * upper,
        }


def enough_levels(
    levels: Sequence[float], variances: Sequence[float], degrees_of_freedom: Sequence[float]
) -> bool:
    """Say whether there are enough levels, far enough apart, and scatter, for a fit to be worth it."""
    sizes = [abs(level) for level in levels]
    return (
        len(set(levels)) >= LEAST_LEVELS
        and max(variances) > _LEAST_VARIANCE
        and math.fsum(degrees_of_freedom) >= LEAST_DEGREES_OF_FREEDOM
        and max(sizes) >= LEAST_RATIO_OF_LEVELS * min(sizes)
    )


def variance_over_level(
    levels: Sequence[float], variances: Sequence[float], degrees_of_freedom: Sequence[float]
) -> VarianceOverLevel:
    """Fit ``v(x) = s0^2 + s1^2 x^2``, both parts from zero up.

    Parameters
    ----------
    levels : sequence of float, shape (n,), unit of the characteristic
        Known well beside the scatter: means of the groups.
    variances : sequence of float, shape (n,), unit squared
        Sample variances; zero is possible.
    degrees_of_freedom : sequence of float, shape (n,)

    Returns
    -------
    VarianceOverLevel

    Raises
    ------
    EvidenceError
        If the levels are too few or too near one another, or no variance is above zero.

    Notes
    -----
    Minimises ``sum nu_i (ln v_i + s_i^2 / v_i)``, twice the negative logarithm of the likelihood of sample
    variances of normal values. The scale has a closed form for a given share of the two parts, so the search
    is over that share alone. The test of s1 = 0 compares the two likelihoods with the 10 % point of
    chi-square with one degree of freedom (Self and Liang, Journal of the American Statistical Association 82
    (1987), from memory: a parameter on its edge). Degrees of freedom come from the information matrix and are
    approximate.
    Source: the model is a case of ISO 5725-2:1994, 7.5 (from memory); its fit by maximum likelihood is common
    practice, no source.
    """
    if not enough_levels(levels, variances, degrees_of_freedom):
        raise EvidenceError(
            f"the dependence on the level needs {LEAST_LEVELS} levels with {LEAST_DEGREES_OF_FREEDOM} "
            f"degrees of freedom, the highest {LEAST_RATIO_OF_LEVELS:g} times the lowest, and some scatter"
        )
    x, s2, nu = (np.asarray(part, dtype=float) for part in (levels, variances, degrees_of_freedom))
    # Levels relative to their quadratic mean: the search then knows no unit.
    unit = float(np.sqrt(np.mean(x * x)))
    z2 = (x / unit) ** 2
    share = _best_share(z2, s2, nu)
    scale = _scale(share, z2, s2, nu)
    constant, proportional = scale * share, scale * (1 - share) / unit**2
    ratio = _deviance(1.0, z2, s2, nu) - _deviance(share, z2, s2, nu)
    return VarianceOverLevel(
        math.sqrt(constant),
        math.sqrt(proportional),
        max(0.0, ratio),
        _covariance(share, scale, z2, nu, unit),
        tuple(sorted(levels)),
    )


def _shape(share: float, z2: _Array) -> _Array:
    return share + (1 - share) * z2


def _scale(share: float, z2: _Array, s2: _Array, nu: _Array) -> float:
    return float(np.sum(nu * s2 / _shape(share, z2)) / np.sum(nu))


def _deviance(share: float, z2: _Array, s2: _Array, nu: _Array) -> float:
    """Return the deviance at the best scale for this share, without what is constant."""
    shape = _shape(share, z2)
    return float(np.sum(nu) * math.log(_scale(share, z2, s2, nu)) + np.sum(nu * np.log(shape)))


def _best_share(z2: _Array, s2: _Array, nu: _Array) -> float:
    """Return which share of the variance at the mean square level is constant."""
    # At a level of zero a purely proportional variance would be zero.
    lowest = 0.0 if np.all(z2 > 0) else 1e-9
    steps = np.geomspace(1e-6, 0.5, 40)
    grid = [lowest, *steps, *(1 - steps[-2::-1]), 1.0]
    values = [_deviance(share, z2, s2, nu) for share in grid]
    best = int(np.argmin(values))
    around = (grid[max(0, best - 1)], grid[min(len(grid) - 1, best + 1)])
    found = minimize_scalar(
        _deviance, bounds=around, args=(z2, s2, nu), method="bounded", options={"xatol": 1e-12}
    )
    return float(found.x) if found.fun < values[best] else grid[best]


def _covariance(
    share: float, scale: float, z2: _Array, nu: _Array, unit: float
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Return the inverse of the information matrix of s0^2 and s1^2."""
    weights = nu / (2 * (scale * _shape(share, z2)) ** 2)
    information = np.array(
        [
            [np.sum(weights), np.sum(weights * z2)],
            [np.sum(weights * z2), np.sum(weights * z2 * z2)],
        ]
    )
    inverse = np.linalg.inv(information)
    return (
        (float(inverse[0, 0]), float(inverse[0, 1] / unit**2)),
        (float(inverse[1, 0] / unit**2), float(inverse[1, 1] / unit**4)),
    )
