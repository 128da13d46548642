"""A study renewed that others took out of their scatter: they are evaluated anew in the same act."""

from __future__ import annotations

import json
import random
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest
from flask import Flask

from service import documents
from service.demo import plant
from service.workflows import renewals
from service.workflows.ledger import verify_record
from tests.service.api import house
from tests.service.api.conftest import Callers, callers_of, open_app
from tests.service.api.house import Caller, done, example, signed
from tests.service.api.test_bad_input import heads, problem
from tests.service.api.test_laboratories import of_laboratory, put

REPEATABILITY, DUPLICATES, VALIDATION = "wmp-rep-2026-01", "wmp-dup-2026-01", "wmp-val-2026-01"
BUDGET = "wmp-moisture-nir"


def repeatability(**changes: Any) -> dict[str, Any]:
    draw = random.Random(31)
    rows = [
        [f"P{sample}", replicate, round(3 + sample / 50 + draw.gauss(0, 0.02), 4)]
        for sample in range(40)
        for replicate in (1, 2)
    ]
    return house.repeatability_study(**{"code": "rep-2", "rows": rows, **changes})


def duplicates(**changes: Any) -> dict[str, Any]:
    draw = random.Random(32)
    rows = [
        [f"D{sample}", again, round(3 + draw.gauss(0, 0.02), 4)] for sample in range(30) for again in (1, 2)
    ]
    return {**house.duplicates_study(), "code": "dup-2", "rows": rows, **changes}


def wish(study: str, **anew: str) -> dict[str, Any]:
    return {"study": study, "reason": "yearly study", "evaluated_anew": anew}


def renewals_of(code: str) -> str:
    return f"/v1/studies/{code}/replacements"


def recorded(engineer: Caller, code: str) -> dict[str, Any]:
    return done(engineer.get(f"/v1/studies/{code}"), 200)


def in_force(callers: Callers) -> dict[str, Any]:
    (found,) = done(callers["auditor"].get("/v1/budgets?state=in_force"), 200)["items"]
    document: dict[str, Any] = found["document"]
    return document


def on_validation(code: str) -> dict[str, Any]:
    """Make the budget on another validation."""
    text = json.dumps(example(documents.BudgetDocument)).replace(VALIDATION, code)
    document: dict[str, Any] = json.loads(text)
    return document


def studies_of(document: dict[str, Any]) -> set[str]:
    return {line["evidence"].get("study") for line in document["components"]} - {None}


def test_what_took_the_study_out_is_evaluated_anew(
    app: Flask, callers: Callers, empty_template: tuple[Path, dict[str, str]], tmp_path: Path
) -> None:
    engineer = callers["engineer"]
    done(engineer.post("/v1/studies", repeatability()))
    before = {head.chain: head.sequence for head in heads(app)}
    submitted = done(engineer.post(renewals_of(REPEATABILITY), wish("rep-2")))
    assert submitted["evaluated_anew"] == [{"study": VALIDATION, "becomes": f"{VALIDATION}-2"}]
    assert [(each["code"], each["version"]) for each in submitted["budgets"]] == [(BUDGET, 2)]
    (document,) = [each["document"] for each in submitted["budgets"]]
    assert studies_of(document) == {"rep-2", f"{VALIDATION}-2"}
    assert document["model"]["quantities"]["bias"]["evidence"]["study"] == f"{VALIDATION}-2"
    # One entry holds the study and the version.
    before["plant"] += 1
    assert {head.chain: head.sequence for head in heads(app)} == before

    was, becomes = recorded(engineer, VALIDATION), recorded(engineer, f"{VALIDATION}-2")
    for member in ("rows", "done_on", "serves_until", "laboratory", "reference_methods", "calibrations"):
        assert becomes["study"][member] == was["study"][member]
    # Just as if somebody had recorded it with the new source.
    by_hand = {**house.agreement_study(), "code": "by-hand"}
    by_hand["named_sources"][0]["evidence"]["study"] = "rep-2"
    evaluation = done(engineer.post("/v1/studies", by_hand))["evaluation"]
    assert str(becomes["evaluation"]).replace(f"{VALIDATION}-2", "by-hand") == str(evaluation)

    compared = done(callers["max"].get(f"{renewals_of(REPEATABILITY)}/rep-2"), 200)
    (anew,) = compared["evaluated_anew"]
    (remainder,) = [each for each in anew["estimates"] if each["name"] == "remainder"]
    # Less is taken out of the same scatter.
    assert remainder["becomes"]["standard_uncertainty"] > remainder["was"]["standard_uncertainty"]
    (budget,) = compared["budgets"]
    lines = {line["code"]: line for line in budget["components"] if line["changed"]}
    assert set(lines) == {"repeatability", "remainder", "bias"}
    # Of the bias nothing but the study is another: the pairs are the same.
    was_and_becomes = [lines["bias"][each]["contribution"] for each in ("was", "becomes")]
    assert was_and_becomes[0] == was_and_becomes[1]

    done(callers["max"].post(f"{renewals_of(REPEATABILITY)}/rep-2/approve", signed()), 200)
    assert in_force(callers) == document
    services = app.extensions["shoalmark"]
    assert verify_record(services.database).whole
    (verdict, *_) = done(callers["mes"].post("/v1/decisions", house.decision()))["verdicts"]
    assert verdict["budget"]["version"] == 2
    # After a restart everything stands as it stood.
    limits = "/v1/acceptance-limits/whole-milk-powder/moisture"
    stands = done(callers["mes"].get(limits), 200)
    services.close()
    again = open_app(tmp_path / "data")
    try:
        restarted = callers_of(again, empty_template[1])
        assert done(restarted["mes"].get(limits), 200) == stands
        assert recorded(restarted["engineer"], f"{VALIDATION}-2") == becomes
    finally:
        again.extensions["shoalmark"].close()


def test_a_study_that_is_only_taken_out_is_renewed_through_those_that_took_it(callers: Callers) -> None:
    engineer = callers["engineer"]
    done(engineer.post("/v1/studies", duplicates()))
    submitted = done(engineer.post(renewals_of(DUPLICATES), wish("dup-2", **{VALIDATION: "val-again"})))
    assert submitted["evaluated_anew"] == [{"study": VALIDATION, "becomes": "val-again"}]
    done(callers["max"].post(f"{renewals_of(DUPLICATES)}/dup-2/approve", signed()), 200)
    assert studies_of(in_force(callers)) == {REPEATABILITY, "val-again"}
    found = engineer.post(renewals_of(DUPLICATES), wish("dup-2"))
    problem(found, 409, "nothing-in-force")


@pytest.mark.parametrize(
    ("anew", "pointer"),
    [
        ({VALIDATION: REPEATABILITY}, f"#/evaluated_anew/{VALIDATION}"),
        ({REPEATABILITY: "rep-3"}, f"#/evaluated_anew/{REPEATABILITY}"),
        ({VALIDATION: "Val 2"}, f"#/evaluated_anew/{VALIDATION}"),
    ],
)
def test_codes_are_new_and_of_what_is_evaluated_anew(
    app: Flask, callers: Callers, anew: dict[str, str], pointer: str
) -> None:
    done(callers["engineer"].post("/v1/studies", duplicates()))
    before = heads(app)
    answered = callers["engineer"].post(renewals_of(DUPLICATES), wish("dup-2", **anew))
    (fault,) = problem(answered, 422, "invalid-request")["errors"]
    assert fault["pointer"] == pointer
    assert heads(app) == before


def test_a_study_that_cannot_be_taken_out_refuses_the_renewal(app: Flask, callers: Callers) -> None:
    engineer = callers["engineer"]
    done(engineer.put("/v1/laboratories/far-lab", example(documents.Laboratory, code="far-lab")))
    done(engineer.post("/v1/studies", duplicates(laboratory="far-lab")))
    before = heads(app)
    answered = engineer.post(renewals_of(DUPLICATES), wish("dup-2"))
    (fault,) = problem(answered, 422, "invalid-request")["errors"]
    assert fault["pointer"] == "#/study"
    assert f"study {VALIDATION}: named_sources/1/evidence/study: dup-2 was made in" in fault["detail"]
    assert heads(app) == before


def test_a_chain_of_studies_is_evaluated_from_its_beginning(callers: Callers) -> None:
    """The stream takes the repeatability out, the validation both the repeatability and the stream."""
    engineer = callers["engineer"]
    source = {"study": REPEATABILITY, "estimate": "repeatability"}
    stream = house.a_study(
        code="stream",
        design="process_stream",
        columns=["position", "reading"],
        rows=[
            [float(row["position"]), float(row["reading"])] for row in plant.rows_of("moisture-stream.csv")
        ],
        options=dict(plant.INCREMENTS),
        named_sources=[{"source": "analyzer_repeatability", "evidence": source}],
    )
    estimate = done(engineer.post("/v1/studies", stream))["evaluation"]["estimates"][0]["name"]
    validation = {**house.agreement_study(), "code": "val-3"}
    subsampling = {"study": "stream", "estimate": estimate}
    validation["named_sources"].append({"source": "subsampling", "evidence": subsampling})
    done(engineer.post("/v1/studies", validation))
    document = on_validation("val-3")
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions", document))
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions/2/submit"), 200)
    done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/2/approve", signed()), 200)

    done(engineer.post("/v1/studies", repeatability()))
    submitted = done(engineer.post(renewals_of(REPEATABILITY), wish("rep-2")))
    assert submitted["evaluated_anew"] == [
        {"study": "stream", "becomes": "stream-2"},
        {"study": "val-3", "becomes": "val-3-2"},
    ]
    sources = recorded(engineer, "val-3-2")["study"]["named_sources"]
    assert [item["evidence"]["study"] for item in sources] == ["rep-2", DUPLICATES, "stream-2"]


def test_the_entry_of_a_laboratory_is_renewed_first(app: Flask, callers: Callers) -> None:
    engineer = callers["engineer"]
    put(engineer, repeatability={"study": DUPLICATES, "estimate": "repeatability"})
    validation = {**house.agreement_study(), "code": "val-3"}
    validation["named_sources"][1]["evidence"] = of_laboratory("repeatability")
    done(engineer.post("/v1/studies", validation))
    document = on_validation("val-3")
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions", document))
    done(engineer.post(f"/v1/budgets/{BUDGET}/versions/2/submit"), 200)
    done(callers["max"].post(f"/v1/budgets/{BUDGET}/versions/2/approve", signed()), 200)
    done(engineer.post("/v1/studies", duplicates()))
    before = heads(app)
    answered = engineer.post(renewals_of(DUPLICATES), wish("dup-2"))
    (fault,) = problem(answered, 422, "invalid-request")["errors"]
    assert f"the repeatability of site-lab rests on {DUPLICATES!r} still" in fault["detail"]
    assert heads(app) == before
    put(engineer, repeatability={"study": "dup-2", "estimate": "repeatability"})
    submitted = done(engineer.post(renewals_of(DUPLICATES), wish("dup-2")))
    assert submitted["evaluated_anew"] == [{"study": "val-3", "becomes": "val-3-2"}]
    (taken,) = recorded(engineer, "val-3-2")["evaluation"]["diagnostics"]["laboratory_components"]
    assert (taken["study"], taken["revision"]) == ("dup-2", 3)


def test_what_was_extended_stays_extended(app: Flask, callers: Callers) -> None:
    """Its data are no younger, and a second extension of them is none."""
    until = (house.TODAY + timedelta(days=400)).isoformat()
    extension = {"until": until, "widening_factor": 1.5, **signed()}
    done(callers["max"].post(f"/v1/studies/{VALIDATION}/extension", extension))
    done(callers["engineer"].post("/v1/studies", repeatability()))
    done(callers["engineer"].post(renewals_of(REPEATABILITY), wish("rep-2")))
    done(callers["max"].post(f"{renewals_of(REPEATABILITY)}/rep-2/approve", signed()), 200)
    assert recorded(callers["engineer"], f"{VALIDATION}-2")["extension"]["widening_factor"] == 1.5
    shown = done(callers["auditor"].get(f"/v1/budgets/{BUDGET}/versions/3/evaluation"), 200)
    assert [item["study"] for item in shown["extensions"]] == [f"{VALIDATION}-2"]
    again = callers["max"].post(f"/v1/studies/{VALIDATION}-2/extension", extension)
    problem(again, 409, "already-extended")
    assert verify_record(app.extensions["shoalmark"].database).whole


def test_it_is_recorded_once(app: Flask, callers: Callers) -> None:
    done(callers["engineer"].post("/v1/studies", repeatability()))
    key = house.fresh_key()
    first = done(callers["engineer"].post(renewals_of(REPEATABILITY), wish("rep-2"), key=key))
    done(callers["max"].post(f"{renewals_of(REPEATABILITY)}/rep-2/approve", signed()), 200)
    before = heads(app)
    again = callers["engineer"].post(renewals_of(REPEATABILITY), wish("rep-2"), key=key)
    assert (done(again), again.headers["Recorded-Earlier"]) == (first, "true")
    assert heads(app) == before


def test_budgets_that_changed_meanwhile_refuse_it(
    app: Flask, callers: Callers, monkeypatch: pytest.MonkeyPatch
) -> None:
    done(callers["engineer"].post("/v1/studies", repeatability()))
    before = heads(app)
    # As if no budget had rested on the validation when studies were evaluated.
    monkeypatch.setattr(renewals, "_evaluated_anew", lambda *_: ())
    problem(callers["engineer"].post(renewals_of(REPEATABILITY), wish("rep-2")), 503, "unavailable")
    assert heads(app) == before
