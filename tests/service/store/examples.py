"""Acts and statements that several of the store's tests use."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from typing import Any

from sqlalchemy import Connection, text

from service.ledger import Entry
from service.store.engine import make_engine
from service.store.unit_of_work import Database, UnitOfWork
from service.store.writer import Act

LINE = "tower-1"
START = datetime(2026, 3, 2, 5, 12, 43, 120934, UTC)


def note(
    text: str = "cup changed",
    *,
    chain: str = LINE,
    key: str | None = None,
    fingerprint: str | None = None,
    before: Callable[[UnitOfWork], None] | None = None,
    after: Callable[[UnitOfWork, Entry], None] | None = None,
) -> Act:
    """Return an act that records a note; ``before`` and ``after`` run around its entry."""

    def perform(unit: UnitOfWork) -> Entry:
        if before is not None:
            before(unit)
        entry = unit.append(chain, "note", "shift-2", {"text": text})
        if after is not None:
            after(unit, entry)
        return entry

    if key is not None and fingerprint is None:
        fingerprint = f"fingerprint of {text}"
    return Act(frozenset({chain}), "mes", perform, key, fingerprint)


def judge(
    lot: str, outcome: str = "release", *, product: str = "whole-milk-powder", chain: str = LINE
) -> Act:
    """Return an act that records a decision on a lot with one reading."""

    def keep(unit: UnitOfWork, entry: Entry) -> None:
        unit.decisions.add(product=product, lot=lot, round=1, outcome=outcome, entry=entry)
        unit.readings.add([("nir-1", f"taken of {product} {lot}", "1")], entry)
        unit.lots.upsert(product=product, lot=lot, line=chain, outcome=outcome, rounds=1, entry=entry)

    def perform(unit: UnitOfWork) -> Entry:
        content = {"product": product, "lot": lot, "outcome": outcome, "moisture": 3.135}
        entry = unit.append(chain, "decision", "mes", content)
        keep(unit, entry)
        return entry

    return Act(frozenset({chain}), "mes", perform)


def texts(database: Database, chain: str = LINE) -> list[str]:
    """Return the texts of all notes of a chain, in order."""
    with database.reading() as unit:
        return [entry.content["text"] for entry in unit.ledger.entries(chain)]


@contextmanager
def connected(url: str) -> Iterator[Connection]:
    """Yield a connection behind the store's back, closed whatever happens."""
    engine = make_engine(url, pool_size=1)
    try:
        with engine.connect() as connection:
            yield connection
    finally:
        engine.dispose()


def execute(url: str, *statements: str, values: dict[str, Any] | None = None) -> None:
    """Execute statements behind the store's back and commit."""
    with connected(url) as connection:
        for statement in statements:
            connection.execute(text(statement), values or {})
        connection.commit()


def drop_triggers(url: str, table: str) -> None:
    """Take away what protects a table, as only somebody with the owner's rights can."""
    if url.startswith("sqlite"):
        execute(url, *(f"DROP TRIGGER {table}_no_{act}" for act in ("update", "delete", "replace")))
    else:
        execute(url, f"DROP TRIGGER {table}_no_change ON {table}")
