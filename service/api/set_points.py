"""How close to the limit a process may run, what to buy first, and what was given away."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer
from service.api.operations import Operation, describe
from service.documents import GiveawayRequest, ImprovementsRequest, SetPointRequest
from service.workflows import giveaways, improvements, set_points

blueprint = Blueprint("set-points", __name__, description="Set points, improvements and giveaway, in money.")


@describe(blueprint, "/v1/set-points", "POST", Operation("SetPoints", body=SetPointRequest, problems=(409,)))
def find_set_points() -> Response:
    """Find how close to the limit a process may run, and what that brings; nothing is recorded."""
    asked = requests.body(SetPointRequest)
    return answer(set_points.ask(requests.services(), requests.actor(), asked))


@describe(
    blueprint,
    "/v1/improvements",
    "POST",
    Operation("Improvements", body=ImprovementsRequest, problems=(409, 503)),
)
def compare_improvements() -> Response:
    """Rank options for a better measurement by what they bring in a year; nothing is recorded."""
    asked = requests.body(ImprovementsRequest)
    return answer(improvements.compare(requests.services(), requests.actor(), asked))


@describe(blueprint, "/v1/giveaway", "POST", Operation("Giveaway", body=GiveawayRequest, problems=(409,)))
def count_giveaway() -> Response:
    """Count what it cost to run further from the limit than needed; nothing is recorded."""
    asked = requests.body(GiveawayRequest)
    return answer(giveaways.giveaway_of(requests.services(), requests.actor(), asked))
