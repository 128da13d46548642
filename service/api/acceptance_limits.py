"""The acceptance limits now."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import conditional
from service.api.operations import Operation, describe
from service.workflows import acceptance_limits

blueprint = Blueprint("acceptance-limits", __name__, description="What a reading must meet now.")


@describe(
    blueprint,
    "/v1/acceptance-limits/<code:product>/<code:characteristic>",
    "GET",
    Operation("AcceptanceLimits", conditional=True, problems=(409, 422)),
)
def get_acceptance_limits(product: str, characteristic: str) -> Response:
    """Give the limits in force, per analyzer, specification and procedure."""
    requests.query()
    limits, etag = acceptance_limits.now(requests.services(), requests.actor(), product, characteristic)
    return conditional(limits, etag)
