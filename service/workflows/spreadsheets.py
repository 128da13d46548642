"""Spreadsheets (Office Open XML), read as they were last stored; nothing in them is executed."""

from __future__ import annotations

import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

from openpyxl import load_workbook
from openpyxl.utils.exceptions import InvalidFileException

from budgets.evidence.study_data import MOST_ROWS
from service.errors import InvalidRequest, Unreadable
from service.workflows.study_tables import RefusedCell, Row, Table

SUFFIXES: Final = (".xlsx", ".xlsm")
_LARGEST: Final = 200 * 1024 * 1024  # unpacked


def read_spreadsheet(path: Path, sheet: str | None = None) -> Table:
    """Read a sheet of a spreadsheet; the only one, unless ``sheet`` names it.

    Raises
    ------
    Unreadable
        The file is no spreadsheet of this format.
    InvalidRequest
        It has several sheets and none was named, no such sheet, or too many rows.
    """
    try:
        _check_size(path)
        values = load_workbook(path, read_only=True, data_only=True)
        formulas = load_workbook(path, read_only=True)
    except (zipfile.BadZipFile, InvalidFileException, KeyError, ValueError, OSError) as error:
        raise Unreadable(f"{path.name} is no spreadsheet that can be read ({error}).") from None
    try:
        name = _sheet(path, values.sheetnames, sheet)
        rows = _rows(values[name], formulas[name])
        headings = next(rows, None)
        if headings is None:
            raise Unreadable(f"The sheet {name!r} of {path.name} is empty.")
        found = []
        for row in rows:
            found.append(row)
            if len(found) > MOST_ROWS:
                raise InvalidRequest(f"{path.name} has more than {MOST_ROWS} rows; nothing was recorded.")
    finally:
        values.close()
        formulas.close()
    cells = ["" if cell is None else str(cell).strip() for cell in headings.cells]
    while cells and not cells[-1]:
        cells.pop()
    return Table(tuple(cells), tuple(found), comma_may_group=True)


def _check_size(path: Path) -> None:
    with zipfile.ZipFile(path) as archive:
        if sum(part.file_size for part in archive.infolist()) > _LARGEST:
            raise ValueError(f"more than {_LARGEST} bytes when unpacked")


def _sheet(path: Path, names: list[str], sheet: str | None) -> str:
    shown = ", ".join(names)
    if sheet is None and len(names) > 1:
        raise InvalidRequest(f"{path.name} has several sheets; name one of them: {shown}.")
    if sheet is not None and sheet not in names:
        raise InvalidRequest(f"{path.name} has no sheet {sheet!r}; there are {shown}.")
    return sheet or names[0]


def _rows(values: Any, formulas: Any) -> Iterator[Row]:
    """Give the rows that hold anything."""
    for number, (row, behind) in enumerate(
        zip(values.iter_rows(), formulas.iter_rows(), strict=True), start=1
    ):
        cells = tuple(_cell(cell, formula.value) for cell, formula in zip(row, behind, strict=True))
        if any(cell is not None for cell in cells):
            yield Row(number, cells)


def _cell(cell: Any, formula: Any) -> Any:
    """Give a cell; what the eye would read otherwise than the program is refused."""
    value = cell.value
    if value is None and formula is not None:
        return RefusedCell("a formula whose figure the file does not hold; open and save it first")
    if cell.data_type == "e":
        return RefusedCell(f"got the error {value}")
    shown_in_per_cent = isinstance(value, (int, float)) and "%" in (cell.number_format or "")
    if shown_in_per_cent:
        return RefusedCell(f"{value:g} is shown in per cent; write the figures in the unit of the study")
    return value
