"""The strict schema, and how its complaints become faults with JSON pointers.

marshmallow's own messages are texts; ours are `Wrong` objects, so that a fault can say apart what was got
and what is expected, and whether the form is wrong or only not supported yet.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, ClassVar
from urllib.parse import quote

from marshmallow import RAISE, Schema, ValidationError, post_load
from marshmallow.exceptions import SCHEMA

from service.errors import Fault, InvalidRequest, NotSupported

# Enough to repair any hand-written document in one go, and an answer that stays small.
MOST_FAULTS = 100

_LONGEST_QUOTE = 60


@dataclass(frozen=True, slots=True)
class Wrong:
    """One complaint, before it is known where in the document it belongs."""

    detail: str
    expected: str | None = None
    supported: bool = True


def complaint(detail: str, expected: str | None = None) -> ValidationError:
    """Something is wrong with the value at hand."""
    return ValidationError([Wrong(detail, expected)])


def not_yet(detail: str, expected: str | None = None) -> ValidationError:
    """The value says something valid that this version cannot do."""
    return ValidationError([Wrong(f"not supported yet: {detail}", expected, supported=False)])


def got(value: object) -> str:
    """What was got, in the words of JSON."""
    if isinstance(value, str):
        text = value if len(value) <= _LONGEST_QUOTE else value[: _LONGEST_QUOTE - 3] + "..."
        return f"got the text {json.dumps(text, ensure_ascii=False)}"
    if value is None or isinstance(value, bool):
        return f"got {json.dumps(value)}"
    if isinstance(value, Mapping):
        return "got an object"
    if isinstance(value, (list, tuple)):
        return "got a list"
    return f"got the number {str(value)[:_LONGEST_QUOTE]}"


class StrictSchema(Schema):
    """A schema that refuses unknown members and makes a frozen dataclass of what it loads."""

    loads_to: ClassVar[type[Any] | None] = None
    # Members that contracts know and the dataclass has no place for yet.
    without: ClassVar[frozenset[str]] = frozenset()

    class Meta:
        """Nothing that is sent is ignored."""

        unknown = RAISE

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        members = ", ".join(str(field.data_key or name) for name, field in self.load_fields.items())
        # Read by marshmallow where it meets a member without a field, and a value that is no object.
        self.error_messages = {
            **self.error_messages,
            "unknown": Wrong("unknown member", f"only the members {members}"),  # type: ignore[dict-item]
            "type": Wrong("got no object", "a JSON object"),  # type: ignore[dict-item]
        }

    @post_load
    def _make(self, data: dict[str, Any], **_: Any) -> Any:
        if self.without:
            data = {name: value for name, value in data.items() if name not in self.without}
        return data if self.loads_to is None else self.loads_to(**data)


def counted(faults: int) -> str:
    """Say how many faults there are."""
    return "1 fault" if faults == 1 else f"{faults} faults"


def pointer_step(step: object) -> str:
    """One step of a JSON pointer in its URI fragment form (RFC 6901, sections 3 and 6)."""
    text = str(step).replace("~", "~0").replace("/", "~1")
    return "/" + quote(text, safe="!$&'()*+,;=:@-._~")


def _flatten(messages: object, pointer: str) -> Iterator[tuple[Wrong, str]]:
    if isinstance(messages, Mapping):
        for key, inner in messages.items():
            yield from _flatten(inner, pointer if key == SCHEMA else pointer + pointer_step(key))
    elif isinstance(messages, (list, tuple)):
        for message in messages:
            yield from _flatten(message, pointer)
    else:
        yield messages if isinstance(messages, Wrong) else Wrong(str(messages)), pointer


def refusal(error: ValidationError) -> InvalidRequest:
    """All complaints of a document as one error with a fault for each."""
    found = list(_flatten(error.messages, "#"))
    faults = tuple(
        Fault(wrong.detail, wrong.expected, pointer, supported=wrong.supported)
        for wrong, pointer in found[:MOST_FAULTS]
    )
    shown = "" if len(found) <= MOST_FAULTS else f", the first {MOST_FAULTS} are shown"
    kind = InvalidRequest if any(wrong.supported for wrong, _ in found) else NotSupported
    return kind(f"{counted(len(found))}{shown}; nothing was recorded.", faults=faults)
