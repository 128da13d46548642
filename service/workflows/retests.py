"""A lot on hold read again: its further readings are joined with all earlier ones and judged together."""

from __future__ import annotations

from functools import partial
from typing import Any, Final

from service.access import require
from service.documents import Actor, DecisionRequest, RetestRequest
from service.errors import Conflict, NotFound, Unavailable
from service.ledger import Entry
from service.schemas import dump
from service.store.rows import StoredLot
from service.store.unit_of_work import UnitOfWork
from service.workflows.decisions import answer_of, project
from service.workflows.earlier_looks import EarlierLooks
from service.workflows.judging import judge
from service.workflows.recording import Request, record
from service.workflows.services import Services
from service.workflows.stuck_sensors import stuck_sensors
from service.workflows.used_readings import check_unused

# A lot that other lines read again meanwhile is looked up anew so often.
_TRIES: Final = 5
MOST_ROUNDS: Final = 1000


class _Moved(Exception):
    """Another line judged the lot meanwhile: the chain of its last decision is not held."""


def retest(
    services: Services,
    actor: Actor,
    product: str,
    lot: str,
    further: RetestRequest,
    request: Request,
) -> tuple[dict[str, Any], bool]:
    """Judge a lot on hold with further readings; gives the answer and whether it had been recorded earlier.

    The entry goes to the line that acts. The chain of the last decision on the lot is held as well, so that
    of two lines only one can take the next round.

    Raises
    ------
    NotFound
        The lot was never judged.
    InvalidRequest
        The request is not understood; nothing was recorded.
    Conflict
        The lot is not on hold, has no round left, or one of the readings was judged before.
    Unavailable
        No answer within the deadline: hold the lot, and ask again with the same key.
    """
    require(actor, "judge a lot")
    decision_request = DecisionRequest(
        lot=lot,
        product=product,
        line=further.line,
        units=further.units,
        readings=further.readings,
        operator=further.operator,
    )
    said = dump(decision_request)

    def perform(held: frozenset[str], unit_of_work: UnitOfWork) -> Entry:
        register = services.registers.current(unit_of_work)
        stored = _standing(unit_of_work, product, lot)
        if stored.chain not in held:
            raise _Moved
        earlier = earlier_looks(unit_of_work, product, lot)
        _check_open(stored, earlier)
        check_unused(unit_of_work, decision_request)
        stuck = stuck_sensors(unit_of_work, decision_request, register.plant.identical_readings)
        answer = judge(register, decision_request, unit_of_work.now(further.line), earlier, stuck=stuck)
        content = {**answer, "request": said}
        entry = unit_of_work.append(further.line, "decision", actor.principal, content)
        project(unit_of_work, decision_request, content, entry)
        return entry

    for _ in range(_TRIES):
        with services.database.reading() as unit_of_work:
            chains = frozenset({further.line, _standing(unit_of_work, product, lot).chain})
        try:
            recorded = record(services, actor, request, chains, partial(perform, chains))
        except _Moved:
            continue
        return answer_of(recorded.entry), recorded.earlier
    raise Unavailable("Other lines judge this lot; try again with the same key.")


def earlier_looks(unit_of_work: UnitOfWork, product: str, lot: str) -> EarlierLooks:
    """Read what was decided on a lot so far."""
    decisions = unit_of_work.decisions.list(product=product, lot=lot, limit=MOST_ROUNDS)
    decisions.sort(key=lambda stored: stored.round)
    return EarlierLooks(
        tuple(stored.identity for stored in decisions),
        tuple(stored.entry.content for stored in decisions),
    )


def _standing(unit_of_work: UnitOfWork, product: str, lot: str) -> StoredLot:
    stored = unit_of_work.lots.get(product, lot)
    if stored is None:
        raise NotFound(f"No lot {lot!r} of {product!r} was judged; its first readings go to /v1/decisions.")
    return stored


def _check_open(stored: StoredLot, earlier: EarlierLooks) -> None:
    link = f"/v1/decisions/{stored.chain}.{stored.sequence}"
    if stored.outcome != "hold":
        detail = f"Lot {stored.lot} of {stored.product} is not on hold: {stored.outcome}."
        raise Conflict("lot-not-held", detail, link=link)
    if earlier.rounds_left < 1 or earlier.round > MOST_ROUNDS:
        detail = (
            f"Lot {stored.lot} of {stored.product} was read as often as the rule plans. A person decides."
        )
        raise Conflict("no-rounds-left", detail, link=link)
