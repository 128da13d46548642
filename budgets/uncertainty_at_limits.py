"""The uncertainty of a budget at the limits of a specification, and how it depends on the estimate."""

from __future__ import annotations

import math
from dataclasses import dataclass

from budgets.budget import Budget
from budgets.conformity import Tolerance
from budgets.errors import NotSupportedError
from budgets.evidence.evaluation import variance
from budgets.level_dependence import LevelDependence
from budgets.linear_propagation import CompiledPropagation
from budgets.propagation import ESTIMATE, Counts, compiled
from budgets.reading_patterns import ReadingPattern


@dataclass(frozen=True)
class UncertaintyAtLimits:
    """The uncertainty that the acceptance limits are made with.

    Parameters
    ----------
    standard_uncertainty : float, unit of the characteristic
        The largest one at a tolerance limit.
    degrees_of_freedom : float
        The least at a tolerance limit: one number everywhere, the cautious one.
    dependence : LevelDependence or None
        None where the uncertainty is the same for all estimates.
    """

    standard_uncertainty: float
    degrees_of_freedom: float
    dependence: LevelDependence | None


def uncertainty_at_limits(
    budget: Budget, counts: Counts | ReadingPattern, tolerance: Tolerance
) -> UncertaintyAtLimits:
    """Return the uncertainty of a budget without a model at the tolerance limits.

    Parameters
    ----------
    budget : Budget
    counts : Counts or ReadingPattern
    tolerance : Tolerance

    Returns
    -------
    UncertaintyAtLimits

    Raises
    ------
    NotSupportedError
        For correlations beside parts proportional to the value.
    """
    return uncertainty_of_law_at_limits(compiled(budget, counts), tolerance)


def uncertainty_of_law_at_limits(law: CompiledPropagation, tolerance: Tolerance) -> UncertaintyAtLimits:
    """Return the uncertainty at the tolerance limits by the law that `compiled` gives without a model.

    Parameters
    ----------
    law : CompiledPropagation
        Of the one quantity ``estimate`` and the error of its bias.
    tolerance : Tolerance

    Returns
    -------
    UncertaintyAtLimits

    Raises
    ------
    NotSupportedError
        For correlations beside parts proportional to the value.
    """
    if not any(line.relative_terms for line in law.lines):
        result = law.at({ESTIMATE: 0.0})
        return UncertaintyAtLimits(result.standard_uncertainty, result.effective_degrees_of_freedom, None)
    if law.correlations:
        raise NotSupportedError(
            "correlations beside parts proportional to the value", where=("correlations",)
        )
    dependence = LevelDependence(
        math.sqrt(math.fsum(line.weight * variance(line.terms) for line in law.lines)),
        math.sqrt(math.fsum(line.weight * variance(line.relative_terms) for line in law.lines)),
    )
    at_limits = [
        law.at({ESTIMATE: limit}) for limit in (tolerance.lower, tolerance.upper) if limit is not None
    ]
    return UncertaintyAtLimits(
        max(result.standard_uncertainty for result in at_limits),
        min(result.effective_degrees_of_freedom for result in at_limits),
        dependence,
    )
