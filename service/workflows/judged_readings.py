"""Whether the readings that count as judged are those of the recorded decisions: each of them, and no others.

A row that is missing would let a reading be evidence twice, a row too many would bar one that never was.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import islice

from service.ledger import Entry, Finding
from service.store.unit_of_work import ReadingIdentity, StoredReading, UnitOfWork
from service.workflows.request_checks import recorded_reading

# So many are looked up at a time, however many readings a page of entries has.
LOOKED_UP = 1000


class JudgedReadings:
    """Compares the table of readings with decisions, page by page, in constant memory."""

    def __init__(self, unit_of_work: UnitOfWork) -> None:
        self._unit_of_work = unit_of_work
        self._expected = 0

    def finding_among(self, page: Sequence[Entry]) -> Finding | None:
        """Give the first reading of a page of entries that does not stand in the table as it was judged."""
        said = ((identity, instant, entry) for entry in page for identity, instant in _readings(entry))
        while some := list(islice(said, LOOKED_UP)):
            self._expected += len(some)
            stored = self._unit_of_work.readings.find(identity for identity, _, _ in some)
            found = {_key(row): row for row in stored}
            for identity, instant, entry in some:
                row = found.get(identity)
                if row is None:
                    return _finding(entry, identity, "is missing from the readings that were judged")
                if (row.chain, row.sequence) != (entry.chain, entry.sequence):
                    return _finding(entry, identity, "stands in the tables as one of another decision")
                # Rows that are older than the column have no instant.
                if row.taken_at not in (None, instant):
                    return _finding(entry, identity, "stands in the tables as taken at another time")
        return None

    def finding_beyond(self) -> Finding | None:
        """Give the first row of the table that no decision speaks of; asked after all pages."""
        # All that were judged were found, so equal numbers mean that there is no other row.
        if self._unit_of_work.readings.count() == self._expected:
            return None
        after: ReadingIdentity | None = None
        while rows := self._unit_of_work.readings.list(after=after, limit=LOOKED_UP):
            for row in rows:
                entry = self._unit_of_work.ledger.entry(row.chain, row.sequence)
                if entry is None or _key(row) not in [identity for identity, _ in _readings(entry)]:
                    detail = f"{_name(_key(row))} stands in the tables as judged, but no entry says so"
                    return Finding(row.chain, row.sequence, detail)
            after = _key(rows[-1])
        return Finding("plant", None, "the readings that were judged are other ones than the decisions say")


def _readings(entry: Entry) -> list[tuple[ReadingIdentity, str]]:
    if entry.kind != "decision":
        return []
    return [recorded_reading(reading) for reading in entry.content["request"]["readings"]]


def _key(row: StoredReading) -> ReadingIdentity:
    return row.analyzer, row.identity, row.sample


def _finding(entry: Entry, identity: ReadingIdentity, what: str) -> Finding:
    return Finding(entry.chain, entry.sequence, f"{_name(identity)} {what}")


def _name(identity: ReadingIdentity) -> str:
    analyzer, moment, sample = identity
    return f"the reading {analyzer}/{moment}/{sample}"
