"""Global risks over HTTP: by a declared prior, a production study and the record."""

from __future__ import annotations

import copy
import random
from typing import Any

import pytest

from service import documents
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done, example, moved, signed
from tests.service.api.test_production_rules import production_study

PATH = "/v1/global-risks"


def asked(**changes: Any) -> dict[str, Any]:
    return example(documents.GlobalRisksRequest, **changes)


def declared(distribution: str = "normal", **changes: Any) -> dict[str, Any]:
    prior = copy.deepcopy(asked()["prior"])
    return {**prior, "distribution": distribution, "declaration": {**prior["declaration"], **changes}}


def faults(response: Any) -> dict[str, str]:
    assert response.status_code == 422, response.get_data(as_text=True)
    return {fault["pointer"]: fault["detail"] for fault in response.get_json()["errors"]}


def test_a_rule_in_force_and_a_curve_of_guard_bands(callers: Callers) -> None:
    found = done(callers["engineer"].post(PATH, asked()), 200)
    assert (found["budget"]["code"], found["specification"]["code"]) == ("wmp-moisture-nir", "customer-b")
    limits = done(callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/moisture"), 200)["items"]
    own = next(i for i in limits if i["planned"] and i["specification"]["code"] == "customer-b")
    now = found["in_force"]
    assert now["upper_acceptance_limit"] == own["upper_acceptance_limit"]
    assert now["lower_acceptance_limit"] is None
    whole = found["random_standard_uncertainty"] ** 2 + found["common_standard_uncertainty"] ** 2
    assert whole == pytest.approx(own["combined_standard_uncertainty"] ** 2)
    curve = found["curve"]
    assert len(curve) == 41 and curve[0]["guard_band"] == 0
    risks = [point["global_consumers_risk"] for point in curve]
    assert risks == sorted(risks, reverse=True)
    # Not at every guard band: where few plants take nearly all of the risk, the mean is above the quantile.
    assert curve[0]["global_consumers_risk"] < curve[0]["global_consumers_risk_quantile"]
    band = found["guard_band"]
    assert band["global_consumers_risk"] == pytest.approx(0.001)
    assert curve[0]["guard_band"] < band["guard_band"] < curve[-1]["guard_band"]
    assert found["nonconforming_share"] == pytest.approx(0.0186, abs=1e-3)  # t of the budget plays no part
    assert found["prior"]["estimated_from"] is None
    assert "of all lots do not conform" in found["statement"] and "A guard band of" in found["statement"]


def test_asked_guard_bands_in_another_unit_and_another_procedure(callers: Callers) -> None:
    own = asked(guard_bands=[0.0, 0.5, 1.0], unit="g/kg", largest_risk=None)
    found = done(callers["engineer"].post(PATH, own), 200)
    assert [point["guard_band"] for point in found["curve"]] == pytest.approx([0, 0.05, 0.1])
    assert found["guard_band"] is None and "A guard band of" not in found["statement"]
    more = asked(procedure={"samples": 3, "readings_per_sample": 4})
    better = done(callers["engineer"].post(PATH, more), 200)
    assert better["random_standard_uncertainty"] < found["random_standard_uncertainty"]
    assert better["common_standard_uncertainty"] == found["common_standard_uncertainty"]


@pytest.mark.parametrize(
    "prior",
    [
        declared("t", degrees_of_freedom=8.0),
        declared("empirical", mean=None, standard_deviation=None, values=[2.7 + 0.01 * i for i in range(50)]),
        declared(
            steered_by_this_analyzer=True,
            readings={"mean": 2.95, "standard_deviation": 0.06, "correlation": -0.3},
        ),
        declared(known_from="readings"),
    ],
    ids=["t", "empirical", "steered", "readings"],
)
def test_every_kind_of_declared_prior(callers: Callers, prior: dict[str, Any]) -> None:
    found = done(callers["auditor"].post(PATH, asked(prior=prior, largest_risk=None)), 200)
    assert 0 < found["in_force"]["global_consumers_risk"] < found["nonconforming_share"] < 0.2
    assert found["prior"]["distribution"] == prior["distribution"]


def test_a_production_study_gives_the_prior_with_its_interval(callers: Callers) -> None:
    done(callers["engineer"].post("/v1/studies", production_study()))
    prior = {**asked()["prior"], "declaration": None, "study": "wmp-prod-2026"}
    found = done(callers["engineer"].post(PATH, asked(prior=prior)), 200)["prior"]
    assert found["anchor"] == "readings"
    estimated = found["estimated_from"]
    assert estimated["lots"] == 120
    assert estimated["interval"]["lower"] < 0.12 < estimated["interval"]["upper"]
    assert estimated["removed_standard_deviation"] > 0


def test_a_production_study_of_a_steered_process_is_refused_where_it_is_named(callers: Callers) -> None:
    study = {**production_study(), "options": {"steered_by_this_analyzer": True}}
    done(callers["engineer"].post("/v1/studies", study))
    prior = {**asked()["prior"], "declaration": None, "study": "wmp-prod-2026"}
    found = faults(callers["engineer"].post(PATH, asked(prior=prior)))
    assert "reference values of lots" in found["#/prior/study"]


def from_record(**changes: Any) -> dict[str, Any]:
    record = {"steered_by_this_analyzer": False, "first_day": None, "last_day": None, **changes}
    return {**asked()["prior"], "declaration": None, "record": record}


def test_the_record_gives_the_prior_held_and_rejected_lots_included(callers: Callers) -> None:
    draw = random.Random(5)
    number = 40
    outcomes = set()
    for lot in range(number):
        moisture = 3.0 + draw.gauss(0, 0.2)
        request = decision(f"R{lot:03}", moisture=(round(moisture, 3), round(moisture + 0.01, 3)))
        sent = moved(request, minutes=-lot)
        outcomes.add(done(callers["mes"].post("/v1/decisions", sent))["outcome"])
    # Another number of readings has another uncertainty, and a lot that was not judged says nothing.
    done(callers["mes"].post("/v1/decisions", moved(decision("more", moisture=(3.0, 3.0, 3.0)), minutes=-50)))
    done(callers["mes"].post("/v1/decisions", moved(decision("outside", moisture=(6.0, 6.0)), minutes=-55)))
    assert outcomes == {"release", "hold", "reject"}
    found = done(callers["engineer"].post(PATH, asked(prior=from_record(), largest_risk=None)), 200)
    estimated = found["prior"]["estimated_from"]
    assert estimated["lots"] == number
    assert estimated["left_out"] == {"read-otherwise": 1, "not-trusted": 1}
    assert estimated["whole_record_read"] is True
    assert estimated["interval"]["lower"] < 0.2 < estimated["interval"]["upper"]
    assert found["prior"]["mean"] == pytest.approx(3.0, abs=0.15)
    steered = callers["engineer"].post(PATH, asked(prior=from_record(steered_by_this_analyzer=True)))
    said = faults(steered)["#/prior/record/steered_by_this_analyzer"]
    assert "reference values of lots" in said
    before = from_record(last_day="2020-01-01")
    assert "no lot" in faults(callers["engineer"].post(PATH, asked(prior=before)))["#/prior/record"]


@pytest.mark.parametrize(
    ("changes", "pointer", "words"),
    [
        ({"characteristic": "ash"}, "#/characteristic", "got 'ash'"),
        ({"unit": "kg"}, "#/unit", "got 'kg'"),
        ({"procedure": {"samples": 9, "readings_per_sample": 1}}, "#/procedure", "9 samples"),
        ({"guard_bands": [0.1, 0.0]}, "#/guard_bands", "ascend"),
        ({"prior": from_record() | {"study": "x"}}, "#/prior", "or several"),
        ({"prior": declared(mean=9.0)}, "#/largest_risk", "out of reach"),
        ({"prior": declared(standard_deviation=-1.0)}, "#/prior/declaration/standard_deviation", "got the"),
    ],
)
def test_what_cannot_be_answered_says_why(
    callers: Callers, changes: dict[str, Any], pointer: str, words: str
) -> None:
    found = faults(callers["engineer"].post(PATH, asked(**changes)))
    assert words in found[pointer], found


def test_shares_too_small_to_be_shown_are_told_in_plain_words(callers: Callers) -> None:
    narrow = asked(prior=declared(mean=2.7, standard_deviation=0.01), largest_risk=None)
    found = done(callers["engineer"].post(PATH, narrow), 200)
    assert "(in nineteen of twenty plants less than 0.01 %)" in found["statement"]


def test_nothing_in_force_is_a_conflict(callers: Callers) -> None:
    for changes in ({"specification": "unknown"}, {"analyzer": "oven"}):
        response = callers["engineer"].post(PATH, asked(**changes))
        assert (response.status_code, response.get_json()["type"]) == (409, "/problems/nothing-in-force")
    done(callers["max"].post("/v1/budgets/wmp-moisture-nir/versions/1/withdraw", signed()), 200)
    assert callers["engineer"].post(PATH, asked()).status_code == 409
    assert callers["nobody"].post(PATH, asked()).status_code == 401
