"""Acts: what is recorded as one entry with its projections, alone or together with others.

A key that was used before is answered from its entry, so a repeated request costs one look-up and changes
nothing. ``perform`` may be run again when a transaction had to be rolled back: it must have no effect but
through its unit of work.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from sqlalchemy.exc import DBAPIError, IntegrityError

from service.errors import KeyReused, Unavailable
from service.ledger import Entry
from service.store.engine import sqlstate
from service.store.unit_of_work import Clock, Database, UnitOfWork

_TRIES = 3
_SERIALIZATION_FAILURE, _DEADLOCK = "40001", "40P01"


@dataclass(frozen=True)
class Act:
    """One act: the chains it needs, whose it is, and the function that records it by one entry."""

    chains: frozenset[str]
    principal: str
    perform: Callable[[UnitOfWork], Entry]
    key: str | None = None
    fingerprint: str | None = None

    def __post_init__(self) -> None:
        if (self.key is None) != (self.fingerprint is None):
            raise ValueError("an idempotency key comes with a fingerprint")
        if not (self.principal + (self.key or "")).isprintable():
            raise ValueError("a principal and a key are printable text")


@dataclass(frozen=True)
class Recorded:
    """The entry of an act; ``earlier`` when the same key had recorded it before."""

    entry: Entry
    earlier: bool


class BatchFailed(Exception):
    """A batch was rolled back, because of its cause; ``opened`` says whether it had begun at all."""

    def __init__(self, cause: Exception, *, opened: bool) -> None:
        super().__init__(str(cause))
        self.cause = cause
        self.opened = opened


def perform_now(database: Database, act: Act, clock: Clock | None = None) -> Recorded:
    """Record an act in a transaction of its own: the way of commands that write beside the service."""
    for remaining in reversed(range(_TRIES)):
        try:
            outcome = perform_batch(database, [act], clock)[0]
        except BatchFailed as failed:
            if remaining and _may_succeed_now(failed.cause):
                continue
            raise failed.cause from failed.cause.__cause__
        if isinstance(outcome, Exception):
            raise outcome
        return outcome
    raise AssertionError("unreachable")


def perform_batch(
    database: Database, acts: Sequence[Act], clock: Clock | None = None
) -> list[Recorded | Exception]:
    """Record acts in one transaction; an act that failed before it wrote anything leaves its error instead.

    Raises
    ------
    BatchFailed
        Nothing of the batch was recorded.
    """
    outcomes: list[Recorded | Exception] = []
    witness: Entry | None = None
    opened = False
    try:
        with database.writing(frozenset[str]().union(*(act.chains for act in acts)), clock=clock) as unit:
            opened = True
            unit.keys.prefetch([(act.principal, act.key) for act in acts if act.key is not None])
            for act in acts:
                outcomes.append(_outcome(unit, act))
                witness = witness or (unit.appended[0] if unit.appended else None)
            if witness is not None:
                unit.commit()
    except Exception as error:
        # The commit may have succeeded although its answer was lost. The batch is one transaction, so one
        # of its entries bears witness for all.
        complete = witness is not None and len(outcomes) == len(acts)
        if not (complete and witness is not None and _was_committed(database, witness, error)):
            raise BatchFailed(error, opened=opened) from error
    return outcomes


def _outcome(unit: UnitOfWork, act: Act) -> Recorded | Exception:
    unit.begin_act()
    try:
        return _perform(unit, act)
    except Exception as error:
        if unit.act_left_traces:
            raise
        return error


def _perform(unit: UnitOfWork, act: Act) -> Recorded:
    if act.key is not None and (earlier := unit.keys.find(act.principal, act.key)) is not None:
        if earlier.fingerprint != act.fingerprint:
            raise KeyReused("the idempotency key was used before with another request")
        entry = unit.ledger.entry(earlier.chain, earlier.sequence)
        if entry is None:
            raise RuntimeError(f"the entry {earlier.chain}.{earlier.sequence} of a key is missing")
        return Recorded(entry, earlier=True)
    entry = act.perform(unit)
    if unit.appended != [entry]:
        raise RuntimeError("an act appends exactly one entry and returns it")
    if act.key is not None and act.fingerprint is not None:
        unit.keys.add(act.principal, act.key, act.fingerprint, entry)
    return Recorded(entry, earlier=False)


def _was_committed(database: Database, witness: Entry, error: Exception) -> bool:
    """Say whether a commit that failed did succeed.

    Holding the chain first makes the answer final: a commit that is still under way holds it too.
    """
    if isinstance(error, IntegrityError):
        return False
    try:
        with database.writing([witness.chain]) as unit:
            found = unit.ledger.entry(witness.chain, witness.sequence)
    except Exception as failure:
        # Not "try again": doing the acts once more could record them twice.
        unknown = Unavailable("the connection was lost at the commit; the key finds what was recorded")
        raise BatchFailed(unknown, opened=False) from failure
    return found is not None and found.hash == witness.hash


def _may_succeed_now(error: Exception) -> bool:
    """Say whether another process was merely faster: done again, the act sees what that one recorded."""
    if isinstance(error, IntegrityError):
        return True
    cause = error.__cause__
    if not isinstance(error, Unavailable) or not isinstance(cause, DBAPIError):
        return False
    return cause.connection_invalidated or sqlstate(cause) in (_SERIALIZATION_FAILURE, _DEADLOCK)
