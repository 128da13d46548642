"""The main job through the API on a real PostgreSQL: what SQLite forgives, it does not."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from datetime import timedelta
from pathlib import Path

import pytest
from flask import Flask

from service import create_app, create_services, documents
from service.settings import load_settings
from service.store.schema import migrate
from service.workflows import accounts
from tests.service.api import house
from tests.service.api.conftest import PEOPLE, TOKENS, Callers, callers_of
from tests.service.api.house import decision, done


@pytest.fixture
def app(postgresql_database: Callable[[str | None], str], tmp_path: Path) -> Iterator[Flask]:
    url = postgresql_database(None)
    migrate(url)
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(tmp_path), "SHOALMARK_DATABASE_URL": url})
    app = create_app(create_services(settings))
    yield app
    app.extensions["shoalmark"].close()


@pytest.fixture
def callers(app: Flask) -> Callers:
    database = app.extensions["shoalmark"].database
    for person, roles in PEOPLE.items():
        accounts.add_person(database, person, person.title(), roles, house.PASSWORD)
    tokens = {name: accounts.add_token(database, name, roles).secret for name, roles in TOKENS.items()}
    return callers_of(app, tokens | {"max": accounts.add_token(database, "max", ()).secret})


def test_a_lot_is_judged_from_raw_data_to_the_record(callers: Callers) -> None:
    house.build(callers["engineer"], callers["max"])
    key = house.fresh_key()
    first = callers["mes"].post("/v1/decisions", decision(), key=key)
    assert done(first)["outcome"] == "release"
    again = callers["mes"].post("/v1/decisions", decision(), key=key)
    assert (again.headers["Recorded-Earlier"], again.get_json()) == ("true", first.get_json())
    reused = callers["mes"].post("/v1/decisions", decision("another"), key=key)
    assert reused.get_json()["type"] == "/problems/idempotency-key-reused"
    judged = callers["mes"].post("/v1/decisions", house.moved(decision(), hours=1))
    assert judged.get_json()["type"] == "/problems/lot-already-judged"
    same = callers["mes"].post("/v1/decisions", {**decision(), "lot": "L2"})
    assert same.get_json()["type"] == "/problems/reading-already-judged"
    held = done(callers["mes"].post("/v1/decisions", decision("Grün/1", moisture=(3.2, 3.22))))
    assert held["outcome"] == "hold"
    assert [lot["lot"] for lot in done(callers["mes"].get("/v1/lots"), 200)["items"]] == [
        "Grün/1",
        "W26-04711",
    ]
    limits = done(callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/moisture"), 200)
    assert limits["items"]
    assert done(callers["auditor"].get("/v1/ledger/verification"), 200)["whole"] is True


def test_evidence_is_extended_and_renewed(callers: Callers) -> None:
    engineer, approver = callers["engineer"], callers["max"]
    house.build(engineer, approver)
    until = (house.TODAY + timedelta(days=400)).isoformat()
    extension = {"until": until, "widening_factor": 1.5, **house.signed()}
    for code in ("wmp-val-2026-01", "wmp-rep-2026-01"):
        done(approver.post(f"/v1/studies/{code}/extension", extension))
    again = approver.post("/v1/studies/wmp-rep-2026-01/extension", extension)
    assert again.get_json()["type"] == "/problems/already-extended"
    done(engineer.post("/v1/studies", house.repeatability_study(code="rep-2")))
    renewals = "/v1/studies/wmp-rep-2026-01/replacements"
    done(engineer.post(renewals, {"study": "rep-2", "reason": "yearly study"}))
    approved = done(approver.post(f"{renewals}/rep-2/approve", house.signed()), 200)
    assert [version["version"] for version in approved["budgets"]] == [4]
    answered = done(callers["mes"].post("/v1/decisions", decision()))
    assert answered["outcome"] == "release"
    assert [notice["code"] for notice in answered["notices"]] == ["evidence-extended"]
    assert done(callers["auditor"].get("/v1/ledger/verification"), 200)["whole"] is True


@pytest.mark.parametrize("path", ["/v1/lots/p/%00", "/v1/lots?cursor=%00", "/v1/studies?product=%00"])
def test_characters_that_postgresql_cannot_hold_are_refused(callers: Callers, path: str) -> None:
    assert callers["mes"].get(path).status_code in (404, 422)


def test_of_two_processes_only_one_takes_the_last_round_of_a_lot(
    app: Flask, callers: Callers, tmp_path: Path
) -> None:
    """Two lines, each with a process of its own, read the same lot again at once."""
    house.build(callers["engineer"], callers["max"])
    rule = {"kind": "guarded_by_specific_risk", "largest_risk": 0.05, "rounds": 2}
    document = house.specification("customer-c", 3.2, rule)
    house.put_in_force(callers["engineer"], callers["max"], "specifications", document)
    line = house.example(documents.Line, code="tower-2", name="Tower 2")
    done(callers["engineer"].put("/v1/lines/tower-2", line))
    settings = app.extensions["shoalmark"].settings
    other = create_app(create_services(settings))
    apps = {"tower-1": app, "tower-2": other}
    try:
        for number in range(3):
            lot = f"W26-{number}"
            held = decision(lot, (3.16, 3.16), specifications=["customer-c"])
            assert done(callers["mes"].post("/v1/decisions", held))["outcome"] == "hold"
            together = threading.Barrier(len(apps))

            def send(line: str, lot: str = lot, together: threading.Barrier = together) -> int:
                caller = house.Caller(apps[line].test_client(), callers["mes"].token)
                request = house.moved(decision(lot, (3.14, 3.15)), minutes=5 if line == "tower-1" else 9)
                body = {"line": line, "units": request["units"], "readings": request["readings"]}
                together.wait()
                return caller.post(f"/v1/lots/whole-milk-powder/{lot}/retests", body).status_code

            with ThreadPoolExecutor(len(apps)) as pool:
                assert sorted(pool.map(send, apps)) == [201, 409]
    finally:
        other.extensions["shoalmark"].close()
    assert done(callers["auditor"].get("/v1/ledger/verification"), 200)["whole"] is True
