"""Lots on hold read again over the real application; and every way to test a lot into compliance, refused."""

from __future__ import annotations

import copy
import threading
from concurrent.futures import ThreadPoolExecutor
from datetime import datetime, timedelta
from typing import Any

import pytest
from flask import Flask

from service import documents
from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done, example

RULE = {"kind": "guarded_by_specific_risk", "largest_risk": 0.05, "rounds": 2}
SPECIFICATION = "customer-c"
RETESTS = "/v1/lots/whole-milk-powder/W26-04711/retests"
HELD = (3.16, 3.16)
"""Two readings in the guard band of the specification below."""


@pytest.fixture(autouse=True)
def plant(callers: Callers) -> None:
    """Put a specification with a second round in force, and a second line with the same analyzer."""
    document = house.specification(SPECIFICATION, 3.2, RULE)
    house.put_in_force(callers["engineer"], callers["max"], "specifications", document)
    other = example(documents.Line, code="tower-2", name="Tower 2")
    done(callers["engineer"].put("/v1/lines/tower-2", other))


def first(lot: str = "W26-04711", moisture: tuple[float, ...] = HELD, **changes: Any) -> dict[str, Any]:
    return decision(lot, moisture, **{"specifications": [SPECIFICATION], **changes})


def further(
    moisture: tuple[float, ...] = (2.9, 2.9), sample: str = "2", minutes: int = 20, **changes: Any
) -> dict[str, Any]:
    """Make a request with further readings, taken some minutes after the first ones."""
    whole = house.moved(decision(moisture=moisture), minutes=minutes)
    request = {name: whole[name] for name in ("line", "units", "readings")}
    for reading in request["readings"]:
        reading["sample"] = sample
    return {**request, **changes}


def problem(response: Any) -> tuple[int, str]:
    return response.status_code, response.get_json()["type"]


def chain_lengths(app: Flask) -> dict[str, int]:
    with app.extensions["shoalmark"].database.reading() as unit_of_work:
        heads = unit_of_work.ledger.heads()
    return {name: head.sequence for name, head in heads.items() if name != "plant"}


def test_a_lot_on_hold_is_released_by_further_readings(app: Flask, callers: Callers) -> None:
    held = done(callers["mes"].post("/v1/decisions", first()))
    assert (held["outcome"], held["round"], held["rounds_left"]) == ("hold", 1, 1)
    assert held["reasons"][0]["next"].startswith("No further reading within the procedure can settle it.")
    answer = done(callers["mes"].post(RETESTS, further()))
    assert (answer["outcome"], answer["round"], answer["rounds_left"]) == ("release", 2, 0)
    assert (answer["id"], answer["joins"]) == ("tower-1.2", ["tower-1.1"])
    (verdict,) = answer["verdicts"]
    assert (verdict["samples"], verdict["readings"]) == (2, 4)
    stored = done(callers["auditor"].get(f"/v1/decisions/{answer['id']}"), 200)
    assert len(stored["request"]["readings"]) == 2
    lot = done(callers["auditor"].get("/v1/lots/whole-milk-powder/W26-04711"), 200)
    assert (lot["outcome"], lot["rounds"], lot["rounds_left"]) == ("release", 2, 0)
    assert [(item["id"], item["outcome"]) for item in lot["decisions"]] == [
        ("tower-1.1", "hold"),
        ("tower-1.2", "release"),
    ]
    assert done(callers["auditor"].get("/v1/ledger/verification"), 200)["whole"]


def test_just_above_the_limit_a_further_look_is_worth_its_while(callers: Callers) -> None:
    """The estimate is the reading less the bias; the next look is named with its probability."""
    limits = done(callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/moisture"), 200)["items"]
    (item,) = (each for each in limits if each["specification"]["code"] == SPECIFICATION and each["planned"])
    assert 0.025 < item["risk_per_look"] < 0.05
    reading = item["upper_acceptance_limit"] + item["bias"] + 0.004
    held = done(callers["mes"].post("/v1/decisions", first(moisture=(reading, reading))))
    assert held["outcome"] == "hold"
    words, power = held["reasons"][0]["next"].rstrip(").").split(" (")
    assert words in (
        "Take 1 more sample, 2 readings: release is then possible",
        "Take 2 more samples, 2 readings of each: release is then possible",
        "Take 3 more samples, 2 readings of each: release is then possible",
    )
    assert 0.05 < float(power) < 0.5


def test_the_entry_goes_to_the_line_that_acts(app: Flask, callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", first()))
    answer = done(callers["mes"].post(RETESTS, further(line="tower-2")))
    assert (answer["id"], answer["line"], answer["joins"]) == ("tower-2.1", "tower-2", ["tower-1.1"])
    lot = done(callers["auditor"].get("/v1/lots/whole-milk-powder/W26-04711"), 200)
    assert (lot["line"], lot["decision"]) == ("tower-2", "tower-2.1")
    assert done(callers["auditor"].get("/v1/ledger/verification"), 200)["whole"]


def test_a_retest_is_repeated_under_its_key(app: Flask, callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", first()))
    key = house.fresh_key()
    once = callers["mes"].post(RETESTS, further(), key=key)
    again = callers["mes"].post(RETESTS, further(), key=key)
    assert (again.status_code, again.headers["Recorded-Earlier"]) == (201, "true")
    assert again.get_json() == once.get_json()
    assert chain_lengths(app) == {"tower-1": 2}
    assert problem(callers["mes"].post(RETESTS, further(sample="3"), key=key)) == (
        422,
        "/problems/idempotency-key-reused",
    )


def test_only_one_of_many_lines_takes_the_last_round(app: Flask, callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", first()))
    rivals = 6
    together = threading.Barrier(rivals)

    def send(number: int) -> int:
        caller = house.Caller(app.test_client(), callers["mes"].token)
        line = "tower-1" if number % 2 else "tower-2"
        together.wait()
        request = further((3.1, 3.1), sample=f"{number + 2}", minutes=30 + number, line=line)
        return caller.post(RETESTS, request).status_code

    with ThreadPoolExecutor(rivals) as pool:
        assert sorted(pool.map(send, range(rivals))) == [201, *[409] * (rivals - 1)]
    assert sum(chain_lengths(app).values()) == 2


# --- testing a lot into compliance ----------------------------------------------------------------------


def test_the_same_readings_are_no_new_evidence(app: Flask, callers: Callers) -> None:
    """Whatever else is changed: lot, key, line, unit, specification, channels, values, the zone."""
    held = first()
    done(callers["mes"].post("/v1/decisions", held))
    in_grams = copy.deepcopy(held)
    in_grams["units"]["moisture"] = "g/kg"
    for reading in in_grams["readings"]:
        reading["values"]["moisture"] = 29.0
    for way in (
        first("W26-04712", HELD, readings=held["readings"]),
        first("W26-04712", HELD, readings=held["readings"], line="tower-2"),
        first("W26-04712", HELD, readings=house.moved(held, minutes=0)["readings"]),
        {**in_grams, "lot": "W26-04713"},
        {**held, "lot": "W26-04713", "specifications": ["legal"]},
    ):
        response = callers["mes"].post("/v1/decisions", way)
        assert problem(response) == (409, "/problems/reading-already-judged"), response.get_json()
    same = {name: held[name] for name in ("line", "units", "readings")}
    moisture_only = copy.deepcopy(same)
    for reading in moisture_only["readings"]:
        reading["values"] = {"moisture": 2.7}
    renamed = copy.deepcopy(same)
    for number, reading in enumerate(renamed["readings"]):
        reading["measurement"] = f"again-{number}"
    for way in (
        same,
        renamed,
        {**same, "line": "tower-2"},
        {**same, "units": in_grams["units"]},
        moisture_only,
    ):
        response = callers["mes"].post(RETESTS, way)
        assert problem(response) == (409, "/problems/reading-already-judged"), response.get_json()
    twice = further()
    twice["readings"].append(twice["readings"][0])
    assert problem(callers["mes"].post(RETESTS, twice)) == (409, "/problems/reading-already-judged")
    assert chain_lengths(app) == {"tower-1": 1}


def test_a_judged_lot_is_judged_again_only_by_a_retest(app: Flask, callers: Callers) -> None:
    """Neither by another line, nor another specification, nor a name that differs in what is trimmed."""
    done(callers["mes"].post("/v1/decisions", first()))
    fresh = house.moved(first(moisture=(2.7, 2.7)), minutes=90)
    for changes in (
        {},
        {"line": "tower-2"},
        {"specifications": ["legal"]},
        {"lot": " W26-04711 "},
    ):
        response = callers["mes"].post("/v1/decisions", {**fresh, **changes})
        assert problem(response) == (409, "/problems/lot-already-judged")
    assert chain_lengths(app) == {"tower-1": 1}


def test_a_retest_names_no_specification_and_no_lot(callers: Callers) -> None:
    """It keeps what the lot was judged against."""
    done(callers["mes"].post("/v1/decisions", first()))
    for changes in ({"specifications": ["legal"]}, {"lot": "W26-04712"}, {"product": "skim-milk-powder"}):
        response = callers["mes"].post(RETESTS, further(**changes))
        assert problem(response) == (422, "/problems/invalid-request")
    answer = done(callers["mes"].post(RETESTS, further()))
    assert [verdict["specification"]["code"] for verdict in answer["verdicts"]] == [SPECIFICATION]


def test_many_readings_in_one_round_do_not_shrink_the_uncertainty(app: Flask, callers: Callers) -> None:
    """Neither as samples nor as readings of one; not in one call, nor cut into calls that do not count."""
    done(callers["mes"].post("/v1/decisions", first()))
    most = example(documents.BudgetDocument)["procedure"]
    many = further(tuple([2.9] * (most["readings_per_sample"]["most"] + 1)))
    assert problem(callers["mes"].post(RETESTS, many)) == (422, "/problems/invalid-request")
    samples = further(tuple([2.9] * (2 * most["samples"]["most"] + 2)))
    for place, reading in enumerate(samples["readings"]):
        reading["sample"] = f"{2 + place // 2}"
    assert problem(callers["mes"].post(RETESTS, samples)) == (422, "/problems/invalid-request")
    # One reading at a time does not count as a round, but each is kept and counts into the next.
    for minute in range(most["samples"]["most"]):
        answer = done(callers["mes"].post(RETESTS, further((2.9,), f"{minute + 2}", 100 + minute)))
        assert (answer["outcome"], answer["rounds_left"]) == ("hold", 1)
    assert problem(callers["mes"].post(RETESTS, further((2.9,), "99", 200))) == (
        422,
        "/problems/invalid-request",
    )


def test_a_reading_that_was_held_back_from_judgement_is_kept(callers: Callers) -> None:
    """A line that sees a high value and sends it without its flag has not got rid of it."""
    hidden = first(moisture=(3.4, 3.4))
    for reading in hidden["readings"]:
        reading["flags"] = {}
    held = done(callers["mes"].post("/v1/decisions", hidden))
    assert (held["outcome"], held["rounds_left"]) == ("hold", 2)
    answer = done(callers["mes"].post(RETESTS, further((2.7, 2.7))))
    (verdict,) = answer["verdicts"]
    assert verdict["readings"] == 4
    assert verdict["estimate"] > 2.9
    assert answer["outcome"] == "hold"


def test_after_the_planned_rounds_a_lot_is_read_no_more(app: Flask, callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", first()))
    answer = done(callers["mes"].post(RETESTS, further((3.15, 3.15))))
    assert (answer["outcome"], answer["rounds_left"]) == ("hold", 0)
    assert answer["reasons"][0]["next"].startswith("The rule plans no further readings.")
    for line in ("tower-1", "tower-2"):
        response = callers["mes"].post(RETESTS, further((2.5, 2.5), "3", 60, line=line))
        assert problem(response) == (409, "/problems/no-rounds-left")
        assert response.get_json()["link"] == "/v1/decisions/tower-1.2"
    assert chain_lengths(app) == {"tower-1": 2}


def test_a_rule_of_one_round_plans_none(callers: Callers) -> None:
    held = done(
        callers["mes"].post("/v1/decisions", first(moisture=(3.19, 3.19), specifications=["customer-b"]))
    )
    assert (held["outcome"], held["rounds_left"]) == ("hold", 0)
    assert problem(callers["mes"].post(RETESTS, further())) == (409, "/problems/no-rounds-left")


@pytest.mark.parametrize(("moisture", "outcome"), [((2.7, 2.7), "release"), ((3.6, 3.6), "reject")])
def test_only_a_lot_on_hold_is_read_again(callers: Callers, moisture: Any, outcome: str) -> None:
    """What was rejected stays so; what was released is not asked again."""
    assert done(callers["mes"].post("/v1/decisions", first(moisture=moisture)))["outcome"] == outcome
    response = callers["mes"].post(RETESTS, further())
    assert problem(response) == (409, "/problems/lot-not-held")
    assert outcome in response.get_json()["detail"]


def test_a_lot_that_was_never_judged_is_not_read_again(callers: Callers) -> None:
    assert problem(callers["mes"].post(RETESTS, further())) == (404, "/problems/not-found")


def test_only_a_line_reads_again(callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", first()))
    for who in ("engineer", "auditor", "max"):
        assert callers[who].post(RETESTS, further()).status_code == 403
    # And with a key, as all that is recorded.
    assert callers["mes"].send("POST", RETESTS, further()).status_code == 400


def test_another_version_of_the_rule_does_not_open_a_new_round(callers: Callers) -> None:
    """A laxer version, approved between the rounds, holds the lot and says so."""
    done(callers["mes"].post("/v1/decisions", first()))
    engineer, approver = callers["engineer"], callers["max"]
    laxer = house.specification(SPECIFICATION, 3.3, {**RULE, "rounds": 5})
    done(engineer.post(f"/v1/specifications/{SPECIFICATION}/versions", laxer))
    one = f"/v1/specifications/{SPECIFICATION}/versions/2"
    done(engineer.post(f"{one}/submit"), 200)
    done(approver.post(f"{one}/approve", house.signed()), 200)
    answer = done(callers["mes"].post(RETESTS, further()))
    assert answer["outcome"] == "hold"
    assert [reason["code"] for reason in answer["reasons"]] == ["terms-changed"]


def test_readings_of_the_future_and_of_strange_analyzers_are_refused(callers: Callers) -> None:
    done(callers["mes"].post("/v1/decisions", first()))
    future = further()
    moment = datetime.now().astimezone() + timedelta(hours=1)
    future["readings"][0]["taken_at"] = moment.isoformat()
    strange = further()
    strange["readings"][0]["analyzer"] = "nir-9"
    for way in (future, strange, further(line="tower-9"), further(units={"moisture": "kg"})):
        assert problem(callers["mes"].post(RETESTS, way)) == (422, "/problems/invalid-request")


def test_a_simple_rule_has_no_rounds(callers: Callers) -> None:
    rule = {"kind": "simple", "largest_standard_uncertainty": 0.2, "rounds": 2}
    response = callers["engineer"].post("/v1/specifications", house.specification("simple-one", 3.2, rule))
    assert problem(response) == (422, "/problems/invalid-request")
    (fault,) = response.get_json()["errors"]
    assert fault["pointer"] == "#/requires/0/decision_rule/rounds"
