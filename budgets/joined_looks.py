"""How the estimates of several looks at a lot are correlated, each of which joins all readings before it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.budget import Budget
from budgets.budget_models import BIAS
from budgets.errors import ProcedureError
from budgets.levels import LEVELS
from budgets.propagation import compiled_with, estimates_for
from budgets.reading_patterns import ReadingPattern

_ALL_ALONE = dict.fromkeys(LEVELS, 1.0)


@dataclass(frozen=True)
class Draw:
    """The error of one component, as it is drawn anew at its level.

    Parameters
    ----------
    level : str or None
        None: it is the same whatever was read.
    variance : float, squared unit of the measurand
        Of one draw.
    covered_weight : float
        What of the averaging weight another component has covered already.
    """

    level: str | None
    variance: float
    covered_weight: float

    def shared(self, weights: Mapping[str, float]) -> float:
        """Return the variance, or the covariance, that averaging or shared weights leave of it."""
        weight = 1.0 if self.level is None else weights[self.level]
        return self.variance * max(0.0, weight - self.covered_weight)


def draws_of(budget: Budget, estimates: Mapping[str, float] | None = None) -> tuple[Draw, ...]:
    """Return the errors of a budget, one by one.

    Parameters
    ----------
    budget : Budget
    estimates : mapping of str to float or None
        As in `budgets.propagation.combined`.

    Returns
    -------
    tuple of Draw
        In the order of the components. A part of a correlation counts with its component, so that a variance
        may be below zero; the sum over a level is not.

    Raises
    ------
    ModelError
        If estimates are needed and missing, or the model fails at them.
    """
    law = compiled_with(budget, _ALL_ALONE)
    full = law.model.estimates(estimates_for(budget, estimates))
    _, coefficients = law.model.linearised(full)
    _, _, parts = law.combination(coefficients, full)
    given = (BIAS,) if budget.model is None else tuple(budget.model.given)
    return tuple(
        Draw(
            level=None if component.inputs[0] in given else component.level,
            variance=part / line.weight if line.weight else 0.0,
            covered_weight=component.covered_weight,
        )
        for component, line, part in zip(budget.components, law.lines, parts, strict=True)
    )


def covariance_of_looks(
    budget: Budget, patterns: Sequence[ReadingPattern], estimates: Mapping[str, float] | None = None
) -> NDArray[np.float64]:
    """Return the covariance matrix of the estimates of several looks, at one true value.

    Parameters
    ----------
    budget : Budget
    patterns : sequence of ReadingPattern
        All readings that each look judges; the first ones are those of the look before.
    estimates : mapping of str to float or None
        As in `budgets.propagation.combined`.

    Returns
    -------
    ndarray, shape (looks, looks), squared unit of the measurand

    Raises
    ------
    ProcedureError
        If a look has fewer readings than the one before it.
    ModelError
        As in `draws_of`.

    Notes
    -----
    ``sum_l sigma_l^2 sum_g (weight of g in one look) (weight of g in the other)`` over the levels l and their
    groups g. Source: JCGM 100:2008, 5.2.2 (from memory).
    """
    counts = [len(pattern.groups["sample"]) for pattern in patterns]
    if counts != sorted(counts):
        raise ProcedureError("each look joins its readings with all those before it", where=("looks",))
    draws = draws_of(budget, estimates)
    found = np.empty((len(patterns), len(patterns)))
    for i, first in enumerate(patterns):
        for j, later in enumerate(patterns[i:], start=i):
            weights = first.shared_weights(later)
            found[i, j] = found[j, i] = sum(draw.shared(weights) for draw in draws)
    return found
