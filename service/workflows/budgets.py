"""Budgets as versioned documents: what a draft must meet, and what is computed and stored at approval."""

from __future__ import annotations

from datetime import date
from typing import Any, Final

from budgets.budget import Budget
from budgets.evidence.evaluation import effective_degrees_of_freedom
from budgets.propagation import CombinedUncertainty, combined, coverage_factor
from service.documents import BudgetComponent, BudgetDocument, Characteristic, Specification, Study
from service.errors import Conflict
from service.ledger import format_instant
from service.schemas import load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows import plant
from service.workflows.calendar import lapse_instant
from service.workflows.evidence import Behind, FaultCollector, resolve
from service.workflows.rules import RuleKey, compile_pair, planned_counts
from service.workflows.stored_budgets import (
    ResolvedBudget,
    assemble_budget,
    budget_evaluation,
    budget_from_evaluation,
    component_of,
)
from service.workflows.versioned_kind import Approval, VersionedKind

BIAS: Final = "bias"


def resolve_budget(unit_of_work: UnitOfWork, document: BudgetDocument) -> ResolvedBudget:
    """Find what stands behind every component and put the budget together.

    Raises
    ------
    InvalidRequest
        With all faults: missing evidence, evidence for something else, a component that may not stand there,
        double counting, a bias without its uncertainty.
    """
    collector = FaultCollector()
    found = [
        collector.attempt(f"#/components/{index}/evidence", _behind, unit_of_work, document, line, index)
        for index, line in enumerate(document.components)
    ]
    bias = collector.attempt(f"#/model/quantities/{BIAS}/evidence", _bias_value, unit_of_work, document)
    _check_bias_is_covered(document, collector)
    collector.finish("The evidence of the budget does not fit.")
    behind = tuple(item for item in found if item is not None)
    components = [
        collector.attempt(f"#/components/{index}", component_of, line, item.estimate, item.evaluation_type)
        for index, (line, item) in enumerate(zip(document.components, behind, strict=True))
    ]
    collector.finish("The components of the budget do not fit.")
    ready = [component for component in components if component is not None]
    budget = collector.attempt("#", assemble_budget, document, ready, bias)
    collector.finish("The budget does not hold together.")
    assert budget is not None
    return ResolvedBudget(budget, behind, _serves_until(behind))


def figures(unit_of_work: UnitOfWork, stored: StoredVersion) -> dict[str, Any]:
    """Give a budget's figures for the planned procedure: as stored at approval, else as they would be now.

    Raises
    ------
    InvalidRequest
        The draft cannot be computed.
    """
    document = load(BudgetDocument, stored.document)
    if stored.evaluation is not None:
        evaluation = stored.evaluation
        budget = budget_from_evaluation(document, evaluation)
    else:
        resolved = resolve_budget(unit_of_work, document)
        evaluation, budget = budget_evaluation(stored.document, resolved), resolved.budget
    counts = planned_counts(budget.procedure)
    result = combined(budget, counts)
    nu = result.effective_degrees_of_freedom
    factor = coverage_factor(budget.coverage_probability, nu)
    return {
        "code": stored.code,
        "version": stored.version,
        "state": stored.state,
        "unit": document.unit,
        "digest": evaluation["digest"],
        "serves_until": evaluation["serves_until"],
        "bias": budget.bias,
        "bias_treatment": budget.bias_treatment,
        "samples": len(counts.readings_per_sample),
        "readings_per_sample": counts.readings_per_sample[0],
        "combined_standard_uncertainty": result.standard_uncertainty,
        "effective_degrees_of_freedom": _finite(nu),
        "coverage_probability": budget.coverage_probability,
        "coverage_factor": factor,
        "expanded_uncertainty": factor * result.standard_uncertainty,
        "components": _lines(document, result),
    }


def _lines(document: BudgetDocument, result: CombinedUncertainty) -> list[dict[str, Any]]:
    lines = []
    for line, part in zip(document.components, result.contributions, strict=True):
        lines.append(
            {
                "code": line.code,
                "quantity": line.quantity,
                "level": line.level,
                "evaluation_type": part.component.evaluation_type,
                "standard_uncertainty": part.standard_uncertainty_of_one_draw,
                "degrees_of_freedom": _finite(effective_degrees_of_freedom(part.component.terms)),
                "averaging_weight": part.weight,
                "sensitivity_coefficient": -1.0 if line.quantity == BIAS else 1.0,
                "contribution": part.contribution,
                "share_of_variance": part.share_of_variance,
            }
        )
    return lines


def _finite(degrees_of_freedom: float) -> float | None:
    return None if degrees_of_freedom == float("inf") else degrees_of_freedom


# --- evidence that fits --------------------------------------------------------------------------------


def _behind(unit_of_work: UnitOfWork, document: BudgetDocument, line: BudgetComponent, index: int) -> Behind:
    pointer = f"#/components/{index}/evidence"
    code = f"{document.code}/{line.code}"
    behind = resolve(unit_of_work, line.evidence, code=code, unit=document.unit, pointer=pointer)
    if behind.study is not None:
        _check_study_fits(behind.study, document, pointer)
    return behind


def _bias_value(unit_of_work: UnitOfWork, document: BudgetDocument) -> float | None:
    quantity = document.model.quantities.get(BIAS)
    if quantity is None or quantity.evidence is None:
        return None
    pointer = f"#/model/quantities/{BIAS}/evidence"
    behind = resolve(
        unit_of_work,
        quantity.evidence,
        code=f"{document.code}/{BIAS}",
        unit=document.unit,
        pointer=pointer,
    )
    if behind.study is not None:
        _check_study_fits(behind.study, document, pointer)
    collector = FaultCollector()
    if behind.estimate.value is None:
        collector.add(
            f"{pointer}/estimate",
            f"{behind.estimate.name!r} has no value, only an uncertainty",
            "an estimate that has a value, such as 'bias'",
        )
        collector.finish("The bias has no value.")
    return behind.estimate.value


def _check_bias_is_covered(document: BudgetDocument, collector: FaultCollector) -> None:
    """Refuse a bias whose own uncertainty is in no component: another study's u(b) says nothing about it."""
    quantity = document.model.quantities.get(BIAS)
    if quantity is None or quantity.evidence is None:
        return
    if not any(line.quantity == BIAS and line.evidence == quantity.evidence for line in document.components):
        collector.add(
            "#/components",
            "no component holds the uncertainty of this very bias",
            f"a component of the quantity {BIAS!r} with the evidence that #/model/quantities/{BIAS} names",
        )


def _check_study_fits(study: Study, document: BudgetDocument, pointer: str) -> None:
    """Refuse evidence that was made for something else than this budget speaks of."""
    collector = FaultCollector()
    for member in ("product", "characteristic"):
        theirs, ours = getattr(study, member), getattr(document, member)
        if theirs != ours:
            collector.add(f"{pointer}/study", f"{study.code} is about the {member} {theirs!r}", f"{ours!r}")
    shared = study.calibrations.keys() & document.calibrations.keys()
    if study.calibrations and shared != document.calibrations.keys():
        collector.add(
            f"{pointer}/study",
            f"{study.code} was made on {', '.join(study.calibrations)}",
            f"evidence for {', '.join(document.calibrations)}",
        )
    if study.design == "agreement" and not study.calibrations:
        collector.add(
            f"{pointer}/study",
            f"{study.code} does not say on which calibration it was made",
            f"evidence for {', '.join(document.calibrations)}",
        )
    for analyzer in sorted(shared):
        if study.calibrations[analyzer] != document.calibrations[analyzer]:
            collector.add(
                f"{pointer}/study",
                f"{study.code} belongs to the calibration {study.calibrations[analyzer]!r} of {analyzer}",
                f"{document.calibrations[analyzer]!r}",
            )
    collector.finish("The evidence belongs to something else.")


def _serves_until(behind: tuple[Behind, ...]) -> str | None:
    days: list[date] = [item.serves_until for item in behind if item.serves_until is not None]
    return min(days).isoformat() if days else None


# --- the versioned kind --------------------------------------------------------------------------------


def _check(unit_of_work: UnitOfWork, document: BudgetDocument) -> None:
    collector = FaultCollector()
    key = f"{document.product}/{document.characteristic}"
    characteristic = unit_of_work.master.get("characteristic", key)
    if unit_of_work.master.get("product", document.product) is None:
        collector.add("#/product", f"there is no product {document.product!r}", "the code of a product")
    elif characteristic is None:
        collector.add("#/characteristic", f"there is no characteristic {key!r}", "one of the product")
    elif characteristic.document["unit"] != document.unit:
        collector.add(
            "#/unit", f"got {document.unit!r}", f"{characteristic.document['unit']!r}, the unit there"
        )
    for name, quantity in document.model.quantities.items():
        if quantity.unit != document.unit:
            collector.add(
                f"#/model/quantities/{name}/unit",
                f"got {quantity.unit!r}",
                f"{document.unit!r}, as the budget",
            )
    for analyzer, code in document.calibrations.items():
        _check_calibration(unit_of_work, document, analyzer, code, collector)
    collector.finish("The budget refers to what does not exist or does not fit.")
    resolve_budget(unit_of_work, document)


def _check_calibration(
    unit_of_work: UnitOfWork,
    document: BudgetDocument,
    analyzer: str,
    code: str,
    collector: FaultCollector,
) -> None:
    pointer = f"#/calibrations/{analyzer}"
    stored = unit_of_work.master.get("calibration", code)
    if stored is None:
        collector.add(pointer, f"there is no calibration {code!r}", "the code of a calibration")
        return
    for member, ours in (("analyzer", analyzer), ("product", document.product)):
        if stored.document[member] != ours:
            collector.add(pointer, f"{code!r} is for the {member} {stored.document[member]!r}", f"{ours!r}")


def _approval(unit_of_work: UnitOfWork, stored: StoredVersion, document: BudgetDocument) -> Approval:
    _check_sole_budget(unit_of_work, document)
    resolved = resolve_budget(unit_of_work, document)
    lapses_at = None
    if resolved.serves_until is not None:
        instant = lapse_instant(date.fromisoformat(resolved.serves_until), plant.in_force(unit_of_work))
        lapses_at = format_instant(instant)
        if lapses_at <= unit_of_work.now("plant"):
            raise Conflict(
                "evidence-lapsed", f"The evidence served until {resolved.serves_until}; renew it first."
            )
    rules = []
    for specification_version in unit_of_work.versions.all_in_force():
        if (
            specification_version.kind == "specification"
            and specification_version.product == document.product
        ):
            rules.extend(
                rules_of_pair(
                    unit_of_work,
                    load(Specification, specification_version.document),
                    specification_version.version,
                    document,
                    stored.version,
                    resolved.budget,
                )
            )
    return Approval(budget_evaluation(stored.document, resolved), lapses_at, tuple(rules))


def _check_sole_budget(unit_of_work: UnitOfWork, document: BudgetDocument) -> None:
    for other in unit_of_work.versions.all_in_force():
        if other.kind != "budget" or other.code == document.code:
            continue
        if (other.product, other.characteristic) != (document.product, document.characteristic):
            continue
        shared = sorted(other.document["calibrations"].keys() & document.calibrations.keys())
        if shared:
            raise Conflict(
                "another-budget-in-force",
                f"{other.code!r} is in force for {document.characteristic} on {', '.join(shared)}; "
                "withdraw it first or draft a version of it.",
                link=f"/v1/budgets/{other.code}",
            )


def rules_of_pair(
    unit_of_work: UnitOfWork,
    specification: Specification,
    specification_version: int,
    document: BudgetDocument,
    budget_version: int,
    budget: Budget,
) -> list[tuple[RuleKey, dict[str, Any]]]:
    """Compile the release rules of a budget for the requirement of a specification that it serves.

    Raises
    ------
    InvalidRequest
        No reading, taken as planned, could prove the requirement.
    """
    stored = unit_of_work.master.get("characteristic", f"{document.product}/{document.characteristic}")
    assert stored is not None  # checked with the draft
    characteristic = load(Characteristic, stored.document)
    rules = []
    for index, requirement in enumerate(specification.requires):
        if requirement.characteristic != document.characteristic:
            continue
        label = (
            f"{specification.code} (version {specification_version}, requires/{index}) with {document.code}"
        )
        compiled = compile_pair(budget, requirement, characteristic, label=label)
        for counts, numbers in compiled.items():
            key = RuleKey(
                specification=specification.code,
                specification_version=specification_version,
                characteristic=requirement.characteristic,
                budget=document.code,
                budget_version=budget_version,
                counts=counts,
            )
            rules.append((key, numbers))
    return rules


BUDGET: Final = VersionedKind(
    name="budget",
    document_class=BudgetDocument,
    subject=lambda document: (document.product, document.characteristic),
    check=_check,
    approval=_approval,
)
