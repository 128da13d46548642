"""The page for errors outside of the API."""

from __future__ import annotations

import logging
from uuid import uuid4

from flask import g, make_response, render_template, request
from werkzeug import Response as WerkzeugResponse
from werkzeug.exceptions import HTTPException

_log = logging.getLogger(__name__)

_WORDS = {
    404: ("There is no such page", "Check the address, or begin at the start page."),
    405: ("This page cannot be used in that way", "Begin at the start page."),
    500: ("The service failed", "The failure is in the log. Until it answers again, treat lots as on hold."),
}


def error_page(error: Exception) -> WerkzeugResponse:
    """Show what went wrong, with the headers that belong to it."""
    if isinstance(error, HTTPException) and (error.response is not None or (error.code or 500) < 400):
        return error.get_response()
    status = (error.code or 500) if isinstance(error, HTTPException) else 500
    identity = g.setdefault("request_id", str(uuid4()))
    if status >= 500:
        _log.error("request %s %s %s failed", identity, request.method, request.path, exc_info=error)
    title, advice = _WORDS.get(status, ("The request cannot be answered", "Begin at the start page."))
    page = render_template("pages/error.html", title=title, advice=advice, status=status, identity=identity)
    response = make_response(page, status)
    if isinstance(error, HTTPException):
        for name, value in error.get_headers():
            if name.lower() != "content-type":
                response.headers[name] = value
    return response
