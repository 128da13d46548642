"""What a requirement may say, from the draft over its approval to a recorded decision and the limits now."""

from __future__ import annotations

from typing import Any

import pytest

from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done

RISK = {"kind": "guarded_by_specific_risk", "largest_risk": 0.05}


def stated(code: str, upper: float, **members: Any) -> dict[str, Any]:
    """Give a specification whose one requirement says more."""
    document = house.specification(code, upper, {**RISK, **members.pop("rule", {})})
    document["requires"][0].update(members)
    return document


def in_force(callers: Callers, document: dict[str, Any]) -> None:
    house.put_in_force(callers["engineer"], callers["max"], "specifications", document)


def judged(callers: Callers, code: str, *moisture: float) -> dict[str, Any]:
    request = decision(f"lot of {code}", moisture=moisture, specifications=[code])
    answer = done(callers["mes"].post("/v1/decisions", request))
    again = done(callers["auditor"].get(f"/v1/decisions/{answer['id']}"), 200)
    assert again["verdicts"] == answer["verdicts"]
    verdict: dict[str, Any] = answer["verdicts"][0]
    return verdict


def limits_now(callers: Callers, code: str) -> list[dict[str, Any]]:
    answer = done(callers["mes"].get("/v1/acceptance-limits/whole-milk-powder/moisture"), 200)
    return [item for item in answer["items"] if item["specification"]["code"] == code]


def test_rounded_comparison_and_guarded_rejection(callers: Callers) -> None:
    guarded = {"rejection": "guarded"}
    in_force(callers, stated("rounding", 3.2, comparison="rounded", decimals=1, rule=guarded))
    verdict = judged(callers, "rounding", 3.3, 3.3)
    assert verdict["outcome"] == "hold"
    assert verdict["upper_tolerance_limit"] == 3.2
    assert verdict["comparison"]["effective_upper_tolerance_limit"] == 3.25
    acceptance, rejection = verdict["upper_acceptance_limit"], verdict["upper_rejection_limit"]
    assert 3.25 - acceptance == pytest.approx(rejection - 3.25)
    now = limits_now(callers, "rounding")[0]
    assert (now["upper_acceptance_limit"], now["upper_rejection_limit"]) == (acceptance, rejection)


@pytest.mark.parametrize("spread", ["known", "from_lot"])
def test_items_need_a_spread(callers: Callers, spread: str) -> None:
    """The budget of the house has one sample and no component between samples: neither can be judged."""
    code = "items-" + spread.replace("_", "-")
    document = stated(code, 5.0, judged="item", item_share=0.9, item_spread=spread)
    done(callers["engineer"].post("/v1/specifications", document))
    one = f"/v1/specifications/{document['code']}/versions/1"
    refused = done(callers["engineer"].post(f"{one}/submit"), 422)
    words = "no component at the level 'sample'" if spread == "known" else "two samples at least"
    assert words in refused["errors"][0]["detail"]


def test_probabilities_within_the_domain(callers: Callers) -> None:
    in_force(callers, stated("near-the-bound", 5.0, within_domain=True))
    verdict = judged(callers, "near-the-bound", 2.7, 2.7)
    assert (verdict["outcome"], verdict["within_domain"]) == ("release", True)
    assert limits_now(callers, "near-the-bound")[0]["within_domain"] is True


@pytest.mark.parametrize(
    ("members", "pointer"),
    [
        ({"comparison": "rounded", "decimals": None}, "#/requires/0/decimals"),
        ({"comparison": "rounded", "decimals": 0}, "#/requires/0/upper_tolerance_limit"),
        ({"judged": "item"}, "#/requires/0/item_share"),
        ({"item_share": 0.9}, "#/requires/0/item_share"),
        ({"judged": "item", "item_share": 0.3, "item_spread": "known"}, "#/requires/0/item_share"),
        ({"rule": {"rejection": "never"}}, "#/requires/0/decision_rule/rejection"),
    ],
)
def test_a_requirement_that_does_not_fit_is_refused_with_its_place(
    callers: Callers, members: dict[str, Any], pointer: str
) -> None:
    refused = done(callers["engineer"].post("/v1/specifications", stated("wrong", 3.2, **members)), 422)
    assert pointer in [fault["pointer"] for fault in refused["errors"]]


def test_a_rounded_limit_in_another_unit_is_refused(callers: Callers) -> None:
    document = stated("in-grams", 32.0, comparison="rounded", decimals=1)
    document["requires"][0]["upper_tolerance_limit"]["unit"] = "g/kg"
    refused = done(callers["engineer"].post("/v1/specifications", document), 422)
    assert [fault["pointer"] for fault in refused["errors"]] == ["#/requires/0/upper_tolerance_limit/unit"]


def test_a_simple_rule_has_nothing_to_mirror(callers: Callers) -> None:
    rule = {"kind": "simple", "largest_standard_uncertainty": 1.0, "rejection": "guarded"}
    document = house.specification("plain", 3.2, rule)
    refused = done(callers["engineer"].post("/v1/specifications", document), 422)
    assert [fault["pointer"] for fault in refused["errors"]] == ["#/requires/0/decision_rule/rejection"]
