"""Judging lots: previewed without a trace, or decided and recorded for good."""

from __future__ import annotations

from typing import Any

from service.access import require
from service.documents import Actor, DecisionRequest
from service.errors import Conflict, NotFound
from service.ledger import Entry
from service.schemas import dump
from service.store.unit_of_work import UnitOfWork
from service.workflows.judging import judge
from service.workflows.paging import page_of, start_after
from service.workflows.recording import Page, Request, entry_reference, record
from service.workflows.services import Services
from service.workflows.stuck_sensors import stuck_sensors
from service.workflows.used_readings import check_unused, mark_used


def preview(services: Services, actor: Actor, request: DecisionRequest) -> dict[str, Any]:
    """Answer as a decision would, and store nothing. Raises InvalidRequest or Conflict like decide."""
    require(actor, "preview a decision")
    with services.database.reading() as unit_of_work:
        register = services.registers.current(unit_of_work)
        _check_unjudged(unit_of_work, request)
        stuck = stuck_sensors(unit_of_work, request, register.plant.identical_readings)
        answer = judge(register, request, unit_of_work.now(request.line), stuck=stuck)
    return {"id": None, "recorded": False, **answer, "entry": None}


def decide(
    services: Services, actor: Actor, decision_request: DecisionRequest, request: Request
) -> tuple[dict[str, Any], bool]:
    """Judge a lot and record it; gives the answer and whether it had been recorded earlier.

    Raises
    ------
    InvalidRequest
        The request is not understood; nothing was recorded.
    Conflict
        The lot was judged before, or one of the readings was.
    Unavailable
        No answer within the deadline: hold the lot, and ask again with the same key.
    """
    require(actor, "judge a lot")
    # Written here and not by the writer, which all lines wait for.
    said = dump(decision_request)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        register = services.registers.current(unit_of_work)
        _check_unjudged(unit_of_work, decision_request)
        stuck = stuck_sensors(unit_of_work, decision_request, register.plant.identical_readings)
        moment = unit_of_work.now(decision_request.line)
        answer = judge(register, decision_request, moment, stuck=stuck)
        content = {**answer, "request": said}
        entry = unit_of_work.append(decision_request.line, "decision", actor.principal, content)
        project(unit_of_work, decision_request, content, entry)
        return entry

    recorded = record(services, actor, request, {decision_request.line}, perform)
    return answer_of(recorded.entry), recorded.earlier


def project(
    unit_of_work: UnitOfWork, request: DecisionRequest, content: dict[str, Any], entry: Entry
) -> None:
    """Keep what look-ups need of a decision: where its lot stands, and that its readings are used."""
    place = {"product": request.product, "lot": request.lot, "outcome": content["outcome"], "entry": entry}
    unit_of_work.decisions.add(round=content["round"], **place)
    unit_of_work.lots.upsert(line=request.line, rounds=content["round"], **place)
    mark_used(unit_of_work, request, entry)


def _check_unjudged(unit_of_work: UnitOfWork, request: DecisionRequest) -> None:
    lot = unit_of_work.lots.get(request.product, request.lot)
    if lot is not None:
        raise Conflict(
            "lot-already-judged",
            f"Lot {request.lot} of {request.product} was judged: {lot.outcome}. Further readings of a lot on "
            "hold go to its retests.",
            link=f"/v1/decisions/{lot.chain}.{lot.sequence}",
        )
    check_unused(unit_of_work, request)


def answer_of(entry: Entry) -> dict[str, Any]:
    """Rebuild the answer to a decision from its entry, for the first time or for a replay."""
    return {
        "id": f"{entry.chain}.{entry.sequence}",
        "recorded": True,
        **{name: value for name, value in entry.content.items() if name != "request"},
        "entry": entry_reference(entry),
    }


def get(services: Services, actor: Actor, identity: str) -> dict[str, Any]:
    """Read one decision with the request that led to it. Raises NotFound."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        stored = unit_of_work.decisions.get(identity)
    if stored is None:
        raise NotFound(f"There is no decision {identity!r}.")
    return {**answer_of(stored.entry), "request": stored.entry.content["request"]}


def listing(
    services: Services,
    actor: Actor,
    *,
    product: str | None = None,
    outcome: str | None = None,
    limit: int = 50,
    cursor: str | None = None,
) -> Page:
    """List decisions, newest first. Raises InvalidRequest for a cursor that no list gave out."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        before = start_after(
            cursor,
            unit_of_work.decisions.get,
            lambda last: (last.recorded_at, last.chain, last.sequence),
        )
        found = unit_of_work.decisions.list(product=product, outcome=outcome, limit=limit + 1, before=before)
    return page_of(found, limit, lambda stored: answer_of(stored.entry), lambda stored: stored.identity)
