"""Lots: may this one go now, and which ones are held."""

from __future__ import annotations

from typing import Any

from service.access import require
from service.documents import Actor
from service.errors import NotFound
from service.store.rows import StoredLot
from service.workflows.decisions import answer_of
from service.workflows.paging import page_of, start_after
from service.workflows.recording import Page
from service.workflows.retests import MOST_ROUNDS
from service.workflows.services import Services


def get(services: Services, actor: Actor, product: str, lot: str) -> dict[str, Any]:
    """Say how a lot stands, with the last decision on it. Raises NotFound for a lot never judged."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        stored = unit_of_work.lots.get(product, lot)
        if stored is None:
            raise NotFound(f"No lot {lot!r} of {product!r} was judged; a lot without a decision is on hold.")
        decisions = unit_of_work.decisions.list(product=product, lot=lot, limit=MOST_ROUNDS)
    decisions.sort(key=lambda decision: decision.round)
    # A lot's row and its decision are written in one transaction.
    last = answer_of(decisions[-1].entry)
    return {
        **_summary(stored),
        "rounds_left": last["rounds_left"],
        "decisions": [
            {
                "id": decision.identity,
                "round": decision.round,
                "outcome": decision.outcome,
                "recorded_at": decision.recorded_at,
            }
            for decision in decisions
        ],
        "last_decision": last,
    }


def listing(
    services: Services,
    actor: Actor,
    *,
    outcome: str | None = None,
    limit: int = 50,
    cursor: str | None = None,
) -> Page:
    """List lots, the last judged first. Raises InvalidRequest for a cursor that no list gave out."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        before = start_after(
            cursor,
            lambda text: unit_of_work.lots.get(*text.split("/", 1)) if "/" in text else None,
            lambda last: (last.recorded_at, last.product, last.lot),
        )
        found = unit_of_work.lots.list(outcome=outcome, limit=limit + 1, before=before)
    return page_of(found, limit, _summary, lambda stored: f"{stored.product}/{stored.lot}")


def _decision(stored: StoredLot) -> str:
    return f"{stored.chain}.{stored.sequence}"


def _summary(stored: StoredLot) -> dict[str, Any]:
    return {
        "product": stored.product,
        "lot": stored.lot,
        "line": stored.line,
        "outcome": stored.outcome,
        "rounds": stored.rounds,
        "decision": _decision(stored),
        "recorded_at": stored.recorded_at,
    }
