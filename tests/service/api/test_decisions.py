"""Decisions over the real application: judged, recorded, repeated, read again."""

from __future__ import annotations

import hashlib
import threading
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from flask import Flask

from service import documents
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done, example


def test_a_reading_far_from_the_limit_releases_the_lot(callers: Callers) -> None:
    answer = done(callers["mes"].post("/v1/decisions", decision()))
    assert answer["id"] == "tower-1.1"
    assert answer["outcome"] == "release"
    assert [verdict["specification"]["code"] for verdict in answer["verdicts"]] == ["legal", "customer-b"]
    assert answer["not_judged"] == ["microbiology"]
    assert answer["caution"]
    for verdict in answer["verdicts"]:
        guard_band = verdict["upper_tolerance_limit"] - verdict["upper_acceptance_limit"]
        assert verdict["guard_band"]["upper"] == pytest.approx(guard_band)
        assert verdict["expanded_uncertainty"] == pytest.approx(
            verdict["coverage_factor"] * verdict["combined_standard_uncertainty"]
        )


@pytest.mark.parametrize(
    ("moisture", "outcome"), [((2.7, 2.7), "release"), ((3.22, 3.2), "hold"), ((3.6, 3.6), "reject")]
)
def test_the_outcome_follows_the_estimate(
    callers: Callers, moisture: tuple[float, ...], outcome: str
) -> None:
    answer = done(callers["mes"].post("/v1/decisions", decision(moisture=moisture)))
    assert answer["outcome"] == outcome
    assert bool(answer["reasons"]) == (outcome != "release")


def holds() -> dict[str, dict[str, Any]]:
    """Give requests that are understood but prove nothing, by the code of their reason."""
    outside = decision(moisture=(6.0, 6.1))
    other_calibration = decision()
    for reading in other_calibration["readings"]:
        reading["calibration"] = "wmp-8"
    missing = decision()
    for reading in missing["readings"]:
        del reading["values"]["moisture"]
    return {
        "outside-validated-range": outside,
        "other-calibration": other_calibration,
        "characteristic-missing": missing,
        "too-few-readings": decision(moisture=(2.7,)),
    }


@pytest.mark.parametrize("name", list(holds()))
def test_what_is_understood_but_not_provable_is_a_recorded_hold(callers: Callers, name: str) -> None:
    calibration = example(documents.Calibration, code="wmp-8")
    done(callers["engineer"].put("/v1/analyzers/nir-1/calibrations/wmp-8", calibration))
    answer = done(callers["mes"].post("/v1/decisions", holds()[name]))
    assert (answer["recorded"], answer["outcome"]) == (True, "hold")
    assert all(reason["detail"] and reason["next"] for reason in answer["reasons"])
    assert answer["reasons"]


def test_nothing_in_force_is_a_recorded_hold(callers: Callers) -> None:
    done(callers["engineer"].post("/v1/specifications", house.specification("draft-only", 3.0)))
    answer = done(callers["mes"].post("/v1/decisions", decision(specifications=["draft-only"])))
    assert answer["outcome"] == "hold"
    assert [reason["code"] for reason in answer["reasons"]] == ["nothing-in-force"]
    assert answer["verdicts"][0]["budget"] is None


def test_a_preview_answers_alike_and_stores_nothing(callers: Callers) -> None:
    shown = done(callers["mes"].post("/v1/decisions/preview", decision()), 200)
    assert (shown["recorded"], shown["id"], shown["entry"]) == (False, None, None)
    assert done(callers["mes"].get("/v1/decisions"), 200)["items"] == []
    real = done(callers["mes"].post("/v1/decisions", decision()))
    assert shown["verdicts"] == real["verdicts"]


def test_a_decision_is_read_back_with_its_request(callers: Callers) -> None:
    answer = done(callers["mes"].post("/v1/decisions", decision()))
    stored = done(callers["auditor"].get(f"/v1/decisions/{answer['id']}"), 200)
    request = stored.pop("request")
    assert stored == answer
    assert request["readings"][0]["values"] == decision()["readings"][0]["values"]
    assert callers["auditor"].get("/v1/decisions/tower-1.99").status_code == 404
    assert callers["auditor"].get("/v1/decisions/tower-1.0").status_code == 404


def test_the_hash_in_the_answer_is_that_of_the_stored_bytes(app: Flask, callers: Callers) -> None:
    entry = done(callers["mes"].post("/v1/decisions", decision()))["entry"]
    with app.extensions["shoalmark"].database.reading() as unit_of_work:
        stored = unit_of_work.ledger.entry(entry["chain"], entry["sequence"])
    assert stored is not None
    assert hashlib.sha256(stored.body).hexdigest() == entry["hash"]


def test_lists_are_newest_first_and_continue(callers: Callers) -> None:
    for number in range(5):
        moisture = (2.7, 2.7) if number % 2 else (3.2, 3.22)
        done(callers["mes"].post("/v1/decisions", decision(f"lot {number}", moisture=moisture)))
    for path, member in (("/v1/decisions", "lot"), ("/v1/lots", "lot")):
        seen, cursor = [], ""
        while cursor is not None:
            page = done(callers["mes"].get(f"{path}?limit=2{cursor and '&cursor=' + cursor}"), 200)
            seen += [item[member] for item in page["items"]]
            cursor = page["next"]
        assert seen == [f"lot {number}" for number in reversed(range(5))]
    held = done(callers["mes"].get("/v1/lots?outcome=hold"), 200)["items"]
    assert [item["lot"] for item in held] == ["lot 4", "lot 2", "lot 0"]


@pytest.mark.parametrize("lot", ["W26/04711", "a b", "Grün 1", "50 %", "a//b", "?#&"])
def test_a_lot_is_found_by_any_printable_name(callers: Callers, lot: str) -> None:
    from urllib.parse import quote

    answer = done(callers["mes"].post("/v1/decisions", decision(lot)))
    path = f"/v1/lots/whole-milk-powder/{quote(lot, safe='')}"
    found = done(callers["mes"].get(path), 200)
    assert (found["lot"], found["decision"]) == (lot, answer["id"])
    assert found["last_decision"] == answer


def test_a_lot_that_was_never_judged_is_a_404_that_says_hold(callers: Callers) -> None:
    response = callers["mes"].get("/v1/lots/whole-milk-powder/unknown")
    assert response.status_code == 404
    assert "hold" in response.get_json()["detail"]


# --- repeated requests --------------------------------------------------------------------------------


def test_the_same_key_gives_the_same_answer_and_one_entry(app: Flask, callers: Callers) -> None:
    key = house.fresh_key()
    first = callers["mes"].post("/v1/decisions", decision(), key=key)
    assert "Recorded-Earlier" not in first.headers
    # Blanks and the order of members are not part of what a request says.
    reordered = dict(reversed(decision().items()))
    again = callers["mes"].post("/v1/decisions", reordered, key=key)
    assert (again.status_code, again.headers["Recorded-Earlier"]) == (201, "true")
    assert again.get_json() == first.get_json()
    assert len(done(callers["mes"].get("/v1/decisions"), 200)["items"]) == 1


def test_a_key_is_refused_for_another_request(callers: Callers) -> None:
    key = house.fresh_key()
    done(callers["mes"].post("/v1/decisions", decision(), key=key))
    response = callers["mes"].post("/v1/decisions", decision("another"), key=key)
    assert response.status_code == 422
    assert response.get_json()["type"] == "/problems/idempotency-key-reused"


def test_a_key_belongs_to_its_principal(app: Flask, callers: Callers) -> None:
    from service.workflows import accounts

    other = accounts.add_token(app.extensions["shoalmark"].database, "mes-2", ("line",)).secret
    key = house.fresh_key()
    done(callers["mes"].post("/v1/decisions", decision("L1"), key=key))
    second = house.Caller(callers["mes"].client, other).post("/v1/decisions", decision("L2"), key=key)
    assert second.status_code == 201


def test_twins_in_flight_are_one_decision(app: Flask, callers: Callers) -> None:
    key, twins = house.fresh_key(), 6
    together = threading.Barrier(twins)

    def send(_: int) -> tuple[int, bool, str]:
        caller = house.Caller(app.test_client(), callers["mes"].token)
        together.wait()
        response = caller.post("/v1/decisions", decision(), key=key)
        return response.status_code, "Recorded-Earlier" in response.headers, response.get_json()["id"]

    with ThreadPoolExecutor(twins) as pool:
        answers = list(pool.map(send, range(twins)))
    assert sorted(answers) == [(201, False, "tower-1.1"), *[(201, True, "tower-1.1")] * (twins - 1)]


def test_only_one_of_many_requests_judges_a_lot(app: Flask, callers: Callers) -> None:
    rivals = 6
    together = threading.Barrier(rivals)

    def send(number: int) -> int:
        caller = house.Caller(app.test_client(), callers["mes"].token)
        together.wait()
        return caller.post("/v1/decisions", house.moved(decision(), minutes=number)).status_code

    with ThreadPoolExecutor(rivals) as pool:
        assert sorted(pool.map(send, range(rivals))) == [201, *[409] * (rivals - 1)]


def test_errors_are_not_remembered_under_a_key(callers: Callers) -> None:
    key = house.fresh_key()
    assert callers["mes"].post("/v1/decisions", decision(line="tower-9"), key=key).status_code == 422
    done(callers["mes"].post("/v1/decisions", decision(), key=key))


@pytest.mark.parametrize("key", [None, "short", "a" * 65, "with blank in it", "grün-grün"])
def test_a_recording_call_needs_a_usable_key(callers: Callers, key: str | None) -> None:
    headers = {} if key is None else {"Idempotency-Key": key}
    response = callers["mes"].send("POST", "/v1/decisions", decision(), headers=headers)
    assert response.status_code == 400
    document = response.get_json()
    assert document["type"] == "/problems/idempotency-key-missing"
    assert [fault["header"] for fault in document["errors"]] == ["Idempotency-Key"]


# --- limits and the record ----------------------------------------------------------------------------


def test_the_limits_now_are_those_that_decisions_use(callers: Callers) -> None:
    path = "/v1/acceptance-limits/whole-milk-powder/moisture"
    response = callers["mes"].get(path)
    limits = done(response, 200)
    verdict = done(callers["mes"].post("/v1/decisions", decision()))["verdicts"][1]
    planned = [
        item for item in limits["items"] if item["planned"] and item["specification"]["code"] == "customer-b"
    ]
    assert [item["upper_acceptance_limit"] for item in planned] == [verdict["upper_acceptance_limit"]]
    assert response.headers["Cache-Control"] == "no-cache"
    again = callers["mes"].get(path, headers={"If-None-Match": response.headers["ETag"]})
    assert (again.status_code, again.get_data()) == (304, b"")


def test_limits_of_nothing_in_force_are_a_409(callers: Callers) -> None:
    response = callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/fat")
    assert response.status_code == 409
    assert response.get_json()["type"] == "/problems/nothing-in-force"
    assert callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/ash").status_code == 404


def test_the_record_is_verified_and_a_changed_byte_is_named(app: Flask, callers: Callers) -> None:
    import sqlite3

    done(callers["mes"].post("/v1/decisions", decision()))
    assert done(callers["auditor"].get("/v1/ledger/verification"), 200)["whole"] is True
    file = app.extensions["shoalmark"].settings.database_url.removeprefix("sqlite:///")
    with sqlite3.connect(file) as connection:
        (trigger,) = connection.execute(
            "select name from sqlite_master "
            "where type = 'trigger' and tbl_name = 'entries' and sql like '%update%'"
        ).fetchone()
        connection.execute(f"drop trigger {trigger}")
        connection.execute(
            "update entries set body = cast(replace(cast(body as text), '2.71', '2.70') as blob) "
            "where chain = 'tower-1' and sequence = 1"
        )
    connection.close()
    found = done(callers["auditor"].get("/v1/ledger/verification"), 200)
    assert found["whole"] is False
    assert "tower-1" in found["finding"] and "1" in found["finding"]
