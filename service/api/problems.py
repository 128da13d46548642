"""From errors to problem documents (RFC 9457): the only table.

`KINDS` holds every class of service.errors, `CONFLICTS` every slug that a Conflict may carry; errors of the
computation are faults of the request, or forms that are not supported yet. HTTP errors of the framework keep
their own status and headers and have the type about:blank.
"""

from __future__ import annotations

import json
import logging
from dataclasses import dataclass
from http import HTTPStatus
from typing import Any
from uuid import uuid4

from flask import Response, g, request
from werkzeug import Response as WerkzeugResponse
from werkzeug.exceptions import HTTPException

from budgets.errors import BudgetsError, NotSupportedError
from service import errors
from service.errors import Fault, ServiceError
from service.schemas.base import pointer_step

MEDIA_TYPE = "application/problem+json"

_log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Kind:
    """What is constant for a type of problem."""

    slug: str
    title: str
    status: int


INVALID = Kind("invalid-request", "The request does not fit its description", 422)
NOT_SUPPORTED = Kind("not-supported", "The request says something that is not supported yet", 422)
INTERNAL = Kind("internal-error", "The service failed", 500)

KINDS: dict[type[ServiceError], Kind] = {
    errors.Unreadable: Kind("unreadable", "The body could not be read", 400),
    errors.InvalidRequest: INVALID,
    errors.NotSupported: NOT_SUPPORTED,
    errors.KeyMissing: Kind("idempotency-key-missing", "A recording call needs an idempotency key", 400),
    errors.KeyReused: Kind("idempotency-key-reused", "The key was used for another request", 422),
    errors.TooLarge: Kind("too-large", "The body is too large", 413),
    errors.Unauthenticated: Kind("unauthenticated", "The request does not say who makes it", 401),
    errors.Forbidden: Kind("forbidden", "The principal may not do this", 403),
    errors.NotFound: Kind("not-found", "There is no such thing", 404),
    errors.Conflict: Kind("conflict", "The present state does not allow it", 409),
    errors.StaleVersion: Kind("stale-version", "The document has changed since it was read", 412),
    errors.PreconditionRequired: Kind("precondition-required", "A replacement needs If-Match", 428),
    errors.Unavailable: Kind("unavailable", "No answer in time; the same key finds the truth later", 503),
    errors.SetupError: INTERNAL,
    errors.SettingsError: INTERNAL,
    errors.SchemaMismatch: INTERNAL,
    errors.LockHeld: INTERNAL,
    errors.ServiceError: INTERNAL,
}

CONFLICTS: dict[str, str] = {
    "already-exists": "The code is taken",
    "already-extended": "The study was extended before",
    "another-budget-in-force": "Another budget serves the same analyzer",
    "evidence-changed": "The evidence of a budget has changed since its approval",
    "evidence-lapsed": "The evidence does not serve any more",
    "lot-already-judged": "The lot is judged already",
    "lot-not-held": "Only a lot on hold is read again",
    "no-rounds-left": "The lot was read as often as its rule plans",
    "not-in-this-state": "The version is in another state",
    "nothing-in-force": "Nothing is in force",
    "open-version-exists": "A version is open already",
    "reading-already-judged": "A reading was judged before",
}


_HTTP_DETAILS = {
    404: "The API has no resource at this path.",
    405: "The resource at this path does not know this method; Allow names those that it knows.",
}


def slugs() -> set[str]:
    """All slugs that the type of a problem may end in."""
    return {kind.slug for kind in KINDS.values()} | CONFLICTS.keys()


def request_id() -> str:
    """The identity of the request at hand, given once and named in its problem and in the log."""
    if "request_id" not in g:
        g.request_id = str(uuid4())
    return str(g.request_id)


def kind_of(error: Exception) -> Kind:
    """Find the type of problem for an error that is no HTTP error of the framework."""
    if isinstance(error, NotSupportedError):
        return NOT_SUPPORTED
    if isinstance(error, BudgetsError):
        return INVALID
    if isinstance(error, errors.Conflict):
        return Kind(error.code, CONFLICTS.get(error.code, KINDS[errors.Conflict].title), 409)
    for base in type(error).__mro__:
        if base in KINDS:
            return KINDS[base]
    return INTERNAL


def problem_response(error: Exception) -> WerkzeugResponse:
    """Answer an error with its problem document."""
    if isinstance(error, HTTPException):
        return _of_http(error)
    kind = kind_of(error)
    if kind is INTERNAL:
        _log.error("request %s %s %s failed", request_id(), request.method, request.path, exc_info=error)
        return _respond(kind.slug, kind.title, 500, "The failure is in the log under this instance.")
    headers: dict[str, str] = {}
    if isinstance(error, errors.Unauthenticated):
        headers["WWW-Authenticate"] = 'Bearer realm="shoalmark"'
    if isinstance(error, errors.Unavailable):
        headers["Retry-After"] = str(error.retry_after)
    faults = _budget_faults(error) if isinstance(error, BudgetsError) else ()
    link = None
    if isinstance(error, ServiceError):
        faults, link = error.faults, error.link
    return _respond(kind.slug, kind.title, kind.status, str(error), faults, link, headers)


def _of_http(error: HTTPException) -> WerkzeugResponse:
    if error.response is not None or (error.code or 500) < 400:  # a ready answer, or a redirect
        return error.get_response()
    status = error.code or 500
    # Without the type of content, which is ours; Allow, Retry-After and WWW-Authenticate go on.
    headers = {name: value for name, value in error.get_headers() if name.lower() != "content-type"}
    detail = _HTTP_DETAILS.get(status, error.description or "")
    return _respond(None, HTTPStatus(status).phrase, status, detail, (), None, headers)


def _budget_faults(error: BudgetsError) -> tuple[Fault, ...]:
    if error.faults:
        return tuple(fault for part in error.faults for fault in _budget_faults(part))
    return (Fault(error.message, pointer="#" + "".join(map(pointer_step, error.where))),)


def _respond(
    slug: str | None,
    title: str,
    status: int,
    detail: str,
    faults: tuple[Fault, ...] = (),
    link: str | None = None,
    headers: dict[str, str] | None = None,
) -> Response:
    document: dict[str, Any] = {
        "type": "about:blank" if slug is None else f"/problems/{slug}",
        "title": title,
        "status": status,
        "instance": f"urn:uuid:{request_id()}",
        "detail": detail,
    }
    if faults:
        document["errors"] = [_fault_document(fault) for fault in faults]
    if link is not None:
        document["link"] = link
    body = json.dumps(document, ensure_ascii=False)
    return Response(body, status=status, headers=headers, mimetype=MEDIA_TYPE)


def _fault_document(fault: Fault) -> dict[str, str]:
    places = {"pointer": fault.pointer, "parameter": fault.parameter, "header": fault.header}
    found = {name: place for name, place in places.items() if place is not None}
    expected = {} if fault.expected is None else {"expected": fault.expected}
    return {**found, "detail": fault.detail, **expected}
