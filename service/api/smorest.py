"""flask-smorest, bent once to this service's rules.

What differs from its defaults: errors of the API are problem documents with their own media type and headers,
errors elsewhere are pages (its handler is app-wide); no default error response is documented, since every
operation names its own; bodies are read and answered by us, its decorators only describe them.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import flask_smorest
from flask import current_app, request
from marshmallow import fields
from werkzeug.exceptions import HTTPException

from service.api.answer_forms import ANSWERS
from service.api.converters import CONVERTERS
from service.api.forms import ref
from service.api.operations import PHRASES, problem_name
from service.api.problems import MEDIA_TYPE, problem_response
from service.schemas import SCHEMAS
from service.schemas.evidence import (
    DeclaredEvidenceSchema,
    LaboratoryEvidenceSchema,
    StudyEvidenceSchema,
)

PREFIX = "/v1"
_FORMS_OF_EVIDENCE = (StudyEvidenceSchema(), DeclaredEvidenceSchema(), LaboratoryEvidenceSchema())


def is_api_path(path: str) -> bool:
    """Whether a path belongs to the API, whose errors are problem documents."""
    return path == PREFIX or path.startswith(PREFIX + "/")


def _problem_response(status: int) -> dict[str, Any]:
    """Describe a problem of a status, with the headers that go with it."""
    description: dict[str, Any] = {
        "description": PHRASES[status],
        "content": {MEDIA_TYPE: {"schema": ref("Problem")}},
    }
    headers = {401: "WWW-Authenticate", 503: "Retry-After"}
    if status in headers:
        description["headers"] = {headers[status]: {"schema": {"type": "string"}}}
    return description


def _stated_form(self: Any, field: fields.Field[Any], **_: Any) -> dict[str, Any]:
    """What a field of service.schemas says about itself, in the words of JSON Schema."""
    return dict(getattr(field, "form", {}))


class ShoalmarkApi(flask_smorest.Api):  # type: ignore[misc] # the package carries no types
    """The API of this service."""

    DEFAULT_ERROR_RESPONSE_NAME = None

    def _init_spec(self, **options: Any) -> None:
        super()._init_spec(**options)
        self.ma_plugin.converter.add_attribute_function(_stated_form)
        for converter in CONVERTERS.values():
            self.register_converter(converter, lambda each: each.form())
        components = self.spec.components
        for schema in (*_FORMS_OF_EVIDENCE, *SCHEMAS.values()):
            name = type(schema).__name__.removesuffix("Schema")
            if name not in components.schemas:
                components.schema(name, schema=schema)
        for name, form in ANSWERS.items():
            components.schema(name, form)
        for status in PHRASES:
            if status >= 400:
                components.response(problem_name(status), _problem_response(status))
        components.security_scheme(
            "token", {"type": "http", "scheme": "bearer", "description": "`shoalmark token add` makes one."}
        )

    def _register_responses(self) -> None:
        """Leave out the ready-made error responses: their media type is not ours."""

    def _register_pagination_header(self) -> None:
        """Leave out the header: our lists say in their body how they go on."""

    def describe_public(self, endpoint: str, operation: dict[str, Any]) -> None:
        """Describe a GET outside of the API's prefix, which needs no token."""
        rule = next(self._app.url_map.iter_rules(endpoint))
        self.spec.path(rule=rule, operations={"get": {**operation, "security": []}})

    def _register_error_handlers(self) -> None:
        for kind in (HTTPException, Exception):
            self._app.register_error_handler(kind, _answer_error)


def _answer_error(error: Exception) -> Any:
    """Answer an error by the place where it happened."""
    if is_api_path(request.path):
        return problem_response(error)
    page: Callable[[Exception], Any] | None = current_app.extensions.get("shoalmark.error_page")
    if page is not None:
        return page(error)
    if isinstance(error, HTTPException):
        return error
    raise error
