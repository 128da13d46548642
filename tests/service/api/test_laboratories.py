"""Laboratories: dated components, each about the laboratory itself, used by reference, kept as they were."""

from __future__ import annotations

import copy
from collections.abc import Callable
from datetime import date, timedelta
from typing import Any

import pytest
from flask import Flask

from service import documents
from service.workflows.calendar import DEFAULT_PLANT, lapse_instant
from service.workflows.ledger import verify_record
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import Caller, done, example, signed
from tests.service.api.test_bad_input import problem

LABORATORY = "/v1/laboratories/site-lab"
BUDGET = "wmp-moisture-nir"
STATED_ON = house.TODAY - timedelta(days=50)
SERVES_UNTIL = house.TODAY + timedelta(days=200)


def declared(value: float, *, serves_until: date | None = SERVES_UNTIL, **changes: Any) -> dict[str, Any]:
    figure = {"meaning": "standard_deviation", "value": value, "unit": "%", "document": "ring test 13"}
    evidence: dict[str, Any] = {"declaration": {**figure, "reliability": 0.25, **changes}}
    if serves_until is not None:
        evidence |= {"stated_on": STATED_ON.isoformat(), "serves_until": serves_until.isoformat()}
    return evidence


def put(engineer: Caller, status: int = 200, /, method: str = "ISO 5537", **components: Any) -> Any:
    """Put the laboratory with these components of its method for moisture."""
    found = engineer.get(LABORATORY)
    document = done(found, 200)
    document["methods"]["moisture"] = {"method": method, **components}
    answered = engineer.put(LABORATORY, document, If_Match=found.headers["ETag"])
    return done(answered, status) if status == 200 else problem(answered, status, "invalid-request")


@pytest.fixture
def engineer(callers: Callers) -> Caller:
    """Somebody in a plant whose laboratory has all components, each with its evidence and its dates."""
    engineer = callers["engineer"]
    of_study = {"study": "wmp-dup-2026-01", "estimate": "repeatability"}
    put(engineer, trueness=declared(0.08), repeatability=of_study, run=declared(0.02))
    return engineer


def of_laboratory(component: str, **changes: Any) -> dict[str, Any]:
    return {"laboratory": "site-lab", "component": component, "characteristic": None, **changes}


def budget(trueness: dict[str, Any], **changes: Any) -> dict[str, Any]:
    document = example(documents.BudgetDocument, **changes)
    document["components"][-1]["evidence"] = trueness
    return document


def validation(code: str = "wmp-val-b", **sources: dict[str, Any]) -> dict[str, Any]:
    document = {**house.agreement_study(), "code": code}
    for source, evidence in sources.items():
        named = [item for item in document["named_sources"] if item["source"] != source]
        document["named_sources"] = [*named, {"source": source, "evidence": evidence}]
    return document


def draft(engineer: Caller, document: dict[str, Any]) -> Any:
    return engineer.post(f"/v1/budgets/{BUDGET}/versions", document)


def in_force(callers: Callers, document: dict[str, Any], version: int) -> dict[str, Any]:
    done(draft(callers["engineer"], document))
    one = f"/v1/budgets/{BUDGET}/versions/{version}"
    done(callers["engineer"].post(f"{one}/submit"), 200)
    return done(callers["max"].post(f"{one}/approve", signed()), 200)


def limits(callers: Callers) -> tuple[dict[str, Any], str]:
    answered = callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/moisture")
    return done(answered, 200), answered.headers["ETag"]


# --- what a component may rest on ----------------------------------------------------------------------


def test_components_are_kept_with_their_evidence_and_dates(engineer: Caller) -> None:
    method = done(engineer.get(LABORATORY), 200)["methods"]["moisture"]
    assert method["trueness"]["serves_until"] == SERVES_UNTIL.isoformat()
    assert method["repeatability"] == {"study": "wmp-dup-2026-01", "estimate": "repeatability"}
    assert method["run"]["stated_on"] == STATED_ON.isoformat()


def elsewhere(engineer: Caller) -> dict[str, Any]:
    done(engineer.put("/v1/laboratories/far-lab", example(documents.Laboratory, code="far-lab")))
    return {**house.duplicates_study(), "laboratory": "far-lab"}


def of_fat(engineer: Caller) -> dict[str, Any]:
    return {**house.duplicates_study(), "characteristic": "fat"}


def on_the_analyzer(engineer: Caller) -> dict[str, Any]:
    return {**house.duplicates_study(), "calibrations": {"nir-1": "wmp-7"}}


def nowhere(engineer: Caller) -> dict[str, Any]:
    return {**house.duplicates_study(), "laboratory": None}


@pytest.mark.parametrize(
    ("study", "found"),
    [
        (elsewhere, "d was made in 'far-lab'"),
        (of_fat, "d is about 'fat'"),
        (on_the_analyzer, "d was made on nir-1"),
        (nowhere, "d was made in a laboratory that it does not name"),
    ],
)
def test_a_study_of_something_else_is_refused(
    callers: Callers, study: Callable[[Caller], dict[str, Any]], found: str
) -> None:
    engineer = callers["engineer"]
    done(engineer.post("/v1/studies", {**study(engineer), "code": "d"}))
    refused = put(engineer, 422, repeatability={"study": "d", "estimate": "repeatability"})
    assert [(fault["pointer"], fault["detail"]) for fault in refused["errors"]] == [
        ("#/methods/moisture/repeatability/study", found)
    ]


def test_a_study_by_another_method_is_refused(engineer: Caller) -> None:
    of_study = {"study": "wmp-dup-2026-01", "estimate": "repeatability"}
    (fault,) = put(engineer, 422, method="ISO 22662", repeatability=of_study)["errors"]
    assert fault["detail"] == "wmp-dup-2026-01 was made by 'ISO 5537'"


WRONG_KINDS = [
    ("repeatability", declared(0.3, meaning="reproducibility_limit"), "holds what laboratories differ by"),
    ("run", declared(0.3, meaning="reproducibility_limit"), "holds what laboratories differ by"),
    ("run", declared(0.3, meaning="repeatability_limit"), "holds the repeatability"),
    ("trueness", declared(0.3, meaning="repeatability_limit"), "says nothing of trueness"),
    ("trueness", {"study": "wmp-dup-2026-01", "estimate": "repeatability"}, "says nothing of trueness"),
    ("trueness", {"study": "checks", "estimate": "bias"}, "'bias' is a value"),
    ("run", {"study": "checks", "estimate": "intermediate_precision"}, "holds the repeatability"),
    ("repeatability", {"study": "checks", "estimate": "intermediate_precision"}, "holds session"),
]


@pytest.mark.parametrize(("component", "evidence", "found"), WRONG_KINDS)
def test_an_estimate_of_another_kind_is_refused(
    callers: Callers, component: str, evidence: dict[str, Any], found: str
) -> None:
    """What may be taken out of an agreement (mathematics.md, rule 1) is not what is added to it (rule 2)."""
    rows = [
        [f"day {day}", 3 + (-1) ** day * 0.02 + again / 100, 2.9] for day in range(12) for again in (0, 1)
    ]
    checks = {
        **house.duplicates_study(),
        "code": "checks",
        "design": "check_samples",
        "columns": ["session", "result", "assigned_value"],
        "rows": rows,
    }
    done(callers["engineer"].post("/v1/studies", checks))
    (fault,) = put(callers["engineer"], 422, **{component: evidence})["errors"]
    assert fault["pointer"] == f"#/methods/moisture/{component}/estimate"
    assert found in fault["detail"]


TOMORROW_BUT_ONE = (house.TODAY + timedelta(days=2)).isoformat()


@pytest.mark.parametrize(
    ("changes", "pointer"),
    [
        ({"stated_on": TOMORROW_BUT_ONE}, "stated_on"),
        ({"stated_on": SERVES_UNTIL.isoformat(), "serves_until": STATED_ON.isoformat()}, "serves_until"),
        ({"serves_until": "2099-01-01"}, "serves_until"),
        ({"serves_until": "soon"}, "serves_until"),
        ({"laboratory": "site-lab"}, "laboratory"),
    ],
)
def test_a_declaration_is_dated_soundly(callers: Callers, changes: dict[str, Any], pointer: str) -> None:
    (fault,) = put(callers["engineer"], 422, trueness={**declared(0.08), **changes})["errors"]
    assert fault["pointer"] == f"#/methods/moisture/trueness/{pointer}"


# --- by reference in a study ---------------------------------------------------------------------------


def test_a_study_takes_its_sources_from_the_laboratory(engineer: Caller) -> None:
    typed = done(engineer.post("/v1/studies", validation("wmp-val-a")))["evaluation"]
    referring = validation(reference_repeatability=of_laboratory("repeatability"))
    recorded = done(engineer.post("/v1/studies", referring))
    # The very same study stands behind both, so nothing but the codes of the own squares differs.
    own = str(recorded["evaluation"]["estimates"]).replace("wmp-val-b", "wmp-val-a")
    assert own == str(typed["estimates"])
    (taken,) = recorded["evaluation"]["diagnostics"]["laboratory_components"]
    assert (taken["code"], taken["component"], taken["revision"]) == ("site-lab", "repeatability", 2)
    assert (taken["method"], taken["study"]) == ("ISO 5537", "wmp-dup-2026-01")
    assert taken["entry"]["chain"] == "plant"
    # The laboratory goes on; what was taken stays.
    put(engineer, repeatability=declared(0.07))
    again = done(engineer.get("/v1/studies/wmp-val-b"), 200)
    assert again["evaluation"] == recorded["evaluation"]
    later = done(engineer.post("/v1/studies", {**referring, "code": "wmp-val-c"}))["evaluation"]
    (taken,) = later["diagnostics"]["laboratory_components"]
    assert (taken["revision"], taken["study"]) == (3, None)
    assert taken["standard_uncertainty"] == pytest.approx(0.07, rel=1e-12)


def test_runs_are_taken_out_by_reference(engineer: Caller) -> None:
    document = validation(reference_run=of_laboratory("run"))
    document["columns"][3] = "run"
    found = done(engineer.post("/v1/studies", document))["evaluation"]
    assert found["diagnostics"]["subtracted_sources"] == [
        "analyzer_repeatability",
        "reference_repeatability",
        "reference_run",
    ]
    assert [item["source"] for item in found["diagnostics"]["laboratory_components"]] == ["reference_run"]


@pytest.mark.parametrize(
    ("source", "evidence", "pointer"),
    [
        ("reference_repeatability", of_laboratory("trueness"), "/component"),
        ("reference_repeatability", of_laboratory("run"), "/component"),
        ("analyzer_repeatability", of_laboratory("repeatability"), ""),
        ("reference_repeatability", of_laboratory("repeatability", laboratory="far-lab"), "/laboratory"),
        ("reference_repeatability", of_laboratory("repeatability", characteristic="fat"), "/characteristic"),
        ("reference_repeatability", {"laboratory": "site-lab", "component": "bias"}, "/component"),
    ],
)
def test_a_source_that_the_laboratory_does_not_give_is_refused(
    engineer: Caller, source: str, evidence: dict[str, Any], pointer: str
) -> None:
    refused = problem(engineer.post("/v1/studies", validation(**{source: evidence})), 422, "invalid-request")
    assert [fault["pointer"] for fault in refused["errors"]] == [f"#/named_sources/1/evidence{pointer}"]


@pytest.mark.parametrize("source", ["reference_repeatability", "subsampling"])
def test_the_repeatability_of_the_analyzer_is_not_taken_out_under_another_name(
    engineer: Caller, source: str
) -> None:
    own = {"study": "wmp-rep-2026-01", "estimate": "repeatability"}
    refused = problem(engineer.post("/v1/studies", validation(**{source: own})), 422, "invalid-request")
    (fault,) = refused["errors"]
    assert fault["pointer"].startswith(("#/named_sources/1", "#/named_sources/2"))
    assert "was made on nir-1" in fault["detail"] or "holds repeatability" in fault["detail"]


def test_a_source_had_to_serve_when_the_study_was_made(engineer: Caller) -> None:
    put(engineer, repeatability=declared(0.04, serves_until=house.TODAY - timedelta(days=45)))
    document = validation(reference_repeatability=of_laboratory("repeatability"))
    (fault,) = problem(engineer.post("/v1/studies", document), 422, "invalid-request")["errors"]
    assert "served until" in fault["detail"]
    assert house.DONE_ON in fault["expected"]


# --- by reference in a budget --------------------------------------------------------------------------


def test_a_budget_takes_the_trueness_by_reference(app: Flask, callers: Callers, engineer: Caller) -> None:
    typed = in_force(callers, budget(declared(0.08)), 2)
    before = limits(callers)[0]["items"]
    approved = in_force(callers, budget(of_laboratory("trueness")), 3)
    after, etag = limits(callers)
    for item, other in zip(after["items"], before, strict=True):
        assert item["upper_acceptance_limit"] == other["upper_acceptance_limit"]
    assert approved["lapses_at"] == typed["lapses_at"] is not None
    shown = done(engineer.get(f"/v1/budgets/{BUDGET}/versions/3/evaluation"), 200)["components"][-1]
    assert shown["evidence"] == of_laboratory("trueness")
    assert (shown["laboratory"]["code"], shown["laboratory"]["revision"]) == ("site-lab", 2)
    assert shown["laboratory"]["standard_uncertainty"] == pytest.approx(0.08, rel=1e-12)
    # What the laboratory says later moves no limit until a version with it is approved.
    put(engineer, trueness=declared(0.16))
    assert limits(callers) == (after, etag)
    verdicts = done(callers["mes"].post("/v1/decisions", house.decision()))["verdicts"]
    (verdict,) = [each for each in verdicts if each["specification"] == before[0]["specification"]]
    assert verdict["budget"]["version"] == 3
    assert verdict["upper_acceptance_limit"] == before[0]["upper_acceptance_limit"]
    in_force(callers, budget(of_laboratory("trueness")), 4)
    assert limits(callers)[0]["items"][0]["upper_acceptance_limit"] < before[0]["upper_acceptance_limit"]
    compared = done(engineer.get(f"/v1/budgets/{BUDGET}/versions/4/comparison?against=3"), 200)
    assert [line["code"] for line in compared["components"] if line["changed"]] == ["reference-trueness"]
    assert verify_record(app.extensions["shoalmark"].database).whole


def test_what_is_not_dated_is_not_used_by_reference(engineer: Caller) -> None:
    for undated in (
        declared(0.08, serves_until=None),
        {**declared(0.08, serves_until=None), "stated_on": STATED_ON.isoformat()},
        {**declared(0.08, serves_until=None), "serves_until": SERVES_UNTIL.isoformat()},
    ):
        put(engineer, trueness=undated)
        refused = problem(draft(engineer, budget(of_laboratory("trueness"))), 422, "invalid-request")
        (fault,) = refused["errors"]
        assert fault["pointer"] == "#/components/3/evidence/component"
        assert "does not say how long" in fault["detail"]


@pytest.mark.parametrize("by_reference", [True, False])
def test_a_dated_figure_lapses_the_budget(callers: Callers, engineer: Caller, by_reference: bool) -> None:
    soon = house.TODAY + timedelta(days=20)
    put(engineer, trueness=declared(0.08, serves_until=soon))
    evidence = of_laboratory("trueness") if by_reference else declared(0.08, serves_until=soon)
    approved = in_force(callers, budget(evidence), 2)
    # The plant's default calendar (contracts.md, section 7): the lapse hour of that or the next working day.
    lapses_at = lapse_instant(soon, DEFAULT_PLANT)
    assert approved["lapses_at"] == lapses_at.strftime("%Y-%m-%dT%H:%M:%S.%fZ")
    answered = done(callers["mes"].post("/v1/decisions", house.decision()))
    assert [notice["code"] for notice in answered["notices"]] == ["evidence-lapses"]
    # What has lapsed already cannot be approved at all.
    past = house.TODAY - timedelta(days=10)
    put(engineer, trueness=declared(0.08, serves_until=past))
    evidence = of_laboratory("trueness") if by_reference else declared(0.08, serves_until=past)
    done(draft(engineer, budget(evidence)))
    found = engineer.post(f"/v1/budgets/{BUDGET}/versions/3/submit")
    problem(found, 409, "evidence-lapsed")


@pytest.mark.parametrize(
    ("evidence", "pointer"),
    [
        (of_laboratory("trueness", laboratory="no-lab"), "/evidence/laboratory"),
        (of_laboratory("trueness", laboratory="far-lab"), "/evidence/laboratory"),
        (of_laboratory("trueness", characteristic="fat"), "/evidence/characteristic"),
        (of_laboratory("trueness", characteristic="ash"), "/evidence/characteristic"),
        (of_laboratory("repeatability"), "/evidence/component"),
        (of_laboratory("run"), "/evidence/component"),
    ],
)
def test_a_budget_takes_no_other_thing_of_a_laboratory(
    engineer: Caller, evidence: dict[str, Any], pointer: str
) -> None:
    far = example(documents.Laboratory, code="far-lab")
    far["methods"]["moisture"]["trueness"] = declared(0.01)
    done(engineer.put("/v1/laboratories/far-lab", far))
    found = done(engineer.get(LABORATORY), 200)
    found["methods"]["fat"] = {"method": "weighing", "trueness": declared(0.01)}
    done(engineer.put(LABORATORY, found, If_Match='"2"'), 200)
    (fault,) = problem(draft(engineer, budget(evidence)), 422, "invalid-request")["errors"]
    assert fault["pointer"] == f"#/components/3{pointer}"


def test_the_trueness_belongs_to_the_method_of_the_validation(engineer: Caller) -> None:
    put(engineer, method="ISO 22662", trueness=declared(0.08))
    (fault,) = problem(draft(engineer, budget(of_laboratory("trueness"))), 422, "invalid-request")["errors"]
    assert fault["detail"] == ("site-lab measures by 'ISO 22662'; wmp-val-2026-01 was measured by 'ISO 5537'")


def test_trueness_stands_at_the_level_reference_and_is_no_value(engineer: Caller) -> None:
    document = budget(of_laboratory("trueness"))
    document["components"][-1]["level"] = "lot"
    (fault,) = problem(draft(engineer, document), 422, "invalid-request")["errors"]
    assert fault["pointer"] == "#/components/3/level"
    document = budget(of_laboratory("trueness"))
    document["model"]["quantities"]["bias"]["evidence"] = of_laboratory("trueness")
    faults = problem(draft(engineer, document), 422, "invalid-request")["errors"]
    assert "#/model/quantities/bias/evidence" in {fault["pointer"] for fault in faults}
    both = copy.deepcopy(budget({**of_laboratory("trueness"), "study": "wmp-dup-2026-01"}))
    (fault,) = problem(draft(engineer, both), 422, "invalid-request")["errors"]
    assert fault["detail"] == "got study and laboratory at once"
