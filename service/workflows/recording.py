"""The one way in which a workflow changes anything: an act of the writer, recorded by one entry."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any, Final

from service.documents import Actor
from service.ledger import Entry
from service.store.unit_of_work import UnitOfWork
from service.store.writer import Act, Recorded
from service.workflows.services import Services

PLANT_CHAIN: Final = "plant"


@dataclass(frozen=True)
class Request:
    """What makes a recording call repeatable: its idempotency key and the fingerprint of all it said."""

    key: str | None
    fingerprint: str


@dataclass(frozen=True)
class Page:
    """A part of a list, newest first, and where the next part begins."""

    items: tuple[dict[str, Any], ...]
    next: str | None


def record(
    services: Services,
    actor: Actor,
    request: Request,
    chains: Iterable[str],
    perform: Callable[[UnitOfWork], Entry],
) -> Recorded:
    """Have the writer perform an act; when it returns, the entry is durable.

    Raises
    ------
    Unavailable
        No answer within the deadline; the same key finds the truth.
    KeyReused
        The key was used for another request.
    """
    act = Act(
        chains=frozenset(chains),
        principal=actor.principal,
        perform=perform,
        key=request.key,
        fingerprint=None if request.key is None else request.fingerprint,
    )
    return services.writer.submit(act)


def was_recorded(unit_of_work: UnitOfWork, actor: Actor, request: Request) -> bool:
    """Say whether the key of a request stands for something: then only the writer may answer it."""
    return request.key is not None and unit_of_work.keys.find(actor.principal, request.key) is not None


def entry_reference(entry: Entry) -> dict[str, Any]:
    """Name an entry so that whoever got the answer can find and witness it."""
    return {"chain": entry.chain, "sequence": entry.sequence, "hash": entry.hash}
