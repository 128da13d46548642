"""CSV as spreadsheets and instruments write it: charset and separator are found out.

Numbers are the same in every charset that is looked for; for labels, whose letters may differ, the sender can
state which one it is.
"""

from __future__ import annotations

import codecs
import csv
import io
import re
from collections.abc import Iterator
from typing import Final

from charset_normalizer import from_bytes

from budgets.evidence.study_data import MOST_ROWS
from service.errors import Fault, InvalidRequest, Unreadable
from service.schemas.studies import MOST_COLUMNS
from service.workflows.study_tables import Row, Table

# The longer marks first: that of UTF-16 is the beginning of that of UTF-32.
_MARKS: Final = (
    (codecs.BOM_UTF8, "utf-8"),
    (codecs.BOM_UTF32_LE, "utf-32-le"),
    (codecs.BOM_UTF32_BE, "utf-32-be"),
    (codecs.BOM_UTF16_LE, "utf-16-le"),
    (codecs.BOM_UTF16_BE, "utf-16-be"),
)
# Single-byte code pages of offices, and the usual ones of East Asia: what else there is no plant exports.
_CHARSETS: Final = [
    *("cp1252", "cp1250", "cp1251", "cp1253", "cp1254", "cp1257", "iso8859_2", "iso8859_15"),
    *("cp850", "cp852", "mac_roman", "shift_jis", "gb18030", "big5", "euc_kr"),
]
_SAMPLE: Final = 65536
_SEPARATOR_LINE: Final = re.compile(r"sep=([,;\t|])", re.IGNORECASE)


def read_csv(body: bytes, charset: str | None = None) -> Table:
    """Read the bytes of a CSV file; ``charset`` is what its sender says that it is in.

    The separator is that of the headings: a tab, else a semicolon, else a comma; in a single column commas
    are decimal ones.

    Raises
    ------
    Unreadable
        It is empty, in another charset than was said or in none that is recognised, or no CSV.
    InvalidRequest
        It has too many rows or columns.
    """
    text = _text(body, charset)
    lines = text.splitlines()
    first = next((number for number, line in enumerate(lines) if line.strip()), None)
    if first is None:
        raise Unreadable("The file is empty; a line of headings and rows of data are expected.")
    stated = _SEPARATOR_LINE.fullmatch(lines[first].strip())
    separator = _separator(lines[first]) if stated is None else stated[1]
    rows = _rows(text, separator)
    if stated is not None:
        next(rows, None)
    headings = next(rows, None)
    if headings is None:
        raise Unreadable("The file has no line of headings.")
    if len(headings.cells) > MOST_COLUMNS:
        raise _too_many(f"{len(headings.cells)} columns", f"at most {MOST_COLUMNS} columns", "#/columns")
    found = []
    for row in rows:
        found.append(row)
        if len(found) > MOST_ROWS:
            raise _too_many(f"more than {MOST_ROWS} rows", f"at most {MOST_ROWS} rows", "#/rows")
    named = tuple(cell.strip() for cell in headings.cells)
    return Table(named, tuple(found), comma_may_group=separator not in lines[first] or separator != ";")


def _too_many(what: str, expected: str, pointer: str) -> InvalidRequest:
    return InvalidRequest("1 fault; nothing was recorded.", faults=(Fault(f"got {what}", expected, pointer),))


def _text(body: bytes, charset: str | None) -> str:
    if not body.strip():
        raise Unreadable("The file is empty; a line of headings and rows of data are expected.")
    mark, marked = next(((mark, name) for mark, name in _MARKS if body.startswith(mark)), (b"", None))
    wanted = marked or charset
    try:
        text = body[len(mark) :].decode(wanted or "utf-8")
    except (UnicodeDecodeError, LookupError):
        if wanted is not None:
            raise Unreadable(f"The file cannot be read as {wanted[:40]}; UTF-8 is best.") from None
        text = _in_found_charset(body)
    if "\0" in text:
        raise Unreadable("The file holds NUL characters: it is no text, or in another charset than was said.")
    return text


def _in_found_charset(body: bytes) -> str:
    # Only what is not ASCII tells charsets apart, and looking at all of a large file would take long.
    telling = b"\n".join(line for line in body.splitlines() if not line.isascii())[:_SAMPLE]
    best = from_bytes(telling, cp_isolation=_CHARSETS).best()
    try:
        if best is not None:
            return body.decode(best.encoding)
    except UnicodeDecodeError:
        pass
    raise Unreadable("The charset of the file is not recognised; save it as UTF-8, or state its charset.")


def _separator(line: str) -> str:
    outside = re.sub(r'"[^"]*"', "", line)
    return next((sign for sign in "\t;," if sign in outside), ";")


def _rows(text: str, separator: str) -> Iterator[Row]:
    """Give the rows that hold anything."""
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator, strict=True)
    try:
        for cells in reader:
            if any(cell.strip() for cell in cells):
                yield Row(reader.line_num, tuple(cells))
    except csv.Error as error:
        raise Unreadable(f"The file is no CSV: {error} at line {reader.line_num}.") from None
