"""Decisions: judge a lot, and read what was decided."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer, listed, recorded
from service.api.operations import PAGING, Operation, describe, parameter
from service.documents import DecisionRequest
from service.workflows import decisions

blueprint = Blueprint("decisions", __name__, description="Judge a lot; the record of what was decided.")

OUTCOMES = ("release", "hold", "reject")


@describe(
    blueprint,
    "/v1/decisions",
    "POST",
    Operation("Decision", (201,), DecisionRequest, key="required", problems=(409,)),
)
def decide() -> Response:
    """Judge a lot and record the decision.

    No answer, a time-out or a 5xx means hold; the same request under the same key finds the truth.
    """
    request = requests.body(DecisionRequest)
    return recorded(decisions.decide(requests.services(), requests.actor(), request, requests.recording()))


@describe(
    blueprint,
    "/v1/decisions/preview",
    "POST",
    Operation("DecisionPreview", body=DecisionRequest, problems=(409,)),
)
def preview_decision() -> Response:
    """Answer as a decision would; nothing is recorded."""
    request = requests.body(DecisionRequest)
    return answer(decisions.preview(requests.services(), requests.actor(), request))


@describe(
    blueprint,
    "/v1/decisions",
    "GET",
    Operation(
        "DecisionPage",
        query=(
            *PAGING,
            parameter("product", "Only decisions on this product."),
            parameter("outcome", "Only decisions with this outcome.", OUTCOMES),
        ),
    ),
)
def list_decisions() -> Response:
    """List the decisions, newest first."""
    page = requests.page("product", outcome=OUTCOMES)
    return listed(decisions.listing(requests.services(), requests.actor(), **page))


@describe(blueprint, "/v1/decisions/<decision:id>", "GET", Operation("Decision", problems=(422,)))
def get_decision(id: str) -> Response:
    """Read a decision with the request that led to it."""
    requests.query()
    return answer(decisions.get(requests.services(), requests.actor(), id))
