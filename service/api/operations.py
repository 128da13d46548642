"""What an operation takes and answers, said once beside its view, for openapi.yaml.

Nothing here runs when a request is served: views read and answer by themselves.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeVar

from flask_smorest import Blueprint

from service import documents
from service.api import requests
from service.api.answers import EARLIER_HEADER
from service.api.forms import Form, ref
from service.schemas import SCHEMAS
from service.schemas.examples import EXAMPLES

View = TypeVar("View", bound=Callable[..., Any])

_ALWAYS = (401, 403, 500)
_OF_BODY = (400, 413, 415, 422)

# As RFC 9110, section 15, has them (428: RFC 6585); http.HTTPStatus words some of them by its own age.
PHRASES = {
    200: "OK",
    201: "Created",
    304: "Not Modified",
    400: "Bad Request",
    401: "Unauthorized",
    403: "Forbidden",
    404: "Not Found",
    409: "Conflict",
    412: "Precondition Failed",
    413: "Content Too Large",
    415: "Unsupported Media Type",
    422: "Unprocessable Content",
    428: "Precondition Required",
    500: "Internal Server Error",
    503: "Service Unavailable",
}

_KEY = {
    "name": requests.KEY_HEADER,
    "in": "header",
    "description": "New for each thing to record; the same again gives the same answer and one entry.",
    "schema": {"type": "string", "pattern": f"^{requests.KEY_PATTERN}$"},
}
_IF_MATCH = {
    "name": "If-Match",
    "in": "header",
    "required": False,
    "description": "The ETag that was read; needed to replace what is there.",
    "schema": {"type": "string", "pattern": '^"[1-9][0-9]{0,17}"$'},
}
_ETAG = {
    "description": "For If-Match or If-None-Match.",
    "schema": {"type": "string", "pattern": '^"[0-9a-f]+"$'},
}
_EARLIER = {"description": "The key was used before.", "schema": {"type": "string", "enum": ["true"]}}

PAGING: tuple[Form, ...] = (
    {
        "name": "limit",
        "in": "query",
        "schema": {
            "type": "integer",
            "minimum": 1,
            "maximum": requests.LARGEST_LIMIT,
            "default": requests.DEFAULT_LIMIT,
        },
    },
    {
        "name": "cursor",
        "in": "query",
        "description": "The next of the page before.",
        "schema": {"type": "string"},
    },
)


def parameter(name: str, about: str, words: Sequence[str] = ()) -> Form:
    """Describe a parameter of the query."""
    schema: Form = {"type": "string", **({"enum": list(words)} if words else {})}
    return {"name": name, "in": "query", "description": about, "schema": schema}


def problem_name(status: int) -> str:
    """Name the response that is described once for all problems of a status."""
    return PHRASES[status].replace(" ", "")


@dataclass(frozen=True)
class Operation:
    """A call: what goes in, what comes out, and which problems it may answer with."""

    answers: str
    status: Sequence[int] = (200,)
    body: type[Any] | None = None
    query: Sequence[Form] = ()
    other_bodies: Mapping[str, str] = field(default_factory=dict)  # media type -> example, as text
    key: str | None = None  # "required" or "optional"
    if_match: bool = False
    may_match: bool = False  # If-Match is honoured, and never asked for
    etag: bool = False
    conditional: bool = False
    problems: Sequence[int] = ()

    def document(self, path_has_parameters: bool) -> Form:
        """Write the operation in the words of OpenAPI."""
        parameters = [*self.query]
        if self.key is not None:
            parameters.append({**_KEY, "required": self.key == "required"})
        if self.if_match:
            parameters.append(_IF_MATCH)
        if self.may_match:
            about = "The ETag that was read; another revision is then refused."
            parameters.append({**_IF_MATCH, "description": about})
        if self.conditional:
            parameters.append({**_IF_MATCH, "name": "If-None-Match", "description": "An ETag read before."})
        described: Form = {"responses": self._responses(path_has_parameters), "parameters": parameters}
        if self.body is not None:
            described["requestBody"] = _body(self.body, self.other_bodies)
        return described

    def _responses(self, path_has_parameters: bool) -> Form:
        headers: Form = {}
        if self.etag or self.conditional:
            headers["ETag"] = _ETAG
        if self.key is not None:
            headers[EARLIER_HEADER] = _EARLIER
        content = {"application/json": {"schema": ref(self.answers)}}
        responses: Form = {}
        for status in self.status:
            responses[str(status)] = {"description": PHRASES[status], "content": content}
            if headers:
                responses[str(status)]["headers"] = headers
        if self.conditional:
            responses["304"] = {"description": PHRASES[304]}
        for status in sorted(self._problem_statuses(path_has_parameters)):
            responses[str(status)] = {"$ref": f"#/components/responses/{problem_name(status)}"}
        return responses

    def _problem_statuses(self, path_has_parameters: bool) -> set[int]:
        statuses = {*_ALWAYS, *self.problems}
        if self.body is not None:
            statuses.update(_OF_BODY)
        if self.query or self.key is not None:
            statuses.add(422)
        if self.key is not None:
            statuses.update((400, 503))
        if self.if_match:
            statuses.update((412, 428))
        if self.may_match:
            statuses.add(412)
        if path_has_parameters:
            statuses.add(404)
        return statuses


def _body(kind: type[Any], other_bodies: Mapping[str, str]) -> Form:
    name = type(SCHEMAS[kind]).__name__.removesuffix("Schema")
    shown = {"schema": ref(name), "example": EXAMPLES[kind]}
    others = {media: {"schema": {"type": "string"}, "example": text} for media, text in other_bodies.items()}
    return {"required": True, "content": {"application/json": shown, **others}}


def describe(blueprint: Blueprint, rule: str, method: str, operation: Operation) -> Callable[[View], View]:
    """Register a view under a rule of the API and describe it."""

    def decorator(view: View) -> View:
        name = f"{blueprint.name}-{view.__name__}".replace("_", "-")
        documented = blueprint.doc(operationId=name, **operation.document("<" in rule))(view)
        blueprint.route(rule, methods=[method])(documented)
        return view

    return decorator


SIGNED = documents.SignedAct
