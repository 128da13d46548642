"""Lots: may this one go now, and which are held."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer, listed
from service.api.decisions import OUTCOMES
from service.api.operations import PAGING, Operation, describe, parameter
from service.workflows import lots

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
