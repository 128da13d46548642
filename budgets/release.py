"""A budget, a tolerance and a decision rule compiled into plain numbers that judge estimates fast.

Compiled once, at approval, and stored: a decision uses the stored numbers. One estimate is judged with the
exact distribution function; an array with finite degrees of freedom goes through a table whose error is
below 1e-10 (see `budgets.distribution_tables`).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields, replace
from functools import cached_property
from typing import Any, Unpack

import numpy as np
from numpy.typing import ArrayLike, NDArray

from budgets.acceptance import AcceptanceOptions, Ends
from budgets.budget import Budget
from budgets.compiled_limits import compiled_limits, truncation
from budgets.conformity import (
    StatedLimits,
    Tolerance,
    measurement_capability_index,
)
from budgets.decision_rules import DecisionRule
from budgets.distribution_tables import DistributionTable
from budgets.error_distributions import ErrorDistribution, StudentT, Tabulated
from budgets.errors import ModelError
from budgets.item_spread import ItemSpread
from budgets.judgements import OUTCOMES, Judgement, Judgements, Zones, fill_conformance
from budgets.known_productions import KnownProduction
from budgets.natural_bounds import probabilities, truncated_probabilities
from budgets.propagation import Counts, check_counts
from budgets.reading_patterns import ReadingPattern
from budgets.uncertainty_at_limits import UncertaintyAtLimits, uncertainty_at_limits

# Small enough for the working arrays to stay in the processor's cache.
_BLOCK = 8192


@dataclass(frozen=True)
class ReleaseRule:
    """Everything that a verdict on an estimate needs, as plain numbers.

    Parameters
    ----------
    lower_tolerance_limit, upper_tolerance_limit : float or None, unit of the characteristic
        The effective ones, that unrounded estimates are compared with.
    lower_inclusive, upper_inclusive : bool
        Whether an estimate exactly at the tolerance limit is within tolerance.
    lower_acceptance_limit, upper_acceptance_limit : float or None, unit of the characteristic
        An estimate exactly at an acceptance limit is accepted.
    guard_band_lower, guard_band_upper : float or None, unit of the characteristic
        Positive when acceptance lies inside tolerance.
    combined_standard_uncertainty : float, unit of the characteristic
    effective_degrees_of_freedom : float
    coverage_probability, coverage_factor : float
    expanded_uncertainty : float, unit of the characteristic
    bias_shift : float, unit of the characteristic
        The bias that was left uncorrected; 0 when it was corrected.
    decision_rule : DecisionRule
    measurement_capability_index : float or None
    largest_specific_risk : float
        Risk that a lot does not conform whose estimate lies exactly at an acceptance limit.
    constant_standard_uncertainty : float or None, unit of the characteristic
        None unless the uncertainty depends on the estimate; ``combined_standard_uncertainty`` is then the
        largest one at a tolerance limit.
    proportional_standard_uncertainty : float
        The part proportional to the estimate, as a fraction.
    stated_limits : StatedLimits or None
        What the specification states, where estimates are rounded before they are compared.
    lower_rejection_limit, upper_rejection_limit : float or None, unit of the characteristic
        Under guarded rejection: only what lies beyond is rejected; None: nothing on that side.
    distribution : Tabulated or None
        Monte Carlo quantiles, where they take the place of Student's t.
    items : ItemSpread or None
        Where the items of the lot are judged: tolerance and probabilities are theirs, the uncertainty and the
        acceptance limits are those of the mean.
    truncated_to : tuple of float or None, or None
        The natural domain, where probabilities are those within it.
    risk_per_look : float or None
        Of a rule with several rounds.
    production : KnownProduction or None
        Where the decision rule names a prior of the production (see `budgets.production_release`).
    """

    lower_tolerance_limit: float | None
    upper_tolerance_limit: float | None
    lower_inclusive: bool
    upper_inclusive: bool
    lower_acceptance_limit: float | None
    upper_acceptance_limit: float | None
    guard_band_lower: float | None
    guard_band_upper: float | None
    combined_standard_uncertainty: float
    effective_degrees_of_freedom: float
    coverage_probability: float
    coverage_factor: float
    expanded_uncertainty: float
    bias_shift: float
    decision_rule: DecisionRule
    measurement_capability_index: float | None
    largest_specific_risk: float
    constant_standard_uncertainty: float | None = None
    proportional_standard_uncertainty: float = 0.0
    stated_limits: StatedLimits | None = None
    lower_rejection_limit: float | None = None
    upper_rejection_limit: float | None = None
    distribution: Tabulated | None = None
    items: ItemSpread | None = None
    truncated_to: Ends | None = None
    risk_per_look: float | None = None
    production: KnownProduction | None = None

    @classmethod
    def compile(
        cls,
        budget: Budget,
        counts: Counts | ReadingPattern,
        tolerance: Tolerance,
        rule: DecisionRule,
        *,
        domain: Ends = (None, None),
        truncated: bool = False,
        distribution: Tabulated | None = None,
        risk_per_look: float | None = None,
        guard_band: float | None = None,
    ) -> ReleaseRule:
        """Compile the rule for what was done.

        Parameters
        ----------
        budget : Budget
        counts : Counts or ReadingPattern
            Must be within the procedure of the budget.
        tolerance : Tolerance
            In the unit of the budget.
        rule : DecisionRule
        domain : tuple of float or None
            Natural domain of the characteristic.
        truncated : bool
            Probabilities are those within the domain.
        distribution : Tabulated or None
            Takes the place of Student's t.
        risk_per_look, guard_band : float or None
            As in `budgets.guard_bands.guard_of`.

        Returns
        -------
        ReleaseRule

        Raises
        ------
        ProcedureError
            If the counts are outside of the procedure.
        ModelError
            If the budget has a measurement model: see `budgets.derived_release`.
        LimitsError
            If the decision rule cannot be used with this measurement; `EmptyAcceptanceError` when it
            would accept nothing.
        NotSupportedError
            For an uncertainty that depends on the estimate beside correlations or limits below zero.

        Notes
        -----
        Source: JCGM 106:2012, clause 8 (from memory).
        """
        if budget.model is not None:
            raise ModelError(
                "a characteristic computed from several quantities has no fixed acceptance limits; it is "
                "judged at its readings",
                where=("model",),
            )
        check_counts(counts, budget.procedure)
        shift = 0.0 if budget.bias is None or budget.bias_treatment == "corrected" else budget.bias
        return cls.of_uncertainty(
            uncertainty_at_limits(budget, counts, tolerance),
            tolerance,
            rule,
            budget.coverage_probability,
            distribution,
            bias=shift,
            domain=domain,
            validated_range=budget.validated_range,
            truncated=truncated,
            risk_per_look=risk_per_look,
            guard_band=guard_band,
        )

    @classmethod
    def of_uncertainty(
        cls,
        uncertain: UncertaintyAtLimits,
        tolerance: Tolerance,
        rule: DecisionRule,
        coverage_probability: float,
        tabulated: Tabulated | None = None,
        items: ItemSpread | None = None,
        **options: Unpack[AcceptanceOptions],
    ) -> ReleaseRule:
        """Return the rule for an uncertainty that is known already.

        Parameters
        ----------
        uncertain : UncertaintyAtLimits
        tolerance : Tolerance
        rule : DecisionRule
        coverage_probability : float
        tabulated : Tabulated or None
            Takes the place of Student's t.
        items : ItemSpread or None
            Items are judged, not the mean of the lot.
        **options
            See `budgets.acceptance.AcceptanceOptions`.

        Returns
        -------
        ReleaseRule

        Raises
        ------
        LimitsError, NotSupportedError
            As in `compile`.
        """
        u, nu, dependence = (
            uncertain.standard_uncertainty,
            uncertain.degrees_of_freedom,
            uncertain.dependence,
        )
        of_mean = tabulated or StudentT(nu)
        limits = compiled_limits(uncertain, tolerance, rule, items or of_mean, options)
        factor = _coverage_factor(coverage_probability, of_mean)
        return cls(
            lower_tolerance_limit=tolerance.lower,
            upper_tolerance_limit=tolerance.upper,
            lower_inclusive=tolerance.lower_inclusive,
            upper_inclusive=tolerance.upper_inclusive,
            lower_acceptance_limit=limits.acceptance.lower,
            upper_acceptance_limit=limits.acceptance.upper,
            guard_band_lower=limits.acceptance.guard_band_lower,
            guard_band_upper=limits.acceptance.guard_band_upper,
            combined_standard_uncertainty=u,
            effective_degrees_of_freedom=nu,
            coverage_probability=coverage_probability,
            coverage_factor=factor,
            expanded_uncertainty=factor * u,
            bias_shift=options.get("bias", 0.0),
            decision_rule=rule,
            measurement_capability_index=measurement_capability_index(tolerance, u),
            largest_specific_risk=limits.largest_specific_risk,
            constant_standard_uncertainty=None if dependence is None else dependence.constant,
            proportional_standard_uncertainty=0.0 if dependence is None else dependence.proportional,
            stated_limits=tolerance.stated,
            lower_rejection_limit=limits.rejection.lower,
            upper_rejection_limit=limits.rejection.upper,
            distribution=tabulated,
            items=items,
            truncated_to=truncation(options),
            risk_per_look=options.get("risk_per_look"),
        )

    @property
    def acceptance_limits(self) -> str:
        """How the acceptance limits are to be read: they are the same for every estimate."""
        return "fixed"

    def standard_uncertainty_at(self, estimate: float) -> float:
        """Return the standard uncertainty of an estimate."""
        constant = self.constant_standard_uncertainty
        if constant is None:
            return self.combined_standard_uncertainty
        return math.hypot(constant, self.proportional_standard_uncertainty * estimate)

    def at(self, estimate: float) -> ReleaseRule:
        """Return the rule with the uncertainty that holds at an estimate.

        Parameters
        ----------
        estimate : float, unit of the characteristic

        Returns
        -------
        ReleaseRule
            The rule itself where its uncertainty is the same for every estimate; the acceptance limits stay.
        """
        if self.constant_standard_uncertainty is None:
            return self
        here = self.standard_uncertainty_at(estimate)
        return replace(
            self, combined_standard_uncertainty=here, expanded_uncertainty=self.coverage_factor * here
        )

    def to_document(self) -> dict[str, Any]:
        """Return the rule as JSON-able members; null stands for infinite degrees of freedom."""
        document = asdict(self)
        if self.items is not None:
            document["items"] = self.items.to_document()
        document["production"] = None if self.production is None else self.production.to_document()
        if math.isinf(self.effective_degrees_of_freedom):
            document["effective_degrees_of_freedom"] = None
        return document

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> ReleaseRule:
        """Return the rule that `to_document` wrote, to the last bit."""
        # Members that earlier versions of this program did not write have their defaults.
        members = {item.name: document[item.name] for item in fields(cls) if item.name in document}
        members["decision_rule"] = DecisionRule(**document["decision_rule"])
        if members["effective_degrees_of_freedom"] is None:
            members["effective_degrees_of_freedom"] = math.inf
        if members.get("stated_limits") is not None:
            members["stated_limits"] = StatedLimits(**members["stated_limits"])
        if members.get("distribution") is not None:
            members["distribution"] = Tabulated.from_document(members["distribution"])
        if members.get("items") is not None:
            members["items"] = ItemSpread.from_document(members["items"])
        if members.get("production") is not None:
            members["production"] = KnownProduction.from_document(members["production"])
        if members.get("truncated_to") is not None:
            members["truncated_to"] = tuple(members["truncated_to"])
        return cls(**members)

    @cached_property
    def tolerance(self) -> Tolerance:
        """The effective tolerance, with what was stated."""
        return Tolerance(
            self.lower_tolerance_limit,
            self.upper_tolerance_limit,
            self.lower_inclusive,
            self.upper_inclusive,
            self.stated_limits,
        )

    @cached_property
    def error_distribution(self) -> ErrorDistribution:
        """The distribution of (true value - estimate)/u."""
        return self.items or self.distribution or StudentT(self.effective_degrees_of_freedom)

    @cached_property
    def _zones(self) -> Zones:
        guarded = self.decision_rule.rejection == "guarded"
        return Zones(
            self.tolerance,
            (self.lower_acceptance_limit, self.upper_acceptance_limit),
            (self.lower_rejection_limit, self.upper_rejection_limit) if guarded else None,
        )

    @cached_property
    def _table(self) -> DistributionTable | None:
        nu = self.effective_degrees_of_freedom
        plain = isinstance(self.error_distribution, StudentT)
        return DistributionTable(nu) if plain and not math.isinf(nu) else None

    def probabilities(
        self, estimate: float, standard_uncertainty: float, distribution: ErrorDistribution
    ) -> tuple[float, float, float]:
        """Return the probabilities that the true value lies below, within and above tolerance.

        Parameters
        ----------
        estimate, standard_uncertainty : float, unit of the characteristic
        distribution : ErrorDistribution

        Returns
        -------
        tuple of float
        """
        return probabilities(
            estimate,
            standard_uncertainty,
            distribution,
            self.tolerance,
            bias=self.bias_shift,
            truncated_to=self.truncated_to,
        )

    def judge(self, estimate: float) -> Judgement:
        """Judge one estimate with the exact distribution function.

        Parameters
        ----------
        estimate : float, unit of the characteristic
            Reading minus bias, or the reading where the bias is in the guard band.

        Returns
        -------
        Judgement

        Raises
        ------
        ModelError
            If the estimate is not a finite number, or would have no uncertainty.

        Notes
        -----
        Within acceptance: release. Outside tolerance, or under guarded rejection beyond a rejection limit:
        reject. Else: hold. See `budgets.judgements.Zones`.
        """
        if not math.isfinite(estimate):
            raise ModelError(f"the estimate must be a finite number, not {estimate}", where=("estimate",))
        u = self.standard_uncertainty_at(estimate)
        if u == 0:
            raise ModelError(
                "all uncertainty is proportional to the value: an estimate of 0 would be known exactly",
                where=("estimate",),
            )
        below, within, above = self.probabilities(estimate, u, self.error_distribution)
        return Judgement(
            outcome=OUTCOMES[self._zones.of(estimate)],
            conformance_probability=within,
            risk_below=below,
            risk_above=above,
            specific_consumers_risk=min(1.0, below + above),
            combined_standard_uncertainty=u,
        )

    def judge_many(self, estimates: ArrayLike) -> Judgements:
        """Judge an array of estimates at memory speed.

        Parameters
        ----------
        estimates : array_like of float, shape (n,), unit of the characteristic

        Returns
        -------
        Judgements
            Outcomes as `judge` gives them. Conformance probabilities exact for infinite degrees of freedom,
            else from a table with an error below 1e-10.

        Raises
        ------
        ModelError
            If an estimate is not a finite number.
        """
        values = np.ascontiguousarray(estimates, dtype=np.float64)
        outcomes = np.empty(values.shape, dtype=np.int8)
        probabilities = np.empty(values.shape, dtype=np.float64)
        flat, flat_outcomes, flat_probabilities = values.ravel(), outcomes.ravel(), probabilities.ravel()
        for start in range(0, flat.size, _BLOCK):
            block = slice(start, start + _BLOCK)
            self._fill(flat[block], flat_outcomes[block], flat_probabilities[block])
        return Judgements(outcomes, probabilities)

    def _fill(
        self, estimates: NDArray[np.float64], outcomes: NDArray[np.int8], probabilities: NDArray[np.float64]
    ) -> None:
        if not np.isfinite(estimates).all():
            raise ModelError("every estimate must be a finite number", where=("estimates",))
        self._zones.fill(estimates, outcomes)
        if self.truncated_to is not None:
            probabilities[...] = truncated_probabilities(
                estimates,
                self.combined_standard_uncertainty,
                self.error_distribution,
                self.tolerance,
                self.truncated_to,
            )[1]
            return
        u: float | NDArray[np.float64] = self.combined_standard_uncertainty
        if self.constant_standard_uncertainty is not None:
            u = np.hypot(
                self.constant_standard_uncertainty, self.proportional_standard_uncertainty * estimates
            )
            if not u.all():
                raise ModelError("an estimate of 0 would be known exactly", where=("estimates",))
        fill_conformance(
            estimates, u, self.error_distribution, self.tolerance, self.bias_shift, probabilities, self._table
        )


def _coverage_factor(coverage_probability: float, distribution: ErrorDistribution) -> float:
    """Return k; of an asymmetric distribution that of the longer side of the interval of equal tails."""
    tail = (1 - coverage_probability) / 2
    return max(distribution.upper_quantile(tail), -distribution.lower_quantile(tail))
