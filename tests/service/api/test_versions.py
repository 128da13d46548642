"""Versioned documents: drafted, replaced, submitted, approved by another person, superseded, withdrawn."""

from __future__ import annotations

import json
from typing import Any

import pytest

from service import documents
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import done, example, signed
from tests.service.api.test_bad_input import problem

KINDS: list[tuple[str, dict[str, Any]]] = [
    ("/v1/specifications/new-one", house.specification("new-one", 3.1)),
    ("/v1/budgets/new-one", example(documents.BudgetDocument, code="new-one")),
    ("/v1/plant", example(documents.Plant)),
]


def drafted(callers: Callers, path: str, document: dict[str, Any]) -> dict[str, Any]:
    collection = "/v1/plant/versions" if path == "/v1/plant" else path.rsplit("/", 1)[0]
    return done(callers["engineer"].post(collection, document))


@pytest.mark.parametrize(("path", "document"), KINDS, ids=["specification", "budget", "plant"])
def test_a_draft_is_replaced_submitted_returned_and_withdrawn(
    callers: Callers, path: str, document: dict[str, Any]
) -> None:
    engineer, approver = callers["engineer"], callers["max"]
    # Only one budget may serve an analyzer: the one in force makes way.
    done(approver.post("/v1/budgets/wmp-moisture-nir/versions/1/withdraw", signed()), 200)
    draft = drafted(callers, path, document)
    assert (draft["version"], draft["state"], draft["revision"]) == (1, "draft", 1)
    one = f"{path}/versions/1"
    response = engineer.get(one)
    assert response.headers["ETag"] == '"1"'
    changed = {**document, "reason": "a better reason"}
    assert engineer.put(one, changed).status_code == 428
    assert engineer.put(one, changed, If_Match='"7"').status_code == 412
    assert engineer.put(one, changed, If_Match="*").status_code == 412
    replaced = engineer.put(one, changed, If_Match='"1"')
    assert done(replaced, 200)["document"]["reason"] == "a better reason"
    assert replaced.headers["ETag"] == '"2"'
    assert done(engineer.post(f"{one}/submit"), 200)["state"] == "submitted"
    late = engineer.put(one, document, If_Match='"3"')
    assert (late.status_code, late.get_json()["type"]) == (409, "/problems/not-in-this-state")
    assert done(approver.post(f"{one}/return", signed("more detail please")), 200)["state"] == "draft"
    assert done(callers["ada"].post(f"{one}/withdraw", signed("not needed")), 200)["state"] == "withdrawn"
    listed = done(engineer.get(f"{path}/versions?state=withdrawn"), 200)["items"]
    assert [item["version"] for item in listed] == [1]


def test_a_used_key_is_refused_for_another_body_also_where_that_body_stands(callers: Callers) -> None:
    engineer, key = callers["engineer"], house.fresh_key()
    drafted(callers, *KINDS[0])
    one = f"{KINDS[0][0]}/versions/1"
    better, best = ({**KINDS[0][1], "reason": reason} for reason in ("better", "best"))
    first = engineer.put(one, better, If_Match='"1"', Idempotency_Key=key)
    done(engineer.put(one, best, If_Match='"2"'), 200)
    response = engineer.put(one, best, Idempotency_Key=key)  # it stands, but the key is that of the first
    assert (response.status_code, response.get_json()["type"]) == (422, "/problems/idempotency-key-reused")
    again = engineer.put(one, better, Idempotency_Key=key)
    assert again.headers["Recorded-Earlier"] == "true"
    assert done(again, 200) == done(first, 200)


@pytest.mark.parametrize(
    ("collection", "document", "member", "other"),
    [
        ("budgets/wmp-moisture-nir", example(documents.BudgetDocument), "characteristic", "fat"),
        ("budgets/wmp-moisture-nir", example(documents.BudgetDocument), "product", "butter"),
        ("specifications/legal", house.specification("legal", 4.9), "product", "butter"),
    ],
)
def test_the_versions_of_a_code_are_about_one_thing(
    callers: Callers, collection: str, document: dict[str, Any], member: str, other: str
) -> None:
    engineer, path = callers["engineer"], f"/v1/{collection}/versions"
    done(
        engineer.put(
            "/v1/products/butter", example(documents.Product, code="butter", default_specifications=[])
        )
    )
    text = json.dumps(document)
    for before, after in ((f'"{document[member]}"', f'"{other}"'), (f"{document[member]} -", f"{other} -")):
        text = text.replace(before, after)  # a whole document about something else
    wrong = json.loads(text)
    drafted_wrong = engineer.post(path, wrong)
    done(engineer.post(path, document))
    for response in (drafted_wrong, engineer.put(f"{path}/2", wrong, If_Match='"1"')):
        assert response.status_code == 422
        fault = response.get_json()["errors"][0]
        assert (fault["pointer"], document[member] in fault["expected"]) == (f"#/{member}", True)


def test_an_approved_version_supersedes_the_one_before(callers: Callers) -> None:
    engineer, approver = callers["engineer"], callers["max"]
    second = done(engineer.post("/v1/specifications/legal/versions", house.specification("legal", 4.9)))
    assert second["version"] == 2
    assert callers["engineer"].post(
        "/v1/specifications/legal/versions", house.specification("legal", 4.8)
    ).get_json()["type"] == ("/problems/open-version-exists")
    two = "/v1/specifications/legal/versions/2"
    done(engineer.post(f"{two}/submit"), 200)
    approved = done(approver.post(f"{two}/approve", signed()), 200)
    assert (approved["state"], approved["approved_by"]) == ("in_force", "max")
    assert approved["in_force_from"]
    assert done(engineer.get("/v1/specifications/legal/versions/1"), 200)["state"] == "superseded"
    summary = done(engineer.get("/v1/specifications/legal"), 200)
    assert (summary["newest"], summary["in_force"]["version"], summary["open"]) == (2, 2, None)
    judged = done(callers["mes"].post("/v1/decisions", house.decision()))
    assert judged["verdicts"][0]["specification"] == {"code": "legal", "version": 2}
    assert judged["verdicts"][0]["upper_tolerance_limit"] == 4.9


def test_nobody_approves_alone(callers: Callers) -> None:
    path, document = KINDS[0]
    done(callers["ada"].post("/v1/specifications", document))
    one = f"{path}/versions/1"
    done(callers["ada"].post(f"{one}/submit"), 200)
    for name, words in (("ada", "another person"), ("robot", "machine"), ("engineer", "role")):
        response = callers[name].post(f"{one}/approve", signed())
        assert response.status_code == 403
        assert response.get_json()["type"] == "/problems/forbidden"
        assert words in response.get_json()["detail"]
    wrong = {"reason": "checked", "signature": {"password": "guessed once"}}
    response = callers["max"].post(f"{one}/approve", wrong)
    assert (response.status_code, "signature" in response.get_json()["detail"]) == (403, True)
    assert "guessed once" not in response.get_data(as_text=True)
    done(callers["max"].post(f"{one}/approve", signed()), 200)


def test_whoever_worked_on_a_version_before_another_does_not_approve_it(callers: Callers) -> None:
    path, document = KINDS[0]
    one = f"{path}/versions/1"
    done(callers["ada"].post("/v1/specifications", document))
    replaced = {**document, "reason": "a word changed"}
    done(callers["engineer"].put(one, replaced, If_Match='"1"'), 200)
    done(callers["engineer"].post(f"{one}/submit"), 200)
    response = callers["ada"].post(f"{one}/approve", signed())
    assert (response.status_code, "another person" in response.get_json()["detail"]) == (403, True)
    done(callers["max"].post(f"{one}/approve", signed()), 200)
    # The next version is another's work, which ada may approve.
    done(callers["engineer"].post(f"{path}/versions", replaced))
    done(callers["engineer"].post(f"{path}/versions/2/submit"), 200)
    done(callers["ada"].post(f"{path}/versions/2/approve", signed()), 200)


def test_an_act_on_a_version_may_insist_on_what_was_read(callers: Callers) -> None:
    path, document = KINDS[0]
    one = f"{path}/versions/1"
    drafted(callers, path, document)

    def send(name: str, act: str, body: Any, etag: str) -> int:
        headers = {"Idempotency-Key": house.fresh_key(), "If-Match": etag}
        return callers[name].send("POST", f"{one}/{act}", body, headers=headers).status_code

    assert [send("engineer", "submit", None, etag) for etag in ('"2"', '"1"')] == [412, 200]
    assert [send("max", "return", signed(), etag) for etag in ('"1"', '"2"')] == [412, 200]
    assert [send("engineer", "submit", None, etag) for etag in ('"2"', '"3"')] == [412, 200]
    assert [send("max", "approve", signed(), etag) for etag in ('"2"', '"4"')] == [412, 200]
    assert [send("max", "withdraw", signed(), etag) for etag in ('"4"', '"5"')] == [412, 200]


def test_a_code_can_be_named_as_soon_as_it_is_drafted(callers: Callers) -> None:
    path, document = KINDS[0]
    done(callers["mes"].post("/v1/decisions/preview", house.decision()), 200)  # the register is read
    drafted(callers, path, document)
    request = house.decision(specifications=["new-one"])
    answer = done(callers["mes"].post("/v1/decisions/preview", request), 200)
    assert [reason["code"] for reason in answer["reasons"]] == ["nothing-in-force"]


def test_evidence_covers_every_analyzer_of_the_budget(callers: Callers) -> None:
    engineer = callers["engineer"]
    second = example(documents.Analyzer, code="nir-2")
    done(engineer.put("/v1/analyzers/nir-2", second))
    calibration = example(documents.Calibration, code="wmp-7-2", analyzer="nir-2")
    done(engineer.put("/v1/analyzers/nir-2/calibrations/wmp-7-2", calibration))
    document = example(
        documents.BudgetDocument, code="both", calibrations={"nir-1": "wmp-7", "nir-2": "wmp-7-2"}
    )
    response = engineer.post("/v1/budgets", document)
    assert response.status_code == 422
    faults = {fault["pointer"]: fault["detail"] for fault in response.get_json()["errors"]}
    assert faults["#/components/0/evidence/study"] == "wmp-rep-2026-01 was made on nir-1"


@pytest.mark.parametrize(("quantity", "unit"), [("moisture", "kg"), ("bias", "g/kg")])
def test_quantities_of_the_model_have_the_unit_of_the_budget(
    callers: Callers, quantity: str, unit: str
) -> None:
    document = example(documents.BudgetDocument, code="new-one")
    document["model"]["quantities"][quantity]["unit"] = unit
    response = callers["engineer"].post("/v1/budgets", document)
    assert response.status_code == 422
    pointers = [fault["pointer"] for fault in response.get_json()["errors"]]
    assert pointers == [f"#/model/quantities/{quantity}/unit"]


def test_a_capability_index_is_no_condition_for_one_limit(callers: Callers) -> None:
    document = house.specification("new-one", 3.1)
    document["requires"][0]["decision_rule"] = {"kind": "simple", "least_capability_index": 2}
    response = callers["engineer"].post("/v1/specifications", document)
    assert response.status_code == 422
    pointers = [fault["pointer"] for fault in response.get_json()["errors"]]
    assert pointers == ["#/requires/0/decision_rule/least_capability_index"]


def test_a_validation_says_which_calibration_it_is_for(callers: Callers) -> None:
    engineer = callers["engineer"]
    study = {**house.agreement_study(), "code": "anywhere", "calibrations": {}}
    refused = engineer.post("/v1/studies", study)
    assert [fault["pointer"] for fault in refused.get_json()["errors"]] == [
        "#/named_sources/0/evidence/study"
    ]
    done(engineer.post("/v1/studies", {**study, "named_sources": study["named_sources"][1:]}))
    document = json.loads(
        json.dumps(example(documents.BudgetDocument, code="new-one")).replace("wmp-val-2026-01", "anywhere")
    )
    response = engineer.post("/v1/budgets", document)
    assert response.status_code == 422
    details = [fault["detail"] for fault in response.get_json()["errors"]]
    # The bias as a quantity of the model and as a component.
    assert details.count("anywhere does not say on which calibration it was made") == 2


@pytest.mark.parametrize("level", ["reading", "presentation", "session"])
def test_the_repeatability_of_a_laboratory_is_none_of_an_analyzer(callers: Callers, level: str) -> None:
    engineer = callers["engineer"]
    study = {**house.repeatability_study(code="of-the-oven"), "calibrations": {}, "laboratory": "site-lab"}
    done(engineer.post("/v1/studies", study))
    document = example(documents.BudgetDocument, code="new-one")
    document["components"][0]["evidence"] = {"study": "of-the-oven", "estimate": "repeatability"}
    document["components"][0]["level"] = level
    found = problem(engineer.post("/v1/budgets", document), 422, "invalid-request")
    assert [(fault["pointer"], fault["detail"]) for fault in found["errors"]] == [
        ("#/components/0/evidence/study", "of-the-oven does not say on which calibration it was made")
    ]


def test_a_repeated_approval_is_one_act_whatever_the_password(callers: Callers) -> None:
    path, document = KINDS[0]
    drafted(callers, path, document)
    one, key = f"{path}/versions/1", house.fresh_key()
    done(callers["engineer"].post(f"{one}/submit"), 200)
    first = callers["max"].post(f"{one}/approve", signed(), key=key)
    again = callers["max"].post(f"{one}/approve", signed(), key=key)
    assert (again.status_code, again.headers["Recorded-Earlier"]) == (200, "true")
    assert again.get_json() == first.get_json()
    other = callers["max"].post(f"{one}/approve", signed("another reason"), key=key)
    assert other.get_json()["type"] == "/problems/idempotency-key-reused"


def test_a_plant_speaks_of_designs_that_there_are(callers: Callers) -> None:
    days = {"repeatability": 365, "agrement": 365}
    response = callers["engineer"].post("/v1/plant/versions", example(documents.Plant, serving_days=days))
    assert response.status_code == 422
    assert [fault["pointer"] for fault in response.get_json()["errors"]] == ["#/serving_days/agrement"]


def test_a_code_is_given_once(callers: Callers) -> None:
    response = callers["engineer"].post("/v1/specifications", house.specification("legal", 4.0))
    document = response.get_json()
    assert (response.status_code, document["type"]) == (409, "/problems/already-exists")
    assert document["link"] == "/v1/specifications/legal"
    response = callers["engineer"].post("/v1/studies", house.repeatability_study())
    assert (response.status_code, response.get_json()["type"]) == (409, "/problems/already-exists")


def test_a_document_belongs_to_the_code_in_its_path(callers: Callers) -> None:
    response = callers["engineer"].post(
        "/v1/specifications/legal/versions", house.specification("other", 4.0)
    )
    assert response.status_code == 422
    assert [fault["pointer"] for fault in response.get_json()["errors"]] == ["#/code"]


@pytest.mark.parametrize(
    "path",
    [
        "/v1/specifications/nothing",
        "/v1/specifications/nothing/versions",
        "/v1/specifications/legal/versions/9",
        "/v1/specifications/legal/versions/0",
        "/v1/specifications/legal/versions/01",
        "/v1/specifications/legal/versions/99999999999999999999",
        "/v1/specifications/LEGAL",
        "/v1/plant/versions/1",
        "/v1/budgets/nothing/versions/1/evaluation",
    ],
)
def test_what_is_not_there_is_a_404(callers: Callers, path: str) -> None:
    response = callers["engineer"].get(path)
    assert (response.status_code, response.content_type) == (404, "application/problem+json")
    # A path that no resource can have says so; a resource that is not there has a type of its own.
    assert response.get_json()["type"] in ("/problems/not-found", "about:blank")


def test_a_budget_shows_its_figures(callers: Callers) -> None:
    figures = done(callers["engineer"].get("/v1/budgets/wmp-moisture-nir/versions/1/evaluation"), 200)
    parts = figures["components"]
    assert {part["code"] for part in parts} == {"repeatability", "remainder", "bias", "reference-trueness"}
    # The law of propagation for independent input quantities: JCGM 100:2008, 5.1.2, eq. (10) (from memory).
    variance = sum(part["contribution"] ** 2 for part in parts)
    assert figures["combined_standard_uncertainty"] ** 2 == pytest.approx(variance)
    assert sum(part["share_of_variance"] for part in parts) == pytest.approx(1)


def test_another_budget_for_the_same_analyzer_cannot_come_in_force(callers: Callers) -> None:
    path, document = KINDS[1]
    drafted(callers, path, document)
    response = callers["engineer"].post(f"{path}/versions/1/submit")
    assert (response.status_code, response.get_json()["type"]) == (409, "/problems/another-budget-in-force")
