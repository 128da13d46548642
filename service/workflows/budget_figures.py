"""The figures of a budget version: what it is made of, and what would change; two versions compared."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

from budgets.budget import Budget
from budgets.comparisons import ComponentChange, compare
from budgets.explanations import Alternative, ExplainedComponent, Explanation, Limits, Subtotal, explain
from budgets.propagation import Contribution, Counts, coverage_factor
from service.access import require
from service.documents import Actor, BudgetDocument, Characteristic, Requirement, Specification
from service.errors import Fault, InvalidRequest, NotFound
from service.schemas import dump, load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.budget_validation import shown, stored_tables
from service.workflows.resolved_budgets import resolve_budget
from service.workflows.rules import decision_rule, planned_counts, tolerance
from service.workflows.services import Services
from service.workflows.stored_budgets import budget_evaluation, budget_from_evaluation
from service.workflows.validated_ranges import range_warnings

Answer = dict[str, Any]


@dataclass(frozen=True)
class Subject:
    """A budget version with its numbers, as stored at approval or as they would be now."""

    stored: StoredVersion
    document: BudgetDocument
    budget: Budget
    evaluation: Mapping[str, Any]

    @property
    def counts(self) -> Counts:
        """The numbers of samples and readings that are planned."""
        return planned_counts(self.budget.procedure)

    @property
    def centre(self) -> dict[str, float]:
        """The middle of what was validated: where a budget that depends on the value is shown."""
        if self.budget.model is None:
            return {self.budget.characteristic: sum(self.budget.validated_range) / 2}
        return {name: sum(self.budget.validated_box[name]) / 2 for name in self.budget.model.read}


def evaluation(
    services: Services, actor: Actor, code: str, version: int, *, specification: str | None = None
) -> Answer:
    """Explain a budget version; with a specification also its acceptance limits and what would move them.

    Raises
    ------
    NotFound
        There is no such version.
    InvalidRequest
        The draft cannot be computed, or the specification says nothing about it.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        subject = subject_of(unit_of_work, code, version)
        by = _requirement(unit_of_work, subject, specification)
        explained = _explained(unit_of_work, subject, None if by is None else by[1], subject.centre)
        warnings = (*explained.warnings, *range_warnings(unit_of_work, subject.document))
    return {
        "code": code,
        "version": version,
        "state": subject.stored.state,
        "unit": subject.document.unit,
        "digest": subject.evaluation["digest"],
        "serves_until": subject.evaluation["serves_until"],
        "extensions": subject.evaluation.get("extensions", []),
        "estimates": subject.evaluation["estimates"],
        "bias_treatment": subject.budget.bias_treatment,
        "samples": len(subject.counts.readings_per_sample),
        "readings_per_sample": subject.counts.readings_per_sample[0],
        "at": {"readings": subject.centre, "estimate": explained.result.estimate},
        **_total(subject.budget, explained),
        "specification": None if by is None else by[0],
        "acceptance_limits": _limits(explained.acceptance_limits),
        "levels": [_subtotal(level) for level in explained.subtotals],
        "components": [
            {"evidence": evidence, **_taken_from(stored), **_component(part)}
            for evidence, stored, part in zip(
                _evidence(subject.document),
                subject.evaluation["components"],
                explained.components,
                strict=True,
            )
        ],
        "monte_carlo": shown(subject.evaluation),
        "warnings": [asdict(warning) for warning in warnings],
    }


def comparison(
    services: Services,
    actor: Actor,
    code: str,
    version: int,
    *,
    against: int | None = None,
    specification: str | None = None,
) -> Answer:
    """Compare a version with another one, the one in force by default, line by line.

    Raises
    ------
    NotFound
        One of the versions does not exist, or none is in force.
    InvalidRequest
        One of them cannot be computed.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        after = subject_of(unit_of_work, code, version)
        if against is None:
            in_force = unit_of_work.versions.in_force("budget", code)
            if in_force is None:
                raise NotFound(f"No version of {code!r} is in force; say which one to compare with.")
            against = in_force.version
        before = subject_of(unit_of_work, code, against)
        by = _requirement(unit_of_work, after, specification)
        requirement = None if by is None else by[1]
        # Both at one place, or the place would be taken for what the versions differ by.
        place = after.centre if after.centre.keys() == before.centre.keys() else before.centre
        compared = compare(
            _explained(unit_of_work, before, requirement, place),
            _explained(unit_of_work, after, requirement, after.centre),
        )
    return {
        "code": code,
        "was": {"version": against, **_version(before, compared.before, place)},
        "becomes": {"version": version, **_version(after, compared.after, after.centre)},
        "unit": after.document.unit,
        "specification": None if by is None else by[0],
        "components": [_change(change) for change in compared.changes],
        "document_changes": _document_changes(before.stored.document, after.stored.document),
    }


# --- what is shown -------------------------------------------------------------------------------------


def subject_of(unit_of_work: UnitOfWork, code: str, version: int) -> Subject:
    """Give a budget version with its numbers. Raises NotFound or InvalidRequest."""
    stored = unit_of_work.versions.get("budget", code, version)
    if stored is None:
        raise NotFound(f"There is no version {version} of a budget {code!r}.")
    document = load(BudgetDocument, stored.document)
    if stored.evaluation is not None:
        return Subject(
            stored, document, budget_from_evaluation(document, stored.evaluation), stored.evaluation
        )
    resolved = resolve_budget(unit_of_work, document)
    return Subject(stored, document, resolved.budget, budget_evaluation(stored.document, resolved))


def _requirement(
    unit_of_work: UnitOfWork, subject: Subject, specification: str | None
) -> tuple[Answer, Requirement] | None:
    if specification is None:
        return None
    stored = unit_of_work.versions.in_force("specification", specification)
    document = None if stored is None else load(Specification, stored.document)
    for requirement in () if document is None else document.requires:
        if stored is not None and requirement.characteristic == subject.document.characteristic:
            return {"code": specification, "version": stored.version}, requirement
    fault = Fault(
        f"got {specification!r}",
        expected=f"a specification in force that requires {subject.document.characteristic}",
        parameter="specification",
    )
    raise InvalidRequest("1 fault in the query.", faults=(fault,))


def _explained(
    unit_of_work: UnitOfWork, subject: Subject, requirement: Requirement | None, place: Mapping[str, float]
) -> Explanation:
    # What one component does to the limits of items is not built: the uncertainty of the mean is explained.
    if requirement is None or requirement.judged == "item":
        return explain(subject.budget, subject.counts, estimates=place)
    key = f"{subject.document.product}/{subject.document.characteristic}"
    stored = unit_of_work.master.get("characteristic", key)
    assert stored is not None  # checked with the draft
    characteristic = load(Characteristic, stored.document)
    domain = characteristic.natural_domain
    tables = stored_tables(subject.evaluation)
    return explain(
        subject.budget,
        subject.counts,
        estimates=place,
        tolerance=tolerance(requirement, characteristic),
        rule=decision_rule(requirement.decision_rule),
        domain=(domain.lower, domain.upper),
        truncated=requirement.within_domain,
        tabulated=None if tables is None else tables.of(subject.counts),
    )


def _total(budget: Budget, explained: Explanation) -> Answer:
    result = explained.result
    nu = result.effective_degrees_of_freedom
    return {
        "combined_standard_uncertainty": result.standard_uncertainty,
        "effective_degrees_of_freedom": _finite(nu),
        "coverage_probability": budget.coverage_probability,
        "coverage_factor": coverage_factor(budget.coverage_probability, nu),
        "expanded_uncertainty": explained.expanded_uncertainty,
    }


def _version(subject: Subject, explained: Explanation, place: Mapping[str, float]) -> Answer:
    return {
        "state": subject.stored.state,
        "estimates": subject.evaluation["estimates"],
        "bias_treatment": subject.budget.bias_treatment,
        "at": {"readings": place, "estimate": explained.result.estimate},
        **_total(subject.budget, explained),
        "acceptance_limits": _limits(explained.acceptance_limits),
    }


def _subtotal(level: Subtotal) -> Answer:
    return {
        "level": level.level,
        "variance": level.variance,
        "contribution": level.contribution,
        "share_of_variance": level.share_of_variance,
    }


def _component(part: ExplainedComponent) -> Answer:
    return {
        **_line(part.contribution),
        "without": _alternative(part.without),
        "halved": _alternative(part.halved),
        "remark": part.remark,
    }


def _line(part: Contribution) -> Answer:
    component = part.component
    return {
        "code": component.code,
        "quantities": list(component.inputs),
        "level": component.level,
        "evaluation_type": component.evaluation_type,
        "standard_uncertainty": part.standard_uncertainty_of_one_draw,
        "degrees_of_freedom": _finite(part.degrees_of_freedom),
        "averaging_weight": part.weight,
        "sensitivity_coefficient": part.sensitivity_coefficient,
        "contribution": part.contribution,
        "share_of_variance": part.share_of_variance,
    }


def _change(change: ComponentChange) -> Answer:
    return {
        "code": change.code,
        "changed": change.changed,
        "was": None if change.before is None else _line(change.before),
        "becomes": None if change.after is None else _line(change.after),
        "acceptance_limits": _limits(change.acceptance_limits),
        "moves_lower_limit_by": change.moves_lower_limit_by,
        "moves_upper_limit_by": change.moves_upper_limit_by,
    }


def _alternative(alternative: Alternative) -> Answer:
    nu = alternative.effective_degrees_of_freedom
    return {
        "combined_standard_uncertainty": alternative.combined_standard_uncertainty,
        "effective_degrees_of_freedom": None if nu is None else _finite(nu),
        "expanded_uncertainty": alternative.expanded_uncertainty,
        "acceptance_limits": _limits(alternative.acceptance_limits),
    }


def _limits(limits: Limits | None) -> Answer | None:
    return None if limits is None else asdict(limits)


def _evidence(document: BudgetDocument) -> list[Answer]:
    return [line["evidence"] for line in dump(document)["components"]]


def _taken_from(stored: Answer) -> Answer:
    """Name the entry of the laboratory that a component was taken from."""
    return {"laboratory": stored["laboratory"]} if "laboratory" in stored else {}


def _document_changes(before: Answer, after: Answer) -> list[Answer]:
    """Name the members of the document that differ, components aside: those have lines of their own."""
    return [
        {"member": name, "was": before.get(name), "becomes": after.get(name)}
        for name in dict.fromkeys([*before, *after])
        if name != "components" and before.get(name) != after.get(name)
    ]


def _finite(degrees_of_freedom: float) -> float | None:
    return None if degrees_of_freedom == float("inf") else degrees_of_freedom
