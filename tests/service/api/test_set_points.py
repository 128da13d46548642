"""Set points, improvements and giveaway over HTTP, in the invented plant."""

from __future__ import annotations

import copy
import random
import statistics
from datetime import timedelta
from typing import Any

import pytest

from service import documents
from service.workflows import recorded_lots
from tests.service.api.conftest import Callers
from tests.service.api.house import (
    TODAY,
    a_study,
    decision,
    done,
    example,
    moved,
    put_in_force,
    specification,
)

SET_POINTS, IMPROVEMENTS, GIVEAWAY = "/v1/set-points", "/v1/improvements", "/v1/giveaway"


def asked(**changes: Any) -> dict[str, Any]:
    return example(documents.SetPointRequest, **changes)


def variation(**changes: Any) -> dict[str, Any]:
    return {"from": "stated", "steered_by_this_analyzer": False, "mean": 2.85, "lot_to_lot": 0.08, **changes}


def faults(response: Any, status: int = 422) -> dict[str, str]:
    assert response.status_code == status, response.get_data(as_text=True)
    return {fault.get("pointer", ""): fault["detail"] for fault in response.get_json()["errors"]}


def test_a_set_point_rests_on_what_is_in_force(callers: Callers) -> None:
    found = done(callers["engineer"].post(SET_POINTS, asked()), 200)
    assert found["budget"]["code"] == "wmp-moisture-nir"
    assert [item["code"] for item in found["specifications"]] == ["legal", "customer-b"]
    assert found["valid_until"]
    limits = done(callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/moisture"), 200)["items"]
    planned = [item["upper_acceptance_limit"] for item in limits if item["planned"]]
    assert found["measurement"]["upper_acceptance_limit"] == pytest.approx(min(planned))
    nearest, cheapest, today = found["nearest"], found["cheapest"], found["today"]
    assert nearest["release_rate"] == pytest.approx(0.95, abs=1e-4)
    assert nearest["bound_by"] == "release_rate"
    assert today["set_point"] == pytest.approx(2.85)
    assert cheapest["gain_per_year"] == pytest.approx((today["cost"] - cheapest["cost"]) * 2000)
    assert len(found["curve"]) > 20
    assert "of lots released" in found["statement"]


def test_the_figure_for_the_controller_keeps_what_is_wanted(callers: Callers) -> None:
    found = done(callers["engineer"].post(SET_POINTS, asked()), 200)
    controller = found["controller"]
    assert controller["scale"] == "reading"
    assert controller["set_point"] == round(controller["set_point"], 2)
    kept = found["keeping_what_is_wanted"]
    assert kept["lower"] <= controller["set_point"] <= kept["upper"]
    assert controller["valid_until"] == found["valid_until"]
    # Of a cheapest set point that does not keep what is wanted the nearest one takes the place.
    strict = done(
        callers["engineer"].post(SET_POINTS, asked(wanted={"release_rate": 0.999, "largest_risk": None})), 200
    )
    assert strict["controller"]["basis"] == "nearest"
    assert (
        strict["cheapest"]["set_point"] > strict["nearest"]["set_point"] >= strict["controller"]["set_point"]
    )


def test_another_unit_asks_the_same(callers: Callers) -> None:
    other = asked(
        unit="g/kg",
        process_variation=variation(mean=28.5, lot_to_lot=0.8, drift=0.2, within_lot=0.3),
        money={**asked()["money"], "value_of_one_unit": 3.0},
        wanted_set_point=29.5,
    )
    one, two = (done(callers["engineer"].post(SET_POINTS, body), 200) for body in (asked(), other))
    assert two["unit"] == "%"
    for name in ("nearest", "cheapest"):
        assert two[name]["set_point"] == pytest.approx(one[name]["set_point"], abs=1e-9)
        assert two[name]["gain_per_year"] == pytest.approx(one[name]["gain_per_year"], rel=1e-9)
    needed = one["required_uncertainty"]
    assert two["required_uncertainty"]["factor"] == pytest.approx(needed["factor"], rel=1e-6)
    assert needed["standard_uncertainty"] == pytest.approx(
        needed["factor"] * needed["todays_standard_uncertainty"]
    )


def test_without_money_the_wanted_set_point_is_given_alone(callers: Callers) -> None:
    found = done(callers["engineer"].post(SET_POINTS, asked(money=None)), 200)
    assert found["cheapest"] is None
    assert found["nearest"]["gain_per_year"] is None
    assert found["controller"]["basis"] == "nearest"


def test_a_steered_process_is_stated_by_both_its_variations(callers: Callers) -> None:
    steered = {
        "from": "stated",
        "steered_by_this_analyzer": True,
        "mean": 2.85,
        "true_standard_deviation": 0.09,
        "reading_standard_deviation": 0.06,
    }
    found = done(callers["engineer"].post(SET_POINTS, asked(process_variation=steered)), 200)
    assert found["process_variation"]["steering"] > 0
    assert found["process_variation"]["reading_standard_deviation"] == pytest.approx(0.06)
    assert found["process_variation"]["true_standard_deviation"] == pytest.approx(0.09)


# --- the variation from the record and from a study ----------------------------------------------------


def judged(callers: Callers, lot: str, *moisture: float, distance: float = 1.8) -> dict[str, Any]:
    request = decision(lot, moisture=moisture)
    for number, reading in enumerate(request["readings"]):
        reading["measurement"] = f"{lot}-{number}"
        reading["flags"] = {"distance-from-calibration-set": distance}
    return done(callers["mes"].post("/v1/decisions", request))


def judged_lots(callers: Callers, number: int = 24) -> list[dict[str, Any]]:
    """Judge lots that vary by about 0.1, read twice each, and one on which a scan was flagged."""
    draw = random.Random(5)
    answers = []
    for lot in range(number):
        middle = 2.85 + draw.gauss(0, 0.1)
        values = tuple(round(middle + draw.gauss(0, 0.03), 3) for _ in range(2))
        answers.append(judged(callers, f"R{lot:03d}", *values))
    judged(callers, "R-flagged", 2.0, 2.0, distance=9.0)
    return answers


def of_moisture(answer: dict[str, Any]) -> dict[str, Any]:
    return next(verdict for verdict in answer["verdicts"] if verdict["characteristic"] == "moisture")


def test_the_record_shows_how_the_lots_vary(callers: Callers) -> None:
    answers = judged_lots(callers)
    record = {"from": "record", "steered_by_this_analyzer": False}
    found = done(callers["engineer"].post(SET_POINTS, asked(process_variation=record)), 200)
    seen = found["process_variation"]
    estimates = [of_moisture(answer)["estimate"] for answer in answers]
    assert seen["lots"] == 24
    assert seen["left_out"] == {"not-trusted": 1}
    offset = found["measurement"]["reading_less_estimate"]
    assert seen["mean"] == pytest.approx(statistics.mean(estimates) + offset)
    # One day of lots: what they vary by less the random error of a reading is left of lot to lot.
    random_variance = found["measurement"]["random_standard_uncertainty"] ** 2
    left = statistics.variance(estimates) - random_variance
    assert seen["lot_to_lot"] ** 2 + seen["drift"] ** 2 == pytest.approx(left)
    assert seen["reading_standard_deviation"] == pytest.approx(statistics.stdev(estimates))
    released = sum(answer["outcome"] == "release" for answer in answers)
    assert seen["recorded_release_rate"] == pytest.approx(released / 24)
    assert found["today"]["set_point"] == pytest.approx(seen["mean"])
    over = found["nearest_over_the_interval"]
    most = over["most_variation"]
    assert most is None or most < found["nearest"]["set_point"]
    assert over["least_variation"] is None or over["least_variation"] > found["nearest"]["set_point"]


def test_a_long_record_is_read_page_by_page(callers: Callers, monkeypatch: pytest.MonkeyPatch) -> None:
    judged_lots(callers, 12)
    body = asked(process_variation={"from": "record", "steered_by_this_analyzer": False})
    at_once = done(callers["engineer"].post(SET_POINTS, body), 200)
    monkeypatch.setattr(recorded_lots, "_PAGE", 5)
    monkeypatch.setattr(recorded_lots, "MOST_DECISIONS", 15)
    assert done(callers["engineer"].post(SET_POINTS, body), 200) == at_once
    monkeypatch.setattr(recorded_lots, "MOST_DECISIONS", 10)
    newest = done(callers["engineer"].post(SET_POINTS, body), 200)
    assert newest["process_variation"]["lots"] == 9
    counted = done(callers["engineer"].post(GIVEAWAY, {"production": body}), 200)
    assert counted["whole_record_read"] is False


def test_the_first_look_shows_the_variation_and_the_last_one_the_release(callers: Callers) -> None:
    code = rule_in_force(callers, "customer-d", rounds=2)
    for lot in range(6):
        judged(callers, f"T{lot:03d}", 2.8 + 0.04 * lot, 2.8 + 0.04 * lot)
    held = decision("again", moisture=(3.16, 3.16), specifications=[code])
    assert done(callers["mes"].post("/v1/decisions", held))["outcome"] == "hold"
    later = moved(decision("again", moisture=(2.9, 2.9)), minutes=20)
    further = {name: later[name] for name in ("line", "units", "readings")}
    for reading in further["readings"]:
        reading["sample"] = "2"
    again = done(callers["mes"].post("/v1/lots/whole-milk-powder/again/retests", further))
    assert again["outcome"] == "release"
    body = asked(process_variation={"from": "record", "steered_by_this_analyzer": False})
    found = done(callers["engineer"].post(GIVEAWAY, {"production": body}), 200)
    readings = [2.8 + 0.04 * lot for lot in range(6)]
    assert found["process_variation"]["lots"] == 7
    assert found["process_variation"]["mean"] == pytest.approx(statistics.mean([*readings, 3.16]))
    # Of the lot that was read again the estimate of all its readings counts.
    offset = found["measurement"]["reading_less_estimate"]
    true_values = [*(reading - offset for reading in readings), of_moisture(again)["estimate"]]
    assert found["giveaway"]["lots"] == 7
    assert found["giveaway"]["true_mean"] == pytest.approx(statistics.mean(true_values))


def test_lots_that_vary_less_than_their_readings_are_steered(callers: Callers) -> None:
    for lot in range(8):
        value = 2.85 + 0.001 * lot
        judged(callers, f"S{lot:03d}", value, value)
    record = {"from": "record", "steered_by_this_analyzer": False}
    found = faults(callers["engineer"].post(SET_POINTS, asked(process_variation=record)))
    (detail,) = found.values()
    assert "steered" in detail
    steered = {"from": "record", "steered_by_this_analyzer": True, "true_standard_deviation": 0.066}
    answer = done(callers["engineer"].post(SET_POINTS, asked(process_variation=steered)), 200)
    assert answer["process_variation"]["steering"] > 0.5


def test_what_the_record_shows_is_wrong_with_the_member_that_asked_for_it(callers: Callers) -> None:
    def refused(**record: Any) -> dict[str, str]:
        body = asked(process_variation={"from": "record", **record})
        return faults(callers["engineer"].post(SET_POINTS, body))

    judged(callers, "S000", 2.85, 2.86)
    few = refused(steered_by_this_analyzer=False)
    assert "1 lots" in few["#/process_variation/from"]
    for lot in range(1, 8):
        judged(callers, f"S{lot:03d}", 2.85 + 0.001 * lot, 2.85 + 0.001 * lot)
    both = refused(steered_by_this_analyzer=True, true_standard_deviation=0.5)
    assert "cannot be true together" in both["#/process_variation/true_standard_deviation"]


def production_study(code: str, within: float = 0.04, **changes: Any) -> dict[str, Any]:
    draw = random.Random(9)
    rows = []
    for lot in range(30):
        middle = 2.85 + 0.03 * (lot // 10) + draw.gauss(0, 0.1)
        rows += [[f"week-{lot // 10}", f"L{lot}", round(middle + draw.gauss(0, within), 3)] for _ in range(2)]
    return a_study(
        code=code,
        design="production",
        columns=["period", "lot", "reading"],
        rows=rows,
        options={"steered_by_this_analyzer": False},
        **changes,
    )


def test_a_study_tells_lots_periods_and_samples_apart(callers: Callers) -> None:
    done(callers["engineer"].post("/v1/studies", production_study("wmp-made-1")))
    study = {"from": "study", "study": "wmp-made-1"}
    found = done(callers["engineer"].post(SET_POINTS, asked(process_variation=study)), 200)
    seen = found["process_variation"]
    assert seen["lots"] == 30
    assert seen["lot_to_lot"] == pytest.approx(0.1, abs=0.05)
    assert seen["within_lot"] == pytest.approx(0.04, abs=0.015)
    assert seen["interval"]["lower"] < seen["true_standard_deviation"] < seen["interval"]["upper"]
    assert (found["nearest_without_drift"] is None) == (seen["drift"] == 0)
    assert seen["warnings"] == []
    # The samples of other lots differ, and the budget of this plant has no component of sampling.
    done(callers["engineer"].post("/v1/studies", production_study("wmp-made-5", within=0.12)))
    uneven = done(
        callers["engineer"].post(SET_POINTS, asked(process_variation={**study, "study": "wmp-made-5"})), 200
    )
    codes = [warning["code"] for warning in uneven["process_variation"]["warnings"]]
    assert "within-lot-not-counted" in codes
    of_no_use = {**study, "true_standard_deviation": 0.1}
    said = faults(callers["engineer"].post(SET_POINTS, asked(process_variation=of_no_use)))
    assert "of no use" in said["#/process_variation/true_standard_deviation"]


def test_a_study_that_lapses_first_bounds_the_answer_and_one_that_lapsed_is_refused(
    callers: Callers,
) -> None:
    soon = (TODAY + timedelta(days=10)).isoformat()
    done(callers["engineer"].post("/v1/studies", production_study("wmp-made-3", serves_until=soon)))
    study = {"from": "study", "study": "wmp-made-3"}
    found = done(callers["engineer"].post(SET_POINTS, asked(process_variation=study)), 200)
    assert found["valid_until"] == found["controller"]["valid_until"]
    assert found["valid_until"] < (TODAY + timedelta(days=14)).isoformat()
    past = (TODAY - timedelta(days=10)).isoformat()
    done(callers["engineer"].post("/v1/studies", production_study("wmp-made-4", serves_until=past)))
    lapsed = {"from": "study", "study": "wmp-made-4"}
    said = faults(callers["engineer"].post(SET_POINTS, asked(process_variation=lapsed)))
    assert "served until" in said["#/process_variation/study"]


def test_a_steered_study_needs_reference_values(callers: Callers) -> None:
    steered = production_study("wmp-made-2") | {"options": {"steered_by_this_analyzer": True}}
    done(callers["engineer"].post("/v1/studies", steered))
    study = {"from": "study", "study": "wmp-made-2"}
    said = faults(callers["engineer"].post(SET_POINTS, asked(process_variation=study)))
    assert "needed" in said["#/process_variation/true_standard_deviation"]
    known = {**study, "true_standard_deviation": 0.12}
    found = done(callers["engineer"].post(SET_POINTS, asked(process_variation=known)), 200)
    seen = found["process_variation"]
    assert seen["steering"] != 0
    assert seen["lots"] == 30


# --- giveaway ------------------------------------------------------------------------------------------


def test_released_lots_gave_away_their_distance(callers: Callers) -> None:
    answers = judged_lots(callers)
    body = {"production": asked(process_variation={"from": "record", "steered_by_this_analyzer": False})}
    found = done(callers["engineer"].post(GIVEAWAY, body), 200)
    released = [of_moisture(answer)["estimate"] for answer in answers if answer["outcome"] == "release"]
    counted = found["giveaway"]
    assert counted["lots"] == len(released)
    assert counted["true_mean"] == pytest.approx(statistics.mean(released))
    distance = counted["needed_true_mean"] - counted["true_mean"]
    assert counted["distance"] == pytest.approx(distance)
    assert counted["value"] == pytest.approx(distance * 25.0 * 30.0 * len(released))
    assert counted["standard_uncertainty"] > 0
    asked_again = done(callers["engineer"].post(SET_POINTS, body["production"]), 200)
    assert found["needed_set_point"] == pytest.approx(asked_again["cheapest"]["set_point"], abs=1e-9)
    assert "released lots lay on average" in found["statement"]


def test_a_period_without_lots_and_a_question_without_money_are_refused(callers: Callers) -> None:
    judged_lots(callers, 6)
    nothing = {"production": asked(), "first_day": "2020-01-01", "last_day": "2020-02-01"}
    assert "no lot was released" in faults(callers["engineer"].post(GIVEAWAY, nothing))["#/first_day"]
    poor = {"production": asked(money=None)}
    said = faults(callers["engineer"].post(GIVEAWAY, poor))
    assert "state both" in said["#/production/money"]


# --- what is not possible ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "pointer", "words"),
    [
        (
            {"process_variation": variation(lot_to_lot=0.0)},
            "#/process_variation/lot_to_lot",
            "no variation of the process",
        ),
        ({"process_variation": variation(lot_to_lot=0.9)}, "#/wanted/release_rate", "no set point keeps"),
        ({"wanted_set_point": 3.3}, "#/wanted_set_point", "even an exact measurement"),
        ({"towards": "lower"}, "#/towards", "no lower tolerance limit"),
        ({"process_variation": variation(mean=1e300)}, "#/process_variation/mean", "1e+300"),
        ({"process_variation": variation(lot_to_lot=1e200)}, "#/process_variation/lot_to_lot", "1e+200"),
        ({"money": {**asked()["money"], "lot_size": 1e300}}, "#/money/lot_size", "1e+300"),
        ({"unit": "kg"}, "#/unit", "got 'kg'"),
        ({"characteristic": "taste"}, "#/characteristic", "got 'taste'"),
        ({"specifications": ["customer-z"]}, "#/specifications/0", "'customer-z'"),
        (
            {"procedure": {"samples": 50, "readings_per_sample": 50, "increments_per_sample": 50}},
            "#/process_variation/study",
            "'nobody' is no study of the design production",
        ),
    ],
)
def test_what_is_impossible_is_said_with_its_reason(
    callers: Callers, changes: dict[str, Any], pointer: str, words: str
) -> None:
    body = asked(**changes)
    if pointer == "#/process_variation/study":
        body["process_variation"] = {"from": "study", "study": "nobody"}
    found = faults(callers["engineer"].post(SET_POINTS, body))
    assert words in found[pointer]


@pytest.mark.parametrize(
    ("stated", "pointer"),
    [
        ({"from": "stated", "mean": 2.8}, "steered_by_this_analyzer"),
        ({"from": "stated", "mean": 2.8, "steered_by_this_analyzer": False}, "lot_to_lot"),
        ({"from": "stated", "mean": 2.8, "steered_by_this_analyzer": True}, "true_standard_deviation"),
        (variation(reading_standard_deviation=0.1), "reading_standard_deviation"),
        ({"from": "study", "study": "x", "mean": 2.8}, "mean"),
        ({"from": "record"}, "steered_by_this_analyzer"),
        ({"from": "record", "steered_by_this_analyzer": True}, "true_standard_deviation"),
        ({"from": "record", "steered_by_this_analyzer": False, "lot_to_lot": 0.1}, "lot_to_lot"),
    ],
)
def test_each_source_of_the_variation_has_its_members(
    callers: Callers, stated: dict[str, Any], pointer: str
) -> None:
    found = faults(callers["engineer"].post(SET_POINTS, asked(process_variation=stated)))
    assert f"#/process_variation/{pointer}" in found


def test_money_that_weighs_nothing_is_refused(callers: Callers) -> None:
    nothing = dict.fromkeys(
        (
            "value_of_one_unit",
            "cost_of_hold",
            "cost_of_retest",
            "cost_of_nonconforming",
            "cost_of_not_released",
        ),
        0.0,
    )
    found = faults(callers["engineer"].post(SET_POINTS, asked(money={**asked()["money"], **nothing})))
    assert "all the money is zero" in found["#/money/value_of_one_unit"]


def test_money_beyond_the_law_is_refused(callers: Callers) -> None:
    simple = {"kind": "simple", "largest_standard_uncertainty": 1.0}
    document = specification("law", 3.2, simple) | {"kind": "legal"}
    put_in_force(callers["engineer"], callers["max"], "specifications", document)
    greedy = {
        **asked()["money"],
        "value_of_one_unit": 1e4,
        "cost_of_hold": 0.001,
        "cost_of_not_released": 0.001,
        "cost_of_nonconforming": 0.001,
    }
    body = asked(
        specifications=["law"],
        process_variation=variation(mean=3.15, lot_to_lot=0.3),
        wanted={"release_rate": 0.4, "largest_risk": None},
        wanted_set_point=None,
        money=greedy,
    )
    said = faults(callers["engineer"].post(SET_POINTS, body))
    assert "beyond the legal limit 3.2" in said["#/money"]
    # With what things cost in truth there is a set point, on the right side of the limit.
    found = done(callers["engineer"].post(SET_POINTS, {**body, "money": asked()["money"]}), 200)
    assert found["cheapest"]["true_mean"] < 3.2


def test_nothing_in_force_is_a_conflict(callers: Callers) -> None:
    response = callers["engineer"].post(SET_POINTS, asked(characteristic="fat"))
    assert response.status_code in (409, 422)
    response = callers["engineer"].post(SET_POINTS, asked(analyzer="oven"))
    assert response.status_code == 409
    assert response.get_json()["type"] == "/problems/nothing-in-force"


def test_a_record_without_lots_says_what_to_do(callers: Callers) -> None:
    stated = {"from": "record", "steered_by_this_analyzer": False}
    found = faults(callers["engineer"].post(SET_POINTS, asked(process_variation=stated)))
    assert "state the variation" in found["#/process_variation/from"]


# --- rules of several rounds, and rules that are not done here -----------------------------------------


def rule_in_force(callers: Callers, code: str, **members: Any) -> str:
    rule = {"kind": "guarded_by_specific_risk", "largest_risk": 0.05, **members}
    engineer, approver = callers["engineer"], callers["max"]
    put_in_force(engineer, approver, "specifications", specification(code, 3.2, rule))
    return code


def test_looks_are_those_of_the_rules(callers: Callers) -> None:
    twice = rule_in_force(callers, "customer-d", rounds=2)
    once = rule_in_force(callers, "customer-e", rounds=1)
    two, one = (
        done(callers["engineer"].post(SET_POINTS, asked(specifications=["legal", code])), 200)
        for code in (twice, once)
    )
    assert (two["procedure"]["looks"], one["procedure"]["looks"]) == (2, 1)
    # The risk of both looks together is that of the rule: each takes less, and some lots get another chance.
    assert two["measurement"]["upper_acceptance_limit"] < one["measurement"]["upper_acceptance_limit"]
    assert two["today"]["further_looks"] > 0
    assert two["today"]["release_rate"] > two["today"]["release_rate_of_first_look"]
    assert two["cheapest"]["cost_parts"]["retests"] > 0
    option = {"code": "once", "kind": "fewer_looks", "looks": 1}
    found = compared(callers, option, specifications=["legal", twice])
    assert found["ranked"][0]["set_point"] == pytest.approx(one["cheapest"]["set_point"], abs=1e-6)


def test_a_cap_on_the_risk_of_the_lot_is_not_done_here(callers: Callers) -> None:
    code = rule_in_force(callers, "customer-f", largest_lot_risk=0.1)
    response = callers["engineer"].post(SET_POINTS, asked(specifications=[code]))
    assert response.status_code == 422
    assert response.get_json()["type"] == "/problems/not-supported"


# --- improvements --------------------------------------------------------------------------------------


def compared(callers: Callers, *options: dict[str, Any], **changes: Any) -> dict[str, Any]:
    body = {"production": asked(**changes), "options": list(options)}
    return done(callers["engineer"].post(IMPROVEMENTS, body), 200)


def test_options_and_pairs_are_ranked(callers: Callers) -> None:
    body = example(documents.ImprovementsRequest)
    found = done(callers["engineer"].post(IMPROVEMENTS, body), 200)
    assert len(found["ranked"]) == 3
    nets = [item["net_gain_per_year"] for item in found["ranked"]]
    assert nets == sorted(nets, reverse=True)
    assert found["best"] == found["ranked"][0]["options"]
    assert found["frontier"][0] == []
    assert found["statement"].startswith("First ")
    again = done(callers["engineer"].post(SET_POINTS, asked()), 200)
    assert found["as_it_is"]["set_point"] == pytest.approx(again["cheapest"]["set_point"], abs=1e-9)


def test_every_kind_of_option_is_understood(callers: Callers) -> None:
    found = compared(
        callers,
        {"code": "readings", "kind": "procedure", "readings_per_sample": 4},
        {"code": "increments", "kind": "procedure", "increments_per_sample": 4},
        {"code": "trueness", "kind": "component", "component": "reference-trueness", "factor": 0.5},
        {
            "code": "duplicates",
            "kind": "reference_determinations",
            "component": "bias",
            "standard_deviation": 0.01,
            "determinations": 2,
            "instead_of": 1,
            "pairs": 60,
        },
        {"code": "same-budget", "kind": "budget", "budget": "wmp-moisture-nir", "version": 1},
        {"code": "correct", "kind": "corrected_bias"},
        {"code": "once", "kind": "fewer_looks", "looks": 2},
    )
    single = {item["options"][0]: item for item in found["ranked"] if len(item["options"]) == 1}
    assert single["trueness"]["gain_per_year"] > 0
    assert "in no reading" in " ".join(single["duplicates"]["remarks"])
    assert single["same-budget"]["gain_per_year"] == pytest.approx(0, abs=1e-6)
    said = {item["options"][0]: item["detail"] for item in found["impossible"]}
    assert "no bias that is left" in said["correct"]
    assert "agreed with the customer" in said["once"]


def test_nothing_pays_is_an_answer(callers: Callers) -> None:
    dear = {"code": "samples", "kind": "procedure", "samples": 2, "cost_per_year": 1e9}
    found = compared(callers, dear)
    assert found["best"] is None
    assert found["statement"].startswith("Nothing pays")


def test_a_cheapest_set_point_that_releases_less_than_wanted_is_told(callers: Callers) -> None:
    option = {"code": "samples", "kind": "procedure", "samples": 2}
    for cost in (0.0, 1e9):
        wish, modest = (
            compared(callers, {**option, "cost_per_year": cost}, wanted={"release_rate": rate})
            for rate in (0.9999, 0.5)
        )
        assert wish["statement"].endswith("of the lots are released, fewer than the wanted 99.99 %.")
        assert wish["statement"].startswith(modest["statement"])


def test_what_cannot_be_had_is_no_matter_of_what_pays(callers: Callers) -> None:
    found = compared(callers, {"code": "correct", "kind": "corrected_bias"})
    assert found["ranked"] == [] and found["best"] is None
    assert found["statement"] == "None of the options can be had; see why under impossible."


def test_a_process_that_releases_nothing_today_is_told_so(callers: Callers) -> None:
    body = asked(process_variation=variation(mean=9.0))
    found = done(callers["engineer"].post(SET_POINTS, body), 200)
    assert found["statement"].startswith("Today the readings average 9.00 %: no lot released.")
    assert found["cheapest"]["gain_per_year"] > 0


def test_a_component_in_another_unit_is_the_same(callers: Callers) -> None:
    option = {"code": "trueness", "kind": "component", "component": "reference-trueness"}
    one = compared(callers, {**option, "standard_uncertainty": 0.02})
    other = compared(
        callers,
        {**option, "standard_uncertainty": 0.2},
        unit="g/kg",
        process_variation=variation(mean=28.5, lot_to_lot=0.8, drift=0.2),
        money={**asked()["money"], "value_of_one_unit": 3.0},
        wanted_set_point=None,
    )
    gain = one["ranked"][0]["gain_per_year"]
    assert other["ranked"][0]["gain_per_year"] == pytest.approx(gain, rel=1e-9)


@pytest.mark.parametrize(
    ("option", "pointer"),
    [
        ({"code": "x", "kind": "budget", "budget": "nobody", "version": 1}, "#/options/0/budget"),
        ({"code": "x", "kind": "budget", "budget": "nobody"}, "#/options/0/version"),
        ({"code": "x", "kind": "procedure", "samples": 2, "factor": 0.5}, "#/options/0/factor"),
        ({"code": "x", "kind": "magic"}, "#/options/0/kind"),
        ({"code": "x", "kind": "procedure"}, "#/options/0/samples"),
        ({"code": "x", "kind": "component", "component": "bias"}, "#/options/0/standard_uncertainty"),
        (
            {
                "code": "x",
                "kind": "component",
                "component": "bias",
                "factor": 0.5,
                "standard_uncertainty": 0.1,
            },
            "#/options/0/standard_uncertainty",
        ),
        ({"code": "x", "kind": "component", "component": "magic", "factor": 0.5}, "#/options/0/component"),
        ({"code": "x", "kind": "corrected_bias", "cost_per_lot": 1e308}, "#/options/0/cost_per_lot"),
        ({"code": "x", "kind": "corrected_bias", "cost_per_lot": -1.0}, "#/options/0/cost_per_lot"),
    ],
)
def test_options_that_are_not_understood_are_refused(
    callers: Callers, option: dict[str, Any], pointer: str
) -> None:
    body = {"production": asked(), "options": [option]}
    assert pointer in faults(callers["engineer"].post(IMPROVEMENTS, body))


def test_options_need_money_and_codes_of_their_own(callers: Callers) -> None:
    option = {"code": "x", "kind": "procedure", "samples": 2}
    twice = {"production": asked(), "options": [option, copy.deepcopy(option)]}
    assert "#/options/1/code" in faults(callers["engineer"].post(IMPROVEMENTS, twice))
    poor = {"production": asked(money=None), "options": [option]}
    assert "state it" in faults(callers["engineer"].post(IMPROVEMENTS, poor))["#/production/money"]
