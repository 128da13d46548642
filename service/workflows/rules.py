"""Budget, specification and decision rule compiled into release rules, one for each number of readings."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass
from itertools import islice
from typing import Any, Final

from budgets.budget import Budget, Procedure
from budgets.budget_validation import ErrorTables
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.derived_release import DerivedReleaseRule, release_rule_kind
from budgets.error_distributions import Tabulated
from budgets.errors import LimitsError, ModelError, NotSupportedError
from budgets.item_rules import ItemRequirement, LotSpreadRule, item_rule
from budgets.planned_looks import risk_per_look_of
from budgets.production_priors import ProductionPrior
from budgets.production_release import release_rule_over_production
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from budgets.rounded_comparison import rounded_tolerance
from budgets.units import convert
from service.documents import Characteristic, Requirement, RuleOfDecision, ToleranceLimit
from service.store.rows import StoredRule
from service.workflows.evidence import FaultCollector

AnyRule = ReleaseRule | DerivedReleaseRule | LotSpreadRule


@dataclass(frozen=True)
class RuleKey:
    """Which specification, budget and numbers of readings a compiled rule belongs to."""

    specification: str
    specification_version: int
    characteristic: str
    budget: str
    budget_version: int
    counts: str

    @classmethod
    def of(cls, stored: StoredRule) -> RuleKey:
        """Give the key of a stored rule."""
        return cls(
            stored.specification,
            stored.specification_version,
            stored.characteristic,
            stored.budget,
            stored.budget_version,
            stored.counts,
        )

    def stored(self, numbers: dict[str, Any]) -> StoredRule:
        """Put the key and the compiled numbers together for the store."""
        return StoredRule(**self.to_document(), numbers=numbers)

    def to_document(self) -> dict[str, Any]:
        """Write the key down for the record."""
        return asdict(self)


def counts_text(counts: Counts) -> str:
    """Write the readings per sample, most first: the order of samples changes no uncertainty."""
    return ",".join(str(number) for number in sorted(counts.readings_per_sample, reverse=True))


def pattern_text(pattern: ReadingPattern) -> str:
    """Write all of a pattern that its rule depends on: the numbers of readings and the averaging weights."""
    numbers = counts_text(Counts(pattern.readings_per_sample))
    return f"{numbers} {sorted(pattern.averaging_weights().items())}"


def counts_from_text(text: str) -> Counts:
    """Read what counts_text wrote."""
    return Counts(tuple(int(part) for part in text.split(",")))


# Compiled and stored at approval; what a wide procedure has beyond is compiled when it occurs.
MOST_STORED: Final = 100


def balanced_counts(procedure: Procedure) -> Iterator[Counts]:
    """Give every balanced way of doing the procedure, the fewest samples first."""
    for samples in range(procedure.samples.least, procedure.samples.most + 1):
        readings = procedure.readings_per_sample
        for readings_per_sample in range(readings.least, readings.most + 1):
            yield Counts((readings_per_sample,) * samples)


def planned_counts(procedure: Procedure) -> Counts:
    """Give the numbers that the procedure plans."""
    return Counts((procedure.readings_per_sample.plan,) * procedure.samples.plan)


def decision_rule(stated: RuleOfDecision) -> DecisionRule:
    """Turn the decision rule of a document into that of the computation. Raises LimitsError."""
    return DecisionRule(
        kind=stated.kind,
        largest_standard_uncertainty=stated.largest_standard_uncertainty,
        least_capability_index=stated.least_capability_index,
        multiple=stated.multiple,
        coverage_probability=stated.coverage_probability,
        sides=stated.sides,
        largest_risk=stated.largest_risk,
        specific_risk_cap=stated.specific_risk_cap,
        rejection=stated.rejection,
        rounds=stated.rounds,
        replicate_level=stated.replicate_level,
        largest_lot_risk=stated.largest_lot_risk,
    )


def tolerance(requirement: Requirement, characteristic: Characteristic) -> Tolerance:
    """Express the tolerance limits in the unit of the characteristic. Raises UnitsError or LimitsError."""

    def value(limit: ToleranceLimit | None) -> float | None:
        return None if limit is None else convert(limit.value, limit.unit, characteristic.unit)

    lower, upper = requirement.lower_tolerance_limit, requirement.upper_tolerance_limit
    inclusive = lower is None or lower.inclusive, upper is None or upper.inclusive
    if requirement.comparison == "absolute":
        return Tolerance(value(lower), value(upper), *inclusive)
    for name, limit in (("lower_tolerance_limit", lower), ("upper_tolerance_limit", upper)):
        if limit is not None and limit.unit != characteristic.unit:
            raise LimitsError(
                f"estimates are rounded in {characteristic.unit}: state the limit in that, not {limit.unit}",
                where=(name, "unit"),
            )
    return rounded_tolerance(
        value(lower),
        value(upper),
        decimals=requirement.decimals or 0,
        lower_inclusive=inclusive[0],
        upper_inclusive=inclusive[1],
    )


def compile_rule(
    budget: Budget,
    done: Counts | ReadingPattern,
    requirement: Requirement,
    characteristic: Characteristic,
    *,
    distribution: Tabulated | None = None,
    risk_per_look: float | None = None,
    prior: ProductionPrior | None = None,
) -> AnyRule:
    """Compile one release rule; the options are those of the rule.

    Raises the errors of budgets, an empty acceptance interval among them.
    """
    domain = characteristic.natural_domain
    if requirement.judged == "item":
        if requirement.within_domain:
            raise NotSupportedError("judging items within the natural domain", where=("within_domain",))
        if prior is not None:
            where = ("decision_rule", "prior")
            raise NotSupportedError("a production prior where items are judged", where=where)
        if distribution is not None:
            # The law of propagation was found wrong for this budget: items have no other one.
            raise NotSupportedError("Monte Carlo quantiles where items are judged", where=("judged",))
        return item_rule(
            budget,
            done,
            tolerance(requirement, characteristic),
            decision_rule(requirement.decision_rule),
            ItemRequirement(requirement.item_share or 0.0, requirement.item_spread or ""),
            domain=(domain.lower, domain.upper),
        )
    if prior is not None:
        return release_rule_over_production(
            budget,
            done,
            tolerance(requirement, characteristic),
            decision_rule(requirement.decision_rule),
            prior,
            domain=(domain.lower, domain.upper),
            truncated=requirement.within_domain,
            distribution=distribution,
            risk_per_look=risk_per_look,
        )
    kind = ReleaseRule if budget.model is None else DerivedReleaseRule
    return kind.compile(
        budget,
        done,
        tolerance(requirement, characteristic),
        decision_rule(requirement.decision_rule),
        domain=(domain.lower, domain.upper),
        truncated=requirement.within_domain,
        distribution=distribution,
        risk_per_look=risk_per_look,
    )


def risk_of_looks(
    budget: Budget,
    requirement: Requirement,
    characteristic: Characteristic,
    *,
    any_distribution: bool = False,
) -> float | None:
    """Find the risk that each look of a rule of several rounds may take; None for one round.

    ``any_distribution``: where errors are not those of Student's t.
    """
    limits, rule = tolerance(requirement, characteristic), decision_rule(requirement.decision_rule)
    return risk_per_look_of(budget, limits, rule, any_distribution=any_distribution)


def stored_rule(numbers: Mapping[str, Any]) -> AnyRule:
    """Rebuild a rule from its stored numbers."""
    if release_rule_kind(numbers) == "fixed":
        return ReleaseRule.from_document(numbers)
    if release_rule_kind(numbers) == LotSpreadRule.kind:
        return LotSpreadRule.from_document(numbers)
    return DerivedReleaseRule.from_document(numbers)


def rule_here(
    rule: AnyRule, means: Mapping[str, float], estimate: float, sample_means: Sequence[float] = ()
) -> ReleaseRule:
    """Give the rule with the uncertainty, and the acceptance limits, that hold at these readings.

    Raises
    ------
    LimitsError
        The decision rule cannot be used at these readings, or accepts nothing there.
    """
    if isinstance(rule, LotSpreadRule):
        return rule.at(sample_means)
    return rule.at(estimate) if isinstance(rule, ReleaseRule) else rule.at(means)


def compile_pair(
    budget: Budget,
    requirement: Requirement,
    characteristic: Characteristic,
    *,
    label: str,
    prior: ProductionPrior | None = None,
    tables: ErrorTables | None = None,
) -> dict[str, dict[str, Any]]:
    """Compile the rules of one budget and one requirement for all balanced numbers of readings.

    The planned numbers must be able to release something; other numbers that cannot are left out, and a lot
    judged with them is compiled when it comes.

    Raises
    ------
    InvalidRequest
        With the planned numbers no reading could prove the requirement, or its limits are wrong.
    """
    collector = FaultCollector()
    planned = planned_counts(budget.procedure)
    options: dict[str, Any] = {"prior": prior}

    def compiled(counts: Counts) -> AnyRule:
        distribution = None if tables is None else tables.of(counts)
        return compile_rule(budget, counts, requirement, characteristic, distribution=distribution, **options)

    options["risk_per_look"] = collector.attempt(
        "#", risk_of_looks, budget, requirement, characteristic, any_distribution=tables is not None
    )
    if not collector.faults:
        collector.attempt("#", compiled, planned)
    if collector.faults:
        detail = "; ".join(fault.detail for fault in collector.faults)
        collector.faults.clear()
        collector.add("#", f"{label}: {detail}")
    collector.finish("This measurement cannot prove this specification.")
    rules = {}
    for counts in dict.fromkeys((planned, *islice(balanced_counts(budget.procedure), MOST_STORED))):
        try:
            rule = compiled(counts)
        except (LimitsError, ModelError):
            # Also where fewer readings leave so much uncertainty that the model curves within it.
            continue
        rules[counts_text(counts)] = rule.to_document()
    return rules
