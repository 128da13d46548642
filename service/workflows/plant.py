"""The plant document: calendar and defaults that can change a verdict; approved like a specification."""

from __future__ import annotations

from typing import Final
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from budgets.evidence.study_data import DESIGNS
from service.documents import Plant
from service.schemas import load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.budget_validation import Findings
from service.workflows.calendar import DEFAULT_PLANT
from service.workflows.evidence import FaultCollector
from service.workflows.versioned_kind import Approval, VersionedKind

CODE: Final = "plant"


def in_force(unit_of_work: UnitOfWork) -> Plant:
    """Give the plant document in force, or the defaults."""
    stored = unit_of_work.versions.in_force("plant", CODE)
    return DEFAULT_PLANT if stored is None else load(Plant, stored.document)


def _check(unit_of_work: UnitOfWork, document: Plant) -> None:
    collector = FaultCollector()
    try:
        ZoneInfo(document.time_zone)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        collector.add("#/time_zone", f"got {document.time_zone!r}", "a time zone of the IANA data base")
    for design in document.serving_days:
        if design not in DESIGNS:
            collector.add(f"#/serving_days/{design}", "is no study design", f"one of {', '.join(DESIGNS)}")
    collector.finish("The plant document cannot be used.")


def _approval(unit_of_work: UnitOfWork, stored: StoredVersion, document: Plant, found: Findings) -> Approval:
    return Approval()


PLANT: Final = VersionedKind(
    name="plant",
    document_class=Plant,
    subject=lambda document: (None, None),
    check=_check,
    approval=_approval,
    singleton=True,
)
