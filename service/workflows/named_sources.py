"""Named sources: what a study takes out of its own scatter, found on the same thing as the study."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, Final

from budgets.evidence.study_tables import NamedSource
from service.documents import LaboratoryEvidence, Study
from service.documents import NamedSource as DocumentedSource
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import Behind, FaultCollector
from service.workflows.laboratories import resolve, used
from service.workflows.reference_methods import is_same_method, methods_of_study

# The component of a laboratory that a source of the reference method may be taken from.
_COMPONENTS: Final = {"reference_repeatability": "repeatability", "reference_run": "run"}


@dataclass(frozen=True)
class ResolvedSource:
    """A source with its estimate and, where it was taken from a laboratory, from which entry."""

    source: NamedSource
    laboratory: Mapping[str, Any] | None


def resolve_source(unit_of_work: UnitOfWork, study: Study, index: int) -> ResolvedSource:
    """Find the estimate of one of a study's named sources.

    Raises
    ------
    InvalidRequest
        There is no such evidence, or it was found on something else than the study.
    """
    named = study.named_sources[index]
    pointer = f"#/named_sources/{index}/evidence"
    if isinstance(named.evidence, LaboratoryEvidence):
        _check_laboratory_fits(study, named, named.evidence, pointer)
    behind = resolve(
        unit_of_work,
        named.evidence,
        code=f"{study.code}/{named.source}",
        unit=study.unit,
        pointer=pointer,
        characteristic=named.quantity or study.characteristic,
    )
    _check_served(study, behind, pointer)
    if behind.study is not None:
        methods = {**methods_of_study(unit_of_work, study), **study.reference_methods}
        ours = replace(study, reference_methods=methods)
        _check_study_fits(behind.study, ours, named, f"{pointer}/study")
    source = NamedSource(source=named.source, estimate=behind.estimate, quantity=named.quantity or "")
    particulars = {"source": named.source, "quantity": named.quantity}
    return ResolvedSource(source, None if behind.laboratory is None else used(behind, **particulars))


def _check_served(study: Study, behind: Behind, pointer: str) -> None:
    """Refuse what did not serve any more when the study was made: it says nothing of the study's scatter."""
    collector = FaultCollector()
    if behind.serves_until is not None and behind.serves_until < study.done_on:
        expected = f"one that served on {study.done_on}, when this study was made"
        collector.add(pointer, f"it served until {behind.serves_until}", expected)
    collector.finish("A named source had lapsed.")


def _check_laboratory_fits(
    study: Study, named: DocumentedSource, evidence: LaboratoryEvidence, pointer: str
) -> None:
    """Refuse another laboratory's component, or one that is no such source."""
    collector = FaultCollector()
    wanted = _COMPONENTS.get(named.source)
    if wanted is None:
        collector.add(pointer, f"{named.source} is no error of a laboratory", "a study or a declaration")
    elif evidence.component != wanted:
        detail = f"the {evidence.component} of a laboratory is not its {named.source.replace('_', ' ')}"
        collector.add(f"{pointer}/component", detail, f"{wanted!r}")
    if evidence.laboratory != study.laboratory:
        whose = f"come from {study.laboratory!r}" if study.laboratory else "name no laboratory"
        collector.add(
            f"{pointer}/laboratory",
            f"got {evidence.laboratory!r}; the reference values {whose}",
            "the laboratory of the study",
        )
    about = (named.quantity,) if named.quantity else (study.characteristic, *study.characteristics)
    if evidence.characteristic is not None and evidence.characteristic not in about:
        collector.add(
            f"{pointer}/characteristic", f"got {evidence.characteristic!r}", f"one of {', '.join(about)}"
        )
    collector.finish("A named source belongs to something else.")


def _check_study_fits(theirs: Study, ours: Study, named: DocumentedSource, pointer: str) -> None:
    """Refuse to take out of a validation what was found on something else.

    A reference method may have been studied on another product, an analyzer only on its own calibration.
    """
    collector = FaultCollector()
    wanted = {named.quantity} if named.quantity else set(ours.characteristics or (ours.characteristic,))
    found = {theirs.characteristic, *theirs.characteristics}
    if not wanted <= found:
        detail = f"{theirs.code} is about {' and '.join(sorted(found))}"
        collector.add(pointer, detail, f"a study about {' and '.join(sorted(wanted))}")
    if named.source.startswith(("analyzer", "presentation")):
        _check_analyzer(theirs, ours, pointer, collector)
    if named.source.startswith("reference"):
        _check_reference(theirs, ours, wanted, pointer, collector)
    collector.finish("A named source belongs to something else.")


def _check_analyzer(theirs: Study, ours: Study, pointer: str, collector: FaultCollector) -> None:
    if theirs.product != ours.product:
        collector.add(pointer, f"{theirs.code} is about the product {theirs.product!r}", f"{ours.product!r}")
    if theirs.calibrations != ours.calibrations:
        detail = f"{theirs.code} was not made on the calibration of this study"
        collector.add(pointer, detail, f"a study made on {', '.join(ours.calibrations.values()) or 'none'}")


def _check_reference(
    theirs: Study, ours: Study, wanted: set[str], pointer: str, collector: FaultCollector
) -> None:
    if theirs.calibrations:
        detail = f"{theirs.code} was made on {', '.join(theirs.calibrations)}"
        collector.add(pointer, detail, "a study of the reference method itself")
    if None not in (theirs.laboratory, ours.laboratory) and theirs.laboratory != ours.laboratory:
        detail = f"{theirs.code} was made in the laboratory {theirs.laboratory!r}"
        collector.add(pointer, detail, f"one made in {ours.laboratory!r}, as the reference values")
    for code in sorted(wanted & theirs.reference_methods.keys() & ours.reference_methods.keys()):
        method, needed = theirs.reference_methods[code], ours.reference_methods[code]
        if not is_same_method(method, needed):
            detail = f"{theirs.code} was made by the method {method!r}"
            collector.add(pointer, detail, f"one made by {needed!r}, as the reference values")
