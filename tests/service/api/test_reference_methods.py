"""Evidence by another reference method than a specification requires is refused, whichever comes first."""

from __future__ import annotations

from typing import Any

import pytest

from service import documents
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import Caller, done, example
from tests.service.api.test_bad_input import problem

BUDGET = "wmp-moisture-nir"
OTHER = "ISO 22662"


def requiring(method: str | None, code: str = "customer-c") -> dict[str, Any]:
    document = house.specification(code, 4.0)
    document["requires"][0]["method"] = method
    return document


def submitted(engineer: Caller, kind: str, document: dict[str, Any], version: int = 1) -> Any:
    path = f"/v1/{kind}" if version == 1 else f"/v1/{kind}/{document['code']}/versions"
    done(engineer.post(path, document))
    return engineer.post(f"/v1/{kind}/{document['code']}/versions/{version}/submit")


def a_budget_on(engineer: Caller, **changes: Any) -> dict[str, Any]:
    """Record a further validation, and give a budget that rests on it."""
    study = {**house.agreement_study(), "code": "wmp-val-b", **changes}
    done(engineer.post("/v1/studies", study))
    document = example(documents.BudgetDocument)
    document["model"]["quantities"]["bias"]["evidence"]["study"] = "wmp-val-b"
    for line in document["components"]:
        if line["evidence"].get("study") == "wmp-val-2026-01":
            line["evidence"]["study"] = "wmp-val-b"
    return document


def change_method(engineer: Caller, method: str) -> None:
    found = engineer.get("/v1/laboratories/site-lab")
    document = done(found, 200)
    document["methods"]["moisture"]["method"] = method
    done(engineer.put("/v1/laboratories/site-lab", document, If_Match=found.headers["ETag"]), 200)


@pytest.mark.parametrize("method", ["ISO 5537", "iso  5537", None])
def test_the_same_method_is_accepted(callers: Callers, method: str | None) -> None:
    house.put_in_force(callers["engineer"], callers["max"], "specifications", requiring(method))


def test_a_specification_by_another_method_is_not_served(callers: Callers) -> None:
    answered = submitted(callers["engineer"], "specifications", requiring(OTHER))
    (fault,) = problem(answered, 422, "invalid-request")["errors"]
    assert "wmp-val-2026-01 were found by 'ISO 5537'" in fault["detail"]
    assert OTHER in fault["expected"]
    # An edition is part of the method.
    answered = submitted(callers["engineer"], "specifications", requiring("ISO 5537:2004", "customer-d"))
    problem(answered, 422, "invalid-request")


def test_a_budget_by_another_method_does_not_serve(callers: Callers) -> None:
    engineer = callers["engineer"]
    change_method(engineer, OTHER)
    duplicates = {**house.duplicates_study(), "code": "wmp-dup-b"}
    done(engineer.post("/v1/studies", duplicates))
    sources = house.agreement_study()["named_sources"]
    sources[1]["evidence"]["study"] = "wmp-dup-b"
    document = a_budget_on(engineer, named_sources=sources)
    found = problem(submitted(engineer, "budgets", document, 2), 422, "invalid-request")
    # Both specifications in force require ISO 5537; the first of them is named.
    assert "wmp-val-b were found by 'ISO 22662'" in found["errors"][0]["detail"]


def test_what_a_study_was_measured_by_stays(callers: Callers) -> None:
    engineer = callers["engineer"]
    change_method(engineer, OTHER)
    recorded = done(engineer.get("/v1/studies/wmp-val-2026-01"), 200)["study"]
    assert recorded["reference_methods"] == {"moisture": "ISO 5537"}
    house.put_in_force(engineer, callers["max"], "specifications", requiring("ISO 5537"))
    # What the laboratory measures by now has to be the same as in what is taken out of the agreement.
    answered = engineer.post("/v1/studies", {**house.agreement_study(), "code": "wmp-val-c"})
    (fault,) = problem(answered, 422, "invalid-request")["errors"]
    assert fault["pointer"] == "#/named_sources/1/evidence/study"
    assert "'ISO 5537'" in fault["detail"]
    assert OTHER in fault["expected"]


def test_an_unknown_method_proves_nothing_about_the_one_required(callers: Callers) -> None:
    document = a_budget_on(callers["engineer"], laboratory=None)
    found = problem(submitted(callers["engineer"], "budgets", document, 2), 422, "invalid-request")
    assert "wmp-val-b names no laboratory, so nothing shows" in found["errors"][0]["detail"]


def test_a_laboratory_without_a_method_for_the_characteristic(callers: Callers) -> None:
    engineer = callers["engineer"]
    other = example(documents.Laboratory, code="far-lab")
    other["methods"] = {"fat": other["methods"].pop("moisture")}
    done(engineer.put("/v1/laboratories/far-lab", other))
    plain = {"laboratory": "far-lab", "named_sources": house.agreement_study()["named_sources"][:1]}
    document = a_budget_on(engineer, **plain)
    document["components"][1]["evidence"]["estimate"] = "standard_error_of_prediction"
    document["components"].pop(0)
    found = problem(submitted(engineer, "budgets", document, 2), 422, "invalid-request")
    assert "'far-lab' has no method for 'moisture'" in found["errors"][0]["detail"]


def test_a_source_of_another_laboratory_is_not_taken_out(callers: Callers) -> None:
    engineer = callers["engineer"]
    done(engineer.put("/v1/laboratories/far-lab", example(documents.Laboratory, code="far-lab")))
    answered = engineer.post(
        "/v1/studies", {**house.agreement_study(), "code": "wmp-val-c", "laboratory": "far-lab"}
    )
    (fault,) = problem(answered, 422, "invalid-request")["errors"]
    assert fault["detail"] == "wmp-dup-2026-01 was made in the laboratory 'site-lab'"


def test_a_stated_method_is_that_of_the_laboratory(callers: Callers) -> None:
    engineer = callers["engineer"]
    for methods in ({"moisture": OTHER}, {"fat": "ISO 5537"}):
        study = {**house.duplicates_study(), "code": "wmp-dup-b", "reference_methods": methods}
        (fault,) = problem(engineer.post("/v1/studies", study), 422, "invalid-request")["errors"]
        assert fault["pointer"] == f"#/reference_methods/{next(iter(methods))}"
    study = {**house.duplicates_study(), "code": "wmp-dup-b", "reference_methods": {"moisture": "iso 5537"}}
    assert done(engineer.post("/v1/studies", study))["study"]["reference_methods"] == {"moisture": "iso 5537"}
