"""A lot judged: outcomes, the reasons to hold whatever the value, and what the answer says."""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from typing import Any

import pytest
from scipy.stats import norm

from budgets.budget import Count, Procedure
from budgets.measurement_models import MeasurementModel, Quantity
from service.documents import DecisionRequest, Reading, Requirement, RuleOfDecision, ToleranceLimit
from service.errors import Conflict, InvalidRequest
from service.workflows.judging import judge
from service.workflows.register import Register
from tests.service.workflows.registers import (
    BIAS,
    NOW,
    STANDARD_UNCERTAINTY,
    a_budget,
    a_budget_in_force,
    a_component,
    a_reading,
    a_register,
    a_request,
    a_requirement,
    a_specification,
)

Z = norm.ppf(0.95)
ACCEPTANCE_LIMIT = 3.2 - Z * STANDARD_UNCERTAINTY


def twice(moisture: float, **changes: Any) -> tuple[Reading, Reading]:
    return a_reading(moisture, 1, **changes), a_reading(moisture, 2, **changes)


def judged(request: DecisionRequest | None = None, register: Register | None = None) -> dict[str, Any]:
    return judge(register or a_register(), request or a_request(), NOW)


def reasons(answer: dict[str, Any]) -> list[str]:
    return [reason["code"] for reason in answer["reasons"]]


# --- outcomes about the value --------------------------------------------------------------------------


def test_the_estimate_is_the_mean_of_sample_means_less_the_bias() -> None:
    request = a_request(
        a_reading(2.80, 1), a_reading(2.90, 2), a_reading(3.10, 3, sample="2"), a_reading(3.10, 4, sample="2")
    )
    verdict = judged(request)["verdicts"][0]
    assert verdict["estimate"] == pytest.approx((2.85 + 3.10) / 2 - BIAS, rel=1e-15)
    assert (verdict["samples"], verdict["readings"]) == (2, 4)


@pytest.mark.parametrize(
    ("estimate", "outcome", "reason"),
    [
        (ACCEPTANCE_LIMIT - 1e-9, "release", []),
        (ACCEPTANCE_LIMIT + 1e-9, "hold", ["in-guard-band"]),
        (3.2 - 1e-9, "hold", ["in-guard-band"]),
        (3.2 + 1e-9, "reject", ["outside-tolerance"]),
    ],
)
def test_the_outcome_follows_the_limits(estimate: float, outcome: str, reason: list[str]) -> None:
    answer = judged(a_request(*twice(estimate + BIAS)))
    assert (answer["outcome"], reasons(answer)) == (outcome, reason)


def test_the_figures_are_those_of_the_normal_distribution() -> None:
    """Compared with scipy.stats.norm, a general-purpose reference library."""
    verdict = judged(a_request(*twice(2.95)))["verdicts"][0]
    assert verdict["combined_standard_uncertainty"] == pytest.approx(STANDARD_UNCERTAINTY, rel=1e-14)
    assert verdict["effective_degrees_of_freedom"] is None
    assert verdict["expanded_uncertainty"] == pytest.approx(norm.ppf(0.975) * STANDARD_UNCERTAINTY, rel=1e-12)
    assert verdict["upper_acceptance_limit"] == pytest.approx(ACCEPTANCE_LIMIT, rel=1e-14)
    assert verdict["conformance_probability"] == pytest.approx(
        norm.cdf((3.2 - 3.0) / STANDARD_UNCERTAINTY), rel=1e-12
    )
    assert verdict["specific_consumers_risk"] == pytest.approx(
        norm.sf((3.2 - 3.0) / STANDARD_UNCERTAINTY), rel=1e-12
    )


def test_more_readings_move_the_acceptance_limit_outward_within_the_procedure() -> None:
    two = judged(a_request(*twice(2.9)))["verdicts"][0]
    four = judged(a_request(*(a_reading(2.9, second) for second in range(4))))["verdicts"][0]
    assert four["combined_standard_uncertainty"] == pytest.approx(math.hypot(0.06 / math.sqrt(2), 0.08))
    assert four["upper_acceptance_limit"] > two["upper_acceptance_limit"]


def test_units_are_converted_before_anything_is_compared() -> None:
    per_kilogram = a_request(*twice(29.1), units={"moisture": "g/kg"})
    assert judged(per_kilogram)["verdicts"][0]["estimate"] == pytest.approx(2.91 - BIAS, rel=1e-15)


def test_a_strict_limit_does_not_hold_its_own_value() -> None:
    """With no guard band the tolerance limit itself decides."""
    rule = RuleOfDecision("simple", largest_standard_uncertainty=0.2)
    exact = a_request(*twice(3.0))
    budgets = {("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(budget=a_budget(bias=0.0))}
    for inclusive, outcome in ((True, "release"), (False, "reject")):
        requirement = a_requirement(
            upper_tolerance_limit=ToleranceLimit(3.0, "%", inclusive), decision_rule=rule
        )
        register = a_register(
            specifications={"customer-b": a_specification("customer-b", requirement)}, budgets=budgets
        )
        assert judged(exact, register)["outcome"] == outcome


def test_a_bias_left_to_the_guard_band_stays_in_the_estimate() -> None:
    """Analyzer below reference (b < 0) harms at an upper limit: the guard band grows by -b (rule 31)."""
    budget = a_budget(bias_treatment="in_guard_band")
    budgets = {("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(budget=budget)}
    verdict = judged(a_request(*twice(2.9)), a_register(budgets=budgets))["verdicts"][0]
    assert verdict["estimate"] == pytest.approx(2.9, rel=1e-15)
    assert verdict["uncorrected_bias"] == BIAS
    assert verdict["guard_band"]["upper"] == pytest.approx(Z * STANDARD_UNCERTAINTY - BIAS, rel=1e-12)


# --- holds that are not about the value ----------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"calibration": "wmp-8"}, "another-calibration"),
        ({"taken_at": datetime(2026, 1, 9, 23, 59, tzinfo=UTC)}, "before-calibration"),
        ({"flags": {}}, "flag-missing"),
        ({"flags": {"distance-from-calibration-set": 3.1}}, "scan-flagged"),
        ({"influences": {"sample_temperature": 14.9}}, "influence-outside-range"),
        ({"influences": {"sample_temperature": 30.1}}, "influence-outside-range"),
    ],
)
def test_a_scan_that_cannot_be_trusted_holds_the_lot(changes: dict[str, Any], reason: str) -> None:
    request = a_request(a_reading(2.7, 1), a_reading(2.7, 2, **changes))
    answer = judged(request)
    assert (answer["outcome"], reasons(answer)) == ("hold", [reason])
    assert answer["reasons"][0]["next"]


@pytest.mark.parametrize("moisture", [1.9, 4.7])
def test_a_reading_outside_of_the_validated_range_is_held_even_beyond_the_limit(moisture: float) -> None:
    """A reading that cannot be trusted rejects no more than it releases."""
    answer = judged(a_request(*twice(moisture)))
    assert (answer["outcome"], reasons(answer)) == ("hold", ["outside-validated-range"])
    assert answer["verdicts"][0]["conformance_probability"] is None


def test_one_reading_outside_of_the_range_is_enough() -> None:
    answer = judged(a_request(a_reading(1.94, 1), a_reading(2.0, 2)))
    assert reasons(answer) == ["outside-validated-range"]


def test_fewer_readings_than_the_procedure_needs_are_held() -> None:
    answer = judged(a_request(a_reading(2.7)))
    assert (answer["outcome"], reasons(answer)) == ("hold", ["too-few-readings"])


@pytest.mark.parametrize(
    "readings",
    [
        [a_reading(2.7, second) for second in range(5)],
        [a_reading(2.7, n, sample=str(n // 2)) for n in range(6)],
    ],
    ids=["readings", "samples"],
)
def test_more_than_the_procedure_has_is_a_fault(readings: list[Reading]) -> None:
    """Many readings in one call must not shrink the uncertainty beyond the plan."""
    with pytest.raises(InvalidRequest) as caught:
        judged(a_request(*readings))
    assert "at most" in str(caught.value.faults[0].expected)


def test_lapsed_evidence_holds_from_its_instant_on_and_is_announced_before() -> None:
    def answer(lapses_at: str) -> dict[str, Any]:
        budget = a_budget_in_force(lapses_at=lapses_at)
        return judged(register=a_register(budgets={("whole-milk-powder", "moisture", "nir-1"): budget}))

    assert reasons(answer(NOW)) == ["evidence-lapsed"]
    soon = answer("2026-03-16T11:00:00.000000Z")
    assert soon["outcome"] == "release"
    assert soon["notices"][0]["code"] == "evidence-lapses"
    assert soon["notices"][0]["at"] == "2026-03-16T11:00:00.000000Z"
    assert answer("2027-03-16T11:00:00.000000Z")["notices"] == []


def test_a_lapsed_production_study_holds_what_rests_on_its_prior() -> None:
    def answer(lapses_at: str) -> dict[str, Any]:
        return judged(register=a_register(prior_lapses={("customer-b", "moisture"): lapses_at}))

    assert reasons(answer(NOW)) == ["evidence-lapsed"]
    assert "production study" in answer(NOW)["reasons"][0]["detail"]
    assert answer("2026-03-16T11:00:00.000000Z")["outcome"] == "release"


def test_a_required_characteristic_that_was_not_sent_is_held() -> None:
    both = a_specification("customer-b", a_requirement(), a_requirement(characteristic="fat"))
    answer = judged(register=a_register(specifications={"customer-b": both}))
    assert [verdict["outcome"] for verdict in answer["verdicts"]] == ["release", "hold"]
    assert (answer["outcome"], reasons(answer)) == ("hold", ["characteristic-missing"])


def test_without_a_budget_in_force_the_members_are_null() -> None:
    answer = judged(register=a_register(budgets={}))
    verdict = answer["verdicts"][0]
    assert (answer["outcome"], reasons(answer)) == ("hold", ["nothing-in-force"])
    for member in ("budget", "upper_acceptance_limit", "expanded_uncertainty", "conformance_probability"):
        assert verdict[member] is None


def test_a_specification_without_a_version_in_force_is_held() -> None:
    answer = judged(register=a_register(specifications={}))
    assert (answer["outcome"], reasons(answer)) == ("hold", ["nothing-in-force"])
    assert answer["verdicts"][0]["specification"] == {"code": "customer-b", "version": None}


def test_a_code_that_became_another_products_specification_is_held() -> None:
    others = a_specification()
    others = replace(others, document=replace(others.document, product="skim-milk-powder"))
    answer = judged(register=a_register(specifications={"customer-b": others}))
    assert (answer["outcome"], reasons(answer)) == ("hold", ["nothing-in-force"])
    assert answer["verdicts"][0]["upper_tolerance_limit"] is None


def test_a_product_without_specifications_is_held() -> None:
    products = dict(a_register().products)
    products["whole-milk-powder"] = replace(products["whole-milk-powder"], default_specifications=())
    answer = judged(register=a_register(products=products))
    assert (answer["outcome"], reasons(answer)) == ("hold", ["nothing-in-force"])


def test_every_reason_is_named_not_only_the_first() -> None:
    bad = a_reading(1.9, 1, calibration="wmp-8", flags={"distance-from-calibration-set": 9.0})
    assert reasons(judged(a_request(bad))) == [
        "scan-flagged",
        "another-calibration",
        "outside-validated-range",
        "too-few-readings",
    ]


# --- several verdicts ----------------------------------------------------------------------------------


def test_the_worst_verdict_decides_the_lot() -> None:
    strict = a_specification("strict", a_requirement(upper_tolerance_limit=ToleranceLimit(2.9, "%")))
    register = a_register(
        specifications={"customer-b": a_specification(), "strict": strict},
        specification_products={"customer-b": "whole-milk-powder", "strict": "whole-milk-powder"},
    )
    answer = judged(a_request(specifications=("customer-b", "strict")), register)
    assert [verdict["outcome"] for verdict in answer["verdicts"]] == ["release", "reject"]
    assert answer["outcome"] == "reject"


# --- what is not understood ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "pointer"),
    [
        ({"product": "butter"}, "#/product"),
        ({"line": "tower-9"}, "#/line"),
        ({"specifications": ("nobody",)}, "#/specifications/0"),
        ({"specifications": ("other",)}, "#/specifications/0"),
        ({"units": {"moisture": "kg"}}, "#/units/moisture"),
        ({"units": {"moisture": "mg/kg"}}, "#/units/moisture"),
        ({"units": {"moisture": "%", "ash": "%"}}, "#/units/ash"),
        ({"units": {"fat": "%"}}, "#/units/moisture"),
        ({"readings": twice(2.9, analyzer="nir-9")}, "#/readings/0/analyzer"),
        ({"readings": twice(2.9, analyzer="nobody")}, "#/readings/0/analyzer"),
        ({"readings": twice(2.9, calibration="wmp-2-1")}, "#/readings/0/calibration"),
        ({"readings": twice(2.9, flags={"distance": 9.0})}, "#/readings/0/flags/distance"),
        (
            {"readings": twice(2.9, influences={"sample_temprature": 24.0})},
            "#/readings/0/influences/sample_temprature",
        ),
        ({"readings": twice(2.9, values={"moisture": 2.9, "ash": 1.0})}, "#/readings/0/values/ash"),
        (
            {"readings": twice(2.9, taken_at=datetime(2026, 3, 2, 5, 18, tzinfo=UTC))},
            "#/readings/0/taken_at",
        ),
    ],
)
def test_what_is_not_understood_is_a_fault_at_its_place(changes: dict[str, Any], pointer: str) -> None:
    with pytest.raises(InvalidRequest) as caught:
        judged(a_request(**changes))
    assert pointer in [fault.pointer for fault in caught.value.faults]
    assert caught.value.message.startswith(("1 fault;", "2 faults;", "3 faults;", "4 faults;", "The request"))


def test_all_faults_are_named_at_once() -> None:
    readings = (a_reading(2.9, 1, calibration="nobody"), a_reading(2.9, 2, analyzer="nobody"))
    with pytest.raises(InvalidRequest) as caught:
        judged(a_request(*readings, units={"moisture": "kg"}))
    assert {fault.pointer for fault in caught.value.faults} == {
        "#/units/moisture",
        "#/readings/0/calibration",
        "#/readings/1/analyzer",
    }


def test_a_clock_a_little_ahead_is_no_fault() -> None:
    ahead = datetime(2026, 3, 2, 5, 17, tzinfo=UTC)
    readings = (a_reading(2.9, taken_at=ahead), a_reading(2.9, taken_at=ahead + timedelta(seconds=1)))
    assert judged(a_request(*readings))["outcome"] == "release"


def test_the_same_reading_twice_is_not_two_readings() -> None:
    with pytest.raises(Conflict) as caught:
        judged(a_request(a_reading(2.9), a_reading(2.9)))
    assert caught.value.code == "reading-already-judged"


def test_measurements_with_identities_of_their_own_may_share_their_instant() -> None:
    readings = (a_reading(2.9, measurement="m1"), a_reading(2.9, measurement="m2"))
    assert judged(a_request(*readings))["outcome"] == "release"


def test_a_lot_read_on_two_analyzers_needs_a_budget_that_names_both() -> None:
    other = a_reading(2.9, 2, analyzer="nir-2", calibration="wmp-2-1")
    with pytest.raises(InvalidRequest, match="names both"):
        judged(a_request(a_reading(2.9, 1), other))


def test_on_two_analyzers_what_is_drawn_anew_with_each_is_averaged() -> None:
    """Rule 19 by hand: the instrument part halves in variance, repeatability is that of two readings."""
    components = (
        a_component("repeatability", "moisture", "reading", 0.06 * math.sqrt(2)),
        a_component("between-instruments", "moisture", "instrument", 0.05),
        a_component("bias", "bias", "calibration", 0.08),
    )
    procedure = Procedure(samples=Count(1, 1, 2), readings_per_sample=Count(1, 2, 4))
    budget = a_budget_in_force(budget=a_budget(components=components, procedure=procedure))
    document = replace(budget.document, calibrations={"nir-1": "wmp-7", "nir-2": "wmp-2-1"})
    both = {
        ("whole-milk-powder", "moisture", analyzer): replace(budget, document=document)
        for analyzer in ("nir-1", "nir-2")
    }
    shared = dict.fromkeys(both, next(iter(both.values())))
    other = a_reading(2.9, 2, analyzer="nir-2", calibration="wmp-2-1")
    verdict = judged(a_request(a_reading(2.8, 1), other), a_register(budgets=shared))["verdicts"][0]
    assert verdict["estimate"] == pytest.approx(2.85 - BIAS)
    u = math.sqrt(0.06**2 + 0.05**2 / 2 + 0.08**2)
    assert verdict["combined_standard_uncertainty"] == pytest.approx(u, rel=1e-12)


# --- readings in groups, weights -----------------------------------------------------------------------


def grouped_budget(**changes: Any) -> Register:
    components = (
        a_component("repeatability", "moisture", "reading", 0.04),
        a_component("presentation", "moisture", "presentation", 0.05),
        a_component("session", "moisture", "session", 0.03),
        a_component("bias", "bias", "calibration", 0.08),
    )
    budget = a_budget_in_force(budget=a_budget(components=components, **changes))
    return a_register(budgets={("whole-milk-powder", "moisture", "nir-1"): budget})


def test_readings_of_one_filling_share_its_error_and_those_of_two_do_not() -> None:
    register = grouped_budget()
    one = judged(a_request(*twice(2.9)), register)["verdicts"][0]
    refilled = (a_reading(2.9, 1, presentation="a"), a_reading(2.9, 2, presentation="b"))
    two = judged(a_request(*refilled), register)["verdicts"][0]
    common = 0.04**2 / 2 + 0.03**2 + 0.08**2
    assert one["combined_standard_uncertainty"] == pytest.approx(math.sqrt(common + 0.05**2), rel=1e-12)
    assert two["combined_standard_uncertainty"] == pytest.approx(math.sqrt(common + 0.05**2 / 2), rel=1e-12)


def test_weights_make_estimate_and_uncertainty_together() -> None:
    readings = (
        a_reading(2.8, 1, weight=0.25, presentation="a"),
        a_reading(3.0, 2, weight=0.75, presentation="b"),
    )
    verdict = judged(a_request(*readings), grouped_budget())["verdicts"][0]
    assert verdict["estimate"] == pytest.approx(0.25 * 2.8 + 0.75 * 3.0 - BIAS, rel=1e-14)
    u = math.sqrt((0.04**2 + 0.05**2) * (0.25**2 + 0.75**2) + 0.03**2 + 0.08**2)
    assert verdict["combined_standard_uncertainty"] == pytest.approx(u, rel=1e-12)


@pytest.mark.parametrize("weights", [(1.0, 0.0), (0.9, 0.1)])
def test_a_reading_is_not_weighed_away(weights: tuple[float, float]) -> None:
    """Setting a reading aside needs a reason and an approver."""
    readings = (a_reading(2.9, number, weight=weight) for number, weight in enumerate(weights))
    with pytest.raises(InvalidRequest, match="weighed"):
        judged(a_request(*readings))


def test_a_pattern_of_readings_is_compiled_once() -> None:
    register = grouped_budget()
    for lot in ("one", "another"):
        readings = (a_reading(2.9, 1, presentation="a"), a_reading(2.8, 2, presentation="b"))
        judged(a_request(*readings, lot=lot), register)
    (key,) = register.compiled
    judged(a_request(a_reading(2.9, 1, session="a"), a_reading(2.8, 2, session="b")), register)
    assert len(register.compiled) == 2
    assert key.counts.startswith("2 ")


@pytest.mark.parametrize("weights", [(0.5, None), (0.5, 0.6)])
def test_weights_that_do_not_make_a_mean_are_refused(weights: tuple[float | None, ...]) -> None:
    readings = (a_reading(2.9, number, weight=weight) for number, weight in enumerate(weights))
    with pytest.raises(InvalidRequest):
        judged(a_request(*readings))


def test_unbalanced_readings_get_the_uncertainty_of_what_was_done() -> None:
    readings = [a_reading(2.9, n, sample="1" if n < 3 else "2") for n in range(5)]
    verdict = judged(a_request(*readings), grouped_budget())["verdicts"][0]
    u = math.sqrt(0.04**2 * (1 / 3 + 1 / 2) / 4 + 0.05**2 / 2 + 0.03**2 + 0.08**2)
    assert verdict["combined_standard_uncertainty"] == pytest.approx(u, rel=1e-12)


# --- what the answer says ------------------------------------------------------------------------------


def test_the_answer_names_what_was_not_judged_and_carries_the_caution() -> None:
    answer = judged()
    assert answer["not_judged"] == ["microbiology"]
    assert "no safety clearance" in answer["caution"]
    assert (answer["round"], answer["rounds_left"]) == (1, 0)


def test_a_reason_never_contradicts_itself_by_rounding() -> None:
    """Just above the acceptance limit the printed estimate lies above the printed limit too."""
    estimate = ACCEPTANCE_LIMIT + 1e-7
    detail = judged(a_request(*twice(estimate + BIAS)))["reasons"][0]["detail"]
    numbers = [float(word) for word in detail.replace("%", "").split() if word[0].isdigit()]
    printed_estimate, tolerance_limit, acceptance_limit = numbers
    assert acceptance_limit <= ACCEPTANCE_LIMIT < printed_estimate < tolerance_limit


def test_a_lower_limit_is_spoken_of_as_below() -> None:
    requirement: Requirement = a_requirement(
        lower_tolerance_limit=ToleranceLimit(2.5, "%"), upper_tolerance_limit=None
    )
    register = a_register(specifications={"customer-b": a_specification("customer-b", requirement)})
    assert "below the tolerance limit" in judged(a_request(*twice(2.3)), register)["reasons"][0]["detail"]
    held = judged(a_request(*twice(2.55)), register)
    assert "below the acceptance limit" in held["reasons"][0]["detail"]


def test_the_digits_of_the_record_are_not_rounded_and_the_display_is() -> None:
    verdict = judged(a_request(a_reading(2.901, 1), a_reading(2.902, 2)))["verdicts"][0]
    assert verdict["estimate"] == pytest.approx(2.9515, rel=1e-15)
    assert verdict["display"]["estimate"] == "2.95"
    assert verdict["display"]["expanded_uncertainty"] == "0.20"
    # Rounded inward: what meets the printed limit meets the limit.
    assert float(verdict["display"]["upper_acceptance_limit"]) <= verdict["upper_acceptance_limit"]


def test_a_stored_rule_is_used_as_it_stands() -> None:
    """A library that computes another quantile tomorrow does not move a verdict of today's approval."""
    register = a_register()
    judged(register=register)
    (key, compiled) = next(iter(register.compiled.items()))
    stored = replace(compiled, upper_acceptance_limit=2.5)
    answer = judged(register=a_register(rules={key: stored}))
    assert answer["verdicts"][0]["upper_acceptance_limit"] == 2.5
    assert answer["outcome"] == "hold"


# --- a characteristic computed from several channels of a scan -----------------------------------------


def derived_register() -> Register:
    """Judge a ratio of two channels, in per cent; u(fat) = 0.2, u(moisture) = 0.1, common to all."""
    model = MeasurementModel(
        "100 * fat / (100 - moisture)", (Quantity("fat", "%"), Quantity("moisture", "%")), "%"
    )
    budget = a_budget(
        components=(a_component("fat", "fat", "lot", 0.2), a_component("moisture", "moisture", "lot", 0.1)),
        bias=None,
        model=model,
        validated_range=(20.0, 35.0),
        validated_box={"fat": (25.0, 29.0), "moisture": (2.0, 4.6)},
    )
    in_force = a_budget_in_force(budget=budget)
    document = replace(in_force.document, characteristic="fat-in-dry-matter")
    characteristics = dict(a_register().characteristics)
    key = ("whole-milk-powder", "fat-in-dry-matter")
    characteristics[key] = replace(
        characteristics["whole-milk-powder", "fat"], code=key[1], derived_from=("fat", "moisture")
    )
    requirement = a_requirement(
        characteristic=key[1], lower_tolerance_limit=ToleranceLimit(27.0, "%"), upper_tolerance_limit=None
    )
    return a_register(
        characteristics=characteristics,
        budgets={(*key, "nir-1"): replace(in_force, document=document)},
        specifications={"customer-b": a_specification("customer-b", requirement)},
    )


def both_channels(fat: float, moisture: float) -> DecisionRequest:
    readings = (a_reading(0, n, values={"fat": fat, "moisture": moisture}) for n in (1, 2))
    return a_request(*readings, units={"fat": "%", "moisture": "%"})


def test_a_derived_characteristic_is_judged_at_its_readings() -> None:
    """The law of propagation by hand: JCGM 100:2008, 5.1.2, eq. (10) (from memory)."""
    verdict = judged(both_channels(27.0, 4.0), derived_register())["verdicts"][0]
    estimate = 100 * 27.0 / 96
    u = math.hypot(100 / 96 * 0.2, 100 * 27.0 / 96**2 * 0.1)
    assert verdict["acceptance_limits"] == "at_this_reading"
    assert "acceptance limits at this reading: lower 27." in verdict["display"]["statement"]
    assert verdict["estimate"] == pytest.approx(estimate, rel=1e-14)
    assert verdict["combined_standard_uncertainty"] == pytest.approx(u, rel=1e-12)
    assert verdict["lower_acceptance_limit"] == pytest.approx(27.0 + Z * u, rel=1e-12)
    assert verdict["conformance_probability"] == pytest.approx(norm.cdf((estimate - 27.0) / u), rel=1e-12)
    assert verdict["outcome"] == "release"


@pytest.mark.parametrize(
    ("fat", "moisture", "outcome", "reason"),
    [(26.2, 4.0, "hold", "in-guard-band"), (25.5, 4.0, "reject", "outside-tolerance")],
)
def test_a_derived_value_is_held_or_rejected_like_any(
    fat: float, moisture: float, outcome: str, reason: str
) -> None:
    answer = judged(both_channels(fat, moisture), derived_register())
    assert (answer["outcome"], reasons(answer)) == (outcome, [reason])


def test_every_channel_of_a_derived_value_has_its_own_validated_range() -> None:
    answer = judged(both_channels(27.0, 1.0), derived_register())
    assert (answer["outcome"], reasons(answer)) == ("hold", ["outside-validated-range"])
    assert "moisture" in answer["reasons"][0]["detail"]


def test_a_derived_value_needs_all_its_channels_in_one_scan() -> None:
    apart = (a_reading(0, 1, values={"fat": 27.0}), a_reading(0, 2, values={"moisture": 3.0}))
    answer = judged(a_request(*apart, units={"fat": "%", "moisture": "%"}), derived_register())
    assert (answer["outcome"], reasons(answer)) == ("hold", ["characteristic-missing"])
