"""A study let serve longer, by an approver's signature."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import recorded
from service.api.operations import Operation, describe
from service.documents import Extension
from service.workflows import extensions

blueprint = Blueprint(
    "extensions", __name__, description="A study let serve longer, with a wider uncertainty."
)


@describe(
    blueprint,
    "/v1/studies/<code:code>/extension",
    "POST",
    Operation("StudyExtension", (201,), Extension, key="required", problems=(409,)),
)
def extend_study(code: str) -> Response:
    """Let a study serve longer, once: its uncertainty is widened in every budget in force that uses it."""
    extension = requests.body(Extension)
    requests.forget_signature()
    request = requests.recording()
    return recorded(extensions.extend(requests.services(), requests.actor(), code, extension, request))
