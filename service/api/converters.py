"""Path parameters: a path with a malformed code names nothing and is a 404."""

from __future__ import annotations

from typing import Any

from flask import Flask
from werkzeug.routing import BaseConverter, ValidationError

from service.schemas import trimmed_text
from service.schemas.decisions import LONGEST_LOT
from service.schemas.fields import CODE_PATTERN


class _Pattern(BaseConverter):
    def form(self) -> dict[str, Any]:
        """Describe the parameter in the words of JSON Schema."""
        return {"type": "string", "pattern": f"^{self.regex}$"}


class CodeConverter(_Pattern):
    """A code that the plant gives."""

    regex = CODE_PATTERN


class DecisionConverter(_Pattern):
    """The identity of a decision: its line and the sequence of its entry."""

    regex = CODE_PATTERN + r"\.[1-9][0-9]{0,17}"


class VersionConverter(_Pattern):
    """The number of a version."""

    regex = "[1-9][0-9]{0,8}"

    def to_python(self, value: str) -> int:
        """Read the number."""
        return int(value)

    def form(self) -> dict[str, Any]:
        """Describe the parameter in the words of JSON Schema."""
        return {"type": "integer", "minimum": 1, "maximum": 999_999_999}


class LotConverter(_Pattern):
    """The text that names a lot; may hold a slash, is trimmed and composed as in a request."""

    regex = ".*?[^/].*?"
    part_isolating = False

    def to_python(self, value: str) -> str:
        """Give the text as the record keeps it."""
        text = trimmed_text(value)
        if not 0 < len(text) <= LONGEST_LOT or not text.isprintable():
            raise ValidationError  # werkzeug's: the rule does not match, so there is no such path
        return text

    def form(self) -> dict[str, Any]:
        """Describe the parameter in the words of JSON Schema."""
        return {"type": "string", "minLength": 1, "maxLength": LONGEST_LOT}


CONVERTERS: dict[str, type[_Pattern]] = {
    "code": CodeConverter,
    "decision": DecisionConverter,
    "version": VersionConverter,
    "lot": LotConverter,
}


def register(app: Flask) -> None:
    """Make the converters known to the routes."""
    app.url_map.converters.update(CONVERTERS)
