"""The strict JSON reader: one text, one meaning, or a clear refusal.

Small bodies pay for one pass of the standard parser. Only where something is wrong is the text parsed a
second time, with markers in place of what is wrong, so that every fault gets its place in the document.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from flask import request
from werkzeug.exceptions import RequestEntityTooLarge, UnsupportedMediaType

from service.errors import Fault, InvalidRequest, TooLarge, Unreadable
from service.schemas.base import MOST_FAULTS, counted, got, pointer_step

LARGEST_BODY = 8 * 1024 * 1024
DEEPEST = 32


class _Trouble(Exception):
    """The text holds something that is refused; a second, slower pass says where."""


@dataclass(frozen=True)
class _Marker:
    """Stands in the parsed document where a value was that JSON or we do not take."""

    detail: str
    expected: str


class _Pairs(list[tuple[str, Any]]):
    """An object of the second pass: its pairs as written, equal names included."""


def request_document() -> dict[str, Any]:
    """Give the JSON object in the body of the request at hand.

    Raises UnsupportedMediaType, TooLarge, Unreadable, or InvalidRequest when it is no object.
    """
    if request.mimetype != "application/json":
        got_type = request.mimetype or "no content type"
        raise UnsupportedMediaType(f"Got {got_type}; the body has to be application/json.")
    charset = request.mimetype_params.get("charset", "utf-8")
    if charset.lower() != "utf-8":  # read as UTF-8 it could be other text than was meant (RFC 8259, 8.1)
        raise UnsupportedMediaType(f"Got the charset {charset[:40]}; the body has to be UTF-8.")
    return read(request_bytes())


def request_bytes() -> bytes:
    """Give the bytes of the body of the request at hand. Raises TooLarge."""
    if request.content_length is not None and request.content_length > LARGEST_BODY:
        raise TooLarge(f"The body has {request.content_length} bytes; at most {LARGEST_BODY} are taken.")
    request.max_content_length = LARGEST_BODY
    try:
        return request.get_data(cache=False)
    except RequestEntityTooLarge:  # a body without a stated length
        raise TooLarge(f"The body is too large; at most {LARGEST_BODY} bytes are taken.") from None


def read(body: bytes) -> dict[str, Any]:
    """Parse the bytes of a JSON object. Raises Unreadable, TooLarge or InvalidRequest."""
    if len(body) > LARGEST_BODY:
        raise TooLarge(f"The body has {len(body)} bytes; at most {LARGEST_BODY} are taken.")
    if not body.strip():
        raise Unreadable("The body is empty; a JSON object is expected.")
    document = _parse(_decode(body))
    if not isinstance(document, dict):
        raise InvalidRequest(
            "1 fault; nothing was recorded.", faults=(Fault(got(document), "a JSON object", "#"),)
        )
    return document


def _decode(body: bytes) -> str:
    if body.startswith(b"\xef\xbb\xbf"):
        raise Unreadable("The body begins with a byte order mark; JSON text has none (RFC 8259, 8.1).")
    try:
        return body.decode()
    except UnicodeDecodeError as error:
        raise Unreadable(f"The body is not UTF-8: byte {error.start + 1} cannot be read.") from None


def _parse(text: str) -> Any:
    _check_depth(text)
    try:
        document = _FAST.decode(text)
    except _Trouble:
        raise _located(text) from None
    except json.JSONDecodeError as error:
        raise _no_json(error) from None
    # Only an escape can bring in a surrogate or NUL.
    if "\\u" in text and any(_unprintable_texts(document)):
        raise _located(text)
    return document


def _no_json(error: json.JSONDecodeError) -> Unreadable:
    return Unreadable(f"The body is no JSON: {error.msg} at line {error.lineno}, column {error.colno}.")


def _check_depth(text: str) -> None:
    """Refuse a great depth before the parser recurses into it, on a thread's stack of unknown size."""
    if text.count("[") + text.count("{") <= DEEPEST:
        return
    depth = 0
    for token in _TOKEN.finditer(text):
        sign = text[token.start()]
        if sign in "[{":
            depth += 1
            if depth > DEEPEST:
                raise Unreadable(f"The body is nested too deep; at most {DEEPEST} levels are taken.")
        elif sign in "]}":
            depth -= 1


# A string, or a bracket. A string without its end goes to the end of the text, so this never goes back.
_TOKEN = re.compile(r'"(?:[^"\\]++|\\.)*+"?|[\[\]{}]', re.DOTALL)


# --- first pass -----------------------------------------------------------------------------------------


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    members = dict(pairs)
    if len(members) != len(pairs):
        raise _Trouble
    return members


def _fraction(text: str) -> float:
    number = float(text)
    if math.isinf(number):
        raise _Trouble
    return number


def _whole(text: str) -> int:
    if len(text) > 400:  # beyond binary64, and Python's own limit of digits is no problem document
        raise _Trouble
    return int(text)


def _constant(text: str) -> Any:
    raise _Trouble


_FAST = json.JSONDecoder(
    object_pairs_hook=_object, parse_float=_fraction, parse_int=_whole, parse_constant=_constant
)


def _has_bad_character(text: str) -> bool:
    return (not text.isascii() and any("\ud800" <= letter <= "\udfff" for letter in text)) or "\x00" in text


def _unprintable_texts(document: Any) -> Iterator[bool]:
    stack = [document]
    while stack:
        item = stack.pop()
        if isinstance(item, str):
            if _has_bad_character(item):
                yield True
        elif isinstance(item, dict):
            stack.extend(item.keys())
            stack.extend(item.values())
        elif isinstance(item, list):
            stack.extend(item)


# --- second pass ----------------------------------------------------------------------------------------


def _marked_fraction(text: str) -> Any:
    number = float(text)
    return _Marker(f"got the number {text[:40]}", _FINITE) if math.isinf(number) else number


def _marked_whole(text: str) -> Any:
    return _Marker(f"got a number of {len(text)} digits", _FINITE) if len(text) > 400 else 0


_FINITE = "a finite JSON number"
_SLOW = json.JSONDecoder(
    object_pairs_hook=_Pairs,
    parse_float=_marked_fraction,
    parse_int=_marked_whole,
    parse_constant=lambda text: _Marker(f"got {text}, which JSON does not have", _FINITE),
)


def _located(text: str) -> Unreadable:
    """Say all that is wrong with a text that parses, and where."""
    try:
        document = _SLOW.decode(text)
    except json.JSONDecodeError as error:
        return _no_json(error)
    faults = list(_faults(document, "#"))
    return Unreadable(f"{counted(len(faults))}; nothing was recorded.", faults=tuple(faults[:MOST_FAULTS]))


def _faults(item: Any, pointer: str) -> Iterator[Fault]:
    if isinstance(item, _Marker):
        yield Fault(item.detail, item.expected, pointer)
    elif isinstance(item, str) and _has_bad_character(item):
        yield Fault(
            "got a text with a lone surrogate or a NUL", "text of Unicode characters without NUL", pointer
        )
    elif isinstance(item, _Pairs):
        seen: set[str] = set()
        for name, value in item:
            if name in seen:
                yield Fault(
                    f"the member {got(name).removeprefix('got the text ')} stands here twice",
                    "each member once",
                    pointer,
                )
            seen.add(name)
            if _has_bad_character(name):
                yield Fault("a member name holds a lone surrogate or a NUL", "another name", pointer)
            else:
                yield from _faults(value, pointer + pointer_step(name))
    elif isinstance(item, list):
        for index, value in enumerate(item):
            yield from _faults(value, f"{pointer}/{index}")
