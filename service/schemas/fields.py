"""The fields of all documents: numbers are numbers, texts are texts, and each says what it expects.

Each keeps its limits as ``form``, in the words of JSON Schema, so that openapi.yaml shows what is checked.
"""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Mapping, Sequence
from datetime import UTC, date, datetime, time
from typing import Any

from marshmallow import Schema, ValidationError, fields
from marshmallow.exceptions import SCHEMA

from service.schemas.base import Wrong, complaint, got, not_yet

CODE_PATTERN = r"[a-z0-9][a-z0-9-]{0,62}"
_CODE = re.compile(CODE_PATTERN)
_NAME = re.compile(r"[a-z][a-z0-9_-]{0,62}")
_INSTANT = re.compile(
    r"[0-9]{4}-[0-9]{2}-[0-9]{2}[Tt][0-9]{2}:[0-9]{2}:[0-9]{2}(\.[0-9]{1,9})?([Zz]|[+-][0-9]{2}:[0-9]{2})"
)
_DATE = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}")
_HOUR = re.compile(r"([01][0-9]|2[0-3]):[0-5][0-9]")


class _Stating(fields.Field[Any]):
    """A field that states what it expects when a value is missing, null or wrong."""

    expected = "a value"

    def __init__(
        self, *args: Any, schema: Mapping[str, Any] | None = None, about: str = "", **kwargs: Any
    ) -> None:
        super().__init__(*args, metadata={"description": about} if about else {}, **kwargs)
        self.form: dict[str, Any] = dict(schema or {})

    def make_error(self, key: str, **_: Any) -> ValidationError:
        """Replace marshmallow's texts: a missing value, null, or (from a base class) a wrong form."""
        detail = {"required": "missing", "null": "got null"}.get(key, "got something else")
        return complaint(detail, self.expected)

    def wrong(self, value: object) -> ValidationError:
        """The complaint about a value of another form."""
        return complaint(got(value), self.expected)


class Number(_Stating, fields.Float):
    """A finite JSON number, within bounds where they are given."""

    def __init__(
        self,
        *,
        above: float | None = None,
        least: float | None = None,
        below: float | None = None,
        most: float | None = None,
        **kwargs: Any,
    ) -> None:
        bounds = {
            "exclusiveMinimum": above,
            "minimum": least,
            "exclusiveMaximum": below,
            "maximum": most,
        }
        super().__init__(schema={key: x for key, x in bounds.items() if x is not None}, **kwargs)
        self._above, self._least, self._below, self._most = above, least, below, most
        self._bounded = any(x is not None for x in bounds.values())
        words = (("above", above), ("at least", least), ("below", below), ("at most", most))
        said = [f"{word} {x:g}" for word, x in words if x is not None]
        self.expected = " ".join(["a finite JSON number", " and ".join(said)]).strip()

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> float:
        if type(value) is float:
            number = value
        elif type(value) is int:
            try:
                number = float(value)
            except OverflowError:
                raise self.wrong(value) from None
        else:
            raise self.wrong(value)
        if not math.isfinite(number) or (self._bounded and not self._within(number)):
            raise self.wrong(value)
        return number

    def _within(self, number: float) -> bool:
        return not (
            (self._above is not None and number <= self._above)
            or (self._least is not None and number < self._least)
            or (self._below is not None and number >= self._below)
            or (self._most is not None and number > self._most)
        )

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> Any:
        return value


class Count(_Stating, fields.Integer):
    """A whole JSON number between bounds; 3.0 is none."""

    def __init__(self, *, least: int = 0, most: int = 2**31 - 1, **kwargs: Any) -> None:
        super().__init__(schema={"minimum": least, "maximum": most}, **kwargs)
        self._least, self._most = least, most
        self.expected = f"a whole JSON number from {least} to {most}"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> int:
        if type(value) is not int or not self._least <= value <= self._most:
            raise self.wrong(value)
        return value


class Flag(_Stating, fields.Boolean):
    """true or false."""

    expected = "true or false"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> bool:
        if not isinstance(value, bool):
            raise self.wrong(value)
        return value


def trimmed_text(value: str) -> str:
    """A text as it is kept: without outer blanks, and composed, so that equal looks are equal texts."""
    return unicodedata.normalize("NFC", value.strip(" "))


class Text(_Stating, fields.String):
    """Printable text of at least one character after trimming; ``lines`` allows line breaks."""

    def __init__(self, most: int, *, lines: bool = False, **kwargs: Any) -> None:
        super().__init__(schema={"minLength": 1, "maxLength": most}, **kwargs)
        self._most, self._lines = most, lines
        self.expected = f"printable text of 1 to {most} characters"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        if not isinstance(value, str):
            raise self.wrong(value)
        text = value if value.isascii() and value[:1] != " " != value[-1:] else trimmed_text(value)
        if not text.strip() or len(text) > self._most:
            raise self.wrong(value)
        if not text.isprintable() and not (self._lines and text.replace("\n", "").isprintable()):
            raise self.wrong(value)
        return text


class Secret(_Stating, fields.String):
    """A password: kept exactly, and never repeated in a complaint."""

    expected = "text of 1 to 1024 characters"

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(schema={"minLength": 1, "maxLength": 1024, "format": "password"}, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        if not isinstance(value, str):
            raise self.wrong(None if value is None else {})
        if not 0 < len(value) <= 1024:
            raise complaint(f"got a text of {len(value)} characters", self.expected)
        return value


class Code(_Stating, fields.String):
    """A code that the plant gives: lower-case letters, digits and hyphens."""

    expected = "a code: 1 to 63 of a-z, 0-9 and hyphen, not beginning with a hyphen"

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(schema={"pattern": f"^{CODE_PATTERN}$"}, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        if not isinstance(value, str) or _CODE.fullmatch(value) is None:
            raise self.wrong(value)
        return value


class Name(_Stating, fields.String):
    """A name that the program gives (an estimate, a design); may hold underscores."""

    expected = "a name of a-z, 0-9, underscore and hyphen"

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(schema={"pattern": f"^{_NAME.pattern}$"}, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        if not isinstance(value, str) or _NAME.fullmatch(value) is None:
            raise self.wrong(value)
        return value


class Choice(_Stating, fields.String):
    """One of a closed list of words; words of ``later`` are understood but not supported yet."""

    def __init__(self, *words: str, later: tuple[str, ...] = (), **kwargs: Any) -> None:
        super().__init__(schema={"enum": [*words, *([None] if kwargs.get("allow_none") else [])]}, **kwargs)
        self._words, self._later = words, later
        self.expected = "one of " + ", ".join(words) if len(words) > 1 else words[0]

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        if not isinstance(value, str):
            raise self.wrong(value)
        if value in self._later:
            raise not_yet(value, self.expected)
        if value not in self._words:
            raise self.wrong(value)
        return value


class Instant(_Stating, fields.AwareDateTime):
    """An instant with its offset from UTC (RFC 3339); goes out in UTC with microseconds."""

    expected = "an instant with offset, as 2026-03-02T06:12:04.120+01:00"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> datetime:
        if not isinstance(value, str) or _INSTANT.fullmatch(value) is None:
            raise self.wrong(value)
        try:
            return datetime.fromisoformat(value.upper()).astimezone(UTC)
        except (ValueError, OverflowError):  # 30 February, hour 25, second 60, before the year 1
            raise self.wrong(value) from None

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> str | None:
        if value is None:
            return None
        text: str = value.astimezone(UTC).isoformat(timespec="microseconds")
        return text.replace("+00:00", "Z")


class Day(_Stating, fields.Date):
    """A date of the plant's calendar."""

    expected = "a date, as 2026-03-02"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> date:
        if not isinstance(value, str) or _DATE.fullmatch(value) is None:
            raise self.wrong(value)
        try:
            return date.fromisoformat(value)
        except ValueError:
            raise self.wrong(value) from None


class HourOfDay(_Stating, fields.String):
    """An hour and minute of the plant's clock."""

    expected = "an hour of the day, as 11:00"

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(schema={"pattern": f"^{_HOUR.pattern}$"}, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        if not isinstance(value, str) or _HOUR.fullmatch(value) is None:
            raise self.wrong(value)
        return time.fromisoformat(value)

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> str:
        return format(value, "%H:%M")


class Part(_Stating, fields.Nested):
    """An object inside a document."""

    expected = "a JSON object"

    def _deserialize(
        self, value: Any, attr: str | None, data: Any, partial: Any = None, **kwargs: Any
    ) -> Any:
        if not isinstance(value, dict):
            raise self.wrong(value)
        return super()._deserialize(value, attr, data, partial, **kwargs)


class Parts(_Stating, fields.List[Any]):
    """A list of things of one kind; loads to a tuple."""

    def __init__(
        self,
        each: fields.Field[Any] | type[Schema],
        *,
        least: int = 0,
        most: int = 1000,
        distinct: bool = False,
        **kwargs: Any,
    ) -> None:
        inner = each if isinstance(each, fields.Field) else Part(each)
        size: dict[str, Any] = {"minItems": least, "maxItems": most}
        if distinct:
            size["uniqueItems"] = True
        super().__init__(inner, schema=size, **kwargs)
        self._least, self._most, self._distinct = least, most, distinct
        self.expected = f"a list of {least} to {most} items" if least else f"a list of at most {most} items"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        if not isinstance(value, list):
            raise self.wrong(value)
        if not self._least <= len(value) <= self._most:
            raise complaint(f"got a list of {len(value)} items", self.expected)
        items = tuple(super()._deserialize(value, attr, data, **kwargs))
        if self._distinct and len(set(items)) != len(items):
            twice = next(i for i, item in enumerate(items) if item in items[:i])
            raise ValidationError({twice: [Wrong(f"{got(value[twice])} a second time", "distinct items")]})
        return items


class ByKey(_Stating, fields.Dict):
    """An object whose member names are data: channel -> value, code -> code."""

    def __init__(
        self,
        key: fields.Field[Any],
        each: fields.Field[Any] | type[Schema],
        *,
        least: int = 0,
        most: int = 200,
        **kwargs: Any,
    ) -> None:
        inner = each if isinstance(each, fields.Field) else Part(each)
        names: dict[str, Any] = getattr(key, "form", {})
        size: dict[str, Any] = {"minProperties": least, "maxProperties": most, "propertyNames": names}
        super().__init__(keys=key, values=inner, schema=size, **kwargs)
        self.key_field: fields.Field[Any]
        self.value_field: fields.Field[Any]
        self._least, self._most = least, most
        self.expected = f"an object of {least} to {most} members" if least else "a JSON object"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> dict[Any, Any]:
        if not isinstance(value, dict):
            raise self.wrong(value)
        if not self._least <= len(value) <= self._most:
            raise complaint(f"got an object of {len(value)} members", self.expected)
        read_key, read_value = self.key_field._deserialize, self.value_field._deserialize
        loaded: dict[Any, Any] = {}
        errors: dict[str, Any] = {}
        for name, member in value.items():
            try:
                # Straight to the form: these fields have no processors, validators or defaults, and every
                # decision passes here several times.
                key = read_key(name, None, None)
                loaded[key] = read_value(member, None, None)
            except ValidationError as error:
                errors[name] = error.messages
        if errors:
            raise ValidationError(errors)
        return loaded

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> Any:
        if value is None:
            return None
        # A dict's items are no attributes of an object, so each is handed to the field by itself.
        return {key: self.value_field._serialize(item, key, obj, **kwargs) for key, item in value.items()}


class Later(_Stating, fields.Raw):
    """A member that contracts know and this version cannot use: only null (or an empty list) is taken."""

    expected = "null, or no such member"

    def __init__(self, *, empty: Sequence[Any] | None = None, **kwargs: Any) -> None:
        kwargs.setdefault("about", "Not supported yet.")
        form: dict[str, Any] = {"type": "null"} if empty is None else {"type": "array", "maxItems": 0}
        super().__init__(schema=form, allow_none=empty is None, **kwargs)
        self._empty = empty
        if empty is not None:
            self.expected = "an empty list, or no such member"

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        if self._empty is not None and value == self._empty:
            return value
        raise not_yet(f"{self.data_key or attr}; {got(value)}", self.expected)


def at_schema(wrong: Wrong) -> ValidationError:
    """A complaint about an object as a whole."""
    return ValidationError({SCHEMA: [wrong]})
