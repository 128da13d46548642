"""Replicates that disagree are held by the level of the rule, or of the plant; and what is said then."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import pytest

from budgets.evidence.evaluation import MeanSquare, Term
from budgets.replicates import critical_range_factor
from service.documents import Reading, RuleOfDecision
from service.workflows.calendar import DEFAULT_PLANT
from service.workflows.judging import judge
from tests.service.workflows.registers import (
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

# Of a single reading, in the budget that the tests judge by.
REPEATABILITY = 0.06 * math.sqrt(2)


def verdict_of(*readings: Reading, level: float | None = None, plant: float | None = 0.99) -> dict[str, Any]:
    rule = RuleOfDecision("guarded_by_specific_risk", largest_risk=0.05, replicate_level=level)
    specification = a_specification("customer-b", a_requirement(decision_rule=rule))
    register = a_register(
        specifications={"customer-b": specification}, plant=replace(DEFAULT_PLANT, replicate_level=plant)
    )
    answer = judge(register, a_request(*readings), NOW)
    verdict: dict[str, Any] = answer["verdicts"][0]
    return {**verdict, "reasons": answer["reasons"]}


def two_apart(distance: float) -> tuple[Reading, Reading]:
    return a_reading(2.8 - distance / 2, 1), a_reading(2.8 + distance / 2, 2)


@pytest.mark.parametrize(
    ("level", "plant", "counts"), [(None, None, 0.99), (None, 0.95, 0.95), (0.9999, 0.95, 0.9999)]
)
def test_the_level_is_the_rules_else_the_plants_else_the_programs(
    level: float | None, plant: float | None, counts: float
) -> None:
    critical = critical_range_factor(2, counts) * REPEATABILITY
    near = verdict_of(*two_apart(critical * 0.99), level=level, plant=plant)
    far = verdict_of(*two_apart(critical * 1.01), level=level, plant=plant)
    assert near["replicates"]["level"] == far["replicates"]["level"] == counts
    assert near["replicates"]["checks"][0]["critical_difference"] == pytest.approx(critical)
    assert near["replicates"]["checks"][0]["agrees"]
    assert (near["outcome"], near["reasons"]) == ("release", [])
    assert far["outcome"] == "hold"
    assert [reason["code"] for reason in far["reasons"]] == ["replicates-disagree"]


def test_disagreeing_readings_are_not_trusted_either_way() -> None:
    """Their mean is far outside of tolerance; it is no rejection, and no probability is given."""
    verdict = verdict_of(a_reading(3.6, 1), a_reading(4.4, 2))
    assert (verdict["outcome"], verdict["conformance_probability"]) == ("hold", None)


def test_the_hold_says_how_far_and_what_to_do() -> None:
    verdict = verdict_of(*two_apart(0.4))
    (reason,) = verdict["reasons"]
    assert "2 readings of moisture differ by 0.4 %" in reason["detail"]
    assert "critical difference 0.309 %" in reason["detail"]
    assert "1 %" in reason["detail"]
    # CR(4) at 99 %: 4.4028 times the standard deviation of a reading
    assert "Read sample 1 2 more times. If all 4 readings lie within 0.374 %" in reason["next"]
    assert "median" in reason["next"]


def test_four_that_still_disagree_leave_their_median() -> None:
    readings = [a_reading(value, second) for second, value in enumerate((2.6, 2.7, 2.76, 3.2))]
    (reason,) = verdict_of(*readings)["reasons"]
    assert "median is 2.73 %" in reason["next"]
    assert "more times" not in reason["next"]


def test_more_readings_are_asked_for_within_the_procedure_only() -> None:
    """The procedure has 4 readings of a sample: a fifth would be a fault."""
    readings = [a_reading(value, second) for second, value in enumerate((2.6, 2.7, 3.2))]
    (reason,) = verdict_of(*readings)["reasons"]
    assert "median is 2.7 %" in reason["next"]


def test_how_often_good_lots_are_held_counts_every_sample() -> None:
    readings = [a_reading(2.8, second, sample=str(second // 2)) for second in range(4)]
    figures = verdict_of(*readings, level=0.95)["replicates"]
    assert [check["sample"] for check in figures["checks"]] == ["0", "1"]
    assert figures["false_hold_rate"] == pytest.approx(1 - 0.95**2)


def test_samples_may_differ_by_more_than_readings() -> None:
    readings = [a_reading(2.6 + 0.5 * (second // 2), second, sample=str(second // 2)) for second in range(4)]
    assert all(check["agrees"] for check in verdict_of(*readings)["replicates"]["checks"])


def test_fillings_of_the_cup_add_what_separates_them() -> None:
    components = (
        a_component("repeatability", "moisture", "reading", 0.06),
        a_component("packing", "moisture", "presentation", 0.08),
        a_component("bias", "bias", "calibration", 0.05),
    )
    budget = a_budget_in_force(budget=a_budget(components=components))
    register = a_register(budgets={("whole-milk-powder", "moisture", "nir-1"): budget})

    def critical(*readings: Reading) -> float:
        answer = judge(register, a_request(*readings), NOW)
        found: float = answer["verdicts"][0]["replicates"]["checks"][0]["critical_difference"]
        return found

    factor = critical_range_factor(2, 0.99)
    assert critical(a_reading(2.8, 1), a_reading(2.81, 2)) == pytest.approx(factor * 0.06)
    apart = (a_reading(2.8, 1, presentation="a"), a_reading(2.81, 2, presentation="b"))
    assert critical(*apart) == pytest.approx(factor * 0.1)


def test_a_spread_that_vanishes_with_the_value_checks_nothing_there() -> None:
    relative = (Term(1.0, MeanSquare("test/share", 1e-4, math.inf)),)
    noise = replace(
        a_component("repeatability", "moisture", "reading", 0.1), terms=(), relative_terms=relative
    )
    components = (noise, a_component("bias", "bias", "calibration", 0.05))
    budget = a_budget_in_force(budget=a_budget(components=components, validated_range=(-1.0, 4.6)))
    register = a_register(budgets={("whole-milk-powder", "moisture", "nir-1"): budget})
    answer = judge(register, a_request(a_reading(0.0, 1), a_reading(0.0, 2)), NOW)
    assert answer["verdicts"][0]["replicates"] is None


def test_without_a_component_between_readings_nothing_is_checked() -> None:
    components = (
        a_component("all", "moisture", "lot", 0.08),
        a_component("bias", "bias", "calibration", 0.05),
    )
    budget = a_budget_in_force(budget=a_budget(components=components))
    register = a_register(budgets={("whole-milk-powder", "moisture", "nir-1"): budget})
    answer = judge(register, a_request(a_reading(2.5, 1), a_reading(3.0, 2)), NOW)
    assert answer["verdicts"][0]["replicates"] is None
