"""What views read from a request besides the body: who asks, the key, preconditions, the query."""

from __future__ import annotations

import hashlib
import json
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, TypeVar, cast

from flask import current_app, g, request

from service.api.reader import request_document
from service.documents import Actor
from service.errors import (
    Fault,
    InvalidRequest,
    KeyMissing,
    NotFound,
    PreconditionRequired,
    StaleVersion,
    Unauthenticated,
)
from service.schemas import load
from service.schemas.base import counted, got
from service.workflows import accounts
from service.workflows.recording import Request
from service.workflows.services import Services

T = TypeVar("T")

KEY_HEADER = "Idempotency-Key"
KEY_PATTERN = r"[!-~]{8,64}"
LONGEST_PARAMETER = 200
DEFAULT_LIMIT, LARGEST_LIMIT = 50, 500
_KEY = re.compile(KEY_PATTERN)
_ETAG = re.compile(r'"([1-9][0-9]{0,17})"')


def services() -> Services:
    """The services that create_app put together."""
    return cast(Services, current_app.extensions["shoalmark"])


def authenticate() -> None:
    """Find the actor behind the bearer token, before any view. Raises Unauthenticated."""
    scheme, _, token = request.headers.get("Authorization", "").partition(" ")
    if scheme.lower() != "bearer" or not token.strip():
        raise Unauthenticated("The header Authorization has to carry a bearer token.")
    g.actor = accounts.authenticate(services(), token.strip())


def actor() -> Actor:
    """Who makes the request at hand."""
    return cast(Actor, g.actor)


def body(kind: type[T]) -> T:
    """Read the body as a document. Raises Unreadable, TooLarge or InvalidRequest."""
    if request.query_string:
        query()  # a call with a body has no parameters, and nothing that is sent is ignored
    g.body = request_document()
    return load(kind, g.body)


def no_body() -> None:
    """Refuse a body where none is described, except an empty object. Raises InvalidRequest."""
    query()
    if request.get_data(cache=False).strip() not in (b"", b"{}"):
        fault = Fault("got a body", "no body, or an empty object", "#")
        raise InvalidRequest("1 fault; nothing was recorded.", faults=(fault,))


def forget_signature() -> None:
    """Keep a password out of the fingerprint, which is stored."""
    g.body = {name: value for name, value in g.body.items() if name != "signature"}


def recording() -> Request:
    """Give key and fingerprint of a call that records. Raises KeyMissing."""
    key = request.headers.get(KEY_HEADER)
    if key is None or _KEY.fullmatch(key) is None:
        raise KeyMissing("1 fault; nothing was recorded.", faults=(_key_fault(key),))
    return Request(key, _fingerprint())


def replaceable() -> Request:
    """Give key and fingerprint of a PUT, where the key may be left out. Raises KeyMissing."""
    return recording() if KEY_HEADER in request.headers else Request(None, _fingerprint())


def _key_fault(key: str | None) -> Fault:
    return Fault(
        "missing" if key is None else f"got {len(key)} characters",
        "8 to 64 printable ASCII characters without blanks, new for each thing to record",
        header=KEY_HEADER,
    )


def _fingerprint() -> str:
    """Say in 64 characters what a request asks: method, path and parsed body (so blanks do not matter)."""
    document = json.dumps(g.get("body"), sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    said = f"{request.method} {request.path}\n{document}"
    return hashlib.sha256(said.encode()).hexdigest()


def if_match() -> int | None:
    """Give the revision that If-Match names; None without the header. Raises StaleVersion.

    An ETag that we never gave out names a document that does not stand any more.
    """
    value = request.headers.get("If-Match")
    if value is None:
        return None
    found = _ETAG.fullmatch(value.strip())
    if found is None:
        raise StaleVersion(f'If-Match has to repeat one ETag as it was read, as "3"; got {value[:60]}.')
    return int(found.group(1))


@contextmanager
def creation_only() -> Iterator[None]:
    """Answer 412 instead of 428 where ``If-None-Match: *`` asked for creation only. Raises StaleVersion."""
    try:
        yield
    except PreconditionRequired:
        if request.headers.get("If-None-Match", "").strip() != "*":
            raise
        raise StaleVersion("If-None-Match: * asks for creation, but the document exists.") from None


def query(*names: str, longest: int = LONGEST_PARAMETER) -> dict[str, str]:
    """Give the query's parameters, each of which has to be one of ``names`` and there once."""
    faults = _query_faults(names, longest)
    if faults:
        raise _bad_query(faults)
    return request.args.to_dict()


def page(*names: str, **words: tuple[str, ...]) -> dict[str, Any]:
    """Give the parameters of a list: limit, cursor and ``names``; those of ``words`` are one of a few words.

    Raises InvalidRequest with all that is wrong with the query.
    """
    faults = _query_faults(("limit", "cursor", *names, *words))
    limit = request.args.get("limit", str(DEFAULT_LIMIT))
    if not (limit.isascii() and limit.isdigit() and len(limit) < 4 and 1 <= int(limit) <= LARGEST_LIMIT):
        faults.append(_wrong_parameter("limit", limit, f"a whole number from 1 to {LARGEST_LIMIT}"))
    for name, allowed in words.items():
        value = request.args.get(name)
        if value is not None and value not in allowed:
            faults.append(_wrong_parameter(name, value, "one of " + ", ".join(allowed)))
    if faults:
        raise _bad_query(faults)
    return {**request.args.to_dict(), "limit": int(limit), "cursor": request.args.get("cursor")}


def belongs(it_does: bool, what: str) -> None:
    """Answer that a thing is not there when it stands under another path. Raises NotFound."""
    if not it_does:
        raise NotFound(f"There is no {what}.")


def same_identity(document: Any, **expected: str) -> None:
    """Refuse a document that names another thing than the path. Raises InvalidRequest."""
    faults = [
        Fault(f"got {getattr(document, member)!r}", f"{value!r}, as in the path", f"#/{member}")
        for member, value in expected.items()
        if getattr(document, member) != value
    ]
    if faults:
        raise InvalidRequest(f"{counted(len(faults))}; nothing was recorded.", faults=tuple(faults))


def _query_faults(names: tuple[str, ...], longest: int = LONGEST_PARAMETER) -> list[Fault]:
    faults = []
    for name, values in request.args.lists():
        if name not in names:
            only = "only " + ", ".join(names) if names else "no parameters"
            faults.append(Fault("unknown parameter", only, parameter=name))
        elif len(values) > 1:
            faults.append(Fault(f"got it {len(values)} times", "one value", parameter=name))
        elif not values[0].isprintable() or len(values[0]) > longest:
            # Nothing has such a name, and a database need not be able to look for it (NUL).
            faults.append(_wrong_parameter(name, values[0], f"printable text up to {longest}"))
    return faults


def _wrong_parameter(name: str, value: str, expected: str) -> Fault:
    return Fault(got(value), expected, parameter=name)


def version_number(value: str | None, name: str) -> int | None:
    """Read a query parameter that is the number of a version. Raises InvalidRequest."""
    if value is None:
        return None
    if not (value.isascii() and value.isdigit() and len(value) < 10 and int(value) > 0):
        raise _bad_query([Fault(f"got {value[:60]!r}", "the number of a version", parameter=name)])
    return int(value)


def _bad_query(faults: list[Fault]) -> InvalidRequest:
    return InvalidRequest(f"{counted(len(faults))} in the query.", faults=tuple(faults))
