"""Monte Carlo at approval and on demand: what is stored, what decisions use, and that no writer waits."""

from __future__ import annotations

import copy
from typing import Any

import pytest
from flask import Flask

from service import documents
from service.errors import Unavailable
from service.workflows import monte_carlo
from service.workflows.budget_validation import ValidationCache, finding, shown, stored_tables
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done, example, fresh_key, signed
from tests.service.api.test_bad_input import problem

VERSIONS = "/v1/budgets/wmp-moisture-nir/versions"


def a_dominant_rectangle() -> dict[str, Any]:
    """Make the budget with one large error of which only the limits are known."""
    document = example(documents.BudgetDocument, reason="the dosing of water is known to its limits only")
    document["components"].append(
        {
            "code": "dosing",
            "quantity": "moisture",
            "level": "lot",
            "evidence": {
                "declaration": {
                    "meaning": "half_width",
                    "value": 0.6,
                    "unit": "%",
                    "distribution": "rectangular",
                    "document": "data sheet of the pump",
                }
            },
        }
    )
    return document


def approved(callers: Callers, document: dict[str, Any], version: int = 2) -> dict[str, Any]:
    done(callers["engineer"].post(VERSIONS, document))
    done(callers["engineer"].post(f"{VERSIONS}/{version}/submit"), 200)
    return done(callers["max"].post(f"{VERSIONS}/{version}/approve", signed()), 200)


def figures(callers: Callers, version: int) -> dict[str, Any]:
    path = f"{VERSIONS}/{version}/evaluation?specification=legal"
    return done(callers["engineer"].get(path), 200)


def test_what_was_found_at_approval_is_shown(callers: Callers) -> None:
    found = figures(callers, 1)["monte_carlo"]
    assert found["agrees"] and found["decisions_use"] == "law_of_propagation"
    assert found["sentence"].endswith("the law of propagation is validated here.")
    first = found["checks"][0]
    assert (first["readings_per_sample"], first["at"]) == ([2], {"moisture": 3.5})
    low, high = first["law_of_propagation"]["coverage_interval"]
    for one, other, difference in zip(
        (low, high), first["monte_carlo"]["coverage_interval"], first["differences"], strict=True
    ):
        assert difference == pytest.approx(abs(one - other), rel=1e-9)
        assert difference <= first["tolerance"]
    assert all(check["agrees"] for check in found["checks"])


def test_a_draft_was_not_checked_yet(callers: Callers) -> None:
    done(callers["engineer"].post(VERSIONS, example(documents.BudgetDocument)))
    assert figures(callers, 2)["monte_carlo"] is None


def test_decisions_use_the_quantiles_where_the_law_does_not_hold(callers: Callers) -> None:
    by_law = done(callers["mes"].post("/v1/decisions/preview", decision(), key=None), 200)
    approved(callers, a_dominant_rectangle())
    found = figures(callers, 2)
    assert not found["monte_carlo"]["agrees"]
    assert found["monte_carlo"]["decisions_use"] == "monte_carlo"
    assert "Decisions use the Monte Carlo distribution instead." in found["monte_carlo"]["sentence"]
    assert "tables" not in found["monte_carlo"]
    now = done(callers["mes"].post("/v1/decisions/preview", decision(), key=None), 200)
    assert {v["error_distribution"] for v in by_law["verdicts"]} == {"t"}
    assert {v["error_distribution"] for v in now["verdicts"]} == {"monte_carlo"}
    legal = next(v for v in now["verdicts"] if v["specification"]["code"] == "legal")
    assert legal["upper_acceptance_limit"] == pytest.approx(found["acceptance_limits"]["upper"], rel=1e-12)
    # One more reading of one sample than the balanced numbers have: compiled on the way, by the same tables.
    (limits, *_) = done(callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/moisture"), 200)["items"]
    assert limits["error_distribution"] == "monte_carlo"


def test_global_risks_do_not_rest_on_a_law_that_does_not_hold(callers: Callers) -> None:
    approved(callers, a_dominant_rectangle())
    asked = example(documents.GlobalRisksRequest, specification="legal")
    found = problem(callers["engineer"].post("/v1/global-risks", asked), 422, "not-supported")
    assert "law of propagation of wmp-moisture-nir" in found["detail"]


def test_a_specification_approved_later_takes_the_stored_quantiles(app: Flask, callers: Callers) -> None:
    approved(callers, a_dominant_rectangle())
    document = example(documents.Specification, code="legal", reason="a new regulation")
    document["requires"][0]["upper_tolerance_limit"]["value"] = 4.9
    versions = "/v1/specifications/legal/versions"
    done(callers["engineer"].post(versions, document))
    done(callers["engineer"].post(f"{versions}/2/submit"), 200)
    done(callers["max"].post(f"{versions}/2/approve", signed()), 200)
    with app.extensions["shoalmark"].database.reading() as unit_of_work:
        rules = unit_of_work.rules.in_force()
        numbers = [rule.numbers for rule in rules if rule.specification == "legal"]
        stored = unit_of_work.versions.in_force("budget", "wmp-moisture-nir")
        tables = stored_tables(stored.evaluation)
    assert numbers and all(each["distribution"] is not None for each in numbers)
    assert {each["distribution"]["trials"] for each in numbers} == {tables.other.trials}


def test_the_record_holds_what_was_found(app: Flask, callers: Callers) -> None:
    approved(callers, a_dominant_rectangle())
    with app.extensions["shoalmark"].database.reading() as unit_of_work:
        stored = unit_of_work.versions.in_force("budget", "wmp-moisture-nir")
        entry = unit_of_work.ledger.entry(stored.chain, stored.sequence)
    found = entry.content["evaluation"]["monte_carlo"]
    assert found == stored.evaluation["monte_carlo"]
    assert found["seed"] == monte_carlo.SEED and found["program"]["numpy"]
    assert found["tables"]["other"]["trials"] >= 500_000


def test_a_replay_needs_no_run_and_no_run_is_made_in_the_writer(
    app: Flask, callers: Callers, monkeypatch: pytest.MonkeyPatch
) -> None:
    """With the helper process gone nothing new is approved, and what was approved is answered again."""
    done(callers["engineer"].post(VERSIONS, a_dominant_rectangle()))
    done(callers["engineer"].post(f"{VERSIONS}/2/submit"), 200)
    key = fresh_key()
    first = done(callers["max"].post(f"{VERSIONS}/2/approve", signed(), key=key), 200)
    services = app.extensions["shoalmark"]

    def gone(*_: Any, **__: Any) -> None:
        raise Unavailable("Other evaluations are under way; nothing was recorded, try again.")

    monkeypatch.setattr(services.helper, "run", gone)
    assert done(callers["max"].post(f"{VERSIONS}/2/approve", signed(), key=key), 200) == first
    document = a_dominant_rectangle()
    document["components"][-1]["evidence"]["declaration"]["value"] = 0.7
    done(callers["engineer"].post(VERSIONS, document))
    problem(callers["engineer"].post(f"{VERSIONS}/3/submit"), 503, "unavailable")
    assert done(callers["engineer"].get(f"{VERSIONS}/3"), 200)["state"] == "draft"


def test_what_was_found_is_kept_from_submitting_to_approving(
    app: Flask, callers: Callers, monkeypatch: pytest.MonkeyPatch
) -> None:
    runs = []
    services = app.extensions["shoalmark"]
    own = services.helper.run
    monkeypatch.setattr(services.helper, "run", lambda *args, **more: runs.append(args) or own(*args, **more))
    approved(callers, a_dominant_rectangle())
    assert len(runs) == 1


def test_another_budget_than_was_checked_is_not_approved() -> None:
    with pytest.raises(Unavailable, match="changed meanwhile"):
        finding({}, "sha256:0")


def test_the_last_findings_are_kept() -> None:
    cache, made = ValidationCache(), []
    for digest in [*map(str, range(65)), "64", "0"]:
        cache.get(digest, lambda digest=digest: made.append(digest))
    assert made == [*map(str, range(65)), "0"]


def test_versions_from_before_there_was_a_check() -> None:
    assert stored_tables({"digest": "sha256:0"}) is None
    assert shown({"digest": "sha256:0"}) is None


def run(callers: Callers, **wanted: Any) -> Any:
    return callers["engineer"].post(f"{VERSIONS}/1/monte-carlo", wanted)


def test_a_run_on_demand(callers: Callers) -> None:
    first = done(run(callers, trials=200_000, seed=5, at={"moisture": 3.1}), 200)
    assert first == done(run(callers, trials=200_000, seed=5, at={"moisture": 3.1}), 200)
    assert (first["seed"], first["at"], first["monte_carlo"]["trials"]) == (5, {"moisture": 3.1}, 200_000)
    other = done(run(callers, trials=200_000, seed=6, at={"moisture": 3.1}), 200)
    assert other["monte_carlo"]["coverage_interval"] != first["monte_carlo"]["coverage_interval"]
    assert first["law_of_propagation"]["estimate"] == pytest.approx(3.1)
    assert first["digest"] == figures(callers, 1)["digest"]


def test_a_run_with_the_tolerance_of_the_digits(callers: Callers) -> None:
    """Two digits of a standard uncertainty of 0.1 are half of a hundredth (JCGM 101, 7.9.2, from memory)."""
    found = done(run(callers, significant_digits=2), 200)
    u = found["law_of_propagation"]["combined_standard_uncertainty"]
    assert found["tolerance"] == (0.005 if u >= 0.0995 else 0.0005)
    assert found["with_known_variances"] is None
    # The law is off by more than that, as few trials show already: their number was no matter of a tolerance.
    assert (found["monte_carlo"]["tolerance"], found["monte_carlo"]["holds_tolerance"]) == (None, None)


def test_a_run_of_a_draft(callers: Callers) -> None:
    done(callers["engineer"].post(VERSIONS, a_dominant_rectangle()))
    found = done(callers["engineer"].post(f"{VERSIONS}/2/monte-carlo", {}), 200)
    assert (found["state"], found["agrees"]) == ("draft", False)
    assert found["sentence"].endswith("the law of propagation is not validated here.")


@pytest.mark.parametrize(
    ("wanted", "pointer"),
    [
        ({"trials": 0}, "#/trials"),
        ({"trials": 500}, "#/trials"),
        ({"trials": 100_000_000}, "#/trials"),
        ({"trials": 2.5}, "#/trials"),
        ({"seed": -1}, "#/seed"),
        ({"significant_digits": 9}, "#/significant_digits"),
        ({"at": {"fat": 26.0}}, "#/at/moisture"),
        ({"at": {"moisture": "3,1"}}, "#/at/moisture"),
        ({"at": {"moisture": 99.0}}, "#/at/moisture"),
    ],
)
def test_a_run_that_cannot_be_made(callers: Callers, wanted: dict[str, Any], pointer: str) -> None:
    found = problem(run(callers, **wanted), 422, "invalid-request")
    assert [fault["pointer"] for fault in found["errors"]] == [pointer]


def test_a_run_of_a_version_that_does_not_exist(callers: Callers) -> None:
    problem(callers["engineer"].post(f"{VERSIONS}/9/monte-carlo", {}), 404, "not-found")
    problem(callers["nobody"].post(f"{VERSIONS}/1/monte-carlo", {}), 401, "unauthenticated")


def test_items_are_not_judged_where_the_law_does_not_hold(callers: Callers) -> None:
    approved(callers, a_dominant_rectangle())
    document = copy.deepcopy(example(documents.Specification, code="by-item"))
    document["requires"][0].update(judged="item", item_share=0.9, item_spread="from_lot")
    done(callers["engineer"].post("/v1/specifications", document))
    submitted = callers["engineer"].post("/v1/specifications/by-item/versions/1/submit")
    assert "Monte Carlo quantiles where items are judged" in str(
        problem(submitted, 422, "invalid-request")["errors"]
    )
