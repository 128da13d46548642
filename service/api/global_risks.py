"""Global risks: what a rule lets pass, and holds back, over a whole production."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer
from service.api.operations import Operation, describe
from service.documents import GlobalRisksRequest
from service.workflows import global_risks

blueprint = Blueprint("global-risks", __name__, description="Risks over a production, by guard band.")


@describe(
    blueprint,
    "/v1/global-risks",
    "POST",
    Operation("GlobalRisks", body=GlobalRisksRequest, problems=(409, 413)),
)
def find_global_risks() -> Response:
    """Find what a rule in force lets pass and holds back, and what guard bands would; nothing is recorded."""
    asked = requests.body(GlobalRisksRequest)
    return answer(global_risks.ask(requests.services(), requests.actor(), asked))
