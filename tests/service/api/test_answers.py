"""Real answers fit the forms in openapi.yaml, and the examples there fit the forms of requests."""

from __future__ import annotations

from typing import Any

import pytest
from flask import Flask
from openapi_schema_validator import OAS31Validator

from service import documents
from service.api import openapi_document
from service.schemas import SCHEMAS, dump, load
from service.schemas.examples import EXAMPLES
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done, example


@pytest.fixture
def check(app: Flask) -> Any:
    components = openapi_document(app)["components"]

    def errors(name: str, instance: Any) -> list[str]:
        schema = {"$ref": f"#/components/schemas/{name}", "components": components}
        return [error.message for error in OAS31Validator(schema).iter_errors(instance)]

    return errors


def form_name(kind: type[Any]) -> str:
    return type(SCHEMAS[kind]).__name__.removesuffix("Schema")


def test_examples_and_what_is_kept_of_them_fit_their_form(check: Any) -> None:
    for kind, document in EXAMPLES.items():
        assert check(form_name(kind), document) == [], kind
        if "signature" not in document:
            assert check(form_name(kind), dump(load(kind, document))) == [], kind


def test_the_forms_refuse_what_the_service_refuses(check: Any) -> None:
    wrong = decision()
    wrong["readings"][0]["values"]["moisture"] = "3.1"
    assert check("DecisionRequest", wrong)
    assert check("DecisionRequest", decision(lot=""))
    assert check("DecisionRequest", {**decision(), "colour": "white"})
    assert check("DecisionRequest", decision(line="Tower 1"))
    unsupported = house.specification("new-one", 3.0)
    unsupported["requires"][0]["decision_rule"]["prior"] = {"mean": 3}
    assert check("Specification", unsupported)


def test_answers_fit_their_forms(callers: Callers, check: Any) -> None:
    mes, engineer = callers["mes"], callers["engineer"]
    for number, moisture in enumerate([(2.7, 2.7), (3.2, 3.22), (3.6, 3.6), (6.0, 6.0)]):
        judged = done(mes.post("/v1/decisions", decision(f"lot {number}", moisture=moisture)))
        assert check("Decision", judged) == []
    preview = done(mes.post("/v1/decisions/preview", decision("preview")), 200)
    assert check("DecisionPreview", preview) == []
    study = house.repeatability_study(code="another-study")
    assert check("StudyAnswer", done(engineer.post("/v1/studies/preview", study), 200)) == []
    assert check("StudyAnswer", done(engineer.post("/v1/studies", study))) == []
    document = house.specification("new-one", 3.0)
    assert check("SpecificationVersion", done(engineer.post("/v1/specifications", document))) == []
    plant = done(engineer.post("/v1/plant/versions", example(documents.Plant)))
    assert check("PlantVersion", plant) == []
    assert check("LotPage", done(mes.get("/v1/lots"), 200)) == []


def test_answers_about_set_points_fit_their_forms(callers: Callers, check: Any) -> None:
    mes, engineer = callers["mes"], callers["engineer"]
    done(mes.post("/v1/decisions", decision()))
    asked = example(documents.SetPointRequest)
    for body in (asked, {**asked, "money": None, "wanted_set_point": None}):
        assert check("SetPoints", done(engineer.post("/v1/set-points", body), 200)) == []
    options = example(documents.ImprovementsRequest)
    options["options"].append({"code": "correct", "kind": "corrected_bias"})
    assert check("Improvements", done(engineer.post("/v1/improvements", options), 200)) == []
    given = {"production": asked}
    assert check("Giveaway", done(engineer.post("/v1/giveaway", given), 200)) == []


def test_problems_fit_their_form(callers: Callers, check: Any) -> None:
    for response in (
        callers["mes"].post("/v1/decisions", {}),
        callers["mes"].post("/v1/specifications", house.specification("x", 3.0)),
        callers["nobody"].get("/v1/lots"),
        callers["mes"].get("/v1/nothing"),
        callers["mes"].send("PATCH", "/v1/lots"),
    ):
        assert response.status_code >= 400
        assert check("Problem", response.get_json()) == []
