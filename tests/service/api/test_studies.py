"""Studies over HTTP: what a design takes beside its data, and data as they come out of other programs."""

from __future__ import annotations

import hashlib
import itertools
import json
import random
import statistics
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from flask import Flask
from werkzeug.test import TestResponse

from budgets.evidence.study_data import DESIGNS, StudyData, evaluate_study
from service import create_app, create_services
from service.helpers import Helper
from tests.service.api import house
from tests.service.api.conftest import Callers, callers_of, copied, settings_for
from tests.service.api.house import done
from tests.service.api.test_bad_input import problem

PREVIEW = "/v1/studies/preview"


# --- options -------------------------------------------------------------------------------------------


def with_options(options: Any, **changes: Any) -> dict[str, Any]:
    return {**house.agreement_study(), "code": "new-study", "options": options, **changes}


def test_options_reach_the_design_and_are_kept(callers: Callers) -> None:
    # A limit in the middle of the pairs: the design then looks at what happens near it.
    document = with_options({"tolerance_limits": [3.5], "presentations_per_pair": 1})
    answer = done(callers["engineer"].post("/v1/studies", document))
    assert answer["study"]["options"] == document["options"]
    kept = done(callers["engineer"].get("/v1/studies/new-study"), 200)
    assert kept["study"]["options"] == document["options"]


@pytest.mark.parametrize(
    ("options", "pointer"),
    [
        ({"colour": "red"}, "#/options/colour"),
        ({"presentations_per_pair": 1.5}, "#/options/presentations_per_pair"),
        ({"tolerance_limits": ["3.5"]}, "#/options/tolerance_limits"),
        ({"tolerance_limits": None}, "#/options/tolerance_limits"),
        ({"tolerance_limits": [[[3.5]]]}, "#/options/tolerance_limits"),
        ({"tolerance_limits": [None]}, "#/options/tolerance_limits"),
        ({"tolerance_limits": {"": {"a": {}}}}, "#/options/tolerance_limits"),
        ({"Colour": 1}, "#/options/Colour"),
        ({"independent": True}, "#/options/independent"),
        ([], "#/options"),
    ],
)
def test_an_option_that_a_design_does_not_know_is_refused(
    callers: Callers, options: Any, pointer: str
) -> None:
    found = problem(callers["engineer"].send("POST", PREVIEW, with_options(options)), 422, "invalid-request")
    assert [fault["pointer"] for fault in found["errors"]] == [pointer]


def test_independence_is_a_member_of_its_own(callers: Callers) -> None:
    document = with_options({}, independent=None)
    found = problem(callers["engineer"].send("POST", PREVIEW, document), 422, "invalid-request")
    assert [fault["pointer"] for fault in found["errors"]] == ["#/independent"]


# --- CSV -----------------------------------------------------------------------------------------------


def csv_call(
    caller: house.Caller,
    body: bytes,
    *,
    path: str = PREVIEW,
    key: str | None = None,
    content_type: str = "text/csv",
    **said: str,
) -> TestResponse:
    headers = {"Authorization": f"Bearer {caller.token}", "Idempotency-Key": key or house.fresh_key()}
    return caller.client.post(path, query_string=said, data=body, content_type=content_type, headers=headers)


def said_of(document: dict[str, Any]) -> dict[str, str]:
    """Say the members of a study in the query, as texts or JSON."""
    left_out = ("columns", "rows", "source")
    return {
        name: value if isinstance(value, str) else json.dumps(value)
        for name, value in document.items()
        if name not in left_out and value is not None
    }


def written(document: dict[str, Any], separator: str, decimal: str) -> bytes:
    lines = [document["columns"], *document["rows"]]
    texts = [separator.join(str(cell).replace(".", decimal) for cell in line) for line in lines]
    return ("\N{BYTE ORDER MARK}" + "\r\n".join(texts)).encode()


@pytest.mark.parametrize("make", [house.repeatability_study, house.duplicates_study, house.agreement_study])
@pytest.mark.parametrize(("separator", "decimal"), [(",", "."), (";", ","), ("\t", ".")])
def test_csv_and_json_give_the_same_evaluation(
    callers: Callers, make: Callable[[], dict[str, Any]], separator: str, decimal: str
) -> None:
    document = {**make(), "code": "new-study"}
    as_json = done(callers["engineer"].send("POST", PREVIEW, document), 200)
    body = written(document, separator, decimal)
    as_csv = done(csv_call(callers["engineer"], body, **said_of(document)), 200)
    assert as_csv["evaluation"] == as_json["evaluation"]
    source = {"name": "CSV body", "sha256": hashlib.sha256(body).hexdigest()}
    assert as_csv["study"]["source"] == source


def test_a_csv_is_recorded_once_under_its_key(callers: Callers) -> None:
    document = house.repeatability_study(code="new-study")
    body, said = written(document, ",", "."), said_of(document)
    key = house.fresh_key()
    first = csv_call(callers["engineer"], body, path="/v1/studies", key=key, **said)
    assert done(first)["recorded"] is True
    again = csv_call(callers["engineer"], body, path="/v1/studies", key=key, **said)
    assert (done(again), again.headers["Recorded-Earlier"]) == (first.get_json(), "true")
    other = csv_call(callers["engineer"], body, path="/v1/studies", key=key, **{**said, "unit": "g/kg"})
    problem(other, 422, "idempotency-key-reused")
    kept = done(callers["engineer"].get("/v1/studies/new-study"), 200)
    assert kept["study"] == first.get_json()["study"]


def test_faults_of_csv_are_named_where_they_were_said(callers: Callers) -> None:
    said = said_of(house.repeatability_study(code="new-study"))
    body = b"sample,replicate,reading\nP01,1,3.1\nP01,2,x\n"
    found = problem(csv_call(callers["engineer"], body, **said), 422, "invalid-request")
    (fault,) = found["errors"]
    assert fault["pointer"] == "#/rows/1/2"
    assert fault["detail"] == 'row 2 (line 3), column reading: got the text "x"'
    wrong = {**said, "done_on": "3 March", "calibrations": '{"nir-1": "no-such"}', "colour": "red"}
    body = b"sample,replicate,reading\nP01,1,3.1\nP01,2,3.2\n"
    found = problem(csv_call(callers["engineer"], body, **wrong), 422, "invalid-request")
    assert [fault["parameter"] for fault in found["errors"]] == ["colour"]
    del wrong["colour"]
    found = problem(csv_call(callers["engineer"], body, **wrong), 422, "invalid-request")
    assert [fault["parameter"] for fault in found["errors"]] == ["done_on"]
    found = problem(
        csv_call(callers["engineer"], body, **{**wrong, "done_on": house.DONE_ON}), 422, "invalid-request"
    )
    assert [(fault["parameter"], "at nir-1: " in fault["detail"]) for fault in found["errors"]] == [
        ("calibrations", True)
    ]


def test_the_place_in_a_json_study_is_said_in_words_too(callers: Callers) -> None:
    document = house.repeatability_study(code="new-study")
    document["rows"][3][2] = "3,1"
    found = problem(callers["engineer"].send("POST", PREVIEW, document), 422, "invalid-request")
    (fault,) = found["errors"]
    assert fault["pointer"] == "#/rows/3/2"
    assert fault["detail"].startswith("row 4, column reading: got the text '3,1'")


def test_rows_are_counted_from_one_wherever_they_are_named(callers: Callers) -> None:
    document = house.repeatability_study(code="new-study")
    document["rows"] = [["P01", 1, 3.1], ["P01", 1, 3.2], ["P01", 2, 3.1]]
    found = problem(callers["engineer"].send("POST", PREVIEW, document), 422, "invalid-request")
    assert [fault["detail"] for fault in found["errors"]] == [
        "row 2: replicate 1 of sample P01 stands in row 1 already"
    ]
    document["rows"][1] = ["P01", 3, {"below": 0.1}]
    found = problem(callers["engineer"].send("POST", PREVIEW, document), 422, "not-supported")
    assert [fault["detail"] for fault in found["errors"]] == [
        "not supported yet: row 2, column reading: values below a reporting limit"
    ]


def test_other_bodies_are_refused(callers: Callers) -> None:
    said = said_of(house.repeatability_study(code="new-study"))
    call = csv_call(callers["engineer"], b"sample,reading\nP,1\n", content_type="text/plain", **said)
    assert (call.status_code, "text/csv" in call.get_json()["detail"]) == (415, True)
    problem(csv_call(callers["engineer"], b"", **said), 400, "unreadable")
    problem(csv_call(callers["engineer"], b"\x00\x01" * 50, **said), 400, "unreadable")
    large = b"sample,replicate,reading\n" + b"P01,1,3.11\n" * 1_000_000
    problem(csv_call(callers["engineer"], large, **said), 413, "too-large")
    mixed = callers["engineer"].send("POST", f"{PREVIEW}?unit=%25", house.repeatability_study())
    problem(mixed, 422, "invalid-request")


# --- the helper process --------------------------------------------------------------------------------


@pytest.fixture
def with_helper(
    house_template: Path, empty_template: tuple[Path, dict[str, str]], tmp_path: Path
) -> Iterator[Callable[[Helper], Callers]]:
    """Give callers of a house that evaluates in a helper of one's own."""
    opened: list[Flask] = []

    def open_with(helper: Helper) -> Callers:
        folder = copied(house_template, tmp_path / "own")
        opened.append(create_app(create_services(settings_for(folder), helper)))
        return callers_of(opened[-1], empty_template[1])

    yield open_with
    for app in opened:
        app.extensions["shoalmark"].close()


def test_the_line_is_answered_while_studies_have_to_wait(
    with_helper: Callable[[Helper], Callers],
) -> None:
    helper = Helper(most=1)
    callers = with_helper(helper)
    document = house.repeatability_study(code="new-study")
    done(callers["engineer"].send("POST", PREVIEW, document), 200)
    busy = threading.Thread(target=helper.run, args=(time.sleep, 2))
    busy.start()
    time.sleep(0.1)
    refused = callers["engineer"].post("/v1/studies", document)
    problem(refused, 503, "unavailable")
    assert int(refused.headers["Retry-After"]) > 0
    assert done(callers["mes"].post("/v1/decisions", house.decision()))["outcome"] == "release"
    assert busy.is_alive()
    busy.join()
    done(callers["engineer"].post("/v1/studies", document))


def test_a_study_that_takes_too_long_is_too_large(with_helper: Callable[[Helper], Callers]) -> None:
    # Not even the process starts in this time.
    callers = with_helper(Helper(seconds=0.001))
    document = house.repeatability_study(code="new-study")
    problem(callers["engineer"].post("/v1/studies", document), 413, "too-large")
    assert callers["engineer"].get("/v1/studies/new-study").status_code == 404


# --- the designs ---------------------------------------------------------------------------------------


def _rows(*counts: int, deviation: float = 0.05) -> list[list[Any]]:
    """Make rows of labels, one for each count, and a figure with its own effect at every label."""
    draw = random.Random(31)
    effects: dict[tuple[int, ...], float] = {}
    rows: list[list[Any]] = []
    for labels in itertools.product(*map(range, counts)):
        for depth in range(1, len(labels)):
            effects.setdefault(labels[:depth], draw.gauss(0, deviation))
        effect = sum(effects[labels[:depth]] for depth in range(1, len(labels)))
        figure = 3 + effect + draw.gauss(0, deviation)
        rows.append([*(f"L{label}" for label in labels), round(figure, 3)])
    return rows


def _lots(*, periods: bool) -> list[list[Any]]:
    """Make two samples of each of eight lots a week, read twice; or only a reading of each lot after lot."""
    if not periods:
        return [[row[0], row[2]] for row in _rows(12, 3)]
    return [[row[0], f"{row[0]}-{row[1]}", row[2], row[4]] for row in _rows(6, 8, 2, 2)]


TABLES: dict[str, tuple[list[str], list[list[Any]], dict[str, Any]]] = {
    "nested_precision": (
        ["Day", "Run", "Reading [%]"],
        [[row[0], row[0] + row[1], row[3]] for row in _rows(12, 2, 2)],
        {},
    ),
    "sampling": (["Target", "Sample", "Analysis", "Result [%]"], _rows(12, 2, 2), {}),
    "check_samples": (["Session", "Result [%]"], [[row[0], row[2]] for row in _rows(25, 2)], {}),
    "fleet": (["Sample", "Instrument", "Replicate", "Reading [%]"], _rows(8, 6, 2), {}),
    "process_stream": (
        ["Reading [%]"],
        [row[1:] for row in _rows(120)],
        {"held_sample": False, "lot_length": 40, "increments": 4, "scheme": "systematic"},
    ),
    "production": (
        ["Period", "Lot", "Sample", "Reading [%]"],
        _lots(periods=True),
        {"steered_by_this_analyzer": False},
    ),
    # Also with the least that it takes.
    "production of lots alone": (["Lot", "Reading"], _lots(periods=False), {}),
}


def test_no_design_is_left_out_here() -> None:
    before = {"repeatability", "duplicates", "agreement"}
    assert {name.partition(" ")[0] for name in TABLES} | before == set(DESIGNS)


@pytest.mark.parametrize("what", TABLES)
def test_every_design_comes_in_as_csv(callers: Callers, what: str) -> None:
    headings, rows, options = TABLES[what]
    design = what.partition(" ")[0]
    document = house.a_study(code="new-study", design=design, columns=headings, rows=rows, options=options)
    answer = done(csv_call(callers["engineer"], written(document, ";", ","), **said_of(document)), 200)
    expected = {name.casefold().removesuffix(" [%]") for name in headings}
    assert set(answer["study"]["columns"]) == expected
    # The helper process gives what the computation gives here.
    data = StudyData(tuple(answer["study"]["columns"]), tuple(map(tuple, answer["study"]["rows"])))
    here = evaluate_study(design, data, study="new-study", options=options, readings_decimals=2)
    assert answer["evaluation"]["estimates"] == here.to_document()["estimates"]
    assert answer["study"]["serves_until"] is not None


def test_a_production_as_csv_gives_what_its_lots_give(callers: Callers) -> None:
    """One reading after the other of each lot: the one-way analysis of variance, here by its own sums."""
    headings, rows, options = TABLES["production of lots alone"]
    document = house.a_study(
        code="new-study", design="production", columns=headings, rows=rows, options=options
    )
    answer = done(csv_call(callers["engineer"], written(document, ";", ","), **said_of(document)), 200)
    found = {each["name"]: each for each in answer["evaluation"]["estimates"]}
    lots = [[row[1] for row in rows if row[0] == lot] for lot in dict.fromkeys(row[0] for row in rows)]
    within = statistics.fmean(statistics.variance(lot) for lot in lots)
    between = statistics.variance([statistics.fmean(lot) for lot in lots]) - within / 3
    assert found["within_lot"]["variance"] == pytest.approx(within)
    assert found["lot_to_lot"]["variance"] == pytest.approx(between)
    # What describes the process is no component, and nobody said whether it is steered.
    assert found["lot_to_lot"]["usable"] is False
    assert "steering-unknown" in {warning["code"] for warning in answer["evaluation"]["warnings"]}


# --- how many rows -------------------------------------------------------------------------------------


def _stream(number: int, **changes: Any) -> dict[str, Any]:
    draw = random.Random(5)
    rows = [[round(draw.gauss(3, 0.05), 3)] for _ in range(number)]
    return house.a_study(
        **{"code": "new-study", "design": "process_stream", "columns": ["reading"], "rows": rows}
        | {"options": {"held_sample": True}}
        | changes
    )


@pytest.mark.parametrize("as_csv", [True, False])
def test_a_series_is_taken_as_long_as_its_design_takes_it(callers: Callers, as_csv: bool) -> None:
    most = DESIGNS["process_stream"].most_rows
    for number in (most, most + 1):
        document = _stream(number)
        if as_csv:
            body = written(document, ";", ".")
            answer = csv_call(callers["engineer"], body, path="/v1/studies", **said_of(document))
        else:
            answer = callers["engineer"].post("/v1/studies", document)
        if number == most:
            assert done(answer)["evaluation"]["used"] == len(answer.get_json()["study"]["rows"]) == 20_000
        else:
            (fault,) = problem(answer, 422, "invalid-request" if as_csv else "not-supported")["errors"]
            assert (fault["pointer"], str(most) in fault["expected"]) == ("#/rows", True)


@pytest.mark.parametrize("as_csv", [True, False])
def test_another_design_takes_fewer_rows(callers: Callers, as_csv: bool) -> None:
    document = _stream(5001, design="production", options={}, columns=["lot", "reading"])
    document["rows"] = [[f"L{index // 2}", *row] for index, row in enumerate(document["rows"])]
    if as_csv:
        answer = csv_call(callers["engineer"], written(document, ";", "."), **said_of(document))
    else:
        answer = callers["engineer"].send("POST", PREVIEW, document)
    (fault,) = problem(answer, 422, "invalid-request")["errors"]
    assert fault["pointer"] == "#/rows"
    assert "5001 rows" in fault["detail"]
    assert "at most 5000" in fault["detail"] + str(fault.get("expected"))
    assert "production" in fault["detail"] + str(fault.get("expected"))
