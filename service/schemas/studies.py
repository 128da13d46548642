"""Studies: a design, what it was done on, and the rows of its data."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from marshmallow import ValidationError, fields, validates_schema

from budgets.evidence.study_data import MOST_ROWS
from service.documents import DataSource, NamedSource, Replacement, SetAsideRow, Study
from service.schemas.base import StrictSchema, Wrong, got, not_yet
from service.schemas.evidence import EvidenceField
from service.schemas.fields import ByKey, Choice, Code, Count, Day, Flag, Name, Part, Parts, Text, _Stating

MOST_COLUMNS = 50
LONGEST_TEXT = 64
DEEPEST_OPTION = 2
SOURCES = (
    "analyzer_repeatability",
    "presentation",
    "reference_repeatability",
    "reference_run",
    "subsampling",
)

_CELL = "a finite JSON number, a text of at most 64 characters, null, or an object with below"
_ROW = {
    "type": "array",
    "items": {
        "oneOf": [
            {"type": "number"},
            {"type": "string", "maxLength": 64},
            {"type": "null"},
            {
                "type": "object",
                "required": ["below"],
                "properties": {"below": {"type": "number"}},
                "additionalProperties": False,
            },
        ]
    },
    "maxItems": MOST_COLUMNS,
}


def _is_cell(cell: object) -> bool:
    if cell is None:
        return True
    kind = type(cell)
    if kind is float or kind is int:
        try:
            return math.isfinite(cell)  # type: ignore[arg-type]
        except OverflowError:  # a whole number of more than 308 digits
            return False
    if isinstance(cell, str):
        return len(cell) <= LONGEST_TEXT and cell.isprintable()
    return isinstance(cell, dict) and cell.keys() == {"below"} and type(cell["below"]) in (int, float)


class RowsField(_Stating, fields.Raw):
    """The rows; checked in one plain loop, since a study may have thousands."""

    expected = "a list of rows, each a list of cells"

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(schema={"type": "array", "items": _ROW, "maxItems": MOST_ROWS}, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        if not isinstance(value, list):
            raise self.wrong(value)
        if len(value) > MOST_ROWS:
            raise not_yet(f"got {len(value)} rows", f"at most {MOST_ROWS} rows")
        wrongs: dict[int, Any] = {}
        for index, row in enumerate(value):
            if not isinstance(row, list):
                wrongs[index] = [Wrong(got(row), "a list of cells")]
            elif len(row) > MOST_COLUMNS:
                wrongs[index] = [Wrong(f"got {len(row)} cells", f"at most {MOST_COLUMNS} cells")]
            elif not all(map(_is_cell, row)):
                wrongs[index] = {
                    place: [Wrong(got(cell), _CELL)] for place, cell in enumerate(row) if not _is_cell(cell)
                }
        if wrongs:
            raise ValidationError(wrongs)
        return tuple(tuple(row) for row in value)

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> Any:
        return [list(row) for row in value]


class OptionField(_Stating, fields.Raw):
    """What an option of a design may be; whether it suits the design is judged by the design."""

    expected = (
        f"a finite JSON number, true or false, a text of at most {LONGEST_TEXT} characters, "
        f"or a list or object of such, {DEEPEST_OPTION} deep at most"
    )

    def __init__(self, **kwargs: Any) -> None:
        kinds = ["number", "boolean", "string", "array", "object"]
        super().__init__(schema={"type": kinds}, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        try:
            return _option(value, DEEPEST_OPTION)
        except ValueError:
            raise self.wrong(value) from None

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> Any:
        if isinstance(value, Mapping):
            return {name: self._serialize(item, name, value) for name, item in value.items()}
        if isinstance(value, (list, tuple)):
            return [self._serialize(item, None, value) for item in value]
        return value


def _option(value: Any, deepest: int) -> Any:
    """Give an option as it is kept, its lists as tuples. Raises ValueError."""
    if isinstance(value, (list, dict)) and (deepest == 0 or len(value) > MOST_ROWS):
        raise ValueError
    if isinstance(value, list):
        return tuple(_option(item, deepest - 1) for item in value)
    if isinstance(value, dict):
        if not all(_is_cell(name) for name in value):
            raise ValueError
        return {name: _option(item, deepest - 1) for name, item in value.items()}
    if value is None or not (isinstance(value, bool) or _is_cell(value)):
        raise ValueError
    return value


class SetAsideRowSchema(StrictSchema):
    """A row that does not count, and why; rows are numbered from 1."""

    loads_to = SetAsideRow
    row = Count(least=1, most=MOST_ROWS, required=True)
    reason = Text(500, required=True)


class NamedSourceSchema(StrictSchema):
    """A source known to be inside a standard error of prediction, with its own evidence."""

    loads_to = NamedSource
    source = Choice(*SOURCES, required=True)
    evidence = EvidenceField(required=True)
    quantity = Code(
        allow_none=True, load_default=None, about="Whose error it is, in a study of several characteristics."
    )


class DataSourceSchema(StrictSchema):
    """The file that the rows came from."""

    loads_to = DataSource
    name = Text(255, required=True)
    sha256 = Text(64, allow_none=True, load_default=None)


class ReplacementSchema(StrictSchema):
    """The recorded study that takes the place of another one behind every budget in force."""

    loads_to = Replacement
    study = Code(required=True)
    reason = Text(2000, lines=True, required=True, about="The reason of the new versions.")
    evaluated_anew = ByKey(
        Code(),
        Code(),
        most=100,
        load_default=dict,
        about="Codes for what is evaluated anew, each by its old code; else a number is added to that.",
    )


class StudySchema(StrictSchema):
    """A body of test data with a design."""

    loads_to = Study
    code = Code(required=True)
    design = Name(required=True, about="The study design, as repeatability or agreement.")
    product = Code(required=True)
    characteristic = Code(required=True)
    unit = Text(32, required=True)
    calibrations = ByKey(Code(), Code(), most=20, load_default=dict)
    laboratory = Code(allow_none=True, load_default=None)
    reference_methods = ByKey(
        Code(),
        Text(200),
        most=20,
        load_default=dict,
        about="Characteristic to the method by which the laboratory measured it; filled in when recorded.",
    )
    done_on = Day(required=True)
    serves_until = Day(allow_none=True, load_default=None)
    done_by = Text(100, allow_none=True, load_default=None)
    procedure = Text(200, allow_none=True, load_default=None)
    independent = Flag(
        allow_none=True,
        load_default=None,
        about="Whether the samples are independent of those the calibration was made from.",
    )
    named_sources = Parts(NamedSourceSchema, most=20, load_default=())
    characteristics = Parts(
        Code(),
        most=20,
        distinct=True,
        load_default=(),
        about="All of them, in a study of several characteristics of one scan.",
    )
    columns = Parts(Text(64), least=1, most=MOST_COLUMNS, distinct=True, required=True)
    rows = RowsField(required=True)
    set_aside = Parts(SetAsideRowSchema, most=MOST_ROWS, load_default=())
    source = Part(DataSourceSchema, allow_none=True, load_default=None)
    options = ByKey(
        Name(), OptionField(), most=20, load_default=dict, about="What the design takes beside its data."
    )

    @validates_schema(skip_on_field_errors=True)
    def _said_once(self, data: dict[str, Any], **_: Any) -> None:
        if "independent" in data["options"]:
            wrong = Wrong("independent is a member of the study", "no such option")
            raise ValidationError({"options": {"independent": [wrong]}})

    @validates_schema(skip_on_field_errors=True)
    def _dates_in_order(self, data: dict[str, Any], **_: Any) -> None:
        serves_until = data["serves_until"]
        if serves_until is not None and serves_until < data["done_on"]:
            wrong = Wrong("lies before done_on", "a date not before done_on")
            raise ValidationError({"serves_until": [wrong]})

    @validates_schema(skip_on_field_errors=True)
    def _rows_are_there(self, data: dict[str, Any], **_: Any) -> None:
        wrongs: dict[int, Any] = {}
        seen: set[int] = set()
        rows = len(data["rows"])
        for index, aside in enumerate(data["set_aside"]):
            if aside.row > rows:
                wrongs[index] = {"row": [Wrong(f"got row {aside.row}", f"a row from 1 to {rows}")]}
            elif aside.row in seen:
                wrongs[index] = {"row": [Wrong("set aside a second time", "each row once")]}
            seen.add(aside.row)
        if wrongs:
            raise ValidationError({"set_aside": wrongs})
