"""Release rules for the items of a lot: from a known spread between them, or from that of the lot at hand."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, fields
from typing import Any, ClassVar, Unpack

import numpy as np

from budgets.acceptance import AcceptanceOptions, Ends
from budgets.budget import Budget
from budgets.conformity import StatedLimits, Tolerance
from budgets.decision_rules import DecisionRule
from budgets.errors import EmptyAcceptanceError, LimitsError, NotSupportedError
from budgets.evidence.evaluation import Term, effective_degrees_of_freedom, merged, variance
from budgets.item_spread import ItemSpread, share_factor
from budgets.propagation import Counts, averaging_weights, check_counts, compiled
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from budgets.uncertainty_at_limits import UncertaintyAtLimits

Terms = tuple[Term, ...]

SPREADS = ("known", "from_lot")
# What is drawn anew with every sample, so that the spread of the samples of a lot shows it.
_WITHIN_A_SAMPLE = ("reading", "presentation", "increment")


@dataclass(frozen=True)
class ItemRequirement:
    """What the items of a lot must meet.

    Parameters
    ----------
    least_share : float
        Of the items that must lie within tolerance: from 0.5 to below 1.
    spread : {"known", "from_lot"}
        Where the spread between items is taken from: the components of the budget at the level ``sample``, or
        the samples of the lot at hand.

    Raises
    ------
    LimitsError
        If a member is none of that.
    """

    least_share: float
    spread: str = "known"

    def __post_init__(self) -> None:
        if not 0.5 <= self.least_share < 1:
            raise LimitsError("item_share must lie from 0.5 to below 1", where=("item_share",))
        if self.spread not in SPREADS:
            raise LimitsError(f"item_spread is {' or '.join(SPREADS)}", where=("item_spread",))


def item_rule(
    budget: Budget,
    counts: Counts | ReadingPattern,
    tolerance: Tolerance,
    rule: DecisionRule,
    items: ItemRequirement,
    *,
    domain: Ends = (None, None),
) -> ReleaseRule | LotSpreadRule:
    """Compile the rule for what was done.

    Parameters
    ----------
    budget : Budget
        Without a measurement model.
    counts : Counts or ReadingPattern
        Within the procedure of the budget; for a spread from the lot at least two samples read equally often.
    tolerance : Tolerance
        Of the items.
    rule : DecisionRule
        By specific risk: the risk that a smaller share of the items lies within tolerance.
    items : ItemRequirement
    domain : tuple of float or None
        Natural domain of the characteristic.

    Returns
    -------
    ReleaseRule or LotSpreadRule
        Its acceptance limits are those of the lot's mean.

    Raises
    ------
    LimitsError
        If the rule or the budget cannot be used; `EmptyAcceptanceError` when nothing would be accepted.
    NotSupportedError
        For what is not built beside items.
    ProcedureError
        If the counts are outside of the procedure.

    Notes
    -----
    Known spread: ``A_U = T_U - q sigma - z u(mean)``; else by the noncentral t distribution. Source:
    ISO 16269-6 (from memory).
    """
    _check(budget, rule)
    check_counts(counts, budget.procedure)
    within, between, others = _parts(budget, counts)
    factor = share_factor(items.least_share, 1 if None in (tolerance.lower, tolerance.upper) else 2)
    shift = 0.0 if budget.bias is None or budget.bias_treatment == "corrected" else budget.bias
    ends: dict[str, Ends] = {"domain": domain, "validated_range": budget.validated_range}
    if items.spread == "from_lot":
        made = LotSpreadRule(
            samples=_equal_samples(counts),
            measurement_standard_deviation=math.sqrt(variance(within) * _equal_samples(counts)),
            other_standard_uncertainty=math.sqrt(variance(others)),
            other_degrees_of_freedom=_freedom(others),
            factor=factor,
            least_share=items.least_share,
            tolerance=tolerance,
            decision_rule=rule,
            coverage_probability=budget.coverage_probability,
            bias_shift=shift,
            **ends,
        )
        made.with_spread(0.0)
        return made
    if not between:
        raise LimitsError(
            "the budget has no component at the level 'sample', which would be the spread of the items; "
            "add one, or take the spread from the lot",
            where=("item_spread",),
        )
    rest = merged([*within, *others])
    mean = averaging_weights(counts)["sample"]
    all_terms = merged([*rest, *(Term(mean * term.coefficient, term.mean_square) for term in between)])
    u = math.sqrt(variance(all_terms))
    return _compiled(
        u,
        effective_degrees_of_freedom(all_terms),
        tolerance,
        rule,
        budget.coverage_probability,
        ItemSpread(
            standard_uncertainty=u,
            standard_deviation=math.sqrt(variance(between)),
            degrees_of_freedom=effective_degrees_of_freedom(between),
            measurement_standard_deviation=0.0,
            averaging_weight=mean,
            other_standard_uncertainty=math.sqrt(variance(rest)),
            other_degrees_of_freedom=_freedom(rest),
            factor=factor,
            least_share=items.least_share,
        ),
        bias=shift,
        domain=domain,
        validated_range=budget.validated_range,
    )


def _compiled(
    u: float,
    degrees_of_freedom: float,
    tolerance: Tolerance,
    rule: DecisionRule,
    coverage_probability: float,
    spread: ItemSpread,
    **options: Unpack[AcceptanceOptions],
) -> ReleaseRule:
    uncertain = UncertaintyAtLimits(u, degrees_of_freedom, None)
    try:
        return ReleaseRule.of_uncertainty(
            uncertain, tolerance, rule, coverage_probability, items=spread, **options
        )
    except EmptyAcceptanceError as error:
        s = spread.item_standard_deviation
        remedy = f"{error.remedy} The spread of the items, {s:.4g}, would have to shrink alike."
        message = error.message.replace(error.remedy, remedy) if error.remedy else f"{error.message} {remedy}"
        raise EmptyAcceptanceError(
            message, capability_index=error.capability_index, remedy=remedy.lstrip(), where=error.where
        ) from None


@dataclass(frozen=True)
class LotSpreadRule:
    """A rule for items whose spread is seen in the samples of the lot at hand only.

    Parameters
    ----------
    samples : int
        At least 2.
    measurement_standard_deviation : float, unit of the characteristic
        Of what was read of one sample.
    other_standard_uncertainty : float, unit of the characteristic
        Of the mean, from all that the samples share.
    other_degrees_of_freedom, factor, least_share : float
    tolerance : Tolerance
        Of the items.
    decision_rule : DecisionRule
    coverage_probability : float
    bias_shift : float, unit of the characteristic
    domain, validated_range : tuple of float or None
    """

    acceptance_limits: ClassVar[str] = "at_this_reading"
    kind: ClassVar[str] = "spread_from_lot"

    samples: int
    measurement_standard_deviation: float
    other_standard_uncertainty: float
    other_degrees_of_freedom: float
    factor: float
    least_share: float
    tolerance: Tolerance
    decision_rule: DecisionRule
    coverage_probability: float
    bias_shift: float
    domain: Ends
    validated_range: Ends

    @property
    def known_spread(self) -> float:
        """A scale of what is known without the lot, unit of the characteristic: to choose spreads by."""
        return math.hypot(self.measurement_standard_deviation, self.other_standard_uncertainty)

    def at(self, sample_means: Sequence[float]) -> ReleaseRule:
        """Return the rule for the samples of a lot.

        Parameters
        ----------
        sample_means : sequence of float, shape (samples,), unit of the characteristic

        Returns
        -------
        ReleaseRule
            Of the mean of these.

        Raises
        ------
        LimitsError
            If there is another number of them, all are equal though nothing is known to vary, or nothing is
            accepted with such a spread.
        """
        if len(sample_means) != self.samples:
            raise LimitsError(f"the rule is for {self.samples} samples, not {len(sample_means)}")
        return self.with_spread(float(np.std(sample_means, ddof=1)))

    def with_spread(self, standard_deviation: float) -> ReleaseRule:
        """Return the rule for a spread between the samples.

        Parameters
        ----------
        standard_deviation : float, unit of the characteristic

        Returns
        -------
        ReleaseRule

        Raises
        ------
        LimitsError
            As `at`.
        """
        s = max(standard_deviation, self.measurement_standard_deviation)
        other, nu = self.other_standard_uncertainty, self.samples - 1
        of_mean = s**2 / self.samples
        u = math.hypot(math.sqrt(of_mean), other)
        if u == 0:
            raise LimitsError("all samples read the same, so that the spread of the items is not seen")
        freedom = u**4 / (of_mean**2 / nu + other**4 / self.other_degrees_of_freedom)
        return _compiled(
            u,
            freedom,
            self.tolerance,
            self.decision_rule,
            self.coverage_probability,
            ItemSpread(
                standard_uncertainty=u,
                standard_deviation=s,
                degrees_of_freedom=nu,
                measurement_standard_deviation=self.measurement_standard_deviation,
                averaging_weight=1 / self.samples,
                other_standard_uncertainty=other,
                other_degrees_of_freedom=self.other_degrees_of_freedom,
                factor=self.factor,
                least_share=self.least_share,
            ),
            bias=self.bias_shift,
            domain=self.domain,
            validated_range=self.validated_range,
        )

    def to_document(self) -> dict[str, Any]:
        """Return the rule as JSON-able members; null stands for infinite degrees of freedom."""
        freedom = self.other_degrees_of_freedom
        return {
            **asdict(self),
            "kind": self.kind,
            "acceptance_limits": self.acceptance_limits,
            "other_degrees_of_freedom": None if math.isinf(freedom) else freedom,
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> LotSpreadRule:
        """Return the rule that `to_document` wrote, to the last bit."""
        members = {item.name: document[item.name] for item in fields(cls)}
        freedom, stated = members["other_degrees_of_freedom"], members["tolerance"]["stated"]
        members |= {
            "other_degrees_of_freedom": math.inf if freedom is None else freedom,
            "tolerance": Tolerance(
                **{**members["tolerance"], "stated": None if stated is None else StatedLimits(**stated)}
            ),
            "decision_rule": DecisionRule(**members["decision_rule"]),
            "domain": tuple(members["domain"]),
            "validated_range": tuple(members["validated_range"]),
        }
        return cls(**members)


def _check(budget: Budget, rule: DecisionRule) -> None:
    if rule.kind != "guarded_by_specific_risk":
        raise LimitsError(
            "items are judged by a specific risk: state guarded_by_specific_risk with its largest_risk",
            where=("kind",),
        )
    for what, there in (
        ("a characteristic computed from several quantities", budget.model is not None),
        ("correlations", bool(budget.correlations)),
        ("parts proportional to the value", any(item.relative_terms for item in budget.components)),
        ("guarded rejection", rule.rejection == "guarded"),
        ("further rounds", rule.rounds > 1),
    ):
        if there:
            raise NotSupportedError(f"judging items beside {what}", where=("judged",))


def _parts(budget: Budget, counts: Counts | ReadingPattern) -> tuple[Terms, Terms, Terms]:
    """Return the variance of the mean from within samples and from what they share; between, that of one."""
    within: list[Term] = []
    between: list[Term] = []
    others: list[Term] = []
    for component, line in zip(budget.components, compiled(budget, counts).lines, strict=True):
        if component.level == "sample":
            between += line.terms
            continue
        part = within if component.level in _WITHIN_A_SAMPLE else others
        part += [Term(line.weight * term.coefficient, term.mean_square) for term in line.terms]
    return merged(within), merged(between), merged(others)


def _freedom(terms: Sequence[Term]) -> float:
    return effective_degrees_of_freedom(terms) if variance(terms) > 0 else math.inf


def _equal_samples(counts: Counts | ReadingPattern) -> int:
    readings = counts.readings_per_sample
    if len(readings) < 2:
        raise LimitsError(
            "the spread of the items is seen in two samples at least: plan them", where=("item_spread",)
        )
    if not isinstance(counts, Counts) or len(set(readings)) > 1:
        raise NotSupportedError(
            "the spread of the items from samples that were read unequally", where=("item_spread",)
        )
    return len(readings)
