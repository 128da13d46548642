"""Whether the evidence of a budget is about the quantities that it is used for."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from service.documents import BudgetComponent, BudgetDocument, Evidence, Study, StudyEvidence
from service.schemas.base import pointer_step
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import Behind, FaultCollector


def check_quantities(document: BudgetDocument, line: BudgetComponent, behind: Behind, index: int) -> None:
    """Refuse evidence about one channel for a line about another.

    Only what is read bears the name of a channel; a bias may be called as one likes.

    Raises
    ------
    InvalidRequest
        The line belongs to another quantity than its study, or a relative figure to one of another unit.
    """
    collector = FaultCollector()
    study, quantities = behind.study, document.model.quantities
    if study is not None and line.quantity is not None and quantities[line.quantity].source == "reading":
        about = channel_of(study, line.evidence)
        if about != line.quantity:
            pointer = f"#/components/{index}/evidence"
            collector.add(pointer, f"it is about {about!r}", f"evidence about {line.quantity!r}")
    for column, name in line.quantities.items():
        if quantities[name].source == "reading" and name != column:
            pointer = f"#/components/{index}/quantities{pointer_step(column)}"
            collector.add(pointer, f"got {name!r}", f"{column!r}, which is read, or a quantity that is not")
    if line.relative_to is not None and line.quantity is not None:
        units = quantities[line.quantity].unit, quantities[line.relative_to].unit
        if units[0] != units[1]:
            pointer = f"#/components/{index}/relative_to"
            collector.add(pointer, f"got a quantity in {units[1]!r}", f"one in {units[0]!r}")
    collector.finish("The evidence is about something else.")


def channel_of(study: Study, evidence: Evidence) -> str:
    """Name the channel that an estimate of a study is about; of several channels its name ends with it."""
    if not study.characteristics or not isinstance(evidence, StudyEvidence):
        return study.characteristic
    for name in study.characteristics:
        if evidence.estimate.endswith(f"_{name}"):
            return name
    return study.characteristic


def check_laboratory_fits(
    unit_of_work: UnitOfWork,
    document: BudgetDocument,
    line: BudgetComponent,
    laboratory: Mapping[str, Any],
    ours: Sequence[str],
    index: int,
) -> None:
    """Refuse what is known of a laboratory where something else is spoken of.

    Its trueness stays the same however often is read; what it repeats is no error of another instrument.

    Raises
    ------
    InvalidRequest
        The component is about a characteristic other than ``ours``, or may not stand in this line.
    """
    collector = FaultCollector()
    pointer, component = f"#/components/{index}", laboratory["component"]
    if line.quantity is not None and document.model.quantities[line.quantity].source == "reading":
        ours = (line.quantity,)
    if laboratory["characteristic"] not in ours:
        detail = f"it is about {laboratory['characteristic']!r}"
        collector.add(f"{pointer}/evidence/characteristic", detail, " or ".join(ours))
    if component == "trueness":
        if line.level != "reference":
            expected = "'reference' for the trueness of a laboratory"
            collector.add(f"{pointer}/level", f"got {line.level!r}", expected)
    else:
        for analyzer in document.calibrations:
            stored = unit_of_work.master.get("analyzer", analyzer)
            if stored is None or stored.document["kind"] != "laboratory":
                detail = f"the {component} of a laboratory says nothing of {analyzer!r}"
                collector.add(f"{pointer}/evidence/component", detail, "'trueness'")
    collector.finish("The evidence is about something else.")


def check_values_are_covered(
    document: BudgetDocument, valued: Mapping[str, Behind | None], collector: FaultCollector
) -> None:
    """Refuse a value whose own uncertainty is in no component: that of another study says nothing of it.

    A line of several quantities holds theirs together, with their covariance, and has to be about the same
    channel as the value.
    """
    for name, quantity in document.model.quantities.items():
        if quantity.evidence is None:
            continue
        if any(line.quantity == name and line.evidence == quantity.evidence for line in document.components):
            continue
        columns = [
            column
            for line in document.components
            for column, own in line.quantities.items()
            if own == name and line.level == "calibration"
        ]
        behind = valued.get(name)
        study = None if behind is None else behind.study
        if not columns:
            collector.add(
                "#/components",
                f"no component holds the uncertainty of this very {name}",
                f"a component of the quantity {name!r} with the evidence of #/model/quantities/{name}",
            )
        elif study is not None and study.characteristic not in columns:
            detail = f"the value is of {study.characteristic!r}, its uncertainty that of {columns[0]!r}"
            collector.add(f"#/model/quantities/{name}/evidence/study", detail, "both of one channel")
