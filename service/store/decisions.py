"""Repositories of decisions, lots and the readings that were judged."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict
from typing import Any

from sqlalchemy import Row, and_, bindparam, func, select, tuple_

from service.ledger import Entry
from service.store.record import entry_of
from service.store.rows import ReadingIdentity, StoredDecision, StoredLot, StoredReading
from service.store.session import Session
from service.store.tables import decisions, entries, lots, readings

_LOT = select(lots).where(lots.c.product == bindparam("of"), lots.c.lot == bindparam("named"))
_SEQUENCE = re.compile(r"[1-9][0-9]{0,17}")


def _decision(row: Row[Any]) -> StoredDecision:
    return StoredDecision(
        row.chain,
        row.sequence,
        row.product,
        row.lot,
        row.round,
        row.outcome,
        row.recorded_at,
        entry_of(row),
    )


class Decisions:
    """Decisions; each comes with the entry that says it in full."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def add(self, *, product: str, lot: str, round: int, outcome: str, entry: Entry) -> None:
        """Keep the look-up columns of a decision."""
        values = {
            "chain": entry.chain,
            "sequence": entry.sequence,
            "product": product,
            "lot": lot,
            "round": round,
            "outcome": outcome,
            "recorded_at": entry.recorded_at,
        }
        self._session.insert(decisions, values)

    def get(self, identity: str) -> StoredDecision | None:
        """Return the decision of an id such as ``tower-1.18233``, or None, also for what is no id."""
        chain, _, sequence = identity.rpartition(".")
        # Only the one way to write it is an id: no leading zeros, nothing beyond PostgreSQL's integer.
        if _SEQUENCE.fullmatch(sequence) is None:
            return None
        query = self._query().where(decisions.c.chain == chain, decisions.c.sequence == int(sequence))
        row = self._session.row(query, entries, decisions)
        return None if row is None else _decision(row)

    def list(
        self,
        *,
        product: str | None = None,
        lot: str | None = None,
        line: str | None = None,
        outcome: str | None = None,
        limit: int = 100,
        before: tuple[str, str, int] | None = None,
    ) -> list[StoredDecision]:
        """Return decisions, newest first; ``before`` is (recorded_at, chain, sequence) of a page's last."""
        query = self._query()
        wanted = {"product": product, "lot": lot, "chain": line, "outcome": outcome}
        for name, value in wanted.items():
            if value is not None:
                query = query.where(decisions.c[name] == value)
        order = (decisions.c.recorded_at, decisions.c.chain, decisions.c.sequence)
        if before is not None:
            query = query.where(tuple_(*order) < before)
        query = query.order_by(*(column.desc() for column in order)).limit(limit)
        return [_decision(row) for row in self._session.rows(query, entries, decisions)]

    def copies(self, chain: str, sequences: range) -> dict[int, tuple[str, str, int, str]]:
        """Return the look-up columns (product, lot, round, outcome) of a stretch of a chain, by sequence."""
        query = select(decisions).where(
            decisions.c.chain == chain,
            decisions.c.sequence >= sequences.start,
            decisions.c.sequence < sequences.stop,
        )
        rows = self._session.rows(query, decisions)
        return {row.sequence: (row.product, row.lot, row.round, row.outcome) for row in rows}

    @staticmethod
    def _query() -> Any:
        same_entry = and_(entries.c.chain == decisions.c.chain, entries.c.sequence == decisions.c.sequence)
        columns = (decisions.c.product, decisions.c.lot, decisions.c.round, decisions.c.outcome)
        return select(entries, *columns).join(decisions, same_entry)


class Lots:
    """Where each lot stands."""

    def __init__(self, session: Session) -> None:
        self._session = session
        self._changed: dict[tuple[str, str], StoredLot] = {}

    def get(self, product: str, lot: str) -> StoredLot | None:
        """Return where a lot stands, or None when it was never judged."""
        if (changed := self._changed.get((product, lot))) is not None:
            return changed
        row = self._session.row(_LOT, of=product, named=lot)
        return None if row is None else StoredLot(**row._mapping)

    def upsert(
        self, *, product: str, lot: str, line: str, outcome: str, rounds: int, entry: Entry
    ) -> StoredLot:
        """Set where a lot stands after a decision."""
        stored = StoredLot(
            product, lot, line, outcome, rounds, entry.chain, entry.sequence, entry.recorded_at
        )
        self._session.upsert(lots, asdict(stored))
        self._changed[product, lot] = stored
        return stored

    def list(
        self,
        *,
        outcome: str | None = None,
        product: str | None = None,
        line: str | None = None,
        limit: int = 100,
        before: tuple[str, str, str] | None = None,
    ) -> list[StoredLot]:
        """Return lots, last judged first; ``before`` is (recorded_at, product, lot) of a page's last."""
        query = select(lots)
        for name, value in {"outcome": outcome, "product": product, "line": line}.items():
            if value is not None:
                query = query.where(lots.c[name] == value)
        order = (lots.c.recorded_at, lots.c.product, lots.c.lot)
        if before is not None:
            query = query.where(tuple_(*order) < before)
        query = query.order_by(*(column.desc() for column in order)).limit(limit)
        return [StoredLot(**row._mapping) for row in self._session.rows(query, lots)]


class Readings:
    """Readings that were judged: the same one is never evidence twice."""

    def __init__(self, session: Session) -> None:
        self._session = session
        self._added: dict[ReadingIdentity, StoredReading] = {}
        self._added_at: dict[ReadingIdentity, StoredReading] = {}

    def find(self, identities: Iterable[ReadingIdentity]) -> Sequence[StoredReading]:
        """Return those of the identities that were used before."""
        return self._find(identities, ("analyzer", "identity", "sample"), self._added)

    def find_taken_at(self, instants: Iterable[ReadingIdentity]) -> Sequence[StoredReading]:
        """Return readings with an identity of their own that were taken at (analyzer, instant, sample)."""
        return self._find(instants, ("analyzer", "taken_at", "sample"), self._added_at)

    def _find(
        self,
        keys: Iterable[ReadingIdentity],
        names: tuple[str, str, str],
        added: Mapping[ReadingIdentity, StoredReading],
    ) -> Sequence[StoredReading]:
        wanted = list(dict.fromkeys(keys))
        earlier = [each for each in wanted if each not in added]
        rows = self._session.rows_among(readings, names, earlier)
        found = [added[each] for each in wanted if each in added]
        return found + [StoredReading(**row._mapping) for row in rows]

    def count(self) -> int:
        """Return how many readings are marked as used."""
        row = self._session.row(select(func.count().label("number")).select_from(readings), readings)
        assert row is not None
        return int(row.number)

    def list(self, *, after: ReadingIdentity | None = None, limit: int = 1000) -> list[StoredReading]:
        """Return readings in the order of their identities, beginning after one of them."""
        order = (readings.c.analyzer, readings.c.identity, readings.c.sample)
        query = select(readings)
        if after is not None:
            query = query.where(tuple_(*order) > after)
        rows = self._session.rows(query.order_by(*order).limit(limit), readings)
        return [StoredReading(**row._mapping) for row in rows]

    def add(
        self,
        identities: Iterable[ReadingIdentity],
        entry: Entry,
        taken_at: Mapping[ReadingIdentity, str] | None = None,
    ) -> None:
        """Mark readings as used by an entry; ``taken_at`` of those whose identity is not the instant."""
        instants = taken_at or {}
        for identity in identities:
            analyzer, name, sample = identity
            instant = instants.get(identity)
            stored = StoredReading(analyzer, name, sample, entry.chain, entry.sequence, instant)
            self._session.insert(readings, asdict(stored))
            self._added[identity] = stored
            if instant is not None:
                self._added_at[analyzer, instant, sample] = stored
