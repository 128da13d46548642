"""A lot judged again with all its readings: pure, from what was decided before."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from scipy.stats import norm

from budgets.budget import Count, Procedure
from budgets.looks import Look, probability_of_release
from budgets.planned_looks import risk_per_look_of
from budgets.propagation import Counts
from budgets.release import ReleaseRule
from service.documents import Reading, Requirement, RuleOfDecision, ToleranceLimit
from service.errors import InvalidRequest
from service.schemas import dump
from service.workflows.earlier_looks import FIRST_LOOK, EarlierLooks
from service.workflows.judging import judge
from service.workflows.register import Register
from service.workflows.rules import RuleKey, compile_pair, compile_rule, decision_rule, stored_rule, tolerance
from tests.service.workflows.registers import (
    BIAS,
    NOW,
    a_budget,
    a_budget_in_force,
    a_component,
    a_reading,
    a_register,
    a_request,
    a_requirement,
    a_specification,
)

LIMIT = 3.2
SAMPLING, COMMON = 0.08, 0.06


def a_rule(rounds: int = 2, **changes: Any) -> Requirement:
    rule = RuleOfDecision("guarded_by_specific_risk", largest_risk=0.05, rounds=rounds)
    return a_requirement(decision_rule=rule, **changes)


def budget_of_samples() -> Any:
    """One reading per sample: what scatters from sample to sample, and a bias that all readings share."""
    return a_budget(
        components=(
            a_component("sampling", "moisture", "sample", SAMPLING),
            a_component("bias", "bias", "calibration", COMMON),
        ),
        procedure=Procedure(samples=Count(1, 1, 3), readings_per_sample=Count(1, 1, 2)),
    )


def a_plant(*requires: Requirement, **changes: Any) -> Register:
    """Compile the rules as an approval does."""
    register = a_register(
        specifications={"customer-b": a_specification("customer-b", *(requires or (a_rule(),)))},
        budgets={
            ("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(
                budget=budget_of_samples(), **changes
            )
        },
    )
    specification = register.specifications["customer-b"]
    (budget,) = register.budgets.values()
    requirement = specification.document.requires[0]
    moisture = register.characteristics["whole-milk-powder", "moisture"]
    rules = {
        RuleKey(
            "customer-b", specification.version, "moisture", budget.document.code, budget.version, counts
        ): stored_rule(numbers)
        for counts, numbers in compile_pair(budget.budget, requirement, moisture, label="").items()
    }
    return replace(register, rules=rules)


def reading(moisture: float, sample: str, second: int = 1, **changes: Any) -> Reading:
    """Give a reading whose estimate is ``moisture``."""
    return a_reading(moisture + BIAS, second, sample=sample, **changes)


def look(
    register: Register, earlier: EarlierLooks, *readings: Reading, **changes: Any
) -> tuple[dict[str, Any], EarlierLooks]:
    """Judge further readings; give the answer, and what is known to the next look."""
    request = a_request(*readings, **changes)
    answer = judge(register, request, NOW, earlier)
    decided = {**answer, "request": dump(request)}
    identity = f"tower-1.{earlier.round}"
    after = EarlierLooks((*earlier.identities, identity), (*earlier.decisions, decided))
    return answer, after


def test_the_second_look_joins_the_readings_of_the_first() -> None:
    register = a_plant()
    first, earlier = look(register, FIRST_LOOK, reading(3.1, "1"))
    assert (first["outcome"], first["round"], first["rounds_left"], first["joins"]) == ("hold", 1, 1, [])
    second, _ = look(register, earlier, reading(2.9, "2"), reading(2.95, "3"))
    (verdict,) = second["verdicts"]
    assert (second["round"], second["joins"]) == (2, ["tower-1.1"])
    assert (verdict["samples"], verdict["readings"]) == (3, 3)
    assert verdict["estimate"] == pytest.approx((3.1 + 2.9 + 2.95) / 3)
    u = math.sqrt(SAMPLING**2 / 3 + COMMON**2)
    assert verdict["combined_standard_uncertainty"] == pytest.approx(u)
    # Both looks take the risk per look, which holds the 5 % over both.
    per_look = risk_per_look_of(
        budget_of_samples(),
        tolerance(a_rule(), register.characteristics["whole-milk-powder", "moisture"]),
        decision_rule(a_rule().decision_rule),
    )
    assert per_look is not None
    assert 0.025 < per_look < 0.035
    assert verdict["risk_per_look"] == first["verdicts"][0]["risk_per_look"] == per_look
    assert verdict["upper_acceptance_limit"] == pytest.approx(LIMIT - norm.isf(per_look) * u)
    assert second["outcome"] == "release"
    assert second["rounds_left"] == 0
    assert "held over 2 rounds" in verdict["display"]["statement"]


def test_the_same_sample_again_averages_no_sampling() -> None:
    register = a_plant()
    _, earlier = look(register, FIRST_LOOK, reading(3.1, "1"))
    second, _ = look(register, earlier, reading(3.0, "1", 2))
    (verdict,) = second["verdicts"]
    assert (verdict["samples"], verdict["readings"]) == (1, 2)
    assert verdict["combined_standard_uncertainty"] == pytest.approx(math.hypot(SAMPLING, COMMON))


def test_the_readings_of_a_look_are_those_that_the_procedure_allows() -> None:
    """Three samples may be taken in each round, but not four in one."""
    register = a_plant()
    _, earlier = look(register, FIRST_LOOK, *(reading(3.1, f"{i}") for i in range(3)))
    answer, _ = look(register, earlier, *(reading(3.1, f"{i}") for i in range(3, 6)))
    assert answer["verdicts"][0]["samples"] == 6
    with pytest.raises(InvalidRequest, match="More was read"):
        look(register, earlier, *(reading(3.1, f"{i}") for i in range(3, 7)))


def test_units_are_those_of_each_call() -> None:
    register = a_plant()
    _, earlier = look(register, FIRST_LOOK, reading(3.1, "1"))
    in_grams = a_reading(10 * (2.9 + BIAS), 9, sample="2")
    second, _ = look(register, earlier, in_grams, units={"moisture": "g/kg"})
    assert second["verdicts"][0]["estimate"] == pytest.approx(3.0)


def test_what_is_said_to_come_next_is_the_power_of_that_look() -> None:
    """By rule 41: y12 = w1 y1 + w2 y2 with the variance of its change, sampling alone."""
    register = a_plant()
    answer, earlier = look(register, FIRST_LOOK, reading(3.05, "1"))
    (reason,) = answer["reasons"]
    assert reason["code"] == "in-guard-band"
    per_look = answer["verdicts"][0]["risk_per_look"]

    def power(samples: int) -> float:
        together = samples + 1
        limit = LIMIT - norm.isf(per_look) * math.sqrt(SAMPLING**2 / together + COMMON**2)
        change = SAMPLING * math.sqrt(1 - 1 / together)
        return float(norm.cdf((limit - 3.05) / change))

    assert power(1) < 0.5 < power(3)
    assert reason["next"] == f"Take 3 more samples: release is then likely ({power(3):.2f})."
    # After the last round there is nothing to read.
    last, _ = look(register, earlier, reading(3.2, "2"))
    assert last["outcome"] == "hold"
    assert last["rounds_left"] == 0
    assert last["reasons"][0]["next"].startswith("The rule plans no further readings.")


@pytest.mark.parametrize(
    ("moisture", "words"),
    [
        (3.02, "Take 1 more sample: release is then likely (0."),
        (3.1, "Take 3 more samples: release is then possible (0."),
        (3.199, "No further reading within the procedure can settle it."),
    ],
)
def test_the_next_step_says_how_likely_it_helps(moisture: float, words: str) -> None:
    answer, _ = look(a_plant(), FIRST_LOOK, reading(moisture, "1"))
    assert answer["reasons"][0]["next"].startswith(words)


@pytest.mark.parametrize(
    ("moisture", "words"),
    [
        (3.03, "Take 1 more sample, 2 readings: release"),
        (3.07, "Take 2 more samples, 2 readings of each: release"),
    ],
)
def test_more_readings_of_a_sample_are_named(moisture: float, words: str) -> None:
    register = a_plant()
    budget = a_budget_in_force(
        budget=replace(
            budget_of_samples(),
            procedure=Procedure(samples=Count(1, 2, 2), readings_per_sample=Count(1, 2, 2)),
        )
    )
    register = replace(
        register, budgets={("whole-milk-powder", "moisture", "nir-1"): budget}, rules=register.rules
    )
    answer, _ = look(register, FIRST_LOOK, reading(moisture, "1"))
    assert answer["reasons"][0]["next"].startswith(words)


def test_a_look_counts_only_once_an_estimate_was_compared_with_a_limit() -> None:
    register = a_plant()
    unflagged = replace(reading(3.1, "1"), flags={})
    first, earlier = look(register, FIRST_LOOK, unflagged)
    assert (first["outcome"], first["rounds_left"]) == ("hold", 2)
    assert [reason["code"] for reason in first["reasons"]] == ["flag-missing"]
    # The reading is not lost: it is joined, and holds the lot until somebody sets it aside.
    second, _ = look(register, earlier, reading(2.8, "2"))
    assert (second["outcome"], second["rounds_left"]) == ("hold", 2)
    assert second["verdicts"][0]["readings"] == 2
    assert [reason["code"] for reason in second["reasons"]] == ["flag-missing"]


def test_what_was_missing_is_sent_later_as_the_first_look() -> None:
    register = a_plant()
    fat_only = replace(reading(3.0, "1"), values={"fat": 26.0})
    first, earlier = look(register, FIRST_LOOK, fat_only, units={"fat": "%"})
    assert [reason["code"] for reason in first["reasons"]] == ["characteristic-missing"]
    second, _ = look(register, earlier, reading(3.1, "2"))
    assert (second["outcome"], second["round"], second["rounds_left"]) == ("hold", 2, 1)


def test_readings_that_were_too_few_count_into_the_next_look() -> None:
    """The two samples of a look may come in two calls, but no more of them than in one."""
    procedure = Procedure(samples=Count(2, 2, 2), readings_per_sample=Count(1, 1, 2))
    budget = a_budget_in_force(budget=replace(budget_of_samples(), procedure=procedure))
    register = replace(a_plant(), budgets={("whole-milk-powder", "moisture", "nir-1"): budget})
    first, earlier = look(register, FIRST_LOOK, reading(3.0, "1"))
    assert [reason["code"] for reason in first["reasons"]] == ["too-few-readings"]
    with pytest.raises(InvalidRequest, match="More was read"):
        look(register, earlier, reading(3.0, "2"), reading(3.0, "3"))
    second, _ = look(register, earlier, reading(3.0, "2"))
    assert second["verdicts"][0]["samples"] == 2
    assert second["rounds_left"] == (1 if second["outcome"] == "hold" else 0)
    assert all(reason["code"] != "too-few-readings" for reason in second["reasons"])


@pytest.mark.parametrize(
    "changes",
    [
        {"version": 5},
        {"requirement": a_rule(3)},
        {"requirement": a_rule(upper_tolerance_limit=ToleranceLimit(3.4, "%"))},
    ],
    ids=["budget", "rule", "limit"],
)
def test_rounds_by_other_versions_are_held_and_say_so(changes: dict[str, Any]) -> None:
    _, earlier = look(a_plant(), FIRST_LOOK, reading(3.1, "1"))
    requirement = changes.pop("requirement", a_rule())
    register = a_plant(requirement, **changes)
    second, _ = look(register, earlier, reading(2.5, "2"))
    assert second["outcome"] == "hold"
    (reason,) = second["reasons"]
    assert reason["code"] == "terms-changed"
    assert "An earlier round was judged by" in reason["detail"]
    # Of a lot that was not compared yet nothing is lost: the versions in force now judge its first look.
    fat_only = replace(reading(3.0, "1"), values={"fat": 26.0})
    _, uncompared = look(a_plant(), FIRST_LOOK, fat_only, units={"fat": "%"})
    fresh, _ = look(register, uncompared, reading(2.5, "2"))
    assert fresh["outcome"] == "release"


def test_the_same_terms_in_a_new_version_go_on() -> None:
    _, earlier = look(a_plant(), FIRST_LOOK, reading(3.1, "1"))
    register = a_plant()
    specification = replace(register.specifications["customer-b"], version=4)
    register = replace(
        register,
        specifications={"customer-b": specification},
        rules={replace(key, specification_version=4): rule for key, rule in register.rules.items()},
    )
    second, _ = look(register, earlier, reading(2.7, "2"))
    assert second["outcome"] == "release"


def test_weights_belong_to_one_call() -> None:
    register = a_plant()
    _, earlier = look(register, FIRST_LOOK, reading(3.1, "1"))
    with pytest.raises(InvalidRequest) as caught:
        look(register, earlier, reading(2.9, "2", weight=1.0))
    assert "mean of sample means" in str(caught.value.faults[0].expected)


def test_a_specification_that_was_judged_stays_judged() -> None:
    """Neither the line nor a change of the product's defaults drops one; new defaults are added."""
    _, earlier = look(a_plant(), FIRST_LOOK, reading(3.1, "1"))
    register = a_plant()
    product = replace(register.products["whole-milk-powder"], default_specifications=("legal",))
    register = replace(register, products={**register.products, "whole-milk-powder": product})
    second, _ = look(register, earlier, reading(2.7, "2"))
    codes = [verdict["specification"]["code"] for verdict in second["verdicts"]]
    assert codes == ["customer-b", "legal"]
    assert second["outcome"] == "hold"
    named, earlier = look(register, FIRST_LOOK, reading(3.1, "1"), specifications=("customer-b",))
    assert named["rounds_left"] == 1
    second, _ = look(register, earlier, reading(2.7, "2"))
    assert [verdict["specification"]["code"] for verdict in second["verdicts"]] == ["customer-b"]


def test_a_rule_of_one_round_beside_one_of_two_does_not_hold_what_it_released() -> None:
    """It is judged again with all readings, and may hold then; released by each, the lot goes."""
    register = a_plant()
    once = a_specification("legal", a_rule(1, upper_tolerance_limit=ToleranceLimit(3.6, "%")))
    register = replace(
        register,
        specifications={**register.specifications, "legal": once},
        specification_products={**register.specification_products, "legal": "whole-milk-powder"},
    )
    both = ("customer-b", "legal")
    first, earlier = look(register, FIRST_LOOK, reading(3.1, "1"), specifications=both)
    assert [verdict["outcome"] for verdict in first["verdicts"]] == ["hold", "release"]
    assert first["rounds_left"] == 1
    second, _ = look(register, earlier, reading(2.7, "2"))
    assert [verdict["outcome"] for verdict in second["verdicts"]] == ["release", "release"]
    # Held by the rule of one round the lot is not read again, whatever the other allows.
    stuck, _ = look(register, FIRST_LOOK, reading(3.5, "1"), specifications=("legal",))
    assert stuck["rounds_left"] == 0


def test_a_simulated_plant_at_the_limit_releases_no_more_than_was_agreed() -> None:
    """200,000 lots exactly at the limit, by the rules that decisions use: a sample, held, then three more."""
    register = a_plant()
    specification = register.specifications["customer-b"]
    (budget,) = register.budgets.values()
    first = register.rule(specification, a_rule(), budget, Counts((1,)))
    second = register.rule(specification, a_rule(), budget, Counts((1, 1, 1, 1)), 2)
    assert isinstance(first, ReleaseRule) and isinstance(second, ReleaseRule)
    lots = 200_000
    generator = np.random.default_rng(29)
    samples = LIMIT + generator.normal(0, COMMON, (lots, 1)) + generator.normal(0, SAMPLING, (lots, 4))
    at_first = first.judge_many(samples[:, 0]).outcomes
    at_second = second.judge_many(samples.mean(axis=1)).outcomes
    released = (at_first == 0) | ((at_first == 1) & (at_second == 0))
    covariance = np.array(
        [[SAMPLING**2 + COMMON**2, SAMPLING**2 / 4 + COMMON**2], [0, SAMPLING**2 / 4 + COMMON**2]]
    )
    covariance[1, 0] = covariance[0, 1]
    looks = [
        Look((-math.inf, rule.upper_acceptance_limit or math.nan), (-math.inf, LIMIT))
        for rule in (first, second)
    ]
    predicted = probability_of_release(covariance, looks, LIMIT)
    error = math.sqrt(predicted * (1 - predicted) / lots)
    assert released.mean() == pytest.approx(predicted, abs=4 * error)
    assert 0.045 < predicted <= 0.05
    # Joined without the smaller risk per look, the same rule would release too many.
    once = compile_rule(
        budget.budget,
        Counts((1,)),
        a_rule(1),
        register.characteristics["whole-milk-powder", "moisture"],
    )
    assert isinstance(once, ReleaseRule) and once.upper_acceptance_limit is not None
    joined = LIMIT - norm.isf(0.05) * math.sqrt(covariance[1, 1])
    naive = [Look((-math.inf, limit), (-math.inf, LIMIT)) for limit in (once.upper_acceptance_limit, joined)]
    assert probability_of_release(covariance, naive, LIMIT) > 0.07
