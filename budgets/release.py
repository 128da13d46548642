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
from typing import Any, TypedDict

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr

from budgets.acceptance import acceptance_interval
from budgets.budget import Budget
from budgets.conformity import (
    Tolerance,
    conformance_probability,
    measurement_capability_index,
    shifted,
    tails,
)
from budgets.decision_rules import DecisionRule
from budgets.distribution_tables import DistributionTable
from budgets.errors import ModelError
from budgets.level_dependence import level_dependent_acceptance
from budgets.propagation import Counts, check_counts, coverage_factor
from budgets.reading_patterns import ReadingPattern
from budgets.uncertainty_at_limits import uncertainty_at_limits

RELEASE, HOLD, REJECT = 0, 1, 2
OUTCOMES: tuple[str, ...] = ("release", "hold", "reject")

# Small enough for the working arrays to stay in the processor's cache.
_BLOCK = 8192


@dataclass(frozen=True)
class Judgement:
    """The verdict on one estimate, with the exact probabilities that are recorded."""

    outcome: str
    conformance_probability: float
    risk_below: float
    risk_above: float
    specific_consumers_risk: float
    combined_standard_uncertainty: float | None = None


@dataclass(frozen=True)
class Judgements:
    """Verdicts on many estimates.

    Parameters
    ----------
    outcomes : ndarray of int8, shape (n,)
        0 release, 1 hold, 2 reject.
    conformance_probability : ndarray of float64, shape (n,)
    """

    outcomes: NDArray[np.int8]
    conformance_probability: NDArray[np.float64]


class _Options(TypedDict):
    bias: float
    domain: tuple[float | None, float | None]
    validated_range: tuple[float | None, float | None]


@dataclass(frozen=True)
class ReleaseRule:
    """Everything that a verdict on an estimate needs, as plain numbers.

    Parameters
    ----------
    lower_tolerance_limit, upper_tolerance_limit : float or None, unit of the characteristic
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

    @classmethod
    def compile(
        cls,
        budget: Budget,
        counts: Counts | ReadingPattern,
        tolerance: Tolerance,
        rule: DecisionRule,
        *,
        domain: tuple[float | None, float | None] = (None, None),
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
        uncertain = uncertainty_at_limits(budget, counts, tolerance)
        u, nu = uncertain.standard_uncertainty, uncertain.degrees_of_freedom
        dependence = uncertain.dependence
        options: _Options = {"bias": shift, "domain": domain, "validated_range": budget.validated_range}
        accepted = (
            acceptance_interval(rule, tolerance, u, nu, **options)
            if dependence is None
            else level_dependent_acceptance(rule, tolerance, dependence, nu, **options)
        )
        factor = coverage_factor(budget.coverage_probability, nu)
        at_limits = [
            float(math.fsum(tails(limit, uncertain.at(limit), nu, tolerance, bias=shift)))
            for limit in (accepted.lower, accepted.upper)
            if limit is not None
        ]
        return cls(
            lower_tolerance_limit=tolerance.lower,
            upper_tolerance_limit=tolerance.upper,
            lower_inclusive=tolerance.lower_inclusive,
            upper_inclusive=tolerance.upper_inclusive,
            lower_acceptance_limit=accepted.lower,
            upper_acceptance_limit=accepted.upper,
            guard_band_lower=accepted.guard_band_lower,
            guard_band_upper=accepted.guard_band_upper,
            combined_standard_uncertainty=u,
            effective_degrees_of_freedom=nu,
            coverage_probability=budget.coverage_probability,
            coverage_factor=factor,
            expanded_uncertainty=factor * u,
            bias_shift=shift,
            decision_rule=rule,
            measurement_capability_index=measurement_capability_index(tolerance, u),
            largest_specific_risk=max(at_limits),
            constant_standard_uncertainty=None if dependence is None else dependence.constant,
            proportional_standard_uncertainty=0.0 if dependence is None else dependence.proportional,
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
        if math.isinf(self.effective_degrees_of_freedom):
            document["effective_degrees_of_freedom"] = None
        return document

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> ReleaseRule:
        """Return the rule that `to_document` wrote, to the last bit."""
        # Members that the first version of this program did not write have their defaults.
        members = {item.name: document[item.name] for item in fields(cls) if item.name in document}
        members["decision_rule"] = DecisionRule(**document["decision_rule"])
        if members["effective_degrees_of_freedom"] is None:
            members["effective_degrees_of_freedom"] = math.inf
        return cls(**members)

    @cached_property
    def _tolerance(self) -> Tolerance:
        return Tolerance(
            self.lower_tolerance_limit, self.upper_tolerance_limit, self.lower_inclusive, self.upper_inclusive
        )

    @cached_property
    def _table(self) -> DistributionTable:
        return DistributionTable(self.effective_degrees_of_freedom)

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
        Outside tolerance: reject. Within acceptance: release. Between: hold. An estimate exactly at a
        tolerance limit is within it when that limit is inclusive; one exactly at an acceptance limit is
        accepted. Source: JCGM 106:2012, 7.2 to 7.4 and 8.3 (from memory).
        """
        if not math.isfinite(estimate):
            raise ModelError(f"the estimate must be a finite number, not {estimate}", where=("estimate",))
        tolerance = self._tolerance
        u, nu = self.standard_uncertainty_at(estimate), self.effective_degrees_of_freedom
        if u == 0:
            raise ModelError(
                "all uncertainty is proportional to the value: an estimate of 0 would be known exactly",
                where=("estimate",),
            )
        below, above = tails(estimate, u, nu, tolerance, bias=self.bias_shift)
        probability = conformance_probability(estimate, u, nu, tolerance, bias=self.bias_shift)
        return Judgement(
            outcome=OUTCOMES[self._outcome(estimate)],
            conformance_probability=float(probability),
            risk_below=float(below),
            risk_above=float(above),
            specific_consumers_risk=min(1.0, float(below + above)),
            combined_standard_uncertainty=u,
        )

    def _outcome(self, estimate: float) -> int:
        if not self._tolerance.holds(estimate):
            return REJECT
        lower, upper = self.lower_acceptance_limit, self.upper_acceptance_limit
        if (upper is None or estimate <= upper) and (lower is None or estimate >= lower):
            return RELEASE
        return HOLD

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
        self._fill_outcomes(estimates, outcomes)
        u: float | NDArray[np.float64] = self.combined_standard_uncertainty
        if self.constant_standard_uncertainty is not None:
            u = np.hypot(
                self.constant_standard_uncertainty, self.proportional_standard_uncertainty * estimates
            )
            if not u.all():
                raise ModelError("an estimate of 0 would be known exactly", where=("estimates",))
        lower, upper = shifted(self._tolerance, self.bias_shift)
        if lower is None or upper is None:
            if upper is not None:
                np.subtract(upper, estimates, out=probabilities)
            else:
                np.subtract(estimates, lower or 0.0, out=probabilities)
            probabilities *= 1 / u
            self._distribute(probabilities)
            return
        # As in conformity.conformance_probability, from the side on which the estimate lies.
        np.subtract(estimates, (lower + upper) / 2, out=probabilities)
        np.abs(probabilities, out=probabilities)
        probabilities *= -1 / u
        half_width = (upper - lower) / (2 * u)
        far = probabilities - half_width
        probabilities += half_width
        self._distribute(probabilities)
        self._distribute(far)
        probabilities -= far
        if upper < lower:
            np.maximum(probabilities, 0.0, out=probabilities)

    def _distribute(self, z: NDArray[np.float64]) -> None:
        """Replace z by the distribution function at z."""
        if math.isinf(self.effective_degrees_of_freedom):
            ndtr(z, out=z)
        else:
            self._table.fill(z)

    def _fill_outcomes(self, estimates: NDArray[np.float64], outcomes: NDArray[np.int8]) -> None:
        outside = np.zeros(estimates.shape, dtype=bool)
        held = np.zeros(estimates.shape, dtype=bool)
        if self.upper_tolerance_limit is not None and self.upper_acceptance_limit is not None:
            beyond = np.greater if self.upper_inclusive else np.greater_equal
            outside |= beyond(estimates, self.upper_tolerance_limit)
            held |= estimates > self.upper_acceptance_limit
        if self.lower_tolerance_limit is not None and self.lower_acceptance_limit is not None:
            short = np.less if self.lower_inclusive else np.less_equal
            outside |= short(estimates, self.lower_tolerance_limit)
            held |= estimates < self.lower_acceptance_limit
        # hold counts 1; outside is always 2, whether the acceptance limits were met or not.
        np.add(held, outside, out=outcomes, dtype=np.int8, casting="unsafe")
        np.maximum(outcomes, outside.view(np.int8) * REJECT, out=outcomes)
