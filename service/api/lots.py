"""Lots: may this one go now, and which are held."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer, listed, recorded
from service.api.decisions import OUTCOMES
from service.api.operations import PAGING, Operation, describe, parameter
from service.documents import RetestRequest
from service.workflows import lots, retests

blueprint = Blueprint("lots", __name__, description="How lots stand.")


@describe(
    blueprint,
    "/v1/lots",
    "GET",
    Operation("LotPage", query=(*PAGING, parameter("outcome", "Only lots with this outcome.", OUTCOMES))),
)
def list_lots() -> Response:
    """List lots, the last judged first."""
    page = requests.page(outcome=OUTCOMES)
    return listed(lots.listing(requests.services(), requests.actor(), **page))


@describe(blueprint, "/v1/lots/<code:product>/<lot:lot>", "GET", Operation("Lot", problems=(422,)))
def get_lot(product: str, lot: str) -> Response:
    """Say how a lot stands, with the last decision on it."""
    requests.query()
    return answer(lots.get(requests.services(), requests.actor(), product, lot))


@describe(
    blueprint,
    "/v1/lots/<code:product>/<lot:lot>/retests",
    "POST",
    Operation("Decision", (201,), RetestRequest, key="required", problems=(409, 422)),
)
def retest_lot(product: str, lot: str) -> Response:
    """Judge a lot on hold with further readings, joined with all earlier ones, and record the decision.

    No answer, a time-out or a 5xx means hold; the same request under the same key finds the truth.
    """
    further = requests.body(RetestRequest)
    result = retests.retest(
        requests.services(), requests.actor(), product, lot, further, requests.recording()
    )
    return recorded(result)
