"""From the document of a budget to its components: what stands behind each, and whether it belongs there."""

from __future__ import annotations

import re
from dataclasses import replace
from datetime import date
from typing import Final

from budgets.errors import NotSupportedError
from service.documents import (
    BudgetComponent,
    BudgetDocument,
    Evidence,
    LaboratoryEvidence,
    Study,
)
from service.errors import Fault, InvalidRequest
from service.schemas.base import pointer_step
from service.store.unit_of_work import UnitOfWork
from service.workflows.budget_evidence import (
    check_laboratory_fits,
    check_quantities,
    check_values_are_covered,
)
from service.workflows.evidence import Behind, FaultCollector, resolve_stated
from service.workflows.laboratories import resolve
from service.workflows.stored_budgets import (
    ResolvedBudget,
    assemble_budget,
    component_of,
)
from service.workflows.trueness import VALIDATIONS, check_trueness
from service.workflows.validated_ranges import check_ranges

# What an analyzer does itself, with one calibration: neither a laboratory nor another analyzer shows it.
_ITS_OWN: Final = frozenset({"reading", "presentation", "session", "instrument", "calibration"})
_NUMBERED_QUANTITY: Final = re.compile(r"#/quantities/(\d+)(/name)?")


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
    valued = {
        name: collector.attempt(
            f"#/model/quantities/{name}/evidence", _value, unit_of_work, document, name, quantity.evidence
        )
        for name, quantity in document.model.quantities.items()
        if quantity.evidence is not None
    }
    check_values_are_covered(document, valued, collector)
    collector.finish("The evidence of the budget does not fit.")
    behind = tuple(item for item in found if item is not None)
    values = {name: item for name, item in valued.items() if item is not None}
    check_ranges(document, (*behind, *values.values()), collector)
    check_trueness(document, behind, collector)
    collector.finish("The budget claims more than its evidence shows.")
    components = [
        collector.attempt(f"#/components/{index}", component_of, line, item.estimate, item.evaluation_type)
        for index, (line, item) in enumerate(zip(document.components, behind, strict=True))
    ]
    collector.finish("The components of the budget do not fit.")
    ready = [component for component in components if component is not None]
    estimates = {
        name: item.estimate.value for name, item in values.items() if item.estimate.value is not None
    }
    budget = collector.attempt("#", assemble_budget, document, ready, estimates)
    collector.faults = [in_document(document, fault) for fault in collector.faults]
    collector.finish("The budget does not hold together.")
    assert budget is not None
    return ResolvedBudget(budget, behind, estimates, _serves_until(behind))


def in_document(document: BudgetDocument, fault: Fault) -> Fault:
    """Point to the member of the document, where the computation calls it otherwise."""
    pointer = (fault.pointer or "#").replace("#/validated_box", "#/validated_ranges", 1)
    pointer = pointer.replace("#/expression", "#/model/expression", 1)
    if numbered := _NUMBERED_QUANTITY.match(pointer):
        # The document has them by their names.
        name = list(document.model.quantities)[int(numbered[1])]
        pointer = f"#/model/quantities{pointer_step(name)}"
    pointer = pointer.replace("#/quantities", "#/model/quantities", 1)
    return replace(fault, pointer=pointer)


# --- evidence that fits --------------------------------------------------------------------------------


def _behind(unit_of_work: UnitOfWork, document: BudgetDocument, line: BudgetComponent, index: int) -> Behind:
    pointer = f"#/components/{index}/evidence"
    code = f"{document.code}/{line.code}"
    names = [line.quantity] if line.quantity is not None else list(line.quantities.values())
    units = {document.model.quantities[name].unit for name in names}
    if len(units) > 1:
        raise NotSupportedError("errors of quantities of several units that go together")
    behind = resolve(
        unit_of_work,
        line.evidence,
        code=code,
        unit=units.pop(),
        pointer=pointer,
        characteristic=_asked_about(unit_of_work, document, line),
        extended=True,
    )
    if behind.laboratory is not None:
        ours = (document.characteristic, *derived_from(unit_of_work, document))
        check_laboratory_fits(unit_of_work, document, line, behind.laboratory, ours, index)
    if behind.study is not None:
        _check_study_fits(unit_of_work, behind.study, document, pointer, line.level)
    check_quantities(document, line, behind, index)
    return behind


def _asked_about(unit_of_work: UnitOfWork, document: BudgetDocument, line: BudgetComponent) -> str | None:
    """Say which characteristic a laboratory is asked about when the evidence does not; None: it has to."""
    if line.quantity is not None and document.model.quantities[line.quantity].source == "reading":
        return line.quantity
    return None if derived_from(unit_of_work, document) else document.characteristic


def _value(unit_of_work: UnitOfWork, document: BudgetDocument, name: str, evidence: Evidence) -> Behind:
    """Give what stands behind the value of a quantity, as a bias."""
    pointer = f"#/model/quantities/{name}/evidence"
    unit = document.model.quantities[name].unit
    if isinstance(evidence, LaboratoryEvidence):
        fault = Fault("what is known of a laboratory is no value", "a study that gives one", pointer)
        raise InvalidRequest("A quantity has no value.", faults=(fault,))
    code = f"{document.code}/{name}"
    behind = resolve_stated(unit_of_work, evidence, code=code, unit=unit, pointer=pointer)
    if behind.study is not None:
        _check_study_fits(unit_of_work, behind.study, document, pointer, "calibration")
    collector = FaultCollector()
    if behind.estimate.value is None:
        collector.add(
            f"{pointer}/estimate",
            f"{behind.estimate.name!r} has no value, only an uncertainty",
            "an estimate that has a value, such as 'bias'",
        )
        collector.finish("A quantity has no value.")
    return behind


def _check_study_fits(
    unit_of_work: UnitOfWork, study: Study, document: BudgetDocument, pointer: str, level: str
) -> None:
    """Refuse evidence that was made for something else than this budget speaks of."""
    collector = FaultCollector()
    if study.product != document.product:
        detail = f"{study.code} is about the product {study.product!r}"
        collector.add(f"{pointer}/study", detail, f"{document.product!r}")
    ours = {document.characteristic, *derived_from(unit_of_work, document)}
    for theirs in {study.characteristic, *study.characteristics} - ours:
        detail = f"{study.code} is about the characteristic {theirs!r}"
        collector.add(f"{pointer}/study", detail, " or ".join(sorted(ours)))
    shared = study.calibrations.keys() & document.calibrations.keys()
    if study.calibrations and shared != document.calibrations.keys():
        collector.add(
            f"{pointer}/study",
            f"{study.code} was made on {', '.join(study.calibrations)}",
            f"evidence for {', '.join(document.calibrations)}",
        )
    needed = [name for name in document.calibrations if not _is_laboratory(unit_of_work, name)]
    if needed and not study.calibrations and (study.design in VALIDATIONS or level in _ITS_OWN):
        collector.add(
            f"{pointer}/study",
            f"{study.code} does not say on which calibration it was made",
            f"evidence for {', '.join(needed)}",
        )
    for analyzer in sorted(shared):
        if study.calibrations[analyzer] != document.calibrations[analyzer]:
            collector.add(
                f"{pointer}/study",
                f"{study.code} belongs to the calibration {study.calibrations[analyzer]!r} of {analyzer}",
                f"{document.calibrations[analyzer]!r}",
            )
    collector.finish("The evidence belongs to something else.")


def _is_laboratory(unit_of_work: UnitOfWork, analyzer: str) -> bool:
    stored = unit_of_work.master.get("analyzer", analyzer)
    return stored is not None and stored.document["kind"] == "laboratory"


def derived_from(unit_of_work: UnitOfWork, document: BudgetDocument) -> tuple[str, ...]:
    """Name the characteristics that the one of a budget is derived from; none where it is read directly."""
    key = f"{document.product}/{document.characteristic}"
    stored = unit_of_work.master.get("characteristic", key)
    return () if stored is None else tuple(stored.document["derived_from"] or ())


def _serves_until(behind: tuple[Behind, ...]) -> str | None:
    days: list[date] = [item.serves_until for item in behind if item.serves_until is not None]
    return min(days).isoformat() if days else None
