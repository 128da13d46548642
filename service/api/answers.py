"""How views answer: JSON, with the revision as ETag and the mark of a replay."""

from __future__ import annotations

import json
from typing import Any

from flask import Response, request

from service.workflows.master_data import MasterAnswer
from service.workflows.recording import Page

EARLIER_HEADER = "Recorded-Earlier"


def answer(
    document: dict[str, Any], status: int = 200, *, etag: object = None, earlier: bool = False
) -> Response:
    """Answer with a JSON document."""
    body = json.dumps(document, ensure_ascii=False, allow_nan=False)
    response = Response(body, status=status, mimetype="application/json")
    if etag is not None:
        response.headers["ETag"] = f'"{etag}"'
    if earlier:
        response.headers[EARLIER_HEADER] = "true"
    return response


def recorded(result: tuple[dict[str, Any], bool], status: int = 201) -> Response:
    """Answer a recording call; a version also carries its revision as ETag."""
    document, earlier = result
    return answer(document, status, etag=document.get("revision"), earlier=earlier)


def conditional(document: dict[str, Any], etag: object) -> Response:
    """Answer a GET with its ETag, or with 304 when the caller has that already."""
    response = answer(document, etag=etag)
    response.headers["Cache-Control"] = "no-cache"
    response.make_conditional(request)
    return response


def master_put(result: MasterAnswer) -> Response:
    """Answer a PUT of master data: 201 when it was made by this call or the one that is repeated."""
    status = 201 if result.created else 200
    document = {**result.document}
    return answer(document, status, etag=result.revision, earlier=result.earlier)


def listed(page: Page) -> Response:
    """Answer a list."""
    return answer({"items": list(page.items), "next": page.next})
