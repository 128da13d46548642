"""The range that a budget claims, against the reference values that its validation had."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Final

from budgets.evidence.evaluation import EvaluationWarning
from budgets.units import convert
from service.documents import BudgetDocument, Study, StudyEvidence
from service.schemas import load
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import Behind, FaultCollector

_ALL: Final = ("reference_lowest", "reference_highest")
_BULK: Final = ("validated_range_lower", "validated_range_upper")


def check_ranges(document: BudgetDocument, behind: Sequence[Behind], collector: FaultCollector) -> None:
    """Refuse a validated range beyond all reference values of the validation (ISO 12099, from memory)."""
    for item in behind:
        if item.study is None:
            continue
        for name, claimed, ends in _beyond(document, item.study, item.diagnostics, _ALL):
            collector.add_once(
                "#/validated_range" if name == document.characteristic else f"#/validated_ranges/{name}",
                f"got {claimed[0]:g} to {claimed[1]:g}; the reference values of {item.study.code} "
                f"run from {ends[0]:g} to {ends[1]:g}",
                "a range within them, best the bulk of them",
            )


def range_warnings(unit_of_work: UnitOfWork, document: BudgetDocument) -> tuple[EvaluationWarning, ...]:
    """Say where a validated range reaches beyond the bulk of the reference values, to their extremes."""
    evidence = [line.evidence for line in document.components]
    evidence += [each.evidence for each in document.model.quantities.values() if each.evidence is not None]
    warnings: dict[str, None] = {}
    for code in dict.fromkeys(item.study for item in evidence if isinstance(item, StudyEvidence)):
        stored = unit_of_work.studies.get(code)
        if stored is None:
            continue
        study = load(Study, stored.document)
        for name, claimed, ends in _beyond(document, study, stored.evaluation["diagnostics"], _BULK):
            warnings[
                f"the range of {name}, {claimed[0]:g} to {claimed[1]:g}, reaches beyond the bulk of the "
                f"reference values of {code}, of which nine in ten lie from {ends[0]:.4g} to {ends[1]:.4g}: "
                "few pairs vouch for its ends"
            ] = None
    return tuple(EvaluationWarning("range-beyond-the-bulk", detail) for detail in warnings)


_Ends = tuple[float, float]


def _beyond(
    document: BudgetDocument, study: Study, diagnostics: Mapping[str, Any], named: tuple[str, str]
) -> Iterator[tuple[str, _Ends, _Ends]]:
    """Give each channel whose claimed range goes beyond the ends that a study names, in the budget's unit."""
    for name, lowest, highest in _ends(study, diagnostics, named):
        own = name == document.characteristic
        bounds = document.validated_range if own else document.validated_ranges.get(name)
        if bounds is None or bounds.lower is None or bounds.upper is None:
            continue
        quantity = document.model.quantities.get(name)
        unit = document.unit if own or quantity is None else quantity.unit
        ends = convert(lowest, study.unit, unit), convert(highest, study.unit, unit)
        if bounds.lower < ends[0] or bounds.upper > ends[1]:
            yield name, (bounds.lower, bounds.upper), ends


def _ends(
    study: Study, diagnostics: Mapping[str, Any], named: tuple[str, str]
) -> Iterator[tuple[str, float, float]]:
    """Give both ends of the reference values of each channel that a validation is about."""
    lowest, highest = (diagnostics.get(end) for end in named)
    if lowest is None or highest is None:
        return
    if isinstance(lowest, Mapping):
        yield from ((name, lowest[name], highest[name]) for name in lowest)
    else:
        yield study.characteristic, lowest, highest
