"""One study renewed behind two budgets: all of them or none, by two people, and whole in the record."""

from __future__ import annotations

import random
from pathlib import Path
from typing import Any

import pytest
from flask import Flask

from service import documents
from service.workflows.ledger import verify_record
from tests.service.api import house
from tests.service.api.conftest import Callers, callers_of, copied, open_app
from tests.service.api.house import Caller, done, example, signed
from tests.service.api.test_bad_input import heads, problem

OLD, NEW = "rep-of-both", "rep-of-both-2"
RENEWALS = f"/v1/studies/{OLD}/replacements"
BUDGETS = ("wmp-moisture-nir", "wmp-moisture-nir-2")
WISH = {"study": NEW, "reason": "yearly study of repeatability"}


BOTH = {"nir-1": "wmp-7", "nir-2": "wmp-8"}


def repeatability(code: str, deviation: float, **changes: Any) -> dict[str, Any]:
    draw = random.Random(21)
    rows = [
        [f"P{sample}", replicate, round(3 + sample / 50 + draw.gauss(0, deviation), 4)]
        for sample in range(40)
        for replicate in (1, 2)
    ]
    return house.repeatability_study(**{"code": code, "rows": rows, "calibrations": BOTH, **changes})


def budget(code: str, analyzer: str, calibration: str, validation: str) -> dict[str, Any]:
    """Make a budget on a study of repeatability that serves both analyzers, and a validation of its own."""
    document = example(documents.BudgetDocument, code=code, calibrations={analyzer: calibration})
    document["model"]["quantities"]["bias"]["evidence"]["study"] = validation
    for line in document["components"]:
        if line["code"] == "repeatability":
            line["evidence"]["study"] = OLD
        elif "study" in line["evidence"]:
            line["evidence"]["study"] = validation
    return document


def add_second_analyzer(engineer: Caller) -> None:
    done(engineer.put("/v1/analyzers/nir-2", example(documents.Analyzer, code="nir-2")))
    calibration = example(documents.Calibration, code="wmp-8", analyzer="nir-2")
    done(engineer.put("/v1/analyzers/nir-2/calibrations/wmp-8", calibration))
    own = {"calibrations": {"nir-2": "wmp-8"}}
    done(engineer.post("/v1/studies", house.repeatability_study(code="rep-of-nir-2", **own)))
    validation = {**house.agreement_study(), "code": "val-of-nir-2", **own}
    validation["named_sources"][0]["evidence"]["study"] = "rep-of-nir-2"
    done(engineer.post("/v1/studies", validation))


@pytest.fixture(scope="module")
def renewal_template(
    house_template: Path,
    empty_template: tuple[Path, dict[str, str]],
    tmp_path_factory: pytest.TempPathFactory,
) -> Path:
    folder = copied(house_template, tmp_path_factory.mktemp("renewal"))
    app = open_app(folder)
    callers = callers_of(app, empty_template[1])
    engineer, approver = callers["engineer"], callers["max"]
    add_second_analyzer(engineer)
    done(engineer.post("/v1/studies", repeatability(OLD, 0.04)))
    done(engineer.post("/v1/studies", repeatability(NEW, 0.02)))
    first, second = BUDGETS
    done(engineer.post(f"/v1/budgets/{first}/versions", budget(first, "nir-1", "wmp-7", "wmp-val-2026-01")))
    one = f"/v1/budgets/{first}/versions/2"
    done(engineer.post(f"{one}/submit"), 200)
    done(approver.post(f"{one}/approve", signed()), 200)
    house.put_in_force(engineer, approver, "budgets", budget(second, "nir-2", "wmp-8", "val-of-nir-2"))
    app.extensions["shoalmark"].close()
    return folder


@pytest.fixture
def app(renewal_template: Path, tmp_path: Path) -> Any:
    app = open_app(copied(renewal_template, tmp_path / "renewed"))
    yield app
    app.extensions["shoalmark"].close()


def in_force(callers: Callers) -> dict[str, Any]:
    found = done(callers["auditor"].get("/v1/budgets?state=in_force"), 200)["items"]
    return {each["code"]: each for each in found}


def studies_of(version: dict[str, Any]) -> set[str]:
    return {line["evidence"].get("study") for line in version["document"]["components"]} - {None}


def test_a_study_is_renewed_behind_all_its_budgets(app: Flask, callers: Callers) -> None:
    before = in_force(callers)
    submitted = done(callers["engineer"].post(RENEWALS, WISH))
    assert [(each["code"], each["version"], each["state"]) for each in submitted["budgets"]] == [
        (BUDGETS[0], 3, "submitted"),
        (BUDGETS[1], 2, "submitted"),
    ]
    for each in submitted["budgets"]:
        stands = done(callers["engineer"].get(f"/v1/budgets/{each['code']}/versions/{each['version']}"), 200)
        assert stands == each
        # Nothing but the evidence and the reason is another.
        was = before[each["code"]]["document"]
        text = str({**was, "reason": WISH["reason"]}).replace(f"'{OLD}'", f"'{NEW}'")
        assert str(each["document"]) == text
    assert in_force(callers) == before

    compared = done(callers["max"].get(f"{RENEWALS}/{NEW}"), 200)
    (estimate,) = [each for each in compared["estimates"] if each["name"] == "repeatability"]
    # The same draws with half of the deviation: half of the standard uncertainty, to the rounding of data.
    ratio = estimate["becomes"]["standard_uncertainty"] / estimate["was"]["standard_uncertainty"]
    assert ratio == pytest.approx(0.5, rel=1e-2)
    for each in compared["budgets"]:
        assert [line["code"] for line in each["components"] if line["changed"]] == ["repeatability"]
        assert each["becomes"]["expanded_uncertainty"] < each["was"]["expanded_uncertainty"]

    approved = done(callers["max"].post(f"{RENEWALS}/{NEW}/approve", signed()), 200)
    now = in_force(callers)
    assert {each["code"]: each for each in approved["budgets"]} == now
    assert all(NEW in studies_of(each) and OLD not in studies_of(each) for each in now.values())
    states = done(callers["auditor"].get("/v1/budgets?state=superseded"), 200)["items"]
    assert {each["code"] for each in states} == set(BUDGETS)
    assert callers["max"].get(f"{RENEWALS}/{NEW}").status_code == 404
    # Lots are judged by the new versions from now on, and the record is whole.
    (verdict, *_) = done(callers["mes"].post("/v1/decisions", house.decision()))["verdicts"]
    assert (verdict["budget"]["code"], verdict["budget"]["version"]) == (BUDGETS[0], 3)
    assert verify_record(app.extensions["shoalmark"].database).whole


def test_both_acts_are_recorded_once(app: Flask, callers: Callers) -> None:
    key, other = house.fresh_key(), house.fresh_key()
    first = callers["engineer"].post(RENEWALS, WISH, key=key)
    again = callers["engineer"].post(RENEWALS, WISH, key=key)
    assert (done(again), again.headers["Recorded-Earlier"]) == (done(first), "true")
    first = callers["max"].post(f"{RENEWALS}/{NEW}/approve", signed(), key=other)
    entries = heads(app)
    again = callers["max"].post(f"{RENEWALS}/{NEW}/approve", signed(), key=other)
    assert (done(again, 200), again.headers["Recorded-Earlier"]) == (done(first, 200), "true")
    assert heads(app) == entries


def test_who_renews_does_not_approve_in_any_way(callers: Callers) -> None:
    done(callers["ada"].post(RENEWALS, WISH))
    problem(callers["ada"].post(f"{RENEWALS}/{NEW}/approve", signed()), 403, "forbidden")
    one = f"/v1/budgets/{BUDGETS[1]}/versions/2"
    problem(callers["ada"].post(f"{one}/approve", signed()), 403, "forbidden")
    # Given back and submitted by somebody else it is still her work, also.
    done(callers["max"].post(f"{one}/return", signed()), 200)
    done(callers["engineer"].post(f"{one}/submit"), 200)
    problem(callers["ada"].post(f"{one}/approve", signed()), 403, "forbidden")
    for who in ("mes", "auditor", "robot"):
        response = callers[who].post(f"{RENEWALS}/{NEW}/approve", signed())
        problem(response, 403, "forbidden")
    wrong = {"reason": "checked", "signature": {"password": "not the password"}}
    problem(callers["max"].post(f"{RENEWALS}/{NEW}/approve", wrong), 403, "forbidden")
    problem(callers["mes"].post(RENEWALS, WISH), 403, "forbidden")


def test_a_single_version_may_leave_the_renewal(callers: Callers) -> None:
    done(callers["engineer"].post(RENEWALS, WISH))
    done(callers["max"].post(f"/v1/budgets/{BUDGETS[1]}/versions/2/withdraw", signed()), 200)
    approved = done(callers["max"].post(f"{RENEWALS}/{NEW}/approve", signed()), 200)
    assert [each["code"] for each in approved["budgets"]] == [BUDGETS[0]]
    assert OLD in studies_of(in_force(callers)[BUDGETS[1]])


def test_all_or_none(app: Flask, callers: Callers) -> None:
    engineer = callers["engineer"]
    # Of one of the two analyzers only, so it cannot serve the other.
    one_sided = repeatability("one-sided", 0.02, calibrations={"nir-1": "wmp-7"})
    done(engineer.post("/v1/studies", one_sided))
    before = heads(app)
    found = problem(engineer.post(RENEWALS, {**WISH, "study": "one-sided"}), 422, "invalid-request")
    assert {fault["pointer"] for fault in found["errors"]} == {"#/study"}
    assert all(f"budget {BUDGETS[1]}: " in fault["detail"] for fault in found["errors"])
    for wish in ({**WISH, "study": OLD}, {**WISH, "study": "no-study"}):
        found = problem(engineer.post(RENEWALS, wish), 422, "invalid-request")
        assert [fault["pointer"] for fault in found["errors"]] == ["#/study"]
    problem(engineer.post("/v1/studies/no-study/replacements", WISH), 404, "not-found")
    problem(engineer.post(f"/v1/studies/{NEW}/replacements", {**WISH, "study": OLD}), 409, "nothing-in-force")
    problem(callers["max"].post(f"{RENEWALS}/{NEW}/approve", signed()), 404, "not-found")
    assert heads(app) == before


def test_a_budget_that_is_being_worked_on_stands_in_the_way(app: Flask, callers: Callers) -> None:
    document = budget(BUDGETS[1], "nir-2", "wmp-8", "val-of-nir-2")
    done(callers["engineer"].post(f"/v1/budgets/{BUDGETS[1]}/versions", document))
    before = heads(app)
    found = problem(callers["engineer"].post(RENEWALS, WISH), 409, "open-version-exists")
    assert found["link"] == f"/v1/budgets/{BUDGETS[1]}/versions/2"
    assert heads(app) == before
