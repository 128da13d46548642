"""The error of a judged reading parted into what scatters from lot to lot and what all lots share."""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass

from budgets.budget import Budget
from budgets.conformity import Tolerance
from budgets.errors import LimitsError, NotSupportedError
from budgets.evidence.evaluation import Term, effective_degrees_of_freedom, variance
from budgets.evidence.sums import f_quantile
from budgets.level_dependence import LevelDependence
from budgets.levels import LEVELS
from budgets.linear_propagation import CompiledPropagation
from budgets.propagation import ESTIMATE, Counts, compiled
from budgets.reading_patterns import ReadingPattern
from budgets.uncertainty_at_limits import uncertainty_of_law_at_limits

COMMON_LEVELS = ("instrument", "calibration", "reference")
"""Drawn once for all lots that one analyzer reads with one calibration."""

RANDOM_LEVELS = tuple(level for level in LEVELS if level not in COMMON_LEVELS)
"""Drawn anew with every lot."""


@dataclass(frozen=True)
class MeasurementErrors:
    """The error of the estimate that a lot is judged by.

    Parameters
    ----------
    random : LevelDependence, unit of the characteristic
        Standard uncertainty of what is drawn anew with every lot.
    common : LevelDependence, unit of the characteristic
        Standard uncertainty of the one error that all lots share.
    degrees_of_freedom : float
        Of the budget: one number for whole and parts.
    bias : float, unit of the characteristic
        Mean of (estimate - true value) that was left uncorrected; 0 when it was corrected.

    Raises
    ------
    LimitsError
        If nothing is drawn anew from lot to lot.
    """

    random: LevelDependence
    common: LevelDependence
    degrees_of_freedom: float = math.inf
    bias: float = 0.0

    def __post_init__(self) -> None:
        if not max(self.random.constant, self.random.proportional) > 0:
            raise LimitsError(
                "nothing in this measurement is drawn anew from lot to lot: a reading without scatter does "
                "not exist, so a component is missing",
                where=("components",),
            )

    @classmethod
    def of(
        cls, random: float, common: float = 0.0, degrees_of_freedom: float = math.inf
    ) -> MeasurementErrors:
        """Return errors that are the same at every value."""
        return cls(LevelDependence(random, 0.0), LevelDependence(common, 0.0), degrees_of_freedom)

    @property
    def whole(self) -> LevelDependence:
        """Standard uncertainty of the estimate."""
        return LevelDependence(
            math.hypot(self.random.constant, self.common.constant),
            math.hypot(self.random.proportional, self.common.proportional),
        )


def measurement_errors(
    budget: Budget, counts: Counts | ReadingPattern, tolerance: Tolerance
) -> MeasurementErrors:
    """Return the errors of a budget for what is done with every lot.

    Parameters
    ----------
    budget : Budget
    counts : Counts or ReadingPattern
    tolerance : Tolerance

    Returns
    -------
    MeasurementErrors

    Raises
    ------
    LimitsError
        If nothing is drawn anew from lot to lot.
    NotSupportedError
        For a budget with a measurement model, or correlations beside parts proportional to the value.
    """
    if budget.model is not None:
        raise NotSupportedError("global risks of a characteristic computed from several", where=("model",))
    law = compiled(budget, counts)
    whole = uncertainty_of_law_at_limits(law, tolerance)

    def part(levels: Collection[str]) -> LevelDependence:
        own = _part_of(budget, law, levels)
        if own is None:
            return LevelDependence(0.0, 0.0)
        found = uncertainty_of_law_at_limits(own, tolerance)
        return found.dependence or LevelDependence(found.standard_uncertainty, 0.0)

    return MeasurementErrors(
        part(RANDOM_LEVELS),
        part(COMMON_LEVELS),
        whole.degrees_of_freedom,
        0.0 if budget.bias is None or budget.bias_treatment == "corrected" else budget.bias,
    )


def error_terms(
    budget: Budget, counts: Counts | ReadingPattern, levels: Collection[str], estimate: float
) -> list[Term]:
    """Return the variance of the errors of some levels as terms over independent mean squares.

    Parameters
    ----------
    budget : Budget
        Without a measurement model.
    counts : Counts or ReadingPattern
    levels : collection of str
    estimate : float, unit of the characteristic
        At which parts proportional to the value are taken.

    Returns
    -------
    list of Term

    Raises
    ------
    NotSupportedError
        For a budget with a measurement model.
    """
    if budget.model is not None:
        raise NotSupportedError("global risks of a characteristic computed from several", where=("model",))
    own = _part_of(budget, compiled(budget, counts), levels)
    if own is None:
        return []
    full = own.model.estimates({ESTIMATE: estimate})
    _, coefficients = own.model.linearised(full)
    return own.combination(coefficients, full)[1]


def exceeds_counted(
    seen: float, degrees_of_freedom: float, counted: Sequence[Term], *, significance: float = 0.05
) -> bool:
    """Say whether a variance that a study saw is significantly larger than what a budget counts for it.

    Parameters
    ----------
    seen : float, unit of the characteristic squared
    degrees_of_freedom : float
        Of what was seen.
    counted : sequence of Term
        Of the budget, as from `error_terms`; none: it counts nothing.
    significance : float

    Returns
    -------
    bool

    Notes
    -----
    One-sided F test of ``seen / counted`` on the effective degrees of freedom of both. Source: ISO 2854,
    comparison of two variances (from memory); JCGM 100:2008, G.4.1, for the degrees of freedom.
    """
    known = variance(counted)
    if seen <= 0 or known <= 0:
        return seen > 0
    limit = f_quantile(significance, degrees_of_freedom, effective_degrees_of_freedom(counted))
    return seen / known > limit


def _part_of(budget: Budget, law: CompiledPropagation, levels: Collection[str]) -> CompiledPropagation | None:
    """Return the law of the components of some levels; None where they add nothing."""
    lines = tuple(
        line
        for component, line in zip(budget.components, law.lines, strict=True)
        if component.level in levels and line.weight > 0
    )
    if not lines:
        return None
    codes = {line.code for line in lines}
    # Correlations hold within one level, so a pair is in or out as a whole.
    correlations = tuple(item for item in law.correlations if codes.issuperset(item.between))
    return CompiledPropagation(law.model, lines, correlations)
