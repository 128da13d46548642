"""Readings that are no evidence: told twice, stuck at one value, or without what they need to be trusted."""

from __future__ import annotations

from typing import Any

import pytest
from flask import Flask

from service import documents
from service.workflows.ledger import verify_record
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done, example, signed


def told(request: dict[str, Any], measurement: str | None, *, lot: str | None = None) -> dict[str, Any]:
    """Give the same readings, each with a measurement of its own or with none."""
    readings = [
        {**reading, "measurement": None if measurement is None else f"{measurement}-{place}"}
        for place, reading in enumerate(request["readings"])
    ]
    return {**request, "readings": readings, "lot": lot or request["lot"]}


# --- the same reading told twice -----------------------------------------------------------------------


@pytest.mark.parametrize(("first", "second"), [("m", None), (None, "m"), ("m", "m"), (None, None)])
def test_a_reading_is_the_same_with_and_without_its_measurement(
    callers: Callers, first: str | None, second: str | None
) -> None:
    done(callers["mes"].post("/v1/decisions", told(decision(), first)))
    again = told(decision(), second, lot="W26-another")
    problem = done(callers["mes"].post("/v1/decisions", again), 409)
    assert problem["type"] == "/problems/reading-already-judged"
    assert problem["link"] == "/v1/decisions/tower-1.1"
    assert done(callers["mes"].post("/v1/decisions/preview", again), 409)["type"] == problem["type"]


def test_one_measurement_at_two_times_is_one_reading(callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", told(decision(), "m")))
    later = told(house.moved(decision(), minutes=3), "m", lot="W26-another")
    done(callers["mes"].post("/v1/decisions", later), 409)


def test_two_measurements_may_share_their_instant(callers: Callers) -> None:
    """A clock that shows whole seconds is why a measurement has an identity of its own."""
    done(callers["mes"].post("/v1/decisions", told(decision(), "m")))
    done(callers["mes"].post("/v1/decisions", told(decision(), "n", lot="W26-another")))


@pytest.mark.parametrize("names", [("m", None), (None, "m"), (None, None), ("m", "m")])
def test_twins_within_a_call_are_refused(callers: Callers, names: tuple[str | None, str | None]) -> None:
    request = decision()
    reading = request["readings"][0]
    request["readings"] = [{**reading, "measurement": name} for name in names]
    problem = done(callers["mes"].post("/v1/decisions", request), 409)
    assert problem["type"] == "/problems/reading-already-judged"


def test_the_record_of_measurements_is_whole(app: Flask, callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", told(decision(), "m")))
    done(callers["mes"].post("/v1/decisions", house.moved(decision("W26-another"), minutes=5)))
    assert verify_record(app.extensions["shoalmark"].database).whole


# --- stuck sensors -------------------------------------------------------------------------------------


def allow(callers: Callers, identical: int) -> None:
    """Have a plant document approved by which so many equal readings are one too many."""
    document = example(documents.Plant, identical_readings=identical)
    version = done(callers["engineer"].post("/v1/plant/versions", document))["version"]
    one = f"/v1/plant/versions/{version}"
    done(callers["engineer"].post(f"{one}/submit"), 200)
    done(callers["ada"].post(f"{one}/approve", signed()), 200)


def judge(callers: Callers, place: int, *moisture: float, **changes: Any) -> dict[str, Any]:
    """Judge the next lot; the other channels move from lot to lot."""
    request = house.moved(decision(f"W26-{place}", moisture, **changes), minutes=place)
    for number, reading in enumerate(request["readings"]):
        reading["values"] |= {"fat": 26.4 + 0.01 * place + 0.001 * number, "protein": 24.9 + 0.001 * number}
    return done(callers["mes"].post("/v1/decisions", request))


def codes(answer: dict[str, Any]) -> set[str]:
    return {reason["code"] for reason in answer["reasons"]}


def test_the_same_digits_in_lot_after_lot_are_those_of_a_stuck_sensor(callers: Callers) -> None:
    allow(callers, 6)
    assert [judge(callers, place, 2.71, 2.71)["outcome"] for place in (1, 2)] == ["release", "release"]
    answer = judge(callers, 3, 2.71, 2.71)
    assert (answer["outcome"], codes(answer)) == ("hold", {"stuck-sensor"})
    detail = answer["reasons"][0]["detail"]
    assert detail == "nir-1 has shown moisture = 2.71 % at least 6 times in a row."
    # stuck as long as it shows them, and free as soon as it moves
    assert codes(judge(callers, 4, 2.71, 2.71)) == {"stuck-sensor"}
    assert judge(callers, 5, 2.71, 2.72)["outcome"] == "release"
    assert judge(callers, 6, 2.71, 2.71)["outcome"] == "release"


def test_one_other_reading_between_them_begins_a_new_row(callers: Callers) -> None:
    allow(callers, 6)
    judge(callers, 1, 2.71, 2.71)
    judge(callers, 2, 2.71, 2.70)
    judge(callers, 3, 2.71, 2.71)
    assert judge(callers, 4, 2.71, 2.71)["outcome"] == "release"
    assert codes(judge(callers, 5, 2.71, 2.71)) == {"stuck-sensor"}


def test_a_row_within_one_call_is_seen_without_the_record(callers: Callers) -> None:
    allow(callers, 3)
    answer = judge(callers, 1, 2.71, 2.71, 2.71, 2.72)
    assert codes(answer) == {"stuck-sensor"}


def test_the_same_digits_in_another_unit_are_other_readings(callers: Callers) -> None:
    allow(callers, 4)
    judge(callers, 1, 2.71, 2.71)
    percent = {"moisture": "%", "fat": "%", "protein": "%"}
    other = judge(callers, 2, 2.71, 2.71, units={**percent, "moisture": "g/kg"})
    assert "stuck-sensor" not in codes(other)


def test_a_preview_knows_of_the_row_as_well(callers: Callers) -> None:
    allow(callers, 4)
    judge(callers, 1, 2.71, 2.71)
    request = house.moved(decision("W26-2", (2.71, 2.71)), minutes=9)
    answer = done(callers["mes"].post("/v1/decisions/preview", request), 200)
    assert codes(answer) == {"stuck-sensor"}


# --- influences ----------------------------------------------------------------------------------------


def without_temperature() -> dict[str, Any]:
    request = decision()
    for reading in request["readings"]:
        reading["influences"] = {}
    return request


def test_an_influence_that_is_bounded_and_was_not_sent_holds(callers: Callers) -> None:
    answer = done(callers["mes"].post("/v1/decisions", without_temperature()))
    assert (answer["outcome"], codes(answer)) == ("hold", {"influence-missing"})
    assert "came without sample temperature" in answer["reasons"][0]["detail"]


def test_an_influence_may_be_optional(callers: Callers) -> None:
    path = "/v1/analyzers/nir-1/calibrations/wmp-7"
    calibration = example(documents.Calibration)
    calibration["influences"]["sample_temperature"]["required"] = False
    etag = callers["engineer"].get(path).headers["ETag"]
    done(callers["engineer"].put(path, calibration, If_Match=etag), 200)
    assert done(callers["mes"].post("/v1/decisions", without_temperature()))["outcome"] == "release"


# --- further looks -------------------------------------------------------------------------------------


def again(callers: Callers, place: int, *moisture: float) -> dict[str, Any]:
    """Read a lot on hold again, the same sample."""
    whole = house.moved(decision(f"W26-{place}", moisture), minutes=100 + place)
    request = {name: whole[name] for name in ("line", "units", "readings")}
    path = f"/v1/lots/whole-milk-powder/W26-{place}/retests"
    return done(callers["mes"].post(path, request))


def test_two_more_readings_settle_replicates_that_disagree(callers: Callers) -> None:
    held = judge(callers, 1, 2.60, 2.74)
    assert (held["outcome"], codes(held)) == ("hold", {"replicates-disagree"})
    assert "Read sample 1 2 more times" in held["reasons"][0]["next"]
    # no estimate was compared, so no round is used up
    assert held["rounds_left"] == 1
    answer = again(callers, 1, 2.66, 2.68)
    assert answer["outcome"] == "release"
    (check,) = answer["verdicts"][0]["replicates"]["checks"]
    assert (check["readings"], check["agrees"]) == (4, True)


def test_replicates_that_still_disagree_are_not_outvoted(callers: Callers) -> None:
    judge(callers, 1, 2.60, 2.90)
    answer = again(callers, 1, 2.66, 2.68)
    assert (answer["outcome"], codes(answer)) == ("hold", {"replicates-disagree"})
    assert "median" in answer["reasons"][0]["next"]


def test_readings_of_a_stuck_sensor_are_not_made_good_by_others(callers: Callers) -> None:
    allow(callers, 3)
    assert codes(judge(callers, 1, 2.71, 2.71, 2.71)) == {"stuck-sensor"}
    answer = again(callers, 1, 2.72)
    assert (answer["outcome"], codes(answer)) == ("hold", {"stuck-sensor"})
    assert "stay with the lot" in answer["reasons"][0]["next"]
