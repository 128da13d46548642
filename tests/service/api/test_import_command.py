"""`shoalmark import` beside a plant that stands: what is recorded, once, and what is refused as a whole."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import openpyxl
import pytest
import yaml
from click.testing import CliRunner, Result

from service.cli import main
from service.store.unit_of_work import Database
from tests.service.api import house
from tests.service.api.conftest import copied, settings_for

Run = Callable[..., Result]


@pytest.fixture
def data(house_template: Path, tmp_path: Path) -> Path:
    return copied(house_template, tmp_path / "data")


@pytest.fixture
def run(data: Path, monkeypatch: pytest.MonkeyPatch) -> Run:
    monkeypatch.setenv("SHOALMARK_DATA_FOLDER", str(data))
    return lambda *arguments: CliRunner().invoke(main, ["import", *map(str, arguments)])


def study_codes(data: Path) -> set[str]:
    database = Database(settings_for(data).database_url)
    with database.reading() as unit_of_work:
        found = {stored.code for stored in unit_of_work.studies.all()}
    database.close()
    return found


def about(document: dict[str, Any]) -> dict[str, Any]:
    return {name: value for name, value in document.items() if name not in ("columns", "rows", "source")}


def as_csv(path: Path, document: dict[str, Any]) -> Path:
    lines = [document["columns"], *document["rows"]]
    text = "\n".join(";".join(str(cell).replace(".", ",") for cell in line) for line in lines)
    path.write_text(text)
    return path


def test_csv_spreadsheet_and_json_are_recorded_alike_and_once(run: Run, data: Path, tmp_path: Path) -> None:
    before = study_codes(data)
    codes = ["new-csv", "new-spreadsheet", "new-json"]
    first, second, third = (house.repeatability_study(code=code) for code in codes)
    files = [as_csv(tmp_path / "a.csv", first), tmp_path / "b.xlsx", tmp_path / "c.json"]
    (tmp_path / "a.yaml").write_text(yaml.safe_dump(about(first)))
    book = openpyxl.Workbook()
    assert book.active is not None
    for line in [second["columns"], *second["rows"]]:
        book.active.append(line)
    book.save(files[1])
    (tmp_path / "b.json").write_text(json.dumps(about(second)))
    files[2].write_text(json.dumps(third))

    result = run(*files)
    assert result.exit_code == 0, result.output
    assert study_codes(data) == before | set(codes)
    figures = [line for line in result.stdout.splitlines() if "standard uncertainty" in line]
    assert len(figures) == 3
    assert len(set(figures)) == 1
    again = run(*files)
    assert again.exit_code == 0, again.output
    assert again.stdout.count("recorded before") == 3


def test_a_member_on_the_command_line_counts_before_the_file(run: Run, data: Path, tmp_path: Path) -> None:
    document = house.repeatability_study(code="from-the-file")
    file = as_csv(tmp_path / "a.csv", document)
    (tmp_path / "other.yml").write_text(yaml.safe_dump(about(document)))
    aside = '[{"row": 1, "reason": "cup not filled"}]'
    arguments = ("--about", tmp_path / "other.yml", "--set", "code=said", "--set", f"set_aside={aside}")
    checked = run(file, *arguments, "--check")
    assert (checked.exit_code, "40 rows for said, not recorded" in checked.stdout) == (0, True)
    assert "said" not in study_codes(data)
    result = run(file, *arguments)
    assert result.exit_code == 0, result.output
    # The other reading of that sample stands alone now and says nothing about repeatability.
    assert "38 rows used" in result.stdout
    assert "said" in study_codes(data)


def test_nothing_is_recorded_when_one_file_cannot_be_read(run: Run, data: Path, tmp_path: Path) -> None:
    before = study_codes(data)
    good, bad = (house.repeatability_study(code=code) for code in ("good", "bad"))
    bad["rows"][2][2] = "x"
    files = [as_csv(tmp_path / f"{each['code']}.csv", each) for each in (good, bad)]
    for each in (good, bad):
        (tmp_path / f"{each['code']}.yaml").write_text(yaml.safe_dump(about(each)))
    result = run(*files)
    assert result.exit_code == 1
    assert "bad.csv" in result.stderr
    assert "row 3 (line 4), column reading" in result.stderr
    assert study_codes(data) == before


def test_what_stands_before_a_study_that_is_refused_is_said(run: Run, data: Path, tmp_path: Path) -> None:
    good, bad = (
        house.repeatability_study(code="good"),
        house.repeatability_study(code="bad", product="butter"),
    )
    for each in (good, bad):
        (tmp_path / f"{each['code']}.json").write_text(json.dumps(each))
    result = run(tmp_path / "good.json", tmp_path / "bad.json")
    assert result.exit_code == 1
    assert "The 1 before it are recorded." in result.stderr
    assert {"good", "bad"} & study_codes(data) == {"good"}


@pytest.mark.parametrize(
    ("about_text", "words"),
    [
        ("code: a\ncode: b\n", "twice"),
        ("- code\n", "members of a study"),
        ("code: [\n", "cannot be read"),
        ("1: a\n", "is no name"),
        ("rows: []\n", "holds rows"),
        ("code: a\ndesign: repeatability\n", "#/product missing"),
        ("code: a\n", "#/design missing"),
        ("code: a\ndesign: repeatability\ncolour: red\n", "unknown member"),
    ],
)
def test_what_is_said_of_a_file_has_one_meaning(
    run: Run, tmp_path: Path, about_text: str, words: str
) -> None:
    file = as_csv(tmp_path / "a.csv", house.repeatability_study())
    (tmp_path / "a.yaml").write_text(about_text)
    result = run(file)
    assert result.exit_code == 1
    assert words in result.stderr
    assert "Traceback" not in result.stderr


def test_two_files_that_say_what_it_is_are_one_too_many(run: Run, tmp_path: Path) -> None:
    file = as_csv(tmp_path / "a.csv", house.repeatability_study())
    for suffix in (".yaml", ".json"):
        (tmp_path / f"a{suffix}").write_text("{}")
    assert "Both a.yaml and a.json are there" in run(file).stderr
    assert "no sheet 'x'" in run(file, "--about", tmp_path / "a.json", "--sheet", "x").stderr


@pytest.mark.parametrize("said", [["code"], ["code=a", "code=b"]])
def test_a_member_is_said_once_with_its_value(run: Run, tmp_path: Path, said: list[str]) -> None:
    file = as_csv(tmp_path / "a.csv", house.repeatability_study())
    options = [option for each in said for option in ("--set", each)]
    assert run(file, *options).exit_code == 2
