"""A table of a file, whatever its format, becomes the columns and rows of a study.

Only here is it decided what a heading means and what a cell says. A table is taken as a whole or refused with
every fault, each cell named by row and column: a value that was misread would pass for evidence.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime
from typing import Any, Final

from budgets.evidence.study_data import DESIGNS, VECTOR_DESIGNS, StudyDesign
from budgets.evidence.study_tables import Layout
from service.errors import Fault, InvalidRequest
from service.schemas.base import MOST_FAULTS, counted, got

_NUMBER: Final = re.compile(r"[+-]?([0-9]+([.,][0-9]*)?|[.,][0-9]+)([eE][+-]?[0-9]{1,3})?")
_BELOW: Final = re.compile(r"<\s*(?P<limit>.+)")
_THOUSANDS: Final = re.compile(r"[+-]?[1-9][0-9]{0,2},[0-9]{3}")
_WITH_UNIT: Final = re.compile(r"(?P<name>.*\S)\s*(\[(?P<square>[^\]]*)\]|\((?P<round>[^)]*)\))")
_EXPECTED: Final = 'a number as 3.12, "<" before a reporting limit, or nothing'


@dataclass(frozen=True)
class RefusedCell:
    """A cell that its file holds in a form which would be misread; ``detail`` says why."""

    detail: str


@dataclass(frozen=True)
class Row:
    """The cells of a row, and on which line of its file it stands."""

    line: int
    cells: tuple[Any, ...]


@dataclass(frozen=True)
class Table:
    """Headings and rows as a file has them; ``comma_may_group`` where 1,234 may mean a thousand and more."""

    headings: tuple[str, ...]
    rows: tuple[Row, ...]
    comma_may_group: bool = False


@dataclass(frozen=True)
class _Column:
    """A heading that was recognised: where its cells stand, and whether they are numbers."""

    place: int
    name: str
    is_number: bool


def table_members(
    table: Table, *, design: object, unit: object, characteristics: Sequence[str] = ()
) -> dict[str, Any]:
    """Give the members ``columns`` and ``rows`` of a study document.

    Raises
    ------
    InvalidRequest
        With every heading or every cell that cannot be read.
    """
    known = _design(design)
    if len(table.rows) > known.most_rows:
        expected = f"at most {known.most_rows} rows in the design {known.name}"
        raise _refused([Fault(f"got {len(table.rows)} rows", expected, "#/rows")])
    columns = _columns(table, known, unit, characteristics)
    faults: list[Fault] = []
    decimal_sign = _decimal_sign(table, columns, faults)
    rows = [
        _row(row, number, columns, len(table.headings), decimal_sign, faults)
        for number, row in enumerate(table.rows, start=1)
    ]
    if faults:
        raise _refused(faults)
    return {"columns": [column.name for column in columns], "rows": rows}


def _refused(faults: Sequence[Fault]) -> InvalidRequest:
    shown = "" if len(faults) <= MOST_FAULTS else f", the first {MOST_FAULTS} are shown"
    message = f"{counted(len(faults))}{shown}; nothing was recorded."
    return InvalidRequest(message, faults=tuple(faults[:MOST_FAULTS]))


# --- headings ------------------------------------------------------------------------------------------


def _design(design: object) -> StudyDesign:
    known = {**DESIGNS, **VECTOR_DESIGNS}
    if not isinstance(design, str) or design not in known:
        detail = "missing" if design is None else got(design)
        raise _refused([Fault(detail, "one of " + ", ".join(known), "#/design")])
    return known[design]


def _columns(
    table: Table, design: StudyDesign, unit: object, characteristics: Sequence[str]
) -> list[_Column]:
    layout = design.layout
    names = [*layout.required, *layout.optional]
    if design.name in VECTOR_DESIGNS:
        names += [name + suffix for suffix in ("", "_reference") for name in characteristics]
    recognised = {_plain(name): name for name in names}
    expected = "the headings " + ", ".join(layout.required)
    if others := [name for name in names if name not in layout.required]:
        expected += "; beside them " + ", ".join(others)
    faults: list[Fault] = []
    columns: list[_Column] = []
    found: set[str] = set()
    for place, heading in enumerate(table.headings):
        if not heading and all(_is_empty(row.cells, place) for row in table.rows):
            continue
        name, fault = _name(heading, recognised, layout, unit)
        if fault is None and name in found:
            fault = Fault(f"{got(heading)}, a second heading of {name!r}")
        found.add(name)
        if fault is not None:
            faults.append(Fault(fault.detail, fault.expected or expected, f"#/columns/{place}"))
        else:
            columns.append(_Column(place, name, layout.is_number(name)))
    missing = [name for name in layout.required if name not in found]
    if missing:
        faults.append(Fault(f"no heading {' and none '.join(missing)}", expected, "#/columns"))
    if faults:
        raise _refused(faults)
    return columns


def _name(heading: str, recognised: dict[str, str], layout: Layout, unit: object) -> tuple[str, Fault | None]:
    """Give the column that a heading names; its unit, if it names one, has to be the study's."""
    plain = heading
    stated = None
    if _plain(heading) not in recognised and (found := _WITH_UNIT.fullmatch(heading)):
        plain = found["name"]
        stated = (found["square"] if found["square"] is not None else found["round"]).strip()
    free = layout.others_are_numbers and len(recognised) == len(layout.required + layout.optional)
    name = recognised.get(_plain(plain), plain if free and plain else None)
    if name is None:
        return "", Fault(f"{got(heading)}, which names no column of this design")
    if stated is not None and stated != unit:
        return name, Fault(f"the heading {heading!r} has another unit than the study", f"the unit {unit!r}")
    return name, None


def _plain(heading: str) -> str:
    """Give a heading without what people write this way or that: case, blanks, hyphens, underscores."""
    return re.sub(r"[\s_-]+", "_", heading.strip().casefold())


# --- cells ---------------------------------------------------------------------------------------------


def _is_empty(cells: Sequence[Any], place: int) -> bool:
    return place >= len(cells) or _trimmed(cells[place]) in (None, "")


def _trimmed(cell: Any) -> Any:
    return cell.strip().replace("\N{MINUS SIGN}", "-") if isinstance(cell, str) else cell


def _decimal_sign(table: Table, columns: Sequence[_Column], faults: list[Fault]) -> str:
    """Find the decimal sign of all numbers; one file that uses both is refused, and so are thousands."""
    texts = [
        text
        for row in table.rows
        for column in columns
        if column.is_number and not _is_empty(row.cells, column.place)
        if isinstance(cell := _trimmed(row.cells[column.place]), str)
        if _NUMBER.fullmatch(text := cell.lstrip("< "))
    ]
    with_comma = [text for text in texts if "," in text]
    if not with_comma:
        return "."
    if any("." in text for text in texts):
        detail = f"numbers with a comma (as {with_comma[0][:20]!r}) beside numbers with a point"
        faults.append(Fault(detail, "one decimal sign, and no sign between thousands", "#/rows"))
    elif table.comma_may_group and all(_THOUSANDS.fullmatch(text) for text in with_comma):
        detail = f"{with_comma[0][:20]!r} may be a decimal comma or a sign between thousands"
        expected = "decimal points; or decimal commas, with the columns separated by semicolons"
        faults.append(Fault(detail, expected, "#/rows"))
    return ","


def _row(
    row: Row, number: int, columns: Sequence[_Column], width: int, decimal_sign: str, faults: list[Fault]
) -> list[Any]:
    pointer = f"#/rows/{number - 1}"
    if any(_trimmed(cell) not in (None, "") for cell in row.cells[width:]):
        expected = f"{width} cells, as there are headings; decimal commas need another sign between columns"
        faults.append(Fault(f"row {number} (line {row.line}) has {len(row.cells)} cells", expected, pointer))
        return []
    cells = []
    for place, column in enumerate(columns):
        cell = None if _is_empty(row.cells, column.place) else _trimmed(row.cells[column.place])
        try:
            cells.append(_number(cell, decimal_sign) if column.is_number else _label(cell))
        except ValueError as error:
            detail = f"row {number} (line {row.line}), column {column.name}: {error}"
            expected = _EXPECTED if column.is_number else "text or a number"
            faults.append(Fault(detail, expected, f"{pointer}/{place}"))
    return cells


def _label(cell: Any) -> Any:
    """Give a cell of a label column. Raises ValueError."""
    if isinstance(cell, datetime) and cell.time().isoformat() == "00:00:00":
        return cell.date().isoformat()
    if isinstance(cell, (date, datetime)):
        return cell.isoformat(" ") if isinstance(cell, datetime) else cell.isoformat()
    if isinstance(cell, RefusedCell):
        raise ValueError(cell.detail)
    if cell is None or (isinstance(cell, (str, int, float)) and not isinstance(cell, bool)):
        return cell
    raise ValueError(f"got {cell}")


def _number(cell: Any, decimal_sign: str) -> Any:
    """Give a cell of a number column. Raises ValueError."""
    if isinstance(cell, RefusedCell):
        raise ValueError(cell.detail)
    if isinstance(cell, str):
        below = _BELOW.fullmatch(cell)
        if below is None:
            return _parsed(cell, cell, decimal_sign)
        return {"below": _parsed(below["limit"], cell, decimal_sign)}
    if isinstance(cell, (date, datetime)):
        raise ValueError(f"got the date {cell.isoformat()}; some programs make dates of numbers")
    if cell is None or (isinstance(cell, (int, float)) and not isinstance(cell, bool)):
        return cell
    raise ValueError(f"got {cell}")


def _parsed(text: str, cell: str, decimal_sign: str) -> int | float:
    other = "," if decimal_sign == "." else "."
    if _NUMBER.fullmatch(text) is None or other in text or len(text) > 64:
        raise ValueError(got(cell))
    plain = text.replace(",", ".")
    number = float(plain)
    if number in (float("inf"), float("-inf")):
        raise ValueError(f"got the number {text}, which is too large")
    whole = plain.lstrip("+-").isdigit()
    return int(plain) if whole else number
