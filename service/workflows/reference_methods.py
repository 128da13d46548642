"""By which reference methods the evidence of a budget was found, and whether a requirement names another one.

A requirement that names a method is about the value which that method gives. A bias that was found against
another method says nothing of it, however good the agreement was.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any, Final

from service.documents import BudgetDocument, Evidence, Requirement, Study, StudyEvidence
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import FaultCollector

# Estimates of a comparison that come from the readings of the analyzer alone.
_OF_THE_ANALYZER: Final = ("repeatability_beyond_study",)


def is_same_method(one: str, other: str) -> bool:
    """Say whether two texts name one method; capitals and blanks make no difference, editions do."""
    return one.casefold().split() == other.casefold().split()


def laboratory_methods(unit_of_work: UnitOfWork, laboratory: str) -> dict[str, str]:
    """Give the method of a laboratory for each characteristic, as it measures now."""
    stored = unit_of_work.master.get("laboratory", laboratory)
    methods = {} if stored is None else stored.document["methods"]
    return {code: method["method"] for code, method in methods.items()}


def methods_of_study(unit_of_work: UnitOfWork, study: Study) -> dict[str, str]:
    """Give the method behind each characteristic of a study that is about to be recorded."""
    if study.laboratory is None:
        return {}
    known = laboratory_methods(unit_of_work, study.laboratory)
    about = dict.fromkeys((study.characteristic, *study.characteristics))
    return {code: known[code] for code in about if code in known}


def check_stated_methods(unit_of_work: UnitOfWork, study: Study, collector: FaultCollector) -> None:
    """Refuse a study that states another method than its laboratory has for the characteristic."""
    known = methods_of_study(unit_of_work, study)
    for code, stated in study.reference_methods.items():
        if code not in known or not is_same_method(known[code], stated):
            measured = f"{known[code]!r}, by which {study.laboratory} measures it" if code in known else ""
            expected = measured or "a characteristic of the study that its laboratory has a method for"
            collector.add(f"#/reference_methods/{code}", f"got {stated!r}", expected)


def check_requirement(
    unit_of_work: UnitOfWork, requirement: Requirement, document: BudgetDocument, label: str
) -> None:
    """Refuse a budget whose reference values were found by another method than a requirement names.

    Where nothing says by which method they were found it is refused as well: an unknown method proves nothing
    about the one that was agreed.

    Raises
    ------
    InvalidRequest
        With a fault for each study or laboratory behind the budget that is at fault.
    """
    if requirement.method is None:
        return
    collector = FaultCollector()
    derived_from = _derived_from(unit_of_work, document)
    for code, study in _validations(unit_of_work, document).items():
        if derived_from:
            found = _of_derived(unit_of_work, study["laboratory"], document.characteristic)
        else:
            found = _of_recorded(unit_of_work, study, document.characteristic)
        if found is None:
            why = (
                f"the laboratory {study['laboratory']!r} has no method for {document.characteristic!r}"
                if study["laboratory"]
                else f"{code} names no laboratory"
            )
            detail = (
                f"{label}: {why}, so nothing shows that its reference values are by {requirement.method!r}"
            )
            expected = f"a validation against a laboratory that measures by {requirement.method!r}"
            collector.add("#", detail, expected)
        elif not is_same_method(found, requirement.method):
            detail = f"{label}: the reference values of {code} were found by {found!r}"
            collector.add("#", detail, f"a validation against {requirement.method!r}, which is required")
    collector.finish("The evidence belongs to another method than the specification requires.")


def _derived_from(unit_of_work: UnitOfWork, document: BudgetDocument) -> bool:
    key = f"{document.product}/{document.characteristic}"
    stored = unit_of_work.master.get("characteristic", key)
    return stored is not None and bool(stored.document["derived_from"])


def _of_derived(unit_of_work: UnitOfWork, laboratory: str | None, characteristic: str) -> str | None:
    """Give the method of what a laboratory computes itself: the studies behind it are about its parts."""
    return None if laboratory is None else laboratory_methods(unit_of_work, laboratory).get(characteristic)


def _of_recorded(unit_of_work: UnitOfWork, study: Mapping[str, Any], characteristic: str) -> str | None:
    # Studies recorded before methods were written down with them: the laboratory's of today.
    methods: Mapping[str, str] = study.get("reference_methods") or {}
    return methods.get(characteristic) or _of_derived(unit_of_work, study["laboratory"], characteristic)


def _validations(unit_of_work: UnitOfWork, document: BudgetDocument) -> dict[str, Mapping[str, Any]]:
    """Give the studies behind a budget that compare with reference values, by code."""
    found: dict[str, Mapping[str, Any]] = {}
    for evidence in _evidence(document):
        if not isinstance(evidence, StudyEvidence) or evidence.estimate in _OF_THE_ANALYZER:
            continue
        stored = unit_of_work.studies.get(evidence.study)
        assert stored is not None  # resolved before
        columns = stored.document["columns"]
        if any(name == "reference" or name.endswith("_reference") for name in columns):
            found[evidence.study] = stored.document
    return found


def _evidence(document: BudgetDocument) -> Iterator[Evidence]:
    yield from (line.evidence for line in document.components)
    yield from (item.evidence for item in document.model.quantities.values() if item.evidence is not None)
