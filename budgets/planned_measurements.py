"""How lots will be measured and judged: a budget, its looks, and all that the lots must meet."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from budgets.budget import Budget
from budgets.components import Component
from budgets.errors import EmptyAcceptanceError, ModelError
from budgets.evidence.evaluation import Term
from budgets.joined_looks import covariance_of_looks
from budgets.linear_propagation import CompiledPropagation
from budgets.look_limits import LookLimits
from budgets.lot_procedures import Demand, LotProcedure
from budgets.measurement_errors import COMMON_LEVELS
from budgets.planned_looks import risk_per_look_of
from budgets.propagation import compiled, estimates_for
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from budgets.uncertainty_at_limits import uncertainty_of_law_at_limits


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
    def random_standard_uncertainty(self) -> float:
        """Standard uncertainty of the first look from errors that lots do not share, unit as estimates."""
        return math.sqrt(float(self.random_covariance[0, 0]))

    @property
    def standard_uncertainty(self) -> float:
        """Combined standard uncertainty of the first look; the largest one at a tolerance limit."""
        return max(rule.combined_standard_uncertainty for rule in self.rules)

    @property
    def centres(self) -> tuple[float, float]:
        """The estimates that a first look releases: where a set point may lie."""
        return self.limits[0].released


def planned_measurement(
    budget: Budget, procedure: LotProcedure, demands: Sequence[Demand]
) -> PlannedMeasurement:
    """Return how lots will be measured and judged.

    Parameters
    ----------
    budget : Budget
        Without a model.
    procedure : LotProcedure
        Takes the place of the procedure of the budget where that leaves no room for it.
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
    Each look is judged with all readings so far, by the risk per look that its rule of so many rounds leaves.
    Where the uncertainty depends on the value it is taken at the tolerance limit that lies furthest out.
    """
    if budget.model is not None:
        raise ModelError(
            "a characteristic computed from several quantities has no fixed acceptance limits, so there is "
            "none to run towards",
            where=("model",),
        )
    budget = replace(budget, procedure=procedure.within(budget.procedure))
    patterns = [procedure.done(look) for look in range(1, procedure.looks + 1)]
    laws = [compiled(budget, pattern) for pattern in patterns]
    risks = [
        risk_per_look_of(
            budget, demand.tolerance, demand.decision_rule, any_distribution=demand.distribution is not None
        )
        for demand in demands
    ]
    rules = [
        [_rule(budget, law, demand, risk) for demand, risk in zip(demands, risks, strict=True)]
        for law in laws
    ]
    limits = [
        _limits_of(own, budget.validated_range, look, look == procedure.looks)
        for look, own in enumerate(rules, start=1)
    ]
    lower, upper = limits[0].released
    if lower > upper:
        raise EmptyAcceptanceError(
            "no estimate can be accepted: what one specification accepts, another one does not",
            capability_index=None,
            remedy="Measure better, or agree on limits that leave room for each other.",
        )
    covariance, common = _covariance(budget, laws[0], patterns, rules[0])
    bias = budget.bias or 0.0
    corrected = budget.bias_treatment == "corrected"
    return PlannedMeasurement(
        limits=tuple(limits),
        tolerance=_joined([rule_ends(rule) for rule in rules[0]]),
        legal_tolerance=_joined(
            [rule_ends(rule) for rule, demand in zip(rules[0], demands, strict=True) if demand.legal]
        ),
        random_covariance=covariance,
        common_standard_uncertainty=math.sqrt(common),
        reading_offset=bias if corrected else 0.0,
        residual_bias=0.0 if corrected else bias,
        rules=tuple(rules[0]),
    )


def _limits_of(
    rules: Sequence[ReleaseRule], validated: tuple[float, float], look: int, last: bool
) -> LookLimits:
    accepted = [_ends(rule.lower_acceptance_limit, rule.upper_acceptance_limit) for rule in rules]
    # What a rule without a further round holds is not read again, whatever the other rules plan.
    used_up = (
        []
        if last
        else [ends for ends, rule in zip(accepted, rules, strict=True) if rule.decision_rule.rounds <= look]
    )
    return LookLimits(
        *_joined(accepted),
        *_joined([_rejection_ends(rule) for rule in rules]),
        *validated,
        *_joined(used_up),
    )


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


def _rule(
    budget: Budget, law: CompiledPropagation, demand: Demand, risk_per_look: float | None
) -> ReleaseRule:
    """Return the rule that approval compiles: from the law, which is the same for all demands."""
    return ReleaseRule.of_uncertainty(
        uncertainty_of_law_at_limits(law, demand.tolerance),
        demand.tolerance,
        demand.decision_rule,
        budget.coverage_probability,
        demand.distribution,
        bias=0.0 if budget.bias is None or budget.bias_treatment == "corrected" else budget.bias,
        domain=demand.domain,
        validated_range=budget.validated_range,
        truncated=demand.truncated,
        risk_per_look=risk_per_look,
    )


def _covariance(
    budget: Budget, law: CompiledPropagation, patterns: Sequence[ReadingPattern], rules: Sequence[ReleaseRule]
) -> tuple[NDArray[np.float64], float]:
    """Return the covariance of what is drawn anew with every lot, and the variance of what all lots share."""
    estimates = None
    if any(component.relative_terms for component in budget.components):
        ends = [end for rule in rules for end in rule_ends(rule) if math.isfinite(end)]
        estimates = {budget.characteristic: max(ends, key=abs)}
    full = law.model.estimates(estimates_for(budget, estimates))
    whole, _, parts = law.combination(law.model.linearised(full)[1], full)
    levels = (component.level for component in budget.components)
    shared = math.fsum(part for part, level in zip(parts, levels, strict=True) if level in COMMON_LEVELS)
    common = max(0.0, shared)
    if len(patterns) == 1:
        return np.array([[max(0.0, whole - common)]]), common
    return covariance_of_looks(budget, patterns, estimates) - common, common


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
