"""Budgets as versioned documents: what a draft must meet, and what is computed and stored at approval."""

from __future__ import annotations

from dataclasses import replace
from datetime import date
from typing import Any, Final

from budgets.budget import Budget
from budgets.budget_validation import BudgetValidation, ErrorTables
from service.documents import (
    BudgetDocument,
    Characteristic,
    Specification,
)
from service.errors import Conflict
from service.ledger import format_instant
from service.schemas import load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows import plant
from service.workflows.budget_validation import Findings, finding, finding_document
from service.workflows.calendar import lapse_instant
from service.workflows.evidence import FaultCollector
from service.workflows.production_priors import resolve_prior
from service.workflows.reference_methods import check_requirement
from service.workflows.resolved_budgets import derived_from, in_document, resolve_budget
from service.workflows.rules import RuleKey, compile_pair
from service.workflows.stored_budgets import (
    ResolvedBudget,
    budget_evaluation,
    is_default_model,
)
from service.workflows.versioned_kind import Approval, VersionedKind


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
    else:
        _check_what_is_read(unit_of_work, document, collector)
        _check_units_of_default_model(document, collector)
    for analyzer, code in document.calibrations.items():
        _check_calibration(unit_of_work, document, analyzer, code, collector)
    collector.finish("The budget refers to what does not exist or does not fit.")
    resolve_budget(unit_of_work, document)


def _check_what_is_read(
    unit_of_work: UnitOfWork, document: BudgetDocument, collector: FaultCollector
) -> None:
    """A quantity that is read is the characteristic itself, or one that it is derived from, in its unit."""
    channels = derived_from(unit_of_work, document) or (document.characteristic,)
    for name in channels:
        if name not in document.model.quantities or document.model.quantities[name].source != "reading":
            collector.add(
                "#/model/quantities", f"{name!r} is not read", f"{' and '.join(channels)}, all read"
            )
    if is_default_model(document):
        for name in document.validated_ranges:
            pointer = f"#/validated_ranges/{name}"
            collector.add(pointer, "the model is the reading less its bias", "validated_range alone")
    else:
        for name, quantity in document.model.quantities.items():
            if quantity.source == "reading" and name not in document.validated_ranges:
                pointer = f"#/validated_ranges/{name}"
                collector.add(pointer, "is missing", f"the range in which {name} was validated")
    for name, quantity in document.model.quantities.items():
        if quantity.source != "reading":
            continue
        pointer = f"#/model/quantities/{name}"
        stored = unit_of_work.master.get("characteristic", f"{document.product}/{name}")
        if name not in channels or stored is None:
            collector.add(
                pointer, f"{name!r} is not read for this characteristic", f"{' or '.join(channels)}"
            )
        elif stored.document["unit"] != quantity.unit:
            unit = stored.document["unit"]
            collector.add(f"{pointer}/unit", f"got {quantity.unit!r}", f"{unit!r}, the unit of {name}")


def _check_units_of_default_model(document: BudgetDocument, collector: FaultCollector) -> None:
    """Without an expression to carry units, reading and bias are both in the unit of the budget."""
    if not is_default_model(document):
        return
    for name, quantity in document.model.quantities.items():
        if quantity.source is None and quantity.unit != document.unit:
            pointer = f"#/model/quantities/{name}/unit"
            collector.add(pointer, f"got {quantity.unit!r}", f"{document.unit!r}, as the budget")


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


def _approval(
    unit_of_work: UnitOfWork, stored: StoredVersion, document: BudgetDocument, found: Findings
) -> Approval:
    _check_sole_budget(unit_of_work, document)
    resolved = resolve_budget(unit_of_work, document)
    approval = approval_of_resolved(unit_of_work, stored, document, resolved, found)
    if approval.lapses_at is not None and approval.lapses_at <= unit_of_work.now("plant"):
        raise Conflict(
            "evidence-lapsed", f"The evidence served until {resolved.serves_until}; renew it first."
        )
    return approval


def approval_of_resolved(
    unit_of_work: UnitOfWork,
    stored: StoredVersion,
    document: BudgetDocument,
    resolved: ResolvedBudget,
    found: Findings,
) -> Approval:
    """Compute what is stored of a budget in force, whether or not its evidence has lapsed.

    Raises
    ------
    InvalidRequest
        A specification in force could not be proved with it, or neither its law of propagation nor Monte
        Carlo quantiles can speak for it.
    """
    evaluation = budget_evaluation(stored.document, resolved)
    validation = _validation(document, found, evaluation["digest"])
    lapses_at = None
    if resolved.serves_until is not None:
        instant = lapse_instant(date.fromisoformat(resolved.serves_until), plant.in_force(unit_of_work))
        lapses_at = format_instant(instant)
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
                    validation.tables,
                )
            )
    numbers = {**evaluation, "monte_carlo": finding_document(validation)}
    return Approval(numbers, lapses_at, tuple(rules))


def _validation(document: BudgetDocument, found: Findings, digest: str) -> BudgetValidation:
    """Give what Monte Carlo runs found; refuse a model that neither the law nor one table can speak for."""
    collector = FaultCollector()
    validation = collector.attempt("#", finding, found, digest)
    # A trial without a value of the model is one of the model, whatever estimates it met.
    collector.faults = [
        in_document(
            document, replace(fault, pointer=(fault.pointer or "#").replace("#/estimates", "#/model"))
        )
        for fault in collector.faults
    ]
    collector.finish("The law of propagation may not be used for this budget.")
    assert validation is not None
    return validation


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
    tables: ErrorTables | None,
) -> list[tuple[RuleKey, dict[str, Any]]]:
    """Compile the release rules of a budget for the requirement of a specification that it serves.

    ``tables`` are those that stand in for its law of propagation, where that does not hold.

    Raises
    ------
    InvalidRequest
        No reading, taken as planned, could prove the requirement, or the evidence belongs to another
        reference method than it names.
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
        check_requirement(unit_of_work, requirement, document, label)
        stated = requirement.decision_rule.prior
        prior = None
        if stated is not None:
            pointer = f"#/requires/{index}/decision_rule/prior"
            prior = resolve_prior(
                unit_of_work, stated, characteristic, document, budget, pointer=pointer
            ).prior
        compiled = compile_pair(budget, requirement, characteristic, label=label, prior=prior, tables=tables)
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
