"""The unit of work: one transaction, its repositories, and the one way an entry gets into a chain.

Leaving the block without ``commit()`` rolls back. A writing unit holds the heads of the chains it named
from its first moment on, so whatever it reads stays true until it commits.
"""

from __future__ import annotations

import os
import time
import weakref
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from typing import Any

from sqlalchemy import Connection, Text, bindparam, cast, func, select, update
from sqlalchemy.dialects.postgresql import ARRAY

from service.errors import NotFound
from service.ledger import GENESIS, Entry, Head, format_instant, write_entry
from service.store.accounts import People, Tokens
from service.store.clock_watch import ClockWatch
from service.store.decisions import Decisions, Lots, Readings
from service.store.engine import BEGIN_OPTION, driver_errors, make_engine
from service.store.master_data import Master
from service.store.record import Keys, Ledger
from service.store.rows import (
    Document,
    ReadingIdentity,
    StoredDecision,
    StoredDocument,
    StoredExtension,
    StoredKey,
    StoredLot,
    StoredPerson,
    StoredReading,
    StoredRule,
    StoredStudy,
    StoredToken,
    StoredVersion,
)
from service.store.session import Session
from service.store.studies import Studies
from service.store.study_extensions import StudyExtensions
from service.store.tables import chains, entries, revision
from service.store.versions import Rules, Versions

__all__ = [
    "PLANT",
    "Clock",
    "Database",
    "Document",
    "ReadingIdentity",
    "StoredDecision",
    "StoredDocument",
    "StoredExtension",
    "StoredKey",
    "StoredLot",
    "StoredPerson",
    "StoredReading",
    "StoredRule",
    "StoredStudy",
    "StoredToken",
    "StoredVersion",
    "UnitOfWork",
    "system_clock",
]

PLANT = "plant"
"""The chain of approvals, master data, people and studies."""
_REVISION = select(revision.c.revision).where(revision.c.id == 1)
_LOCKED_HEADS = (
    select(chains.c.chain)
    .where(chains.c.chain == func.any(cast(bindparam("names"), ARRAY(Text))))
    .order_by(chains.c.chain)
    .with_for_update()
)
_NEW_CHAIN_LOCK = 0x53484D4B
"""PostgreSQL advisory lock held while a chain gets its first entry: there is no head row to lock yet."""

Clock = Callable[[], datetime]


def system_clock() -> datetime:
    """Return this machine's time."""
    return datetime.now(UTC)


class UnitOfWork:
    """One transaction; made by ``Database.reading`` and ``Database.writing`` only."""

    def __init__(
        self,
        connection: Connection,
        clock: Clock | None,
        locked: frozenset[str] | None,
        watch: ClockWatch | None = None,
    ) -> None:
        self._watch = watch
        self._connection = connection
        self.session = session = Session(connection, may_write=locked is not None)
        self._locked = locked or frozenset()
        self._clock = clock
        self._heads: dict[str, Head] | None = None
        self._moved: set[str] = set()
        self._latest = ""
        self._moment: str | None = None
        self._asked: tuple[datetime, float] | None = None
        self._revision: int | None = None
        self._writes_before = 0
        self.revision_moved = False
        self.appended: list[Entry] = []
        self.ledger = Ledger(session)
        self.keys = Keys(session)
        self.master = Master(session)
        self.versions = Versions(session)
        self.rules = Rules(session)
        self.studies = Studies(session)
        self.extensions = StudyExtensions(session)
        self.decisions = Decisions(session)
        self.lots = Lots(session)
        self.readings = Readings(session)
        self.people = People(session)
        self.tokens = Tokens(session)

    def now(self, chain: str) -> str:
        """Return the ``recorded_at`` of this act: the clock, but never before anything recorded earlier.

        It is fixed for the act. Every head counts, not only that of ``chain``, so that an approval in the
        plant's chain and a decision in a line's keep the order in which they happened if a clock steps back.
        """
        heads = self._read_heads()
        if self._moment is None:
            instant = self._read_clock()
            self._moment = format_instant(instant)
            if self._watch is not None:
                self._watch.look(instant, self._latest)
        previous = heads[chain].recorded_at if chain in heads else ""
        return max(self._moment, previous, self._latest)

    def append(self, chain: str, kind: str, actor: str, content: Mapping[str, Any]) -> Entry:
        """Write an entry at the end of a chain that this unit of work holds."""
        if chain not in self._locked:
            raise RuntimeError(f"the chain {chain} is not held by this unit of work")
        head = self._read_heads().get(chain)
        entry = write_entry(
            chain=chain,
            sequence=1 if head is None else head.sequence + 1,
            previous=GENESIS if head is None else head.hash,
            recorded_at=self.now(chain),
            actor=actor,
            kind=kind,
            content=content,
        )
        columns = ("chain", "sequence", "recorded_at", "actor", "kind", "previous", "hash", "body")
        self.session.insert(entries, {name: getattr(entry, name) for name in columns})
        self._read_heads()[chain] = Head(chain, entry.sequence, entry.hash, entry.recorded_at)
        self._moved.add(chain)
        self._latest = max(self._latest, entry.recorded_at)
        self.appended.append(entry)
        return entry

    def revision(self) -> int:
        """Return the number that counts the acts which can change a verdict."""
        if self._revision is None:
            row = self.session.row(_REVISION)
            if row is None:
                raise NotFound("the row of the revision is missing from the database")
            self._revision = int(row.revision)
        return self._revision

    def bump_revision(self) -> int:
        """Count one more act that can change a verdict; needs the plant's chain."""
        if PLANT not in self._locked:
            raise RuntimeError("an act that changes the revision holds the plant's chain")
        self._revision = self.revision() + 1
        self.revision_moved = True
        self.session.write(update(revision).where(revision.c.id == 1).values(revision=self._revision))
        return self._revision

    def begin_act(self) -> None:
        """Begin the next act of a batch: a moment of its own, and nothing written yet."""
        self._moment = None
        self._writes_before = self.session.writes
        self.appended = []

    @property
    def act_left_traces(self) -> bool:
        """Say whether the act since ``begin_act`` wrote anything, or broke the transaction."""
        return self.session.broken or self.session.writes != self._writes_before

    def commit(self) -> None:
        """Write what was gathered, move the heads, and commit."""
        heads = self._read_heads() if self._moved else {}
        for chain in sorted(self._moved):
            head = heads[chain]
            values = {"chain": chain, "sequence": head.sequence, "hash": head.hash}
            self.session.upsert(chains, {**values, "recorded_at": head.recorded_at})
        self._moved.clear()
        self.session.flush_all()
        with driver_errors():
            self._connection.commit()

    def hold(self) -> None:
        """Take the locks on PostgreSQL; on SQLite the transaction itself is the lock."""
        if self.session.postgresql:
            self._lock_heads()
            # An act in the plant's chain excludes decisions for its moment; decisions exclude no other.
            # So the order of recorded_at is the order in which versions came into force and were used.
            statement = _REVISION.with_for_update(read=PLANT not in self._locked)
            if (row := self.session.row(statement)) is not None:
                self._revision = int(row.revision)
        self._read_heads()

    def _lock_heads(self) -> None:
        names = sorted(self._locked)
        if len(self.session.rows(_LOCKED_HEADS, names=names)) == len(names):
            return
        # A chain without entries has no row to lock. Begin again: whoever waits for this lock must hold
        # nothing that its holder may wait for.
        self._connection.rollback()
        self.session.row(select(func.pg_advisory_xact_lock(_NEW_CHAIN_LOCK)))
        self.session.rows(_LOCKED_HEADS, names=names)

    def _read_heads(self) -> dict[str, Head]:
        if self._heads is None:
            self._heads = self.ledger.heads()
            self._latest = max((head.recorded_at for head in self._heads.values()), default="")
        return self._heads

    def _read_clock(self) -> datetime:
        if self._clock is not None:
            return self._clock()
        if not self.session.postgresql:
            return system_clock()
        return self._database_clock()

    def _database_clock(self) -> datetime:
        """Return the database's time: asked once per transaction, then carried on by our own stop-watch."""
        if self._asked is None:
            row = self.session.row(select(func.clock_timestamp().label("instant")))
            assert row is not None
            self._asked = (row.instant, time.monotonic())
        instant, asked = self._asked
        return instant + timedelta(seconds=time.monotonic() - asked)


class Database:
    """A database by URL; hands out units of work. Safe to share between threads, and after a fork."""

    def __init__(self, url: str, *, clock: Clock | None = None) -> None:
        """Without a clock SQLite takes this machine's time and PostgreSQL its own."""
        self.url = url
        self._clock = clock
        self._watch = ClockWatch()
        self._engine = make_engine(url)
        self.dialect = self._engine.dialect.name
        if hasattr(os, "register_at_fork"):
            reference = weakref.ref(self)
            os.register_at_fork(after_in_child=lambda: _forget_connections(reference))

    @contextmanager
    def reading(self) -> Iterator[UnitOfWork]:
        """Open a unit of work that only reads, all from one state of the database."""
        with driver_errors():
            connection = self._engine.connect()
        with connection:
            if self.dialect == "postgresql":
                connection = connection.execution_options(
                    isolation_level="REPEATABLE READ", postgresql_readonly=True
                )
            yield UnitOfWork(connection, self._clock, None)

    @contextmanager
    def writing(self, chains: Iterable[str], *, clock: Clock | None = None) -> Iterator[UnitOfWork]:
        """Open a unit of work that may append to the chains named; it rolls back unless committed."""
        with driver_errors():
            connection = self._engine.connect()
        with connection:
            if self.dialect == "sqlite":
                connection = connection.execution_options(**{BEGIN_OPTION: "BEGIN IMMEDIATE"})
            else:
                connection = connection.execution_options(isolation_level="READ COMMITTED")
            unit = UnitOfWork(connection, clock or self._clock, frozenset(chains), self._watch)
            unit.hold()
            yield unit

    def close(self) -> None:
        """Close all connections that are not in use."""
        self._engine.dispose()


def _forget_connections(reference: weakref.ref[Database]) -> None:
    """In a forked child: drop the parent's connections without closing them under the parent's feet."""
    if (database := reference()) is not None:
        database._engine.dispose(close=False)
