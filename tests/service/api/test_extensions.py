"""A study let serve longer: once, by another person, with a wider uncertainty wherever it stands behind."""

from __future__ import annotations

import math
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from flask import Flask

from service import documents
from service.demo import plant
from service.workflows.calendar import DEFAULT_PLANT, lapse_instant
from service.workflows.ledger import verify_record
from tests.service.api import house
from tests.service.api.conftest import Callers, callers_of, open_app
from tests.service.api.house import Caller, done, example, signed
from tests.service.api.test_bad_input import heads, problem
from tests.service.api.test_laboratories import declared, of_laboratory, put
from tests.service.store.examples import drop_triggers, execute

STUDY, BUDGET, FACTOR = "wmp-val-2026-01", "wmp-moisture-nir", 1.5
LIMITS = "/v1/acceptance-limits/whole-milk-powder/moisture"
SERVES_UNTIL = date.fromisoformat(house.SERVES_UNTIL)
UNTIL = SERVES_UNTIL + timedelta(days=40)


def extension_of(code: str) -> str:
    return f"/v1/studies/{code}/extension"


def wish(until: date = UNTIL, factor: float = FACTOR, **changes: Any) -> dict[str, Any]:
    return {
        "until": until.isoformat(),
        "widening_factor": factor,
        **signed("the new study is late"),
        **changes,
    }


def in_force(callers: Callers) -> dict[str, Any]:
    (found,) = done(callers["auditor"].get("/v1/budgets?state=in_force"), 200)["items"]
    assert isinstance(found, dict)
    return found


def lines(callers: Callers, version: int) -> dict[str, Any]:
    found = done(callers["auditor"].get(f"/v1/budgets/{BUDGET}/versions/{version}/evaluation"), 200)
    return {line["code"]: line for line in found["components"]}


def limits(callers: Callers) -> tuple[list[dict[str, Any]], str]:
    answered = callers["mes"].get(LIMITS)
    items: list[dict[str, Any]] = done(answered, 200)["items"]
    return items, answered.headers["ETag"]


def test_the_uncertainty_of_the_study_is_widened_and_nothing_else(app: Flask, callers: Callers) -> None:
    before, was, (old_limits, old_etag) = in_force(callers), lines(callers, 1), limits(callers)
    counts = {head.chain: head.sequence for head in heads(app)}
    answered = done(callers["max"].post(extension_of(STUDY), wish()))
    counts["plant"] += 1
    assert {head.chain: head.sequence for head in heads(app)} == counts
    lapses_at = lapse_instant(UNTIL, DEFAULT_PLANT).strftime("%Y-%m-%dT%H:%M:%S.%fZ")
    assert answered["extension"] == {
        "until": UNTIL.isoformat(),
        "widening_factor": FACTOR,
        "lapses_at": lapses_at,
    }
    now = in_force(callers)
    assert answered["budgets"] == [now]
    assert (now["version"], now["approved_by"], now["drafted_by"]) == (2, "max", before["drafted_by"])
    assert now["document"] == {**before["document"], "reason": "the new study is late"}
    # The study of repeatability still serves as long as it did: the first that lapses counts.
    assert now["lapses_at"] == before["lapses_at"]

    becomes = lines(callers, 2)
    for code, line in becomes.items():
        factor = FACTOR if line["evidence"].get("study") == STUDY else 1.0
        assert line["standard_uncertainty"] == pytest.approx(
            factor * was[code]["standard_uncertainty"], rel=1e-12
        ), code
        assert line["degrees_of_freedom"] == pytest.approx(was[code]["degrees_of_freedom"], rel=1e-12)
    extended = {code for code, line in becomes.items() if line["evidence"].get("study") == STUDY}
    assert extended == {"remainder", "bias"}

    new_limits, new_etag = limits(callers)
    assert new_etag != old_etag
    for new, old in zip(new_limits, old_limits, strict=True):
        assert new["budget"]["version"] == 2
        assert new["upper_acceptance_limit"] < old["upper_acceptance_limit"]
        assert [item["study"] for item in new["extensions"]] == [STUDY]
        assert old["extensions"] == []
    assert verify_record(app.extensions["shoalmark"].database).whole


def test_decisions_are_made_on_it_and_say_so(callers: Callers) -> None:
    old_limits, _ = limits(callers)
    done(callers["max"].post(extension_of(STUDY), wish()))
    (limit,) = {
        item["upper_acceptance_limit"]
        for item in limits(callers)[0]
        if item["planned"] and item["specification"]["code"] == "customer-b"
    }
    (old,) = {
        item["upper_acceptance_limit"]
        for item in old_limits
        if item["planned"] and item["specification"]["code"] == "customer-b"
    }
    bias = limits(callers)[0][0]["bias"]
    # Between the two limits: released the day before, held now.
    value = round((limit + old) / 2 + bias, 4)
    answered = done(callers["mes"].post("/v1/decisions", house.decision(moisture=(value, value))))
    assert answered["outcome"] == "hold"
    assert [reason["code"] for reason in answered["reasons"]] == ["in-guard-band"]
    assert all(verdict["budget"]["version"] == 2 for verdict in answered["verdicts"])
    (notice,) = [each for each in answered["notices"] if each["code"] == "evidence-extended"]
    assert notice["detail"] == (
        f"The study {STUDY} behind {BUDGET} serves beyond its time until {UNTIL}; its uncertainty is widened "
        "by the factor 1.5."
    )
    study = done(callers["auditor"].get(f"/v1/studies/{STUDY}"), 200)
    assert study["extension"]["until"] == UNTIL.isoformat()
    assert study["study"]["serves_until"] == house.SERVES_UNTIL


def extend_all(callers: Callers) -> None:
    for code in (STUDY, "wmp-rep-2026-01"):
        done(callers["max"].post(extension_of(code), wish()))


def later(app: Flask, monkeypatch: pytest.MonkeyPatch, day: date) -> None:
    """Let the clock of the database stand at noon of a day."""
    moment = datetime(day.year, day.month, day.day, 12, tzinfo=UTC)
    monkeypatch.setattr(app.extensions["shoalmark"].database, "_clock", lambda: moment)


@pytest.mark.parametrize("lapsed", [False, True])
def test_a_budget_serves_again(
    app: Flask, callers: Callers, monkeypatch: pytest.MonkeyPatch, lapsed: bool
) -> None:
    """Two studies lapse on one day, as they were made on one: each is extended by itself, also afterwards."""
    after = SERVES_UNTIL + timedelta(days=10)
    if not lapsed:
        extend_all(callers)
    later(app, monkeypatch, after)
    if lapsed:
        held = done(callers["mes"].post("/v1/decisions/preview", house.decision()), 200)
        assert {reason["code"] for reason in held["reasons"]} == {"evidence-lapsed"}
        assert {item["state"] for item in limits(callers)[0]} == {"lapsed"}
        extend_all(callers)
    answered = done(callers["mes"].post("/v1/decisions", house.decision()))
    assert answered["outcome"] == "release"
    assert {each["code"] for each in answered["notices"]} == {"evidence-extended"}
    assert len(answered["notices"]) == 2
    assert {item["state"] for item in limits(callers)[0]} == {"in_force"}
    # Once more it does not serve.
    later(app, monkeypatch, UNTIL + timedelta(days=5))
    held = done(callers["mes"].post("/v1/decisions", house.decision("W26-04712", (2.71, 2.75))))
    assert "evidence-lapsed" in {reason["code"] for reason in held["reasons"]}


def test_after_a_restart_everything_stands_as_it_stood(
    app: Flask, callers: Callers, empty_template: tuple[Path, dict[str, str]], tmp_path: Path
) -> None:
    done(callers["max"].post(extension_of(STUDY), wish()))
    stands = limits(callers)
    judged = done(callers["mes"].post("/v1/decisions/preview", house.decision()), 200)
    app.extensions["shoalmark"].close()
    again = open_app(tmp_path / "data")
    try:
        restarted = callers_of(again, empty_template[1])
        assert limits(restarted) == stands
        assert (
            done(restarted["mes"].post("/v1/decisions/preview", house.decision()), 200)["verdicts"]
            == (judged["verdicts"])
        )
        assert verify_record(again.extensions["shoalmark"].database).whole
    finally:
        again.extensions["shoalmark"].close()


def test_later_versions_and_specifications_take_it_as_it_is(callers: Callers) -> None:
    done(callers["max"].post(extension_of(STUDY), wish()))
    wide = lines(callers, 2)
    document = example(documents.BudgetDocument)
    done(callers["engineer"].post(f"/v1/budgets/{BUDGET}/versions", document))
    done(callers["engineer"].post(f"/v1/budgets/{BUDGET}/versions/3/submit"), 200)
    done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/3/approve", signed()), 200)
    assert lines(callers, 3) == wide
    house.put_in_force(callers["engineer"], callers["max"], "specifications", house.specification("c", 4.0))
    found = {item["specification"]["code"]: item for item in limits(callers)[0] if item["planned"]}
    widths = {
        code: found[code]["upper_tolerance_limit"] - found[code]["upper_acceptance_limit"] for code in found
    }
    assert widths["c"] == pytest.approx(widths["customer-b"], rel=1e-9)


def test_what_is_taken_out_of_a_scatter_is_not_widened(callers: Callers) -> None:
    """More would be taken out, and less would remain: an extension must never make anything smaller."""
    engineer = callers["engineer"]
    validation = {**house.agreement_study(), "code": "val-a"}
    before = done(engineer.post("/v1/studies", validation))["evaluation"]
    done(callers["max"].post(extension_of("wmp-rep-2026-01"), wish()))
    after = done(engineer.post("/v1/studies", {**validation, "code": "val-b"}))["evaluation"]
    assert str(after).replace("val-b", "val-a") == str(before)


def test_an_open_version_does_not_stand_in_the_way(callers: Callers) -> None:
    document = example(documents.BudgetDocument)
    done(callers["engineer"].post(f"/v1/budgets/{BUDGET}/versions", document))
    done(callers["engineer"].post(f"/v1/budgets/{BUDGET}/versions/2/submit"), 200)
    assert [
        each["version"] for each in done(callers["max"].post(extension_of(STUDY), wish()))["budgets"]
    ] == [3]
    approved = done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/2/approve", signed()), 200)
    assert approved["state"] == "in_force"
    assert lines(callers, 2) == lines(callers, 3)
    states = done(callers["auditor"].get(f"/v1/budgets/{BUDGET}/versions"), 200)["items"]
    assert {each["version"]: each["state"] for each in states} == {
        1: "superseded",
        2: "in_force",
        3: "superseded",
    }


# --- who, when, how often ------------------------------------------------------------------------------


def test_once_for_ever(app: Flask, callers: Callers) -> None:
    key = house.fresh_key()
    first = callers["max"].post(extension_of(STUDY), wish(), key=key)
    again = callers["max"].post(extension_of(STUDY), wish(), key=key)
    assert (done(again), again.headers["Recorded-Earlier"]) == (done(first), "true")
    before = heads(app)
    found = problem(callers["max"].post(extension_of(STUDY), wish()), 409, "already-extended")
    assert found["link"] == f"/v1/studies/{STUDY}"
    assert heads(app) == before


@pytest.mark.parametrize(
    ("changes", "pointer"),
    [
        ({"until": house.SERVES_UNTIL}, "#/until"),
        ({"until": "2020-01-01"}, "#/until"),
        # 340 days it was to serve, so 340 more at most.
        ({"until": (SERVES_UNTIL + timedelta(days=341)).isoformat()}, "#/until"),
        ({"until": "9999-12-31"}, "#/until"),
        ({"until": "soon"}, "#/until"),
        ({"widening_factor": 1}, "#/widening_factor"),
        ({"widening_factor": 0.9}, "#/widening_factor"),
        ({"widening_factor": 10.5}, "#/widening_factor"),
        ({"widening_factor": "1.5"}, "#/widening_factor"),
        ({"widening_factor": None}, "#/widening_factor"),
        ({"reason": ""}, "#/reason"),
        ({"more": 1}, "#/more"),
    ],
)
def test_a_day_or_a_factor_that_is_none(
    app: Flask, callers: Callers, changes: dict[str, Any], pointer: str
) -> None:
    before = heads(app)
    answered = callers["max"].post(extension_of(STUDY), {**wish(), **changes})
    faults = problem(answered, 422, "invalid-request")["errors"]
    assert [fault["pointer"] for fault in faults] == [pointer]
    assert heads(app) == before


def test_the_last_day_is_as_far_again(callers: Callers) -> None:
    last = SERVES_UNTIL + (SERVES_UNTIL - date.fromisoformat(house.DONE_ON))
    done(callers["max"].post(extension_of(STUDY), wish(last)))


def test_a_day_that_is_over_extends_nothing(
    app: Flask, callers: Callers, monkeypatch: pytest.MonkeyPatch
) -> None:
    later(app, monkeypatch, UNTIL + timedelta(days=5))
    (fault,) = problem(callers["max"].post(extension_of(STUDY), wish()), 422, "invalid-request")["errors"]
    assert (fault["pointer"], fault["expected"]) == ("#/until", "a day to come")


@pytest.mark.parametrize("who", ["engineer", "mes", "auditor", "robot"])
def test_only_a_person_who_approves_extends(callers: Callers, who: str) -> None:
    problem(callers[who].post(extension_of(STUDY), wish()), 403, "forbidden")


def test_a_signature_that_does_not_match(callers: Callers) -> None:
    wrong = {"signature": {"password": "not the password"}}
    problem(callers["max"].post(extension_of(STUDY), {**wish(), **wrong}), 403, "forbidden")


def test_nobody_extends_their_own_work(callers: Callers) -> None:
    """Ada is engineer and approver: she recorded a study, and drafted a version."""
    done(callers["ada"].post("/v1/studies", {**house.agreement_study(), "code": "of-ada"}))
    document = example(documents.BudgetDocument)
    for place in (document["model"]["quantities"]["bias"], *document["components"][1:3]):
        place["evidence"]["study"] = "of-ada"
    done(callers["engineer"].post(f"/v1/budgets/{BUDGET}/versions", document))
    one = f"/v1/budgets/{BUDGET}/versions/2"
    done(callers["ada"].post(f"{one}/submit"), 200)
    done(callers["max"].post(f"{one}/approve", signed()), 200)
    for study in ("of-ada", "wmp-rep-2026-01"):
        problem(callers["ada"].post(extension_of(study), wish()), 403, "forbidden")
    done(callers["max"].post(extension_of("of-ada"), wish()))


def test_a_study_that_no_budget_uses(callers: Callers) -> None:
    problem(callers["max"].post(extension_of("no-study"), wish()), 404, "not-found")
    # Taken out of the validation, and by that in no budget.
    problem(callers["max"].post(extension_of("wmp-dup-2026-01"), wish()), 409, "nothing-in-force")


# --- budgets that do not bear it -----------------------------------------------------------------------


def test_a_factor_that_leaves_no_acceptance_is_refused(app: Flask, callers: Callers) -> None:
    two_sided = house.specification("narrow", 3.2)
    two_sided["requires"][0]["lower_tolerance_limit"] = {"value": 2.6, "unit": "%", "inclusive": True}
    house.put_in_force(callers["engineer"], callers["max"], "specifications", two_sided)
    before = heads(app)
    answered = callers["max"].post(extension_of(STUDY), wish(factor=9))
    (fault,) = problem(answered, 422, "invalid-request")["errors"]
    assert fault["pointer"] == "#/widening_factor"
    assert fault["detail"].startswith(f"budget {BUDGET}: narrow (version 1")
    assert heads(app) == before


def test_a_factor_that_would_accept_more_is_refused(callers: Callers) -> None:
    """The trueness, by far the largest part, has three degrees of freedom: k falls faster than u rises.

    By hand, one-sided 5 %: u 0.308, nu 3.3, k u = 0.697; with 1.2 times the study's u 0.311, 3.5, 0.695.
    """
    document = example(documents.BudgetDocument)
    document["components"][-1]["evidence"] = declared(0.3, reliability=0.408)
    done(callers["engineer"].post(f"/v1/budgets/{BUDGET}/versions", document))
    done(callers["engineer"].post(f"/v1/budgets/{BUDGET}/versions/2/submit"), 200)
    done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/2/approve", signed()), 200)
    answered = callers["max"].post(extension_of(STUDY), wish(factor=1.2))
    faults = problem(answered, 422, "invalid-request")["errors"]
    assert {fault["pointer"] for fault in faults} == {"#/widening_factor"}
    assert all("would accept more than before" in fault["detail"] for fault in faults)
    done(callers["max"].post(extension_of(STUDY), wish(factor=4)))


def with_laboratory(callers: Callers) -> Caller:
    """Have a budget in force that takes the trueness of the laboratory by reference."""
    engineer = callers["engineer"]
    put(engineer, trueness=declared(0.08))
    document = example(documents.BudgetDocument)
    document["components"][-1]["evidence"] = of_laboratory("trueness")
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions", document))
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions/2/submit"), 200)
    done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/2/approve", signed()), 200)
    return engineer


@pytest.mark.parametrize("value", [0.02, 0.08])
def test_nothing_else_comes_in_with_an_extension(app: Flask, callers: Callers, value: float) -> None:
    engineer = with_laboratory(callers)
    soon = house.TODAY + timedelta(days=400)
    put(engineer, trueness=declared(value, serves_until=soon))
    before = heads(app)
    found = problem(callers["max"].post(extension_of(STUDY), wish()), 409, "evidence-changed")
    assert "trueness of site-lab is another one" in found["detail"]
    assert heads(app) == before
    # As it was, under a further revision, it changes nothing.
    put(engineer, trueness=declared(0.08))
    done(callers["max"].post(extension_of(STUDY), wish()))


def between_laboratories(engineer: Caller) -> None:
    shifts = (0.06, -0.05, 0.02, -0.07, 0.04, 0.01, -0.03, 0.02)
    rows = [
        [f"L{number}", round(3 + shift + again / 100, 3)]
        for number, shift in enumerate(shifts)
        for again in (0, 1)
    ]
    study = {
        **house.duplicates_study(),
        "code": "ring",
        "design": "nested_precision",
        "laboratory": None,
        "columns": ["laboratory", "reading"],
        "rows": rows,
    }
    done(engineer.post("/v1/studies", study))


def test_a_study_behind_a_laboratory_is_extended_through_its_entry(app: Flask, callers: Callers) -> None:
    engineer = callers["engineer"]
    between_laboratories(engineer)
    put(engineer, trueness={"study": "ring", "estimate": "between_laboratories"})
    document = example(documents.BudgetDocument)
    document["components"][-1]["evidence"] = of_laboratory("trueness")
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions", document))
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions/2/submit"), 200)
    done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/2/approve", signed()), 200)
    was = lines(callers, 2)
    done(callers["max"].post(extension_of("ring"), wish(factor=2)))
    becomes = lines(callers, 3)
    for code, line in becomes.items():
        factor = 2 if code == "reference-trueness" else 1
        assert math.isclose(line["standard_uncertainty"], factor * was[code]["standard_uncertainty"])
    assert becomes["reference-trueness"]["laboratory"]["serves_until"] == UNTIL.isoformat()
    assert [item["study"] for item in limits(callers)[0][0]["extensions"]] == ["ring"]
    assert verify_record(app.extensions["shoalmark"].database).whole


def test_a_derived_characteristic_is_extended(at_start: Callers) -> None:
    engineer, approver = at_start["engineer"], at_start["max"]
    for path, document in plant.master_data():
        done(engineer.put(path, document))
    for study in plant.studies():
        done(engineer.post("/v1/studies", study))
    for document in plant.specifications():
        house.put_in_force(engineer, approver, "specifications", document)
    house.put_in_force(engineer, approver, "budgets", plant.derived_budget())
    path = f"/v1/acceptance-limits/{plant.PRODUCT}/{plant.DERIVED}"
    (before,) = [item for item in done(engineer.get(path), 200)["items"] if item["planned"]]
    serves_until = date.fromisoformat(
        done(engineer.get("/v1/studies/pair-cov"), 200)["study"]["serves_until"]
    )
    done(approver.post(extension_of("pair-cov"), wish(serves_until + timedelta(days=30), 1.3)))
    (after,) = [item for item in done(engineer.get(path), 200)["items"] if item["planned"]]
    ratio = after["largest_standard_uncertainty"] / before["largest_standard_uncertainty"]
    assert 1 < ratio < 1.3


def test_items_are_judged_more_cautiously_too(callers: Callers) -> None:
    engineer = callers["engineer"]
    document = example(documents.BudgetDocument)
    document["procedure"]["samples"] = {"least": 2, "plan": 3, "most": 3}
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions", document))
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions/2/submit"), 200)
    done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/2/approve", signed()), 200)
    items = house.specification("items", 5.0)
    items["requires"][0] |= {"judged": "item", "item_share": 0.9, "item_spread": "from_lot"}
    house.put_in_force(engineer, callers["max"], "specifications", items)

    def limit() -> float:
        request = house.decision("items", (2.7, 2.74, 2.8, 2.78, 2.66, 2.7), specifications=["items"])
        for number, reading in enumerate(request["readings"]):
            reading["sample"] = str(number // 2 + 1)
        (verdict,) = done(callers["mes"].post("/v1/decisions/preview", request), 200)["verdicts"]
        found: float = verdict["upper_acceptance_limit"]
        return found

    before = limit()
    done(callers["max"].post(extension_of(STUDY), wish(factor=2)))
    assert limit() < before


# --- the record ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE study_extensions SET document = replace(document, '1.5', '1.1')",
        "DELETE FROM study_extensions",
        "UPDATE versions SET state = 'in_force' WHERE version = 1 AND kind = 'budget'",
        "DELETE FROM versions WHERE version = 2 AND kind = 'budget'",
    ],
)
def test_an_altered_extension_is_found(app: Flask, callers: Callers, statement: str) -> None:
    done(callers["max"].post(extension_of(STUDY), wish()))
    database = app.extensions["shoalmark"].database
    assert verify_record(database).whole
    if "study_extensions" in statement:
        drop_triggers(database.url, "study_extensions")
    else:
        execute(database.url, "DROP INDEX uq_versions_in_force")
    execute(database.url, statement)
    found = verify_record(database).finding
    assert found is not None
