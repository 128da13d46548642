"""The release rule of a characteristic that is computed from several quantities of a scan.

Such a characteristic has no single acceptance limit: two sets of readings with the same value can have
different uncertainties. It is judged at its readings, by the law of propagation there. Whether that law may
be used is settled at approval, over a grid of the validated box; a decision only evaluates it once.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any, ClassVar

from budgets.acceptance import AcceptanceInterval, acceptance_interval
from budgets.budget import Budget
from budgets.conformity import Tolerance, conformance_probability, measurement_capability_index, tails
from budgets.decision_rules import DecisionRule
from budgets.errors import LimitsError, ModelError
from budgets.linear_propagation import CompiledPropagation
from budgets.model_validation import ValidatedBox, validate_over_box
from budgets.propagation import Counts, check_counts, compiled, coverage_factor
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from budgets.stored_propagation import propagation_document, propagation_from_document


@dataclass(frozen=True)
class DerivedJudgement:
    """The verdict on one set of readings.

    Parameters
    ----------
    outcome : {"release", "hold", "reject"}
    estimate : float, unit of the characteristic
    conformance_probability, risk_below, risk_above, specific_consumers_risk : float
    combined_standard_uncertainty, effective_degrees_of_freedom, coverage_factor, expanded_uncertainty : float
        At these readings.
    lower_acceptance_limit, upper_acceptance_limit : float or None, unit of the characteristic
        For the uncertainty at these readings; None where there is none, or nothing could be accepted.
    detail : str
        Why the rule cannot be used at these readings; empty where it can.
    """

    outcome: str
    estimate: float
    conformance_probability: float
    risk_below: float
    risk_above: float
    specific_consumers_risk: float
    combined_standard_uncertainty: float
    effective_degrees_of_freedom: float
    coverage_factor: float
    expanded_uncertainty: float
    lower_acceptance_limit: float | None
    upper_acceptance_limit: float | None
    detail: str = ""


@dataclass(frozen=True)
class DerivedReleaseRule:
    """Everything that a verdict on the readings of a derived characteristic needs, as plain numbers.

    Parameters
    ----------
    law : CompiledPropagation
    tolerance : Tolerance
    decision_rule : DecisionRule
    coverage_probability : float
    domain, validated_range : tuple of float or None, unit of the characteristic
    box : ValidatedBox
        Where the law of propagation was validated, and what was found there.
    """

    acceptance_limits: ClassVar[str] = "at_this_reading"

    law: CompiledPropagation
    tolerance: Tolerance
    decision_rule: DecisionRule
    coverage_probability: float
    domain: tuple[float | None, float | None]
    validated_range: tuple[float | None, float | None]
    box: ValidatedBox

    @classmethod
    def compile(
        cls,
        budget: Budget,
        counts: Counts | ReadingPattern,
        tolerance: Tolerance,
        rule: DecisionRule,
        *,
        domain: tuple[float | None, float | None] = (None, None),
    ) -> DerivedReleaseRule:
        """Compile the rule and validate the law of propagation over the validated box.

        Parameters
        ----------
        budget : Budget
            With a measurement model and a ``validated_box`` for every quantity that is read.
        counts : Counts or ReadingPattern
            Within the procedure of the budget.
        tolerance : Tolerance
        rule : DecisionRule
        domain : tuple of float or None
            Natural domain of the characteristic.

        Returns
        -------
        DerivedReleaseRule

        Raises
        ------
        ModelError
            If there is no model, a range is missing, the model fails in the box, or it curves so much there
            that the law of propagation may not be used.
        ProcedureError
            If the counts are outside of the procedure.
        LimitsError
            If the decision rule can be used nowhere in the box; `EmptyAcceptanceError` when it would accept
            nothing anywhere.
        """
        if budget.model is None:
            raise ModelError("a budget without a model has fixed acceptance limits", where=("model",))
        check_counts(counts, budget.procedure)
        law = compiled(budget, counts)
        box = validate_over_box(law, budget.validated_box)
        made = cls(law, tolerance, rule, budget.coverage_probability, domain, budget.validated_range, box)
        # Where it is least uncertain the rule must be able to accept something.
        acceptance_interval(
            rule,
            tolerance,
            box.smallest_standard_uncertainty,
            box.degrees_of_freedom_there,
            domain=domain,
            validated_range=budget.validated_range,
        )
        return made

    def outside(self, estimates: Mapping[str, float]) -> tuple[str, ...]:
        """Return the names of the quantities that lie outside of their validated ranges."""
        ranges = self.box.ranges
        return tuple(
            name
            for name, value in estimates.items()
            if name in ranges and not ranges[name][0] <= value <= ranges[name][1]
        )

    def judge(self, estimates: Mapping[str, float]) -> DerivedJudgement:
        """Judge one set of readings.

        Parameters
        ----------
        estimates : mapping of str to float
            Means over the readings, of the quantities that are read.

        Returns
        -------
        DerivedJudgement

        Raises
        ------
        ModelError
            If an estimate is missing or not finite, or the model has no value there.

        Notes
        -----
        Outcomes as in `budgets.release.ReleaseRule.judge`, with the uncertainty at these readings; a rule
        that cannot be used there, or accepts nothing there, gives hold. Source: JCGM 106:2012, 7.2 to 7.4
        and 8.3 (from memory).
        """
        found = self.law.at(estimates)
        u, nu, y = found.standard_uncertainty, found.effective_degrees_of_freedom, found.estimate
        below, above = tails(y, u, nu, self.tolerance)
        lower = upper = None
        detail = ""
        try:
            accepted = self._accepted(u, nu)
        except LimitsError as error:
            detail, inside = error.message, False
        else:
            lower, upper = accepted.lower, accepted.upper
            inside = (lower is None or y >= lower) and (upper is None or y <= upper)
        factor = coverage_factor(self.coverage_probability, nu)
        return DerivedJudgement(
            outcome=("release" if inside else "hold") if self.tolerance.holds(y) else "reject",
            estimate=y,
            conformance_probability=float(conformance_probability(y, u, nu, self.tolerance)),
            risk_below=float(below),
            risk_above=float(above),
            specific_consumers_risk=min(1.0, float(below + above)),
            combined_standard_uncertainty=u,
            effective_degrees_of_freedom=nu,
            coverage_factor=factor,
            expanded_uncertainty=factor * u,
            lower_acceptance_limit=lower,
            upper_acceptance_limit=upper,
            detail=detail,
        )

    def at(self, estimates: Mapping[str, float]) -> ReleaseRule:
        """Return the rule with fixed limits that holds at one set of readings, as plain numbers.

        Parameters
        ----------
        estimates : mapping of str to float
            Means over the readings, of the quantities that are read.

        Returns
        -------
        ReleaseRule
            Judges the value of the model at these readings as `judge` does.

        Raises
        ------
        ModelError
            If an estimate is missing or not finite, or the model has no value there.
        LimitsError
            If the decision rule cannot be used with the uncertainty at these readings, or accepts nothing.

        Notes
        -----
        Source: JCGM 106:2012, 7.2 to 7.4 and 8.3 (from memory).
        """
        found = self.law.at(estimates)
        u, nu, limits = found.standard_uncertainty, found.effective_degrees_of_freedom, self.tolerance
        accepted = self._accepted(u, nu)
        factor = coverage_factor(self.coverage_probability, nu)
        return ReleaseRule(
            lower_tolerance_limit=limits.lower,
            upper_tolerance_limit=limits.upper,
            lower_inclusive=limits.lower_inclusive,
            upper_inclusive=limits.upper_inclusive,
            lower_acceptance_limit=accepted.lower,
            upper_acceptance_limit=accepted.upper,
            guard_band_lower=accepted.guard_band_lower,
            guard_band_upper=accepted.guard_band_upper,
            combined_standard_uncertainty=u,
            effective_degrees_of_freedom=nu,
            coverage_probability=self.coverage_probability,
            coverage_factor=factor,
            expanded_uncertainty=factor * u,
            bias_shift=0.0,
            decision_rule=self.decision_rule,
            measurement_capability_index=measurement_capability_index(limits, u),
            largest_specific_risk=max(
                math.fsum(tails(limit, u, nu, limits))
                for limit in (accepted.lower, accepted.upper)
                if limit is not None
            ),
        )

    def _accepted(self, standard_uncertainty: float, degrees_of_freedom: float) -> AcceptanceInterval:
        return acceptance_interval(
            self.decision_rule,
            self.tolerance,
            standard_uncertainty,
            degrees_of_freedom,
            domain=self.domain,
            validated_range=self.validated_range,
        )

    def to_document(self) -> dict[str, Any]:
        """Return the rule as JSON-able members."""
        return {
            "acceptance_limits": self.acceptance_limits,
            "propagation": propagation_document(self.law),
            "tolerance": asdict(self.tolerance),
            "decision_rule": asdict(self.decision_rule),
            "coverage_probability": self.coverage_probability,
            "domain": list(self.domain),
            "validated_range": list(self.validated_range),
            "box": self.box.to_document(),
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> DerivedReleaseRule:
        """Return the rule that `to_document` wrote, to the last bit."""
        return cls(
            law=propagation_from_document(document["propagation"]),
            tolerance=Tolerance(**document["tolerance"]),
            decision_rule=DecisionRule(**document["decision_rule"]),
            coverage_probability=document["coverage_probability"],
            domain=(document["domain"][0], document["domain"][1]),
            validated_range=(document["validated_range"][0], document["validated_range"][1]),
            box=ValidatedBox.from_document(document["box"]),
        )


def release_rule_kind(document: Mapping[str, Any]) -> str:
    """Return how the acceptance limits of a stored rule are to be read: ``fixed`` or ``at_this_reading``."""
    return str(document.get("acceptance_limits", "fixed"))
