"""Several characteristics of one specification together, and the cap on the risk of the lot."""

from __future__ import annotations

import math
from typing import Any

import pytest
from scipy.stats import multivariate_normal

from budgets.budget import Budget
from budgets.components import Component
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix
from budgets.measurement_models import MeasurementModel
from budgets.measurement_models import Quantity as ModelQuantity
from service.documents import (
    Analyzer,
    Bounds,
    BudgetDocument,
    Characteristic,
    Model,
    Quantity,
    RuleOfDecision,
    StudyEvidence,
    ToleranceLimit,
)
from service.workflows.judging import judge
from service.workflows.register import BudgetInForce, Register
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

PRODUCT = "whole-milk-powder"
MOISTURE, FAT = 2.99, 26.27
# Of one reading; two are averaged. The errors of the biases are 0.08 and independent of each other.
NOISE, CORRELATION = 0.09, 0.7


def in_force(code: str, characteristic: str, budget: Budget, model: Model) -> BudgetInForce:
    plain = a_budget_in_force(budget=budget)
    document = BudgetDocument(
        **{
            **vars(plain.document),
            "code": code,
            "characteristic": characteristic,
            "model": model,
            "validated_range": Bounds(*budget.validated_range),
        }
    )
    return BudgetInForce(4, document, budget, "sha256:00", None)


def a_direct(characteristic: str, validated_range: tuple[float, float]) -> BudgetInForce:
    budget = a_budget(
        components=(
            a_component(f"{characteristic}-noise", characteristic, "reading", NOISE),
            a_component(f"{characteristic}-bias", "bias", "calibration", 0.08),
        ),
        bias=0.0,
        validated_range=validated_range,
    )
    bias = Quantity("%", None, StudyEvidence(f"{characteristic}-pairs", "bias"))
    model = Model(f"{characteristic} - bias", {characteristic: Quantity("%", "reading"), "bias": bias})
    return in_force(f"wmp-{characteristic}-nir", characteristic, budget, model)


def a_joint() -> BudgetInForce:
    """Make a budget of the sum of both channels, which says how their errors go together."""
    shared = CORRELATION * NOISE**2
    square = MeanSquareMatrix(
        "scans", ("moisture", "fat"), ((NOISE**2, shared), (shared, NOISE**2)), math.inf
    )
    members = {"quantities": square.quantities, "matrix_terms": (MatrixTerm(1.0, square),)}
    noise = Component("noise", "", "reading", (), "A", **members)  # type: ignore[arg-type]
    names = {"moisture_bias": "moisture-pairs", "fat_bias": "fat-pairs"}
    budget = a_budget(
        components=(noise, *(a_component(name, name, "calibration", 0.08) for name in names)),
        bias=None,
        validated_range=(20.0, 40.0),
        validated_box={"moisture": (2.0, 4.6), "fat": (24.0, 29.0)},
        model=MeasurementModel(
            "moisture - moisture_bias + fat - fat_bias",
            (
                ModelQuantity("moisture"),
                ModelQuantity("fat"),
                *(ModelQuantity(name, None, "given", 0.0) for name in names),
            ),
        ),
    )
    quantities = {name: Quantity("%", "reading") for name in ("moisture", "fat")}
    quantities |= {name: Quantity("%", None, StudyEvidence(study, "bias")) for name, study in names.items()}
    model = Model("moisture - moisture_bias + fat - fat_bias", quantities)
    return in_force("wmp-sum-nir", "moisture-and-fat", budget, model)


def a_plant(*more: BudgetInForce, cap: float | None = None, risk: float = 0.05) -> Register:
    rule = RuleOfDecision("guarded_by_specific_risk", largest_risk=risk, largest_lot_risk=cap)
    requires = (
        a_requirement(decision_rule=rule),
        a_requirement(
            characteristic="fat",
            lower_tolerance_limit=ToleranceLimit(26.0, "%"),
            upper_tolerance_limit=ToleranceLimit(28.0, "%"),
            decision_rule=rule,
        ),
    )
    budgets = (a_direct("moisture", (2.0, 4.6)), a_direct("fat", (24.0, 29.0)), *more)
    derived = Characteristic(
        "moisture-and-fat", PRODUCT, "%", ("%",), "as is", Bounds(0, 100), 2, ("moisture", "fat")
    )
    register = a_register(
        analyzers={"nir-1": Analyzer("nir-1", "analyzer", ("moisture", "fat"))},
        specifications={"customer-b": a_specification("customer-b", *requires)},
        budgets={(PRODUCT, item.document.characteristic, "nir-1"): item for item in budgets},
    )
    register.characteristics = {**register.characteristics, (PRODUCT, derived.code): derived}
    return register


def judged(
    register: Register, moisture: float = MOISTURE, fat: float = FAT, **changes: Any
) -> dict[str, Any]:
    readings = [a_reading(moisture, second, values={"moisture": moisture, "fat": fat}) for second in (1, 2)]
    return judge(register, a_request(*readings, units={"moisture": "%", "fat": "%"}, **changes), NOW)


def test_the_joint_risk_is_that_of_the_box_with_the_correlations_of_the_scan() -> None:
    """By hand: variances 0.09^2/2 + 0.08^2 each, covariance 0.7 0.09^2/2; the box by scipy."""
    answer = judged(a_plant(a_joint()))
    (joint,) = answer["joint_conformance"]
    assert joint["characteristics"] == ["moisture", "fat"]
    shared = CORRELATION * NOISE**2 / 2
    own = NOISE**2 / 2 + 0.08**2
    box = multivariate_normal([MOISTURE, FAT], [[own, shared], [shared, own]])
    expected = 1 - box.cdf([3.2, 28.0], lower_limit=[-50.0, 26.0])
    assert joint["risk"] == pytest.approx(expected, abs=1e-6)
    assert joint["least_risk"] < joint["risk"] < joint["most_risk"]
    assert joint["conformance_probability"] == pytest.approx(1 - expected, abs=1e-6)


def test_what_the_errors_have_in_common_is_not_guessed() -> None:
    (joint,) = judged(a_plant())["joint_conformance"]
    assert joint["risk"] is None
    risks = [verdict["specific_consumers_risk"] for verdict in judged(a_plant())["verdicts"]]
    assert joint["most_risk"] == pytest.approx(sum(risks))
    assert joint["least_risk"] == max(risks)
    assert "no budget says how the errors of moisture and fat go together" in joint["rests_on"]


def test_a_lot_whose_characteristics_are_accepted_one_by_one_may_be_too_risky_as_a_whole() -> None:
    risks = [verdict["specific_consumers_risk"] for verdict in judged(a_plant())["verdicts"]]
    assert max(risks) < 0.05
    answer = judged(a_plant(cap=0.9 * sum(risks)))
    assert answer["outcome"] == "hold"
    assert [reason["code"] for reason in answer["reasons"]] == ["lot-risk", "lot-risk"]
    assert "at most" in answer["reasons"][0]["detail"]
    assert answer["joint_conformance"][0]["largest_lot_risk"] == 0.9 * sum(risks)
    for verdict in answer["verdicts"]:
        # what was found stays; only the outcome is another
        assert verdict["conformance_probability"] is not None
        assert "Outcome: hold" in verdict["display"]["statement"]
    assert judged(a_plant(cap=1.1 * sum(risks)))["outcome"] == "release"


def test_a_cap_holds_only_what_was_accepted() -> None:
    answer = judged(a_plant(cap=0.01), moisture=3.6)
    assert [verdict["outcome"] for verdict in answer["verdicts"]] == ["reject", "hold"]
    assert [reason["code"] for reason in answer["reasons"]] == ["outside-tolerance", "lot-risk"]


def test_nothing_is_said_of_a_lot_of_which_something_was_not_judged() -> None:
    register = a_plant(a_joint(), cap=0.01)
    readings = [a_reading(2.5, second) for second in (1, 2)]
    answer = judge(register, a_request(*readings), NOW)
    (joint,) = answer["joint_conformance"]
    assert joint["risk"] is joint["most_risk"] is joint["least_risk"] is None
    assert joint["rests_on"].endswith("not judged: fat.")
    assert [verdict["outcome"] for verdict in answer["verdicts"]] == ["release", "hold"]


def test_other_scans_share_no_noise_that_is_known() -> None:
    register = a_plant(a_joint())
    readings = [
        a_reading(MOISTURE, second, values={"moisture": MOISTURE} if second < 3 else {"fat": FAT})
        for second in (1, 2, 3, 4)
    ]
    answer = judge(register, a_request(*readings, units={"moisture": "%", "fat": "%"}), NOW)
    (joint,) = answer["joint_conformance"]
    assert joint["risk"] is None
    assert "not all read in the same scans" in joint["rests_on"]


def test_one_characteristic_is_the_lot() -> None:
    answer = judge(a_register(), a_request(), NOW)
    (joint,) = answer["joint_conformance"]
    risk = answer["verdicts"][0]["specific_consumers_risk"]
    assert joint["least_risk"] == joint["risk"] == joint["most_risk"] == risk
    assert joint["rests_on"] == "The risk of the one characteristic."


def test_a_specification_that_is_not_in_force_says_nothing_together() -> None:
    answer = judge(a_register(specifications={}), a_request(), NOW)
    assert answer["joint_conformance"] == []


def test_evidence_that_has_lapsed_says_nothing_of_correlations() -> None:
    joint = a_joint()
    lapsed = BudgetInForce(4, joint.document, joint.budget, "sha256:00", "2026-01-01T00:00:00.000000Z")
    assert judged(a_plant(lapsed))["joint_conformance"][0]["risk"] is None
