"""Whether this process is alive and able to decide. Outside of the API's prefix, without a token."""

from __future__ import annotations

import logging

from flask import Blueprint, Response

from service.api import requests
from service.api.answers import answer
from service.errors import Unavailable
from service.workflows import health

blueprint = Blueprint("health", __name__)

_log = logging.getLogger(__name__)


@blueprint.get("/healthz")
def get_health() -> Response:
    """Say that the process answers."""
    return answer({"alive": True})


@blueprint.get("/readyz")
def get_readiness() -> Response:
    """Say whether this process can record decisions now."""
    try:
        return answer(health.ready(requests.services()))
    except Unavailable as error:
        return _not_ready(error.message, error.retry_after)
    except Exception:  # whatever it is, this process cannot decide
        _log.exception("readiness")
        return _not_ready("The failure is in the log.", 5)


def _not_ready(detail: str, retry_after: int) -> Response:
    response = answer({"ready": False, "detail": detail}, 503)
    response.headers["Retry-After"] = str(retry_after)
    return response
