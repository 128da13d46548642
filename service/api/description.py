"""The head of openapi.yaml."""

from __future__ import annotations

from typing import Any

from service.api.forms import ref

# That of the distribution (a test holds both together).
VERSION = "0.1.0"

_ABOUT = """\
Judges the lots of a production line against specifications, from uncertainty budgets in force, and keeps
every answer in a record that cannot be altered unseen.

What cannot be understood is a problem document (RFC 9457) that names every fault, and nothing is recorded.
What is understood but not provable is a recorded `hold` with its reasons. No answer, a time-out or a 5xx
means hold: send the same request again under the same `Idempotency-Key` to find the truth.

Numbers are JSON numbers, instants RFC 3339 with their offset, units are named with every figure. Members may
be added to answers; unknown members of requests are refused. Answers speak of the named characteristics
only; they are no safety clearance.
"""


def describe_api() -> dict[str, Any]:
    """Give title, version and what holds for all operations."""
    return {
        "title": "Shoalmark",
        "version": VERSION,
        "openapi_version": "3.1.0",
        "info": {"description": _ABOUT},
        "security": [{"token": []}],
        "servers": [{"url": "/"}],
    }


def public_operations() -> dict[str, dict[str, Any]]:
    """Describe what is outside of the API's prefix, by endpoint."""
    ready = {"application/json": {"schema": ref("Readiness")}}
    retry = {"Retry-After": {"schema": {"type": "string"}}}
    return {
        "health.get_health": {
            "summary": "Say that the process answers.",
            "operationId": "health",
            "tags": ["health"],
            "responses": {
                "200": {
                    "description": "It does.",
                    "content": {"application/json": {"schema": ref("Health")}},
                }
            },
        },
        "health.get_readiness": {
            "summary": "Say whether this process can record decisions now.",
            "operationId": "readiness",
            "tags": ["health"],
            "responses": {
                "200": {"description": "It can.", "content": ready},
                "503": {"description": "It cannot.", "content": ready, "headers": retry},
            },
        },
        "openapi": {
            "summary": "Give this description.",
            "operationId": "description",
            "tags": ["health"],
            "responses": {
                "200": {
                    "description": "This document.",
                    "content": {"application/yaml": {"schema": {"type": "string"}}},
                }
            },
        },
    }
