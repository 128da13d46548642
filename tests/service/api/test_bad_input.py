"""Bad input: each gets its own clear problem, and nothing is stored."""

from __future__ import annotations

import json
from datetime import timedelta
from typing import Any

import pytest
from flask import Flask
from werkzeug.test import TestResponse

from service import documents
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done, example
from tests.service.api.test_production_rules import DECLARED, GLOBAL


def heads(app: Flask) -> list[Any]:
    with app.extensions["shoalmark"].database.reading() as unit_of_work:
        return list(unit_of_work.ledger.heads().values())


def problem(response: TestResponse, status: int, slug: str) -> dict[str, Any]:
    """Give the problem document, which has to be of this status and type."""
    assert response.status_code == status, response.get_data(as_text=True)
    assert response.content_type == "application/problem+json"
    document: dict[str, Any] = response.get_json()
    assert document["type"] == f"/problems/{slug}"
    assert document["status"] == status
    assert document["instance"].startswith("urn:uuid:")
    assert document["title"] and document["detail"]
    return document


def pointers(document: dict[str, Any]) -> list[str]:
    return [fault["pointer"] for fault in document["errors"]]


def changed_reading(**changes: Any) -> dict[str, Any]:
    request = decision()
    request["readings"][1].update(changes)
    return request


@pytest.mark.parametrize(
    ("request_document", "pointer"),
    [
        (decision(product="butter"), "#/product"),
        (decision(line="tower-9"), "#/line"),
        (decision(specifications=["legal", "customer-x"]), "#/specifications/1"),
        (decision(units={"moisture": "%", "fat": "%", "protein": "%", "ash": "%"}), "#/units/ash"),
        (decision(units={"moisture": "%", "fat": "degC", "protein": "%"}), "#/units/fat"),
        (decision(units={"moisture": "%", "fat": "g/100 mL", "protein": "%"}), "#/units/fat"),
        (decision(units={"moisture": "%", "protein": "%"}), "#/units/fat"),
        (changed_reading(analyzer="nir-9"), "#/readings/1/analyzer"),
        (changed_reading(calibration="wmp-9"), "#/readings/1/calibration"),
        (changed_reading(values={"moisture": 2.7, "ash": 1.0}), "#/readings/1/values/ash"),
        (changed_reading(values={"moisture": "2.7"}), "#/readings/1/values/moisture"),
        (changed_reading(taken_at="9999-03-02T06:12:04Z"), "#/readings/1/taken_at"),
        (decision(moisture=(2.7, 2.7, 2.7, 2.7, 2.7)), "#/readings"),
        (decision(readings=[]), "#/readings"),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_what_is_not_understood_is_named_and_not_recorded(
    app: Flask, callers: Callers, request_document: dict[str, Any], pointer: str
) -> None:
    before = heads(app)
    for path in ("/v1/decisions", "/v1/decisions/preview"):
        document = problem(callers["mes"].post(path, request_document), 422, "invalid-request")
        assert pointer in pointers(document)
    assert heads(app) == before


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b'{"lot": "A", "lot": "B"}', "stands here twice"),
        (b'{"lot": NaN}', "NaN"),
        (b'{"lot": 1e999}', "1e999"),
        (b'{"lot": "\\ud800"}', "surrogate"),
        (b'{"a": ' * 10_000 + b"1" + b"}" * 10_000, "nested too deep"),
        (b"", "empty"),
        (b"lot=A", "no JSON"),
    ],
    ids=["equal names", "NaN", "1e999", "surrogate", "depth", "empty", "form"],
)
def test_what_cannot_be_read_is_a_400(app: Flask, callers: Callers, body: bytes, words: str) -> None:
    before = heads(app)
    response = callers["mes"].send(
        "POST", "/v1/decisions", raw=body, headers={"Idempotency-Key": house.fresh_key()}
    )
    assert words in json.dumps(problem(response, 400, "unreadable"))
    assert heads(app) == before


def test_other_content_types_are_refused(callers: Callers) -> None:
    headers = {"Authorization": f"Bearer {callers['mes'].token}", "Idempotency-Key": house.fresh_key()}
    client = callers["mes"].client
    response = client.post("/v1/decisions", data="{}", content_type="text/plain", headers=headers)
    assert (response.status_code, response.content_type) == (415, "application/problem+json")


@pytest.mark.parametrize(
    ("content_type", "taken"),
    [
        ("application/json; charset=utf-8", True),
        ('application/json; charset="UTF-8"', True),
        ("application/json; charset=latin-1", False),
        ("application/json;charset=utf-16", False),
    ],
)
def test_a_body_in_another_charset_is_refused(callers: Callers, content_type: str, taken: bool) -> None:
    """JSON that systems exchange is UTF-8: RFC 8259, 8.1 (from memory)."""
    client, token = callers["mes"].client, callers["mes"].token
    response = client.post(
        "/v1/decisions/preview",
        data=json.dumps(decision("L1"), ensure_ascii=False).encode(),
        content_type=content_type,
        headers={"Authorization": f"Bearer {token}"},
    )
    assert response.status_code == (200 if taken else 415), response.get_data(as_text=True)


def test_a_body_beyond_the_bound_is_a_413(callers: Callers) -> None:
    raw = b'{"lot": "' + b"x" * (8 * 1024 * 1024) + b'"}'
    response = callers["mes"].send("POST", "/v1/decisions/preview", raw=raw)
    problem(response, 413, "too-large")


def test_forms_that_are_not_built_yet_are_refused_as_such(app: Flask, callers: Callers) -> None:
    before = heads(app)
    document = house.specification("guarded", 3.3)
    document["requires"][0]["decision_rule"] = {**GLOBAL, "prior": DECLARED, "rounds": 2}
    problem(callers["engineer"].post("/v1/specifications", document), 422, "not-supported")
    document = study(rows=[["P01", 1, 3.1], ["P01", 2, {"below": 0.1}]])
    found = problem(callers["engineer"].post("/v1/studies", document), 422, "not-supported")
    assert pointers(found) == ["#/rows/1/2"]
    assert heads(app) == before


def test_a_lot_is_judged_once(app: Flask, callers: Callers) -> None:
    first = done(callers["mes"].post("/v1/decisions", decision("L1")))
    before = heads(app)
    again = house.moved(decision("L1", moisture=(2.5, 2.6)), hours=1)
    document = problem(callers["mes"].post("/v1/decisions", again), 409, "lot-already-judged")
    assert document["link"] == f"/v1/decisions/{first['id']}"
    assert heads(app) == before


def test_the_same_reading_is_no_new_evidence(app: Flask, callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", decision("L1")))
    before = heads(app)
    other_lot = {**decision("L1"), "lot": "L2"}
    problem(callers["mes"].post("/v1/decisions", other_lot), 409, "reading-already-judged")
    # The same instant in another zone, and below the millisecond, is the same reading.
    elsewhere = house.moved(decision("L1"), microseconds=400)
    problem(callers["mes"].post("/v1/decisions", {**elsewhere, "lot": "L3"}), 409, "reading-already-judged")
    twice = decision("L4")
    twice["readings"][1] = twice["readings"][0]
    problem(callers["mes"].post("/v1/decisions", twice), 409, "reading-already-judged")
    assert heads(app) == before


def study(**changes: Any) -> dict[str, Any]:
    return house.repeatability_study(code="new-study", **changes)


@pytest.mark.parametrize(
    ("document", "pointer"),
    [
        (study(rows=[]), "#/rows"),
        (study(rows=[["P01", 1, 3.1], ["P01", 2]]), "#/rows/1"),
        (study(rows=[["P01", 1, 3.1], ["P02", 1, 3.2], ["P03", 1, 3.0]]), ""),
        (study(rows=[["P01", 1, 3.1], ["P01", 2, 3.1], ["P02", 1, 3.1], ["P02", 2, 3.1]]), ""),
        (study(rows=[["P01", 1, "3,1"], ["P01", 2, 3.1]]), "#/rows/0/2"),
        (study(columns=["sample", "replicate", "value"]), "#/columns"),
        (study(design="guesswork"), "#/design"),
        (study(unit="degC"), "#/unit"),
        (study(product="butter"), "#/product"),
        (study(characteristic="ash"), "#/characteristic"),
        (study(calibrations={"nir-1": "wmp-9"}), "#/calibrations/nir-1"),
        (study(laboratory="no-lab"), "#/laboratory"),
        (study(done_on="9999-01-01", serves_until=None), "#/done_on"),
        (study(done_on="2016-01-01", serves_until="2025-12-30"), "#/serves_until"),
        (study(serves_until="9999-12-31"), "#/serves_until"),
        (study(source={"name": "a.csv", "sha256": "0" * 63}), "#/source/sha256"),
        (study(source={"name": "a.csv", "sha256": "g" * 64}), "#/source/sha256"),
    ],
    ids=[
        "empty",
        "ragged",
        "no replicates",
        "constant",
        "text for number",
        "columns",
        "design",
        "unit",
        "product",
        "characteristic",
        "calibration",
        "laboratory",
        "future",
        "3651 days",
        "for ever",
        "short digest",
        "no digest",
    ],
)
def test_unusable_studies_are_refused_with_their_place(
    app: Flask, callers: Callers, document: dict[str, Any], pointer: str
) -> None:
    before = heads(app)
    for path in ("/v1/studies/preview", "/v1/studies"):
        found = problem(callers["engineer"].post(path, document), 422, "invalid-request")
        assert any(place.startswith(pointer) for place in pointers(found)), found
    assert heads(app) == before
    assert callers["engineer"].get("/v1/studies/new-study").status_code == 404


def test_a_study_may_serve_for_3650_days_and_name_its_file(callers: Callers) -> None:
    source = {"name": "a.csv", "sha256": "0f" * 32}
    document = study(done_on="2016-01-01", serves_until="2025-12-29", source=source)
    assert done(callers["engineer"].post("/v1/studies", document))["study"]["source"] == source


def test_limits_the_wrong_way_round_are_refused(app: Flask, callers: Callers) -> None:
    before = heads(app)
    document = house.specification("reversed", 3.0)
    document["requires"][0]["lower_tolerance_limit"] = {"value": 4.0, "unit": "%", "inclusive": True}
    found = problem(callers["engineer"].post("/v1/specifications", document), 422, "invalid-request")
    assert pointers(found) == ["#/requires/0"]
    document["requires"][0]["lower_tolerance_limit"] = {"value": 40, "unit": "g/kg", "inclusive": True}
    found = problem(callers["engineer"].post("/v1/specifications", document), 422, "invalid-request")
    assert pointers(found)[0].startswith("#/requires/0")
    assert heads(app) == before


def test_an_empty_acceptance_interval_cannot_be_submitted(app: Flask, callers: Callers) -> None:
    document = house.specification("narrow", 3.0)
    document["requires"][0]["lower_tolerance_limit"] = {"value": 2.95, "unit": "%", "inclusive": True}
    done(callers["engineer"].post("/v1/specifications", document))
    before = heads(app)
    response = callers["engineer"].post("/v1/specifications/narrow/versions/1/submit")
    found = problem(response, 422, "invalid-request")
    assert "requires/0" in found["errors"][0]["detail"]
    assert heads(app) == before
    assert done(callers["engineer"].get("/v1/specifications/narrow/versions/1"), 200)["state"] == "draft"


def test_a_budget_on_missing_evidence_is_refused(app: Flask, callers: Callers) -> None:
    before = heads(app)
    document = example(documents.BudgetDocument, code="other-budget")
    document["components"][0]["evidence"] = {"study": "no-study", "estimate": "repeatability"}
    document["components"][1]["evidence"] = {"study": "wmp-val-2026-01", "estimate": "no-estimate"}
    document["components"][3]["evidence"]["declaration"].pop("unit")
    found = problem(callers["engineer"].post("/v1/budgets", document), 422, "invalid-request")
    places = pointers(found)
    assert "#/components/0/evidence/study" in places
    assert any(place.startswith("#/components/1/evidence") for place in places)
    assert "#/components/3/evidence/declaration/unit" in places
    assert heads(app) == before


def test_a_bias_needs_its_very_own_uncertainty(app: Flask, callers: Callers) -> None:
    """The bias of one study with the uncertainty of another's would be covered by neither."""
    before = heads(app)
    document = example(documents.BudgetDocument)
    document["components"] = [line for line in document["components"] if line["code"] != "bias"]
    response = callers["engineer"].post("/v1/budgets/wmp-moisture-nir/versions", document)
    found = problem(response, 422, "invalid-request")
    assert "no component holds the uncertainty of this very bias" in str(found["errors"])
    assert heads(app) == before


def test_evidence_that_lapsed_carries_no_budget(app: Flask, callers: Callers) -> None:
    old = house.repeatability_study(
        code="old-study",
        done_on=(house.TODAY - timedelta(days=400)).isoformat(),
        serves_until=(house.TODAY - timedelta(days=30)).isoformat(),
    )
    done(callers["engineer"].post("/v1/studies", old))
    document = example(documents.BudgetDocument)
    document["components"][0]["evidence"]["study"] = "old-study"
    done(callers["engineer"].post("/v1/budgets/wmp-moisture-nir/versions", document))
    before = heads(app)
    response = callers["engineer"].post("/v1/budgets/wmp-moisture-nir/versions/2/submit")
    problem(response, 409, "evidence-lapsed")
    assert heads(app) == before


@pytest.mark.parametrize(
    ("query", "parameter"),
    [
        ("limit=0", "limit"),
        ("limit=501", "limit"),
        ("limit=ten", "limit"),
        ("limit=1&limit=2", "limit"),
        ("outcome=maybe", "outcome"),
        ("colour=white", "colour"),
        ("cursor=nowhere", "cursor"),
        ("product=%00", "product"),
        ("cursor=%00", "cursor"),
        ("product=" + "a" * 201, "product"),
    ],
)
def test_a_wrong_query_is_refused_by_parameter(callers: Callers, query: str, parameter: str) -> None:
    found = problem(callers["mes"].get(f"/v1/decisions?{query}"), 422, "invalid-request")
    assert [fault["parameter"] for fault in found["errors"]] == [parameter]


def test_a_wrong_query_has_all_its_faults_at_once(callers: Callers) -> None:
    found = problem(callers["mes"].get("/v1/lots?limit=0&outcome=maybe&colour=white"), 422, "invalid-request")
    assert {fault["parameter"] for fault in found["errors"]} == {"limit", "outcome", "colour"}


def test_a_call_that_records_takes_no_parameters(app: Flask, callers: Callers) -> None:
    before = heads(app)
    found = problem(
        callers["mes"].post("/v1/decisions?preview=true", house.decision()), 422, "invalid-request"
    )
    assert [fault["parameter"] for fault in found["errors"]] == ["preview"]
    path = "/v1/products/whole-milk-powder?force=yes"
    changed = example(documents.Product, name="Another")
    found = problem(callers["engineer"].put(path, changed, If_Match='"1"'), 422, "invalid-request")
    assert [fault["parameter"] for fault in found["errors"]] == ["force"]
    path = "/v1/budgets/wmp-moisture-nir/versions/1/submit?now=1"
    found = problem(callers["engineer"].post(path), 422, "invalid-request")
    assert [fault["parameter"] for fault in found["errors"]] == ["now"]
    assert heads(app) == before


def test_a_body_where_none_is_described_is_refused(app: Flask, callers: Callers) -> None:
    done(callers["engineer"].post("/v1/specifications", house.specification("new-one", 3.0)))
    before = heads(app)
    path = "/v1/specifications/new-one/versions/1/submit"
    found = problem(callers["engineer"].post(path, {"reason": "please"}), 422, "invalid-request")
    assert pointers(found) == ["#"]
    assert heads(app) == before
    assert done(callers["engineer"].post(path, {}), 200)["state"] == "submitted"


@pytest.mark.parametrize("lot", ["%00", "%20", "%0A", "a" * 65, "%F0%9F"])
def test_a_lot_that_no_request_can_name_is_a_404(callers: Callers, lot: str) -> None:
    response = callers["mes"].get(f"/v1/lots/whole-milk-powder/{lot}")
    assert (response.status_code, response.content_type) == (404, "application/problem+json")
