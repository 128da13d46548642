"""The start page: what runs here, where its API is described, and the caution."""

from __future__ import annotations

import logging
from importlib.metadata import PackageNotFoundError, version

from flask import Blueprint, Response, current_app, render_template

from service.workflows import health

_log = logging.getLogger(__name__)

blueprint = Blueprint("pages", __name__, template_folder="templates", static_folder="static")

CAUTION = (
    "Answers of this service speak of the named characteristics only; they are no safety clearance. Local "
    "regulations and the plant's authorised person decide on a lot."
)

# Everything a page needs comes from this server; nothing is framed, sniffed or told to other sites.
_GUARDS = {
    "Content-Security-Policy": (
        "default-src 'self'; frame-ancestors 'none'; form-action 'self'; base-uri 'none'"
    ),
    "Referrer-Policy": "same-origin",
    "X-Content-Type-Options": "nosniff",
}


@blueprint.get("/")
def start() -> str:
    """Show the start page."""
    services = current_app.extensions["shoalmark"]
    try:
        health.ready(services)
        ready = True
    except Exception:  # whatever it is, this process cannot decide
        _log.exception("readiness")
        ready = False
    return render_template("pages/start.html", ready=ready, number=_number(), caution=CAUTION)


def _number() -> str:
    try:
        return version("shoalmark")
    except PackageNotFoundError:  # run from a folder without installation
        return ""


def guard(response: Response) -> Response:
    """Tell browsers to trust nothing but this server."""
    for name, value in _GUARDS.items():
        response.headers.setdefault(name, value)
    return response
