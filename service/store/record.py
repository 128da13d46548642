"""Repositories of the record itself: entries, heads of chains, idempotency keys."""

from __future__ import annotations

import heapq
from collections.abc import Collection, Mapping, Sequence
from itertools import islice
from typing import Any

from sqlalchemy import LargeBinary, Row, bindparam, cast, select

from service.ledger import Entry, Head, StoredEntry
from service.store.rows import StoredKey
from service.store.session import Session
from service.store.tables import chains, entries, idempotency_keys

LARGEST_PAGE = 1000
_AS_STORED: tuple[Any, ...] = (entries,)
# A body that somebody altered may be text by now; verification must be able to read it all the same.
_AS_BYTES: list[Any] = [column for column in entries.c if column.name != "body"]
_AS_BYTES.append(cast(entries.c.body, LargeBinary).label("body"))

_ENTRY = select(entries).where(entries.c.chain == bindparam("of"), entries.c.sequence == bindparam("at"))
_HEADS = select(chains).order_by(chains.c.chain)


def entry_of(row: Row[Any]) -> Entry:
    """Return the entry that a row of ``entries`` holds."""
    return Entry(
        row.chain, row.sequence, row.previous, row.recorded_at, row.actor, row.kind, bytes(row.body), row.hash
    )


class Ledger:
    """Reads entries and heads."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def entry(self, chain: str, sequence: int) -> Entry | None:
        """Return one entry."""
        row = self._session.row(_ENTRY, entries, of=chain, at=sequence)
        return None if row is None else entry_of(row)

    def entries(self, chain: str, *, after: int = 0, limit: int = LARGEST_PAGE) -> list[Entry]:
        """Return entries of a chain in order, beginning after a sequence number."""
        return [entry_of(row) for row in self._rows(chain, after, limit)]

    def stored_entries(
        self, chain: str, *, after: int | None = None, limit: int = LARGEST_PAGE
    ) -> list[StoredEntry]:
        """Return entries with their column copies as they stand, for verification; None: from the first."""
        return [
            StoredEntry(
                row.chain,
                row.sequence,
                row.recorded_at,
                row.actor,
                row.kind,
                row.previous,
                row.hash,
                bytes(row.body),
            )
            for row in self._rows(chain, after, limit, columns=_AS_BYTES)
        ]

    def heads(self) -> dict[str, Head]:
        """Return the heads of all chains by chain."""
        found = self._session.rows(_HEADS)
        return {row.chain: Head(row.chain, row.sequence, row.hash, row.recorded_at) for row in found}

    def chain_names(self) -> list[str]:
        """Return the chains that have entries, whether or not they have a head."""
        found = self._session.rows(select(entries.c.chain).distinct().order_by(entries.c.chain), entries)
        return [row.chain for row in found]

    def events(self, after: Mapping[str, int], limit: int = 100) -> tuple[list[Entry], dict[str, int]]:
        """Return what happened after a position, in order of time, and the position reached.

        A position holds a sequence number per chain. It cannot miss an entry that was committed late:
        within a chain entries become visible in their order, between chains they need not.
        """
        position = dict(after)
        pages = [self.entries(chain, after=position.get(chain, 0), limit=limit) for chain in self.heads()]
        merged = heapq.merge(*pages, key=lambda entry: (entry.recorded_at, entry.chain, entry.sequence))
        found = list(islice(merged, limit))
        for entry in found:
            position[entry.chain] = entry.sequence
        return found, position

    def of_actor(self, chain: str, actor: str, kinds: Collection[str]) -> list[Entry]:
        """Return what one actor did of some kinds, in order."""
        query = select(*_AS_STORED).where(
            entries.c.chain == chain, entries.c.actor == actor, entries.c.kind.in_(kinds)
        )
        return [entry_of(row) for row in self._session.rows(query.order_by(entries.c.sequence), entries)]

    def _rows(
        self, chain: str, after: int | None, limit: int, columns: Sequence[Any] = _AS_STORED
    ) -> Sequence[Row[Any]]:
        query = select(*columns).where(entries.c.chain == chain)
        if after is not None:
            query = query.where(entries.c.sequence > after)
        return self._session.rows(query.order_by(entries.c.sequence).limit(limit), entries)


class Keys:
    """Idempotency keys, looked up for a whole batch at once."""

    def __init__(self, session: Session) -> None:
        self._session = session
        self._known: dict[tuple[str, str], StoredKey | None] = {}

    def find(self, principal: str, key: str) -> StoredKey | None:
        """Return what a principal's key stands for."""
        pair = (principal, key)
        if pair not in self._known:
            self.prefetch([pair])
        return self._known[pair]

    def prefetch(self, pairs: list[tuple[str, str]]) -> None:
        """Look up many keys by one query; a writing unit of work holds the lock that keeps this true."""
        unknown = [pair for pair in pairs if pair not in self._known]
        found = self._session.rows_among(idempotency_keys, ("principal", "key"), unknown)
        self._known.update(dict.fromkeys(unknown))
        for row in found:
            self._known[row.principal, row.key] = StoredKey(row.fingerprint, row.chain, row.sequence)

    def add(self, principal: str, key: str, fingerprint: str, entry: Entry) -> None:
        """Keep a key in the transaction of its entry."""
        self._session.insert(
            idempotency_keys,
            {
                "principal": principal,
                "key": key,
                "fingerprint": fingerprint,
                "chain": entry.chain,
                "sequence": entry.sequence,
            },
        )
        self._known[principal, key] = StoredKey(fingerprint, entry.chain, entry.sequence)
