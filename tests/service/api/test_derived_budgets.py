"""Drafts of a budget of three channels whose evidence is about something else: each names its fault."""

from __future__ import annotations

import copy
import math
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from budgets.components import Component
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.propagation import Counts, combined
from service.demo import plant
from service.documents import Bounds, BudgetDocument, Model
from service.schemas import load
from service.workflows.stored_budgets import assemble_budget, is_default_model
from tests.service.api.conftest import callers_of, copied, open_app
from tests.service.api.house import Caller, done, example

Change = Callable[[dict[str, Any]], object]


@pytest.fixture(scope="module")
def engineer(
    empty_template: tuple[Path, dict[str, str]], tmp_path_factory: pytest.TempPathFactory
) -> Iterator[Caller]:
    """Somebody in a plant with master data and studies; a draft that is refused leaves nothing behind."""
    app = open_app(copied(empty_template[0], tmp_path_factory.mktemp("derived")))
    caller = callers_of(app, empty_template[1])["engineer"]
    for path, document in plant.master_data():
        done(caller.put(path, document))
    for study in plant.studies():
        done(caller.post("/v1/studies", study))
    yield caller
    app.extensions["shoalmark"].close()


def faults_of(engineer: Caller, document: dict[str, Any]) -> dict[str, str]:
    response = engineer.post("/v1/budgets", document)
    assert response.status_code == 422, response.get_data(as_text=True)
    return {fault["pointer"]: fault["detail"] for fault in response.get_json()["errors"]}


def alone(code: str, quantity: str, level: str, study: str, estimate: str) -> dict[str, Any]:
    """Write a line of one quantity."""
    return {
        "code": code,
        "quantity": quantity,
        "level": level,
        "evidence": {"study": study, "estimate": estimate},
    }


def value_of_another_channel(document: dict[str, Any]) -> None:
    document["model"]["quantities"]["fat_bias"]["evidence"]["study"] = "moisture-pairs"


def swapped_channels(document: dict[str, Any]) -> None:
    document["components"][0]["quantities"] = {"moisture": "fat", "fat": "moisture", "protein": "protein"}


def repeatability_of_another_channel(document: dict[str, Any]) -> None:
    document["components"][0] = alone("r", "moisture", "reading", "fat-scans", "repeatability")


def one_channel_out_of_several(document: dict[str, Any]) -> None:
    document["components"][0] = alone("r", "moisture", "reading", "scan-cov", "repeatability_fat")


def a_column_that_is_none(document: dict[str, Any]) -> None:
    biases = {"moisture": "moisture_bias", "fat": "fat_bias", "protein": "protein_bias"}
    document["components"][2]["quantities"] = {**biases, "lactose": "fat_bias"}


def covered_by_repeatability(document: dict[str, Any]) -> None:
    """Make the scan's repeatability, drawn anew with each reading, stand for the biases."""
    document["components"][2].update(
        level="reading", evidence={"study": "scan-cov", "estimate": "repeatability_covariance"}
    )


def wide_range(document: dict[str, Any]) -> None:
    document["validated_ranges"]["moisture"] = {"lower": 0, "upper": 20}


def a_channel_left_out(document: dict[str, Any]) -> None:
    document["model"]["expression"] = "100 * (protein - protein_bias) / (73 - moisture - moisture_bias)"
    for name in ("fat", "fat_bias"):
        document["model"]["quantities"].pop(name)
    document["validated_ranges"].pop("fat")
    document["components"] = [alone("r", "moisture", "reading", "moisture-scans", "repeatability")]


def unused_quantities(document: dict[str, Any]) -> None:
    document["model"]["expression"] = "100 * (protein - protein_bias) / (100 - moisture - fat)"


def relative_to_something(document: dict[str, Any]) -> None:
    document["components"][3]["relative_to"] = "fat"


@pytest.mark.parametrize(
    ("change", "pointer", "words"),
    [
        (value_of_another_channel, "#/model/quantities/fat_bias/evidence/study", "'moisture'"),
        (swapped_channels, "#/components/0/quantities/moisture", "'fat'"),
        (repeatability_of_another_channel, "#/components/0/evidence", "about 'fat'"),
        (one_channel_out_of_several, "#/components/0/evidence", "about 'fat'"),
        (a_column_that_is_none, "#/components/2/quantities/lactose", "no column"),
        (covered_by_repeatability, "#/components", "no component holds the uncertainty of this very"),
        (wide_range, "#/validated_ranges/moisture", "pair-cov run from"),
        (a_channel_left_out, "#/model/quantities", "'fat' is not read"),
        (unused_quantities, "#/model/quantities/fat_bias", "does not use 'fat_bias'"),
        (relative_to_something, "#/components/3/relative_to", "not relative"),
    ],
)
def test_evidence_about_something_else_is_refused(
    engineer: Caller, change: Change, pointer: str, words: str
) -> None:
    document = copy.deepcopy(plant.derived_budget())
    change(document)
    assert words in faults_of(engineer, document)[pointer]


def test_a_model_that_curves_within_its_uncertainty_is_not_submitted(engineer: Caller) -> None:
    """The sum of the channels comes within its uncertainty of 100 %."""
    document = {**copy.deepcopy(plant.derived_budget()), "code": "curving"}
    figure = {"meaning": "standard_deviation", "value": 12, "unit": "%", "document": "a guess"}
    document["components"].append(
        {"code": "guess", "quantity": "moisture", "level": "lot", "evidence": {"declaration": figure}}
    )
    done(engineer.post("/v1/budgets", document))
    response = engineer.post("/v1/budgets/curving/versions/1/submit")
    assert response.status_code == 422, response.get_data(as_text=True)
    (fault,) = response.get_json()["errors"]
    assert fault["pointer"] == "#/validated_ranges" and "curves within" in fault["detail"]


def test_a_relative_figure_is_relative_to_a_quantity_in_its_own_unit(engineer: Caller) -> None:
    document = copy.deepcopy(plant.derived_budget())
    document["model"]["quantities"]["fat_bias"]["unit"] = "g/kg"
    figure = {"meaning": "relative", "figure": "standard_deviation", "value": 2, "unit": "%", "document": "x"}
    document["components"][3].update(relative_to="fat_bias", evidence={"declaration": figure})
    assert "g/kg" in faults_of(engineer, document)["#/components/3/relative_to"]


def test_ranges_of_quantities_belong_to_an_expression(engineer: Caller) -> None:
    document = {**plant.budget(), "validated_ranges": {"moisture": {"lower": 0, "upper": 90}}}
    assert "reading less its bias" in faults_of(engineer, document)["#/validated_ranges/moisture"]


def test_the_resolution_of_the_display_is_not_the_repeatability_that_was_taken_out(engineer: Caller) -> None:
    document = copy.deepcopy(plant.budget())
    figure = {"meaning": "resolution", "value": 0.001, "unit": "%", "document": "manual"}
    document["components"][0]["evidence"] = {"declaration": figure}
    assert "brings it back" in faults_of(engineer, document)["#/components/2"]


@pytest.mark.parametrize("expression", ["free-fat - bias", "free-fat-bias", " free-fat  -bias"])
def test_the_code_of_a_characteristic_may_hold_hyphens(expression: str) -> None:
    document = load(BudgetDocument, example(BudgetDocument))
    reading = document.model.quantities["moisture"]
    quantities = {"free-fat": reading, "bias": document.model.quantities["bias"]}
    model = replace(document.model, expression=expression, quantities=quantities)
    document = replace(document, characteristic="free-fat", model=model)
    assert is_default_model(document)
    components = [
        Component(code, quantity, level, (Term(1.0, MeanSquare(code, 0.01, 9)),), "A")
        for code, quantity, level in (("r", "free-fat", "reading"), ("b", "bias", "calibration"))
    ]
    budget = assemble_budget(document, components, {"bias": 0.1})
    assert (budget.model, budget.bias, budget.characteristic) == (None, 0.1, "free-fat")


def test_an_expression_names_a_channel_with_a_hyphen_in_quotes() -> None:
    document = load(BudgetDocument, example(BudgetDocument))
    reading = document.model.quantities["moisture"]
    model = Model("100 * protein / 'total-solids'", {"protein": reading, "total-solids": reading})
    ranges = {"protein": Bounds(20, 30), "total-solids": Bounds(90, 99)}
    document = replace(document, characteristic="dry-protein", model=model, validated_ranges=ranges)
    components = [
        Component(name, name, "reading", (Term(1.0, MeanSquare(name, 0.01, 9)),), "A")
        for name in ("protein", "total-solids")
    ]
    budget = assemble_budget(document, components, {})
    assert budget.model is not None
    assert budget.model.value({"protein": 24.0, "total-solids": 96.0}) == pytest.approx(25.0, rel=1e-15)
    law = combined(budget, Counts((1,)), estimates={"protein": 24.0, "total-solids": 96.0})
    expected = 0.1 * math.hypot(100 / 96, 100 * 24 / 96**2)
    assert law.standard_uncertainty == pytest.approx(expected, rel=1e-12)
