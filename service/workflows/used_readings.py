"""A reading is evidence once: whether one was judged before, and marking it as used.

A measurement's own identity names a reading across times; the instant names it where one of two tellings of
it came without that identity.
"""

from __future__ import annotations

from service.documents import DecisionRequest
from service.errors import Conflict
from service.ledger import Entry
from service.store.unit_of_work import StoredReading, UnitOfWork
from service.workflows.request_checks import reading_identity, reading_instant


def check_unused(unit_of_work: UnitOfWork, request: DecisionRequest) -> None:
    """Refuse readings that were judged before, in any lot. Raises Conflict."""
    first = _used(unit_of_work, request)
    if first is not None:
        raise Conflict(
            "reading-already-judged",
            f"The reading of sample {first.sample} on {first.analyzer} ({first.identity}) was judged before; "
            "the same reading again is no new evidence.",
            link=f"/v1/decisions/{first.chain}.{first.sequence}",
        )


def _used(unit_of_work: UnitOfWork, request: DecisionRequest) -> StoredReading | None:
    named = [reading_identity(reading) for reading in request.readings]
    # One that was judged without its measurement stands under its instant.
    named += [reading_instant(reading) for reading in request.readings if reading.measurement is not None]
    if found := unit_of_work.readings.find(named):
        return found[0]
    unnamed = [reading_instant(reading) for reading in request.readings if reading.measurement is None]
    found = unit_of_work.readings.find_taken_at(unnamed)
    return found[0] if found else None


def mark_used(unit_of_work: UnitOfWork, request: DecisionRequest, entry: Entry) -> None:
    """Keep that the readings of a request are evidence now."""
    unit_of_work.readings.add(
        [reading_identity(reading) for reading in request.readings],
        entry,
        {
            reading_identity(reading): reading_instant(reading)[1]
            for reading in request.readings
            if reading.measurement is not None
        },
    )
