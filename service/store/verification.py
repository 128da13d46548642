"""Is the record whole? Reads every entry in constant memory and names the first fault."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

from sqlalchemy import ColumnElement, Select, Table, and_, or_, select

from service.ledger import Anchor, ChainCheck, Finding, Head, StoredEntry
from service.store.record import LARGEST_PAGE, Ledger
from service.store.session import Session
from service.store.tables import (
    decisions,
    entries,
    idempotency_keys,
    lots,
    readings,
    studies,
    study_extensions,
)
from service.store.triggers import missing_triggers
from service.store.unit_of_work import Database

DECISION = "decision"
"""The kind of the entries that have a row in ``decisions``, all of them and no others."""


@dataclass(frozen=True)
class VerifiedChain:
    """A chain that was read to its end: how many entries it has and the hash of the last."""

    chain: str
    entries: int
    hash: str


@dataclass(frozen=True)
class Verification:
    """What was found whole, and the first thing that is not."""

    chains: tuple[VerifiedChain, ...]
    finding: Finding | None

    @property
    def whole(self) -> bool:
        """Say whether nothing was found."""
        return self.finding is None


def verify(database: Database, anchors: Iterable[Anchor] = ()) -> Verification:
    """Check all chains, the rows that point to entries, and the triggers, on one state of the database."""
    kept = tuple(anchors)
    verified: list[VerifiedChain] = []
    with database.reading() as unit:
        heads = unit.ledger.heads()
        names = {*heads, *unit.ledger.chain_names(), *(anchor.chain for anchor in kept)}
        for chain in sorted(names):
            check = ChainCheck(chain, kept)
            if (finding := _chain_finding(check, unit.ledger, heads.get(chain))) is not None:
                return Verification(tuple(verified), finding)
            verified.append(VerifiedChain(chain, check.sequence, check.hash))
        finding = (
            _pointer_finding(unit.session) or _lot_finding(unit.session) or _trigger_finding(unit.session)
        )
    return Verification(tuple(verified), finding)


def _chain_finding(check: ChainCheck, ledger: Ledger, head: Head | None) -> Finding | None:
    for stored in _stored_entries(ledger, check.chain):
        if (finding := check.add(stored)) is not None:
            return finding
    return check.close(head)


def _stored_entries(ledger: Ledger, chain: str) -> Iterator[StoredEntry]:
    after: int | None = None
    while page := ledger.stored_entries(chain, after=after, limit=LARGEST_PAGE):
        yield from page
        after = page[-1].sequence


def _pointer_finding(session: Session) -> Finding | None:
    for table in (decisions, readings, idempotency_keys, studies, study_extensions):
        if (row := session.row(_astray(table))) is not None:
            detail = f"a row of {table.name} names this entry, but the entry is missing or differs from it"
            return Finding(row.chain, row.sequence, detail)
    if (row := session.row(_decisions_without_row())) is not None:
        return Finding(row.chain, row.sequence, "this decision has no row in decisions")
    return None


def _lot_finding(session: Session) -> Finding | None:
    """Compare where each lot stands with the last decision on it."""
    same_decision = and_(decisions.c.chain == lots.c.chain, decisions.c.sequence == lots.c.sequence)
    differs = or_(
        decisions.c.chain.is_(None),
        # A decision is an entry of the line that acted.
        lots.c.line != lots.c.chain,
        decisions.c.product != lots.c.product,
        decisions.c.lot != lots.c.lot,
        decisions.c.outcome != lots.c.outcome,
        decisions.c.round != lots.c.rounds,
    )
    query = select(lots).outerjoin(decisions, same_decision).where(differs)
    if (row := session.row(query.order_by(lots.c.chain, lots.c.sequence).limit(1))) is not None:
        detail = f"the lot {row.lot} of {row.product} does not stand as its last decision says"
        return Finding(row.chain, row.sequence, detail)
    same_lot = and_(decisions.c.product == lots.c.product, decisions.c.lot == lots.c.lot)
    later = select(decisions).outerjoin(lots, same_lot)
    later = later.where(or_(lots.c.lot.is_(None), decisions.c.round > lots.c.rounds))
    row = session.row(later.order_by(decisions.c.chain, decisions.c.sequence).limit(1))
    if row is not None:
        detail = f"the lot {row.lot} of {row.product} stands as if this decision had not been made"
        return Finding(row.chain, row.sequence, detail)
    return None


def _astray(table: Table) -> Select[Any]:
    """Return a query for rows whose entry is missing or, for decisions, differs from its row's copies."""
    query = select(table.c.chain, table.c.sequence).outerjoin(entries, _same_entry(table))
    if table is decisions:
        differs = or_(entries.c.recorded_at != decisions.c.recorded_at, entries.c.kind != DECISION)
        query = query.where(or_(entries.c.chain.is_(None), differs))
    else:
        query = query.where(entries.c.chain.is_(None))
    return query.order_by(table.c.chain, table.c.sequence).limit(1)


def _decisions_without_row() -> Select[Any]:
    query = select(entries.c.chain, entries.c.sequence).outerjoin(decisions, _same_entry(decisions))
    query = query.where(entries.c.kind == DECISION, decisions.c.chain.is_(None))
    return query.order_by(entries.c.chain, entries.c.sequence).limit(1)


def _same_entry(table: Table) -> ColumnElement[bool]:
    return and_(entries.c.chain == table.c.chain, entries.c.sequence == table.c.sequence)


def _trigger_finding(session: Session) -> Finding | None:
    if missing := missing_triggers(session):
        return Finding("plant", None, f"triggers that protect the record are missing: {', '.join(missing)}")
    return None
