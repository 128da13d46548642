"""How lots will be measured and judged: a budget, its looks, and all that the lots must meet."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from budgets.budget import LARGEST_COUNT, Budget, Count, Procedure
from budgets.components import Component
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.errors import EmptyAcceptanceError, ProcedureError
from budgets.evidence.evaluation import Term
from budgets.look_limits import LookLimits
from budgets.propagation import Counts, combined
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule

# Drawn once for the plant and not for each lot: an error of these levels is the same in every reading.
COMMON_LEVELS = ("instrument", "calibration", "reference")


@dataclass(frozen=True)
class Demand:
    """What one specification demands of the characteristic.

    Parameters
    ----------
    code : str
    tolerance : Tolerance
    decision_rule : DecisionRule
    legal : bool
        Whether the limits are those of the law.
    domain : tuple of float or None
        Natural domain of the characteristic.
    """

    code: str
    tolerance: Tolerance
    decision_rule: DecisionRule
    legal: bool = False
    domain: tuple[float | None, float | None] = (None, None)


@dataclass(frozen=True)
class PlannedLooks:
    """What is done at every look at a lot; a further look takes as many samples again.

    Parameters
    ----------
    samples, readings_per_sample : int
    increments_per_sample : int
        A sample is a composite of so many increments.
    looks : int
        The first one and what the rules plan for lots on hold.

    Raises
    ------
    ProcedureError
        If a number is below 1, or all looks together are more than a budget can have.
    """

    samples: int
    readings_per_sample: int
    increments_per_sample: int = 1
    looks: int = 1

    def __post_init__(self) -> None:
        for name in ("samples", "readings_per_sample", "increments_per_sample", "looks"):
            if getattr(self, name) < 1:
                raise ProcedureError(f"{name} must be at least 1", where=(name,))
        if max(self.samples * self.looks, self.readings_per_sample) > LARGEST_COUNT:
            raise ProcedureError(f"more than {LARGEST_COUNT} samples of a lot", where=("samples",))

    def done(self, looks: int) -> Counts | ReadingPattern:
        """Return all that has been done when so many looks are over.

        Parameters
        ----------
        looks : int

        Returns
        -------
        Counts or ReadingPattern
            A session for each look; the readings of a sample share its presentation.
        """
        if looks == 1 and self.increments_per_sample == 1:
            return Counts((self.readings_per_sample,) * self.samples)
        samples = [f"{look}/{sample}" for look in range(looks) for sample in range(self.samples)]
        labels = tuple(label for label in samples for _ in range(self.readings_per_sample))
        parts = {
            label: tuple(f"{label}/{part}" for part in range(self.increments_per_sample)) for label in samples
        }
        return ReadingPattern(
            {
                "presentation": labels,
                "increment": tuple(parts[label] for label in labels),
                "sample": labels,
                "session": tuple(label.split("/")[0] for label in labels),
            }
        )

    def procedure(self) -> Procedure:
        """Return the procedure of a budget that has room for all looks."""
        samples, readings = self.samples, self.readings_per_sample
        return Procedure(Count(samples, samples, samples * self.looks), Count(readings, readings, readings))


@dataclass(frozen=True)
class PlannedMeasurement:
    """A measurement with all that it decides by, ready for set points.

    Parameters
    ----------
    limits : tuple of LookLimits
        One for each look, of all demands together.
    tolerance, legal_tolerance : tuple of float
        Of all demands together, and of those of the law; infinite where there is no limit.
    random_covariance : ndarray, shape (looks, looks), unit of the characteristic squared
        Of the errors of the looks that are drawn anew with every lot.
    common_standard_uncertainty : float, unit of the characteristic
        Of the error that all lots share.
    reading_offset : float, unit of the characteristic
        Reading less estimate: the bias that is corrected.
    residual_bias : float, unit of the characteristic
        Estimate less true value, of a bias that was left in the guard band.
    rules : tuple of ReleaseRule
        Of the first look, one for each demand.
    """

    limits: tuple[LookLimits, ...]
    tolerance: tuple[float, float]
    legal_tolerance: tuple[float, float]
    random_covariance: NDArray[np.float64]
    common_standard_uncertainty: float
    reading_offset: float
    residual_bias: float
    rules: tuple[ReleaseRule, ...]

    @property
    def standard_uncertainty(self) -> float:
        """Combined standard uncertainty of the first look; the largest one at a tolerance limit."""
        return max(rule.combined_standard_uncertainty for rule in self.rules)

    @property
    def centres(self) -> tuple[float, float]:
        """The estimates that a first look releases: where a set point may lie."""
        return self.limits[0].released


def planned_measurement(budget: Budget, looks: PlannedLooks, demands: Sequence[Demand]) -> PlannedMeasurement:
    """Return how lots will be measured and judged.

    Parameters
    ----------
    budget : Budget
        Without a model.
    looks : PlannedLooks
        Takes the place of the procedure of the budget.
    demands : sequence of Demand
        At least one.

    Returns
    -------
    PlannedMeasurement

    Raises
    ------
    ModelError
        For a characteristic computed from several quantities: it has no acceptance limit to run towards.
    LimitsError
        If a decision rule cannot be used with this measurement.
    EmptyAcceptanceError
        If nothing could be released that meets all demands.

    Notes
    -----
    The error of the mean after k looks has the variance V_k, and ``cov(e_j, e_k) = V_k`` for j < k: the later
    mean holds the earlier one, and its own readings weigh the same. Source: JCGM 100:2008, 5.1.2, eq. (10)
    (from memory), applied to readings that means share.
    """
    budget = replace(budget, procedure=looks.procedure())
    limits, rules = [], []
    for look in range(1, looks.looks + 1):
        own = tuple(
            ReleaseRule.compile(
                budget, looks.done(look), demand.tolerance, demand.decision_rule, domain=demand.domain
            )
            for demand in demands
        )
        limits.append(_limits_of(own, budget.validated_range))
        rules.append(own)
    lower, upper = limits[0].released
    if lower > upper:
        raise EmptyAcceptanceError(
            "no estimate can be accepted: what one specification accepts, another one does not",
            capability_index=None,
            remedy="Measure better, or agree on limits that leave room for each other.",
        )
    variances = [_variances(budget, looks.done(look), rules[0]) for look in range(1, looks.looks + 1)]
    later = np.maximum.outer(np.arange(looks.looks), np.arange(looks.looks))
    bias = budget.bias or 0.0
    corrected = budget.bias_treatment == "corrected"
    return PlannedMeasurement(
        limits=tuple(limits),
        tolerance=_joined([rule_ends(rule) for rule in rules[0]]),
        legal_tolerance=_joined(
            [rule_ends(rule) for rule, demand in zip(rules[0], demands, strict=True) if demand.legal]
        ),
        random_covariance=np.array([random for random, _ in variances])[later],
        common_standard_uncertainty=math.sqrt(variances[0][1]),
        reading_offset=bias if corrected else 0.0,
        residual_bias=0.0 if corrected else bias,
        rules=rules[0],
    )


def _limits_of(rules: Sequence[ReleaseRule], validated: tuple[float, float]) -> LookLimits:
    accepted = _joined([_ends(rule.lower_acceptance_limit, rule.upper_acceptance_limit) for rule in rules])
    return LookLimits(*accepted, *_joined([_rejection_ends(rule) for rule in rules]), *validated)


def _rejection_ends(rule: ReleaseRule) -> tuple[float, float]:
    """Return the limits beyond which a rule rejects: of tolerance, or those that guard rejection."""
    if rule.decision_rule.rejection == "guarded":
        return _ends(rule.lower_rejection_limit, rule.upper_rejection_limit)
    return rule_ends(rule)


def rule_ends(rule: ReleaseRule) -> tuple[float, float]:
    """Return the tolerance limits that a release rule judges by, infinite where there is none."""
    return _ends(rule.lower_tolerance_limit, rule.upper_tolerance_limit)


def _ends(lower: float | None, upper: float | None) -> tuple[float, float]:
    return -math.inf if lower is None else lower, math.inf if upper is None else upper


def _joined(intervals: Sequence[tuple[float, float]]) -> tuple[float, float]:
    """Return what lies in all of the intervals."""
    return (
        max((low for low, _ in intervals), default=-math.inf),
        min((high for _, high in intervals), default=math.inf),
    )


def _variances(
    budget: Budget, done: Counts | ReadingPattern, rules: Sequence[ReleaseRule]
) -> tuple[float, float]:
    """Return the variance that is drawn anew with every lot, and that of what all lots share.

    Where the uncertainty depends on the value it is taken where it is largest: at a tolerance limit.
    """
    estimates = None
    if any(component.relative_terms for component in budget.components):
        ends = [end for rule in rules for end in rule_ends(rule) if math.isfinite(end)]
        estimates = {budget.characteristic: max(ends, key=abs)}
    result = combined(budget, done, estimates=estimates)
    common = math.fsum(
        part.share_of_variance * result.variance
        for part in result.contributions
        if part.component.level in COMMON_LEVELS
    )
    return max(0.0, result.variance - common), max(0.0, common)


def scaled(budget: Budget, factor: float, *, component: str | None = None) -> Budget:
    """Return the budget with standard uncertainties multiplied, degrees of freedom as they are.

    Parameters
    ----------
    budget : Budget
        Without a model.
    factor : float
        Above 0.
    component : str or None
        The one to change; None: all of them.

    Returns
    -------
    Budget
    """
    square = factor * factor

    def changed(item: Component) -> Component:
        if component not in (None, item.code):
            return item
        return replace(
            item,
            terms=tuple(Term(square * term.coefficient, term.mean_square) for term in item.terms),
            relative_terms=tuple(
                Term(square * term.coefficient, term.mean_square) for term in item.relative_terms
            ),
        )

    return replace(budget, components=tuple(changed(item) for item in budget.components))
