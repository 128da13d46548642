"""Master data: put with If-Match, read with ETag, listed; each refers only to what exists."""

from __future__ import annotations

from typing import Any

import pytest

from service import documents
from tests.service.api.conftest import Callers
from tests.service.api.house import done, example, fresh_key, put_master_data

PATHS: list[tuple[str, type[Any]]] = [
    ("/v1/products/whole-milk-powder", documents.Product),
    ("/v1/products/whole-milk-powder/characteristics/moisture", documents.Characteristic),
    ("/v1/lines/tower-1", documents.Line),
    ("/v1/analyzers/nir-1", documents.Analyzer),
    ("/v1/analyzers/nir-1/calibrations/wmp-7", documents.Calibration),
    ("/v1/laboratories/site-lab", documents.Laboratory),
]
IDS = [kind.__name__ for _, kind in PATHS]


@pytest.mark.parametrize(("path", "kind"), PATHS, ids=IDS)
def test_what_was_put_is_read_replaced_and_listed(callers: Callers, path: str, kind: type[Any]) -> None:
    engineer = callers["engineer"]
    response = engineer.get(path)
    document = done(response, 200)
    etag = response.headers["ETag"]
    assert etag == '"1"'
    assert engineer.get(path, headers={"If-None-Match": etag}).status_code == 304
    changed = {**document, "external_codes": {"mes": "0815"}}
    assert engineer.put(path, changed).get_json()["type"] == "/problems/precondition-required"
    stale = engineer.put(path, changed, If_Match='"9"')
    assert (stale.status_code, stale.get_json()["type"]) == (412, "/problems/stale-version")
    replaced = engineer.put(path, changed, If_Match=etag)
    assert (replaced.status_code, replaced.headers["ETag"]) == (200, '"2"')
    assert done(engineer.get(path), 200) == changed
    listed = done(engineer.get(path.rsplit("/", 1)[0]), 200)
    assert changed in listed["items"]


@pytest.mark.parametrize(("path", "kind"), PATHS, ids=IDS)
def test_the_same_document_again_changes_nothing(callers: Callers, path: str, kind: type[Any]) -> None:
    document = done(callers["engineer"].get(path), 200)
    response = callers["engineer"].put(path, document)
    assert (response.status_code, response.headers["ETag"]) == (200, '"1"')


@pytest.mark.parametrize(("path", "kind"), PATHS, ids=IDS)
def test_a_document_names_what_its_path_names(callers: Callers, path: str, kind: type[Any]) -> None:
    response = callers["engineer"].put(f"{path}-2", example(kind))
    assert response.status_code == 422
    assert [fault["pointer"] for fault in response.get_json()["errors"]] == ["#/code"]


@pytest.mark.parametrize(("path", "kind"), PATHS, ids=IDS)
def test_only_engineers_change_master_data(callers: Callers, path: str, kind: type[Any]) -> None:
    for name in ("mes", "auditor", "max"):
        response = callers[name].put(path, example(kind), If_Match='"1"')
        assert (response.status_code, response.get_json()["type"]) == (403, "/problems/forbidden")


def test_what_does_not_exist_cannot_be_referred_to(at_start: Callers) -> None:
    engineer = at_start["engineer"]
    for path, kind in PATHS:
        if kind in (documents.Characteristic, documents.Line, documents.Calibration):
            response = engineer.put(path, example(kind))
            assert response.status_code == 422, path
            assert engineer.get(path).get_json()["type"] == "/problems/not-found"


def test_a_put_may_carry_a_key_and_is_then_repeatable(at_start: Callers) -> None:
    key, path = fresh_key(), "/v1/products/whole-milk-powder"
    first = at_start["engineer"].put(path, example(documents.Product), Idempotency_Key=key)
    again = at_start["engineer"].put(path, example(documents.Product), Idempotency_Key=key)
    assert (first.status_code, first.headers["ETag"]) == (201, '"1"')
    assert again.headers["ETag"] == '"1"'
    assert again.get_json() == first.get_json()


def test_a_used_key_is_refused_for_another_body_also_where_that_body_stands(at_start: Callers) -> None:
    key, path = fresh_key(), "/v1/products/whole-milk-powder"
    engineer, document = at_start["engineer"], example(documents.Product)
    other = {**document, "name": "Another name"}
    first = engineer.put(path, document, Idempotency_Key=key)
    done(engineer.put(path, other, If_Match='"1"'), 200)
    response = engineer.put(path, other, Idempotency_Key=key)  # it stands, but the key is that of the first
    assert (response.status_code, response.get_json()["type"]) == (422, "/problems/idempotency-key-reused")
    again = engineer.put(path, document, Idempotency_Key=key)
    assert (again.status_code, again.headers["ETag"]) == (201, '"1"')
    assert again.headers["Recorded-Earlier"] == "true"
    assert again.get_json() == first.get_json()


def test_if_match_on_what_is_not_there_is_a_412(at_start: Callers) -> None:
    response = at_start["engineer"].put(PATHS[0][0], example(documents.Product), If_Match='"1"')
    assert response.status_code == 412


def test_creation_may_insist_on_being_the_first(at_start: Callers) -> None:
    path = PATHS[0][0]
    document = example(documents.Product)
    assert at_start["engineer"].put(path, document, If_None_Match="*").status_code == 201
    other = {**document, "name": "Another name"}
    assert at_start["engineer"].put(path, other, If_None_Match="*").status_code == 412


def test_a_calibration_stands_under_its_analyzer(callers: Callers) -> None:
    assert callers["mes"].get("/v1/analyzers/oven/calibrations/wmp-7").status_code == 404
    assert done(callers["mes"].get("/v1/analyzers/oven/calibrations"), 200)["items"] == []


@pytest.mark.parametrize(
    ("member", "value"),
    [("adjustment", {"moisture": {"slope": 1.0, "bias": 0.2}}), ("product", "skim-milk-powder")],
)
def test_another_model_or_adjustment_is_another_calibration(
    callers: Callers, member: str, value: Any
) -> None:
    engineer = callers["engineer"]
    done(
        engineer.put(
            "/v1/products/skim-milk-powder",
            example(documents.Product, code="skim-milk-powder", default_specifications=[]),
        )
    )
    path = "/v1/analyzers/nir-1/calibrations/wmp-7"
    changed = {**done(engineer.get(path), 200), member: value}
    response = engineer.put(path, changed, If_Match='"1"')
    assert response.status_code == 422
    assert [fault["pointer"] for fault in response.get_json()["errors"]] == [f"#/{member}"]
    done(engineer.put("/v1/analyzers/nir-1/calibrations/wmp-7b", {**changed, "code": "wmp-7b"}))


def test_lists_continue_where_they_ended(at_start: Callers) -> None:
    put_master_data(at_start["engineer"])
    seen: list[str] = []
    cursor: str | None = ""
    while cursor is not None:
        path = f"/v1/products/whole-milk-powder/characteristics?limit=1{cursor and '&cursor=' + cursor}"
        page = done(at_start["mes"].get(path), 200)
        seen += [item["code"] for item in page["items"]]
        cursor = page["next"]
    assert sorted(seen) == ["fat", "moisture", "protein"]


def test_the_natural_domain_stays_while_a_budget_is_in_force(callers: Callers) -> None:
    """Rules compiled at approval and rules compiled for other counts rest on the same domain."""
    path = "/v1/products/whole-milk-powder/characteristics/moisture"
    found = callers["engineer"].get(path)
    document = found.get_json() | {"natural_domain": {"lower": 0, "upper": 50}}
    response = callers["engineer"].put(path, document, **{"If-Match": found.headers["ETag"]})
    assert response.status_code == 422
    assert [fault["pointer"] for fault in response.get_json()["errors"]] == ["#/natural_domain"]
