"""What the characteristics of one specification come to together, and the cap that a rule may put on it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from budgets.errors import BudgetsError, CorrelationError
from budgets.joint_conformance import JointConformance, joint_conformance
from budgets.judgements import Judgement
from budgets.reporting import probability_text
from budgets.shared_errors import NamedBudget
from service.documents import Requirement, StudyEvidence
from service.workflows.holds import Hold
from service.workflows.measured import Measured
from service.workflows.register import BudgetInForce, Register, SpecificationInForce

_NEXT: Final = (
    "Bring the characteristic that takes most of the risk farther within its limits. A person decides on "
    "this lot, with an analysis by the laboratory."
)


@dataclass(frozen=True)
class LotRisk:
    """The joint figures of one specification, and the risk to be held against a cap where there is one."""

    specification: SpecificationInForce
    figures: dict[str, Any]
    joint: JointConformance | None

    def hold(self, requirement: Requirement) -> Hold | None:
        """Give the reason to hold a verdict whose rule caps the risk of the lot, where that is larger."""
        cap = requirement.decision_rule.largest_lot_risk
        if cap is None or self.joint is None or self.joint.cautious_risk <= cap:
            return None
        most = "" if self.joint.risk is not None else "at most "
        code = self.specification.document.code
        return Hold(
            "lot-risk",
            f"The risk that the lot misses one or more of the limits of {code} is "
            f"{most}{probability_text(self.joint.cautious_risk)}, more than {probability_text(cap)}.",
            _NEXT,
        )


def lot_risk(
    register: Register,
    specification: SpecificationInForce,
    judged: Sequence[tuple[Requirement, Measured, Judgement | None]],
    recorded_at: str,
) -> LotRisk:
    """Take the characteristics of a specification together; nothing is said unless all were judged."""
    joint = None
    unjudged = [requirement.characteristic for requirement, _, judgement in judged if judgement is None]
    if unjudged:
        rests_on = f"Nothing is said of the lot as a whole; not judged: {', '.join(unjudged)}."
    else:
        risks = [
            (min(1.0, judgement.risk_below), min(1.0, judgement.risk_above))
            for _, _, judgement in judged
            if judgement is not None
        ]
        try:
            joint = joint_conformance(risks, _correlations(register, judged, recorded_at))
            rests_on = "The risks and the correlations of the errors, level by level as the budgets say."
        except BudgetsError as error:
            joint = joint_conformance(risks)
            rests_on = f"The risks alone, because {error.message}."
    if len(judged) == 1 and joint is not None:
        rests_on = "The risk of the one characteristic."
    return LotRisk(specification, _figures(specification, judged, joint, rests_on), joint)


def _figures(
    specification: SpecificationInForce,
    judged: Sequence[tuple[Requirement, Measured, Judgement | None]],
    joint: JointConformance | None,
    rests_on: str,
) -> dict[str, Any]:
    caps = [requirement.decision_rule.largest_lot_risk for requirement, _, _ in judged]
    stated = [cap for cap in caps if cap is not None]
    return {
        "specification": {"code": specification.document.code, "version": specification.version},
        "characteristics": [requirement.characteristic for requirement, _, _ in judged],
        "least_risk": None if joint is None else joint.smallest_risk,
        "most_risk": None if joint is None else joint.largest_risk,
        "risk": None if joint is None else joint.risk,
        "conformance_probability": None if joint is None else joint.conformance_probability,
        "largest_lot_risk": min(stated) if stated else None,
        "rests_on": rests_on,
    }


def _correlations(
    register: Register, judged: Sequence[tuple[Requirement, Measured, Judgement | None]], recorded_at: str
) -> Any:
    """Give the correlations of the errors. Raises BudgetsError with what is not known."""
    if len(judged) == 1:
        return None
    if any(requirement.judged != "lot_mean" for requirement, _, _ in judged):
        raise CorrelationError("items are judged, and how they vary together is not known")
    measured = [item for _, item, _ in judged]
    first = measured[0]
    if any(item.scans != first.scans for item in measured):
        raise CorrelationError("the characteristics were not all read in the same scans")
    budgets = [item.budget for item in measured if item.budget is not None]
    assert len(budgets) == len(measured) and first.done is not None  # judged, so there are both
    others = _others(register, budgets, recorded_at)
    errors = register.shared_errors(first.done, budgets, others, _named)
    return errors.correlations([_means(item) for item in measured])


def _others(register: Register, budgets: Sequence[BudgetInForce], recorded_at: str) -> list[BudgetInForce]:
    """Give the other budgets for these calibrations that hold several quantities."""
    first = budgets[0].document
    known = {budget.document.code for budget in budgets}
    found = {}
    for budget in register.budgets.values():
        document = budget.document
        same = document.product == first.product and document.calibrations == first.calibrations
        serves = budget.lapses_at is None or recorded_at < budget.lapses_at
        if same and serves and budget.budget.model is not None and document.code not in known:
            found[document.code] = budget
    return list(found.values())


def _means(item: Measured) -> Mapping[str, float]:
    assert item.budget is not None and item.estimate is not None  # judged, so there are both
    if item.budget.budget.model is not None:
        return item.means
    return {item.budget.document.characteristic: item.estimate}


def _named(budget: BudgetInForce) -> NamedBudget:
    """Call a quantity that is read by its channel, a value that a study found by that study.

    A declared value is the budget's own: nothing says that another budget means the same error.
    """
    document = budget.document
    names = {document.characteristic: document.characteristic, "bias": f"{document.code}/bias"}
    for name, quantity in document.model.quantities.items():
        if isinstance(quantity.evidence, StudyEvidence):
            names[name] = f"{quantity.evidence.study}/{quantity.evidence.estimate}"
        else:
            names[name] = name if quantity.source == "reading" else f"{document.code}/{name}"
    return NamedBudget(budget.budget, names)
