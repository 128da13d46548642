"""The release rule of a characteristic that is computed from several quantities of a scan.

Such a characteristic has no single acceptance limit: two sets of readings with the same value can have
different uncertainties. It is judged at its readings, by the law of propagation there. Whether that law may
be used is settled at approval, over a grid of the validated box; a decision only evaluates it once.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any, ClassVar

from budgets.acceptance import AcceptanceOptions, Ends, acceptance_interval
from budgets.budget import Budget
from budgets.conformity import StatedLimits, Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT, Tabulated
from budgets.errors import ModelError
from budgets.linear_propagation import CompiledPropagation
from budgets.model_validation import ValidatedBox, validate_over_box
from budgets.propagation import Counts, check_counts, compiled
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from budgets.stored_propagation import propagation_document, propagation_from_document
from budgets.uncertainty_at_limits import UncertaintyAtLimits


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
    truncated : bool
        Probabilities are those within the domain.
    distribution : Tabulated or None
        Monte Carlo quantiles, where they take the place of Student's t at every reading.
    risk_per_look, guard_band : float or None
        As in `budgets.guard_bands.guard_of`.
    """

    acceptance_limits: ClassVar[str] = "at_this_reading"

    law: CompiledPropagation
    tolerance: Tolerance
    decision_rule: DecisionRule
    coverage_probability: float
    domain: Ends
    validated_range: Ends
    box: ValidatedBox
    truncated: bool = False
    distribution: Tabulated | None = None
    risk_per_look: float | None = None
    guard_band: float | None = None

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
        truncated, distribution, risk_per_look, guard_band
            As in `budgets.release.ReleaseRule.compile`.

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
        made = cls(
            law,
            tolerance,
            rule,
            budget.coverage_probability,
            domain,
            budget.validated_range,
            box,
            truncated,
            distribution,
            risk_per_look,
            guard_band,
        )
        # Where it is least uncertain the rule must be able to accept something.
        acceptance_interval(
            rule,
            tolerance,
            box.smallest_standard_uncertainty,
            distribution or StudentT(box.degrees_of_freedom_there),
            **made._options,
        )
        return made

    @property
    def _options(self) -> AcceptanceOptions:
        return {
            "domain": self.domain,
            "validated_range": self.validated_range,
            "truncated": self.truncated,
            "risk_per_look": self.risk_per_look,
            "guard_band": self.guard_band,
        }

    def outside(self, estimates: Mapping[str, float]) -> tuple[str, ...]:
        """Return the names of the quantities that lie outside of their validated ranges."""
        ranges = self.box.ranges
        return tuple(
            name
            for name, value in estimates.items()
            if name in ranges and not ranges[name][0] <= value <= ranges[name][1]
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
            Judges the value of the model at these readings.

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
        return ReleaseRule.of_uncertainty(
            UncertaintyAtLimits(found.standard_uncertainty, found.effective_degrees_of_freedom, None),
            self.tolerance,
            self.decision_rule,
            self.coverage_probability,
            self.distribution,
            **self._options,
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
            "truncated": self.truncated,
            "distribution": None if self.distribution is None else self.distribution.to_document(),
            "risk_per_look": self.risk_per_look,
            "guard_band": self.guard_band,
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> DerivedReleaseRule:
        """Return the rule that `to_document` wrote, to the last bit."""
        tabulated = document.get("distribution")
        # Members that earlier versions of this program did not write have their defaults.
        return cls(
            law=propagation_from_document(document["propagation"]),
            tolerance=_tolerance(document["tolerance"]),
            decision_rule=DecisionRule(**document["decision_rule"]),
            coverage_probability=document["coverage_probability"],
            domain=(document["domain"][0], document["domain"][1]),
            validated_range=(document["validated_range"][0], document["validated_range"][1]),
            box=ValidatedBox.from_document(document["box"]),
            truncated=document.get("truncated", False),
            distribution=None if tabulated is None else Tabulated.from_document(tabulated),
            risk_per_look=document.get("risk_per_look"),
            guard_band=document.get("guard_band"),
        )


def _tolerance(document: Mapping[str, Any]) -> Tolerance:
    stated = document.get("stated")
    return Tolerance(**{**document, "stated": None if stated is None else StatedLimits(**stated)})


def release_rule_kind(document: Mapping[str, Any]) -> str:
    """Return the kind of a stored rule: ``fixed``, ``at_this_reading`` or ``spread_from_lot``."""
    return str(document.get("kind") or document.get("acceptance_limits", "fixed"))
