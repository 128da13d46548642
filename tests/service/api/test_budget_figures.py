"""A budget explained, two versions compared, and drafts that claim more than their evidence shows."""

from __future__ import annotations

import math
import statistics
from typing import Any

import numpy as np
import pytest

from service import documents
from tests.service.api.conftest import Callers
from tests.service.api.house import done, example, signed

VERSIONS = "/v1/budgets/wmp-moisture-nir/versions"


def draft(callers: Callers, document: dict[str, Any]) -> None:
    done(callers["engineer"].post(VERSIONS, document))


def figures(callers: Callers, version: int = 1, query: str = "?specification=legal") -> dict[str, Any]:
    return done(callers["engineer"].get(f"{VERSIONS}/{version}/evaluation{query}"), 200)


def test_the_levels_add_up_to_the_variance(callers: Callers) -> None:
    found = figures(callers)
    variance = found["combined_standard_uncertainty"] ** 2
    assert math.fsum(level["variance"] for level in found["levels"]) == pytest.approx(variance, rel=1e-12)
    assert [level["level"] for level in found["levels"]] == ["reading", "lot", "calibration", "reference"]


def test_without_a_component_the_rest_is_left(callers: Callers) -> None:
    found = figures(callers)
    parts = {part["code"]: part for part in found["components"]}
    for code, part in parts.items():
        rest = math.fsum(other["contribution"] ** 2 for name, other in parts.items() if name != code)
        assert part["without"]["combined_standard_uncertainty"] == pytest.approx(math.sqrt(rest), rel=1e-12)
        half = rest + part["contribution"] ** 2 / 4
        assert part["halved"]["combined_standard_uncertainty"] == pytest.approx(math.sqrt(half), rel=1e-12)
    # The legal limit is an upper one: with less uncertainty more is accepted.
    accepted = found["acceptance_limits"]["upper"]
    assert parts["remainder"]["without"]["acceptance_limits"]["upper"] > accepted


def test_without_a_specification_there_are_no_limits(callers: Callers) -> None:
    found = figures(callers, query="")
    assert found["specification"] is None
    assert found["acceptance_limits"] is None


def test_a_specification_that_says_nothing_of_it_is_refused(callers: Callers) -> None:
    response = callers["engineer"].get(f"{VERSIONS}/1/evaluation?specification=nobody")
    assert response.status_code == 422
    assert response.get_json()["errors"][0]["parameter"] == "specification"


def test_two_versions_are_compared_line_by_line(callers: Callers) -> None:
    document = example(documents.BudgetDocument, reason="a better ring test")
    trueness = document["components"][3]["evidence"]["declaration"]
    trueness["value"] /= 2
    draft(callers, document)
    compared = done(callers["engineer"].get(f"{VERSIONS}/2/comparison?specification=legal"), 200)
    assert (compared["was"]["version"], compared["becomes"]["version"]) == (1, 2)
    assert [line["code"] for line in compared["components"] if line["changed"]] == ["reference-trueness"]
    (line,) = [line for line in compared["components"] if line["changed"]]
    assert line["becomes"]["contribution"] == pytest.approx(line["was"]["contribution"] / 2, rel=1e-12)
    moved = compared["becomes"]["acceptance_limits"]["upper"] - compared["was"]["acceptance_limits"]["upper"]
    # Only this line changed, so it alone moves the limit.
    assert line["moves_upper_limit_by"] == pytest.approx(moved, rel=1e-9)
    assert moved > 0
    assert [change["member"] for change in compared["document_changes"]] == ["reason"]


def test_a_version_is_compared_with_another_one_when_asked(callers: Callers) -> None:
    same = done(callers["engineer"].get(f"{VERSIONS}/1/comparison?against=1"), 200)
    assert not any(line["changed"] for line in same["components"])
    assert callers["engineer"].get(f"{VERSIONS}/1/comparison?against=0").status_code == 422
    assert callers["engineer"].get(f"{VERSIONS}/1/comparison?against=7").status_code == 404


def faults_of(callers: Callers, document: dict[str, Any]) -> dict[str, str]:
    response = callers["engineer"].post(VERSIONS, document)
    assert response.status_code == 422, response.get_data(as_text=True)
    return {fault["pointer"]: fault["detail"] for fault in response.get_json()["errors"]}


def test_a_range_beyond_all_reference_values_is_refused(callers: Callers) -> None:
    document = example(documents.BudgetDocument, validated_range={"lower": 0.1, "upper": 50})
    assert (
        "the reference values of wmp-val-2026-01 run from"
        in faults_of(callers, document)["#/validated_range"]
    )


def test_a_bias_without_the_trueness_of_its_laboratory_is_refused(callers: Callers) -> None:
    document = example(documents.BudgetDocument)
    document["components"] = document["components"][:3]
    assert "trueness of the laboratory" in faults_of(callers, document)["#/components"]


def test_a_stated_figure_names_the_document_it_was_taken_from(callers: Callers) -> None:
    document = example(documents.BudgetDocument)
    document["components"][3]["evidence"]["declaration"].pop("document")
    faults = faults_of(callers, document)
    assert faults == {"#/components/3/evidence/declaration/document": "is missing"}


@pytest.mark.parametrize(
    ("expression", "words"),
    [
        ("moisture - bias + __import__('os')", "expression"),
        ("moisture - bias.real", "expression"),
        ("(lambda: 1)() - bias", "expression"),
        ("moisture - bias - ash", "ash"),
        ("(" * 300 + "moisture" + ")" * 300 + " - bias", "expression"),
        ("moisture ** 9 ** 9 ** 9 - bias", ""),
        ("moisture[0] - bias", "expression"),
        ("moisture -", "expression"),
    ],
)
def test_an_expression_is_arithmetic_and_nothing_else(callers: Callers, expression: str, words: str) -> None:
    document = example(documents.BudgetDocument, validated_ranges={"moisture": {"lower": 1.5, "upper": 5.5}})
    document["model"]["expression"] = expression
    faults = faults_of(callers, document)
    assert any(place.startswith(("#/model", "#/components")) for place in faults), faults
    assert words in str(faults)


def test_correlations_that_cannot_hold_together_are_refused(callers: Callers) -> None:
    document = example(documents.BudgetDocument)
    document["correlations"] = [
        {
            "between": ["repeatability", "nobody"],
            "level": "reading",
            "coefficient": 0.5,
            "evidence": {"document": "a guess"},
        }
    ]
    faults = faults_of(callers, document)
    assert "no component 'nobody'" in str(faults)
    assert any(place.startswith("#/correlations/0") for place in faults)


def test_versions_are_compared_at_one_place_and_with_their_biases(callers: Callers) -> None:
    """A part proportional to the value: what a narrower range alone changes is not the uncertainty."""
    document = example(documents.BudgetDocument, reason="a proportional part")
    figure = {"meaning": "relative", "figure": "standard_deviation", "value": 2, "unit": "%", "document": "x"}
    document["components"].append(
        {"code": "sampling", "quantity": "moisture", "level": "sample", "evidence": {"declaration": figure}}
    )
    draft(callers, document)
    one = f"{VERSIONS}/2"
    done(callers["engineer"].post(f"{one}/submit"), 200)
    done(callers["max"].post(f"{one}/approve", signed()), 200)
    document |= {"validated_range": {"lower": 3.5, "upper": 5.5}, "reason": "a narrower range"}
    draft(callers, document)
    compared = done(callers["engineer"].get(f"{VERSIONS}/3/comparison?specification=legal"), 200)
    was, becomes = compared["was"], compared["becomes"]
    assert was["at"] == becomes["at"] == {"readings": {"moisture": 4.5}, "estimate": 4.5}
    assert was["combined_standard_uncertainty"] == becomes["combined_standard_uncertainty"]
    assert was["acceptance_limits"] == becomes["acceptance_limits"]
    assert was["estimates"] == figures(callers)["estimates"]
    assert was["bias_treatment"] == "corrected"


@pytest.mark.parametrize("to_the_extremes", [True, False])
def test_a_range_to_the_extremes_of_the_reference_values_is_told(
    callers: Callers, to_the_extremes: bool
) -> None:
    """Within all of them it is taken; beyond the 5 % and 95 % points (numpy's) single pairs vouch for it."""
    study = done(callers["engineer"].get("/v1/studies/wmp-val-2026-01"), 200)["study"]
    references: dict[str, list[float]] = {}
    for row in study["rows"]:
        cells = dict(zip(study["columns"], row, strict=True))
        if cells["reference"] is not None:
            references.setdefault(cells["pair"], []).append(cells["reference"])
    means = [statistics.fmean(values) for values in references.values()]
    lower, upper = map(float, np.percentile(means, [5, 95]))
    ends = (min(means), max(means)) if to_the_extremes else (lower + 1e-6, upper - 1e-6)
    claimed = {"lower": ends[0], "upper": ends[1]}
    draft(callers, example(documents.BudgetDocument, validated_range=claimed))
    found = figures(callers, 2, "")["warnings"]
    details = [warning["detail"] for warning in found if warning["code"] == "range-beyond-the-bulk"]
    assert len(details) == to_the_extremes
    assert all(f"nine in ten lie from {lower:.4g} to {upper:.4g}" in detail for detail in details)
