"""Tables out of files: what is read, and what is refused with row and column."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budgets.evidence.study_data import DESIGNS
from service.errors import Fault, InvalidRequest, Unreadable
from service.workflows.csv_files import read_csv
from service.workflows.spreadsheets import read_spreadsheet
from service.workflows.study_files import members_of, study_document
from service.workflows.study_tables import Table, table_members


def members(table: Table, **changes: Any) -> dict[str, Any]:
    return table_members(table, **{"design": "repeatability", "unit": "%", **changes})


def of_csv(text: str, charset: str = "utf-8", **changes: Any) -> dict[str, Any]:
    return members(read_csv(text.encode(charset)), **changes)


def faults(text: str, **changes: Any) -> tuple[Fault, ...]:
    with pytest.raises(InvalidRequest) as caught:
        of_csv(text, **changes)
    return caught.value.faults


COLUMNS = ["sample", "replicate", "reading"]
ROWS = [["P01", "1", 3.11], ["P01", "2", 3.16]]


@pytest.mark.parametrize(
    "text",
    [
        "sample,replicate,reading\nP01,1,3.11\nP01,2,3.16\n",
        "sample;replicate;reading\r\nP01;1;3,11\r\nP01;2;3,16\r\n",
        "sample\treplicate\treading\nP01\t1\t3,11\nP01\t2\t3,16",
        'sample,replicate,reading\n"P01",1,"3,11"\nP01,2,"3,16"\n',
        "sep=;\nsample;replicate;reading\nP01;1;3.11\nP01;2;3.16\n",
        "\n Sample ; REPLICATE;Reading [%];\n\nP01;1;3.11;\n;;;\nP01; 2 ;+3.16;\n\n",
        "Sample,Replicate,reading (%)\nP01,1,311e-2\nP01,2,3.16\n",
    ],
    ids=["plain", "semicolons", "tabs", "quoted", "stated", "untidy", "unit"],
)
@pytest.mark.parametrize("charset", ["utf-8", "utf-8-sig", "utf-16"])
def test_what_programs_write_is_read_alike(text: str, charset: str) -> None:
    assert of_csv(text, charset) == {"columns": COLUMNS, "rows": ROWS}


@pytest.mark.parametrize("text", ["reading\n3,11\n3,2\n", "Reading [%]\n3.11\n3.2\n"])
def test_a_single_column_needs_no_separator(text: str) -> None:
    read = of_csv(text, design="process_stream")
    assert read == {"columns": ["reading"], "rows": [[3.11], [3.2]]}


def test_quotes_are_those_of_rfc_4180() -> None:
    """RFC 4180, section 2, rules 5 to 7: separators, line breaks and doubled quotes inside of quotes."""
    text = 'sample,replicate,reading\r\n"a ""b"", c",1,3.11\r\n'
    assert of_csv(text)["rows"] == [['a "b", c', "1", 3.11]]


@pytest.mark.parametrize("charset", ["cp1252", "cp1251"])
def test_labels_of_older_charsets(charset: str) -> None:
    label = {"cp1252": "Müller-Größe", "cp1251": "Проба молока"}[charset]
    text = f"sample;replicate;reading\n{label};1;3,11\n"
    assert of_csv(text, charset)["rows"] == [[label, "1", 3.11]]
    stated = members(read_csv(text.encode(charset), charset))
    assert stated["rows"] == [[label, "1", 3.11]]


def test_labels_stay_as_they_are_written() -> None:
    assert of_csv("sample,replicate,reading\n007,1e3,3\n")["rows"] == [["007", "1e3", 3]]


def test_a_reporting_limit_and_an_empty_cell() -> None:
    assert of_csv("sample;replicate;reading\nP01;1;< 0,1\nP01;2;\n")["rows"] == [
        ["P01", "1", {"below": 0.1}],
        ["P01", "2", None],
    ]


@pytest.mark.parametrize(
    "cell",
    ["3.1o", "NaN", "inf", "1e999", "n/a", "-", "3.1 %", ">5", "<", "<x", "0x1F", "1_000", "٣", "3.1.2"],
)
def test_a_bad_cell_is_named_by_row_and_column(cell: str) -> None:
    text = f"sample,replicate,reading\nP01,1,3.11\n\nP01,2,{cell}\nP02,1,bad\n"
    first, second = faults(text)
    assert (first.pointer, second.pointer) == ("#/rows/1/2", "#/rows/2/2")
    assert first.detail.startswith("row 2 (line 4), column reading: got")
    assert first.expected is not None


@pytest.mark.parametrize(
    ("text", "pointers", "words"),
    [
        ("sample,replicate,readin\nP,1,3\n", ["#/columns/2", "#/columns"], "sample, reading"),
        ("sample,sample,reading\nP,1,3\n", ["#/columns/1"], "second heading"),
        ("sample,Sample,reading\nP,1,3\n", ["#/columns/1"], "second heading"),
        ("sample,replicate,reading [g/kg]\nP,1,3\n", ["#/columns/2"], "the unit '%'"),
        ("sample,replicate\nP,1\n", ["#/columns"], "no heading reading"),
        ("sample,replicate,reading\nP,1,3,12\nQ,2,3,12\n", ["#/rows/0", "#/rows/1"], "another sign"),
        ("sample;replicate;reading\nP;1;3,12\nQ;2;3.12\n", ["#/rows", "#/rows/1/2"], "one decimal sign"),
        ('sample,replicate,reading\nP,1,"3,120"\nQ,2,"4,500"\n', ["#/rows"], "thousands"),
        ("reading\n1,234\n5,678\n", ["#/columns"], "no heading sample"),
        ("sample,replicate,reading\nP,1,1.234.567\n", ["#/rows/0/2"], "1.234.567"),
        ("sample,,reading\nP,1,3\n", ["#/columns/1"], "names no column"),
    ],
)
def test_tables_that_could_be_misread_are_refused(text: str, pointers: list[str], words: str) -> None:
    found = faults(text)
    assert [fault.pointer for fault in found] == pointers
    assert words in " ".join(f"{fault.detail} {fault.expected}" for fault in found)


def test_a_single_column_of_what_may_be_thousands_is_refused() -> None:
    (fault,) = faults("reading\n1,234\n5,678\n", design="process_stream")
    assert fault.pointer == "#/rows"


def test_an_unknown_heading_is_answered_with_those_expected() -> None:
    (unknown, _missing) = faults("sample,replicate,value\nP,1,3\n")
    assert unknown.detail == 'got the text "value", which names no column of this design'
    assert unknown.expected is not None
    layout = DESIGNS["repeatability"].layout
    assert all(name in unknown.expected for name in (*layout.required, *layout.optional))


def test_a_design_has_to_be_known() -> None:
    assert [fault.pointer for fault in faults("a\n1\n", design="no-design")] == ["#/design"]
    assert [fault.pointer for fault in faults("a\n1\n", design=None)] == ["#/design"]


def test_headings_of_several_characteristics_are_their_codes() -> None:
    text = "pair;Moisture [%];protein in snf;moisture reference\nV1;3,1;38,2;3,2\n"
    read = of_csv(text, design="covariance", characteristics=["moisture", "protein-in-snf"])
    assert read["columns"] == ["pair", "moisture", "protein-in-snf", "moisture_reference"]
    assert read["rows"] == [["V1", 3.1, 38.2, 3.2]]
    found = faults(text, design="covariance", characteristics=["moisture"])
    assert [fault.pointer for fault in found] == ["#/columns/2"]


@pytest.mark.parametrize(
    ("body", "charset", "words"),
    [
        (b"", None, "empty"),
        (b"\n \n", None, "empty"),
        (b"sample,reading\n\xff\xfe\x00,1", "utf-8", "cannot be read as utf-8"),
        (b"sample,reading\nP,1", "no-charset", "no-charset"),
        (b"sample,reading\nP\x00,1", None, "NUL"),
        (b'sample,reading\n"P,1', None, "no CSV"),
    ],
)
def test_what_is_no_csv(body: bytes, charset: str | None, words: str) -> None:
    with pytest.raises(Unreadable, match=words):
        read_csv(body, charset)


def test_too_much_is_refused_before_it_is_read() -> None:
    with pytest.raises(InvalidRequest) as caught:
        read_csv(b"sample,reading\n" + b"P,1\n" * 1_000_000)
    assert caught.value.faults[0].pointer == "#/rows"
    with pytest.raises(InvalidRequest) as caught:
        read_csv(b"a," * 60)
    assert caught.value.faults[0].pointer == "#/columns"


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.floats(min_value=-1e14, max_value=1e14), min_size=1, max_size=8),
    st.sampled_from([(";", ","), (";", "."), ("\t", "."), (",", ".")]),
)
def test_numbers_come_back_as_they_were_written(values: list[float], signs: tuple[str, str]) -> None:
    separator, decimal = signs
    lines = [separator.join(("sample", "reading"))]
    lines += [separator.join(("P", repr(value).replace(".", decimal))) for value in values]
    assert [row[1] for row in of_csv("\n".join(lines))["rows"]] == values


# --- spreadsheets --------------------------------------------------------------------------------------


def spreadsheet(path: Path, *rows: list[Any], **formats: str) -> Path:
    book = openpyxl.Workbook()
    assert book.active is not None
    for row in rows:
        book.active.append(row)
    for place, number_format in formats.items():
        book.active[place].number_format = number_format
    book.save(path)
    return path


def test_a_spreadsheet_gives_what_its_csv_gives(tmp_path: Path) -> None:
    file = spreadsheet(
        tmp_path / "a.xlsx",
        [],
        ["Sample", "Replicate", "Reading [%]"],
        ["P01", 1, 3.11],
        [],
        ["P01", 2, "3,16"],
    )
    assert members(read_spreadsheet(file)) == {
        "columns": COLUMNS,
        "rows": [["P01", 1, 3.11], ["P01", 2, 3.16]],
    }


@pytest.mark.parametrize(
    ("cell", "number_format", "words"),
    [
        (0.0311, "0.00%", "per cent"),
        (datetime(2026, 3, 11), "dd.mm.yyyy", "date"),
        ("=A1", "General", "formula"),
        ("=NA()", "General", "formula"),
        ("#DIV/0!", "General", "error"),
        (True, "General", "True"),
        ("3.1o", "General", "3.1o"),
    ],
)
def test_cells_that_the_eye_reads_otherwise_are_refused(
    tmp_path: Path, cell: Any, number_format: str, words: str
) -> None:
    file = spreadsheet(tmp_path / "a.xlsx", COLUMNS, ["P", 1, 3.0], ["P", 2, cell], C3=number_format)
    with pytest.raises(InvalidRequest) as caught:
        members(read_spreadsheet(file))
    (fault,) = caught.value.faults
    assert fault.pointer == "#/rows/1/2"
    assert fault.detail.startswith("row 2 (line 3), column reading: ")
    assert words in fault.detail


def test_a_sheet_is_named_where_there_are_several(tmp_path: Path) -> None:
    book = openpyxl.Workbook()
    book.create_sheet("data").append(["sample", "reading"])
    book["data"].append(["P", 3.1])
    book.save(tmp_path / "a.xlsx")
    with pytest.raises(InvalidRequest, match="Sheet, data"):
        read_spreadsheet(tmp_path / "a.xlsx")
    with pytest.raises(InvalidRequest, match="no sheet 'other'"):
        read_spreadsheet(tmp_path / "a.xlsx", "other")
    with pytest.raises(Unreadable, match="is empty"):
        read_spreadsheet(tmp_path / "a.xlsx", "Sheet")
    assert members(read_spreadsheet(tmp_path / "a.xlsx", "data"))["rows"] == [["P", 3.1]]


def test_what_is_no_spreadsheet(tmp_path: Path) -> None:
    (tmp_path / "a.xlsx").write_text("sample,reading")
    with pytest.raises(Unreadable, match=r"a\.xlsx is no spreadsheet"):
        read_spreadsheet(tmp_path / "a.xlsx")


# --- what is said beside the data ----------------------------------------------------------------------


def test_text_stands_as_it_is_and_all_else_as_json() -> None:
    said = {"code": "1", "calibrations": '{"nir-1": "wmp-7"}', "independent": "true"}
    assert members_of(said) == {"code": "1", "calibrations": {"nir-1": "wmp-7"}, "independent": True}


@pytest.mark.parametrize("text", ["{", '{"a": 1, "a": 2}', "NaN", "nir-1:wmp-7", "[" * 5000, ""])
def test_other_text_is_refused(text: str) -> None:
    with pytest.raises(InvalidRequest) as caught:
        members_of({"options": text, "rows": "[]"})
    assert [fault.pointer for fault in caught.value.faults] == ["#/options", "#/rows"]


def test_the_document_names_its_file_by_its_digest() -> None:
    content = b"sample,reading\nP,3.1\n"
    # Of these bytes by sha256sum (GNU coreutils).
    digest = "922c92cf84c2db37249b8674632376ef4ac4d7fdd5a425dc1926287ce2107dd3"
    said: dict[str, Any] = {"design": "repeatability"}
    made = study_document(said, read_csv(content), name="a.csv", content=content)
    assert made["source"] == {"name": "a.csv", "sha256": digest}
    stated = {**said, "source": {"name": "b.csv", "sha256": made["source"]["sha256"].upper()}}
    kept = study_document(stated, read_csv(content), name="a.csv", content=content)
    assert kept["source"] == {"name": "b.csv", "sha256": made["source"]["sha256"]}
    with pytest.raises(InvalidRequest) as caught:
        stated = {**said, "source": {"name": "b.csv", "sha256": digest[::-1]}}
        study_document(stated, read_csv(content), name="a.csv", content=content)
    assert caught.value.faults[0].pointer == "#/source/sha256"
