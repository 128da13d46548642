"""The agreement near a tolerance limit, and whether differences scatter more at high levels."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from budgets.evidence.evaluation import EvaluationWarning
from budgets.evidence.sums import (
    CONFIDENCE,
    f_quantile,
    mean,
    standard_deviation_factors,
    sum_of_squares,
)
from budgets.evidence.validation_pairs import Pair
from budgets.evidence.variance_over_level import VarianceOverLevel, enough_levels, variance_over_level

PAIRS_NEAR_A_LIMIT = 10
_LEAST_PAIRS_FOR_A_FIT = 20


def differences_over_level(pairs: Sequence[Pair]) -> VarianceOverLevel | None:
    """Fit the variance of the differences over the reference value.

    Parameters
    ----------
    pairs : sequence of Pair

    Returns
    -------
    VarianceOverLevel or None
        None with fewer than 20 pairs, or levels too near one another to tell.

    Notes
    -----
    Each pair gives a variance with one degree of freedom, ``(d - mean d)^2 n / (n - 1)``.
    """
    n = len(pairs)
    levels = [pair.reference for pair in pairs]
    differences = [pair.difference for pair in pairs]
    centre = mean(differences)
    variances = [(d - centre) ** 2 * n / (n - 1) for d in differences]
    if n < _LEAST_PAIRS_FOR_A_FIT or not enough_levels(levels, variances, [1.0] * n):
        return None
    return variance_over_level(levels, variances, [1.0] * n)


def agreement_near_limits(
    pairs: Sequence[Pair], deviation: float, limits: Sequence[float], fit: VarianceOverLevel | None
) -> tuple[dict[str, Any], ...]:
    """Return bias and standard error of prediction of the pairs near each limit.

    Parameters
    ----------
    pairs : sequence of Pair
    deviation : float
        SEP: pairs within two of it are near.
    limits : sequence of float
    fit : VarianceOverLevel or None
        Stands in where fewer than 10 pairs are near and the differences depend on the level.

    Returns
    -------
    tuple of dict
        JSON-able, one per limit; None where neither can tell.
    """
    found = []
    for limit in limits:
        near: list[float] = []
        others: list[float] = []
        for pair in pairs:
            is_near = abs(pair.reference - limit) <= 2 * deviation
            (near if is_near else others).append(pair.difference)
        if len(near) >= PAIRS_NEAR_A_LIMIT:
            figures = _of_differences(near, others)
        elif fit is not None and fit.significant and fit.levels[0] <= limit <= fit.levels[-1]:
            figures = _of_fit(fit, limit)
        else:
            figures = {"from": None, "standard_error_of_prediction": None}
        found.append({"limit": limit, "pairs": len(near), **figures})
    return tuple(found)


def _of_differences(near: Sequence[float], others: Sequence[float]) -> dict[str, Any]:
    n = len(near)
    square = sum_of_squares(near) / (n - 1)
    lower, upper = standard_deviation_factors(n - 1)
    larger = False
    if len(others) > 1:
        elsewhere = sum_of_squares(others) / (len(others) - 1)
        larger = square > elsewhere * f_quantile(1 - CONFIDENCE, n - 1, len(others) - 1)
    return {
        "from": "pairs near the limit",
        "bias": mean(near),
        "standard_error_of_prediction": math.sqrt(square),
        "lower": math.sqrt(square) * lower,
        "upper": math.sqrt(square) * upper,
        "larger_than_elsewhere": larger,
    }


def _of_fit(fit: VarianceOverLevel, limit: float) -> dict[str, Any]:
    deviation = math.sqrt(fit.variance(limit))
    lower, upper = standard_deviation_factors(fit.degrees_of_freedom(limit))
    return {
        "from": "fit over the level",
        "standard_error_of_prediction": deviation,
        "lower": deviation * lower,
        "upper": deviation * upper,
    }


def warnings_near_limits(
    near: Sequence[dict[str, Any]], fit: VarianceOverLevel | None
) -> tuple[EvaluationWarning, ...]:
    """Say where few pairs are, and where the agreement is worse than elsewhere."""
    warnings = []
    for figures in near:
        limit = figures["limit"]
        if figures["pairs"] < PAIRS_NEAR_A_LIMIT:
            detail = (
                f"only {figures['pairs']} pairs lie within two standard errors of prediction of the limit "
                f"{limit:g}; what matters is how well the analyzer agrees there"
            )
            warnings.append(EvaluationWarning("few-pairs-near-limit", detail))
        if figures.get("larger_than_elsewhere"):
            detail = (
                f"near the limit {limit:g} the standard error of prediction is "
                f"{figures['standard_error_of_prediction']:.2g}, larger than elsewhere; the one of all pairs "
                "is too small there"
            )
            warnings.append(EvaluationWarning("worse-near-limit", detail))
    if fit is not None and fit.significant:
        low, high = (math.sqrt(fit.variance(level)) for level in (fit.levels[0], fit.levels[-1]))
        detail = (
            f"the differences scatter more at high levels: {low:.2g} at {fit.levels[0]:.4g}, {high:.2g} at "
            f"{fit.levels[-1]:.4g}; one standard error of prediction is wrong at both ends"
        )
        warnings.append(EvaluationWarning("differences-depend-on-level", detail))
    return tuple(warnings)
