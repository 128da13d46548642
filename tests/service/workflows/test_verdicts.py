"""What a verdict rests on: rounded comparison, guarded rejection, the natural domain, how sure u is."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from typing import Any

import pytest
from scipy.stats import chi2, norm

from budgets.budget import Count, Procedure
from budgets.error_distributions import Tabulated
from budgets.errors import LimitsError, NotSupportedError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.propagation import Counts
from service.documents import Bounds, Characteristic, Requirement, RuleOfDecision, ToleranceLimit
from service.workflows.judging import judge
from service.workflows.rules import compile_pair, compile_rule, planned_counts, stored_rule, tolerance
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

GUARDED = RuleOfDecision("guarded_by_specific_risk", largest_risk=0.05, rejection="guarded")
GUARD_BAND = norm.ppf(0.95) * STANDARD_UNCERTAINTY
MOISTURE = Characteristic("moisture", "whole-milk-powder", "%", ("%", "g/kg"), "as is", Bounds(0, 100), 2)


def verdict(
    moisture: float, requirement: Requirement, **changes: Any
) -> tuple[dict[str, Any], dict[str, Any] | None]:
    """Judge two equal readings whose estimate is ``moisture``; give the verdict and its reason."""
    request = a_request(a_reading(moisture + BIAS, 1), a_reading(moisture + BIAS, 2))
    register = a_register(
        specifications={"customer-b": a_specification("customer-b", requirement)}, **changes
    )
    answer = judge(register, request, NOW)
    return answer["verdicts"][0], answer["reasons"][0] if answer["reasons"] else None


@pytest.mark.parametrize(
    ("moisture", "outcome", "words"),
    [
        (3.0, "release", None),
        (3.19, "hold", "is within the tolerance limit 3.2 % but above the acceptance limit"),
        (3.21, "hold", "is not within the tolerance limit 3.2 %, but only beyond the rejection limit"),
        (3.4, "reject", "is above the rejection limit"),
    ],
)
def test_guarded_rejection_holds_what_is_not_proved_either_way(
    moisture: float, outcome: str, words: str | None
) -> None:
    found, reason = verdict(moisture, a_requirement(decision_rule=GUARDED))
    assert found["outcome"] == outcome
    assert found["upper_rejection_limit"] == pytest.approx(3.2 + GUARD_BAND)
    assert found["lower_rejection_limit"] is None
    assert (reason is None) == (words is None)
    if reason is not None and words is not None:
        assert words in reason["detail"]
    assert "guarded rejection" in found["display"]["statement"]
    assert "; rejection limits: upper 3." in found["display"]["statement"]


def test_where_no_value_is_ever_rejected_the_reason_says_so() -> None:
    line = a_component("repeatability", "moisture", "reading", 0.01)
    # The uncertainty grows nearly as fast as the value does.
    relative = (Term(1.0, MeanSquare("test/steep", 0.95**2, math.inf)),)
    steep = a_budget(
        components=(replace(line, relative_terms=relative), a_budget().components[1]),
        validated_range=(0.5, 4.6),
    )
    found, reason = verdict(
        3.21,
        a_requirement(decision_rule=GUARDED),
        budgets={("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(budget=steep)},
    )
    assert (found["outcome"], found["upper_rejection_limit"]) == ("hold", None)
    assert reason is not None
    assert "but no value proves that" in reason["detail"]


def test_by_default_what_is_outside_of_tolerance_is_rejected() -> None:
    found, reason = verdict(3.21, a_requirement())
    assert (found["outcome"], found["upper_rejection_limit"]) == ("reject", 3.2)
    assert reason is not None
    assert reason["detail"] == "3.210 % is above the tolerance limit 3.2 %."


def rounded(value: float = 3.2, **changes: Any) -> Requirement:
    limit = ToleranceLimit(value, changes.pop("unit", "%"), changes.pop("inclusive", True))
    return a_requirement(upper_tolerance_limit=limit, comparison="rounded", decimals=1, **changes)


def test_a_rounded_comparison_moves_verdict_and_probability_alike() -> None:
    found, reason = verdict(3.24, rounded())
    assert found["outcome"] == "hold"  # it would be shown as 3.2
    assert (found["upper_tolerance_limit"], found["comparison"]) == (
        3.2,
        {
            "kind": "rounded",
            "decimals": 1,
            "effective_lower_tolerance_limit": None,
            "effective_upper_tolerance_limit": 3.25,
            "lower_inclusive": True,
            "upper_inclusive": True,
        },
    )
    assert found["upper_acceptance_limit"] == pytest.approx(3.25 - GUARD_BAND)
    assert found["conformance_probability"] == pytest.approx(norm.cdf((3.25 - 3.24) / STANDARD_UNCERTAINTY))
    assert reason is not None
    assert "3.2 % (rounded to 1 decimals, so 3.25 % unrounded)" in reason["detail"]
    text = found["display"]["statement"]
    assert (
        "Tolerance limits: upper 3.2 %, compared after rounding to 1 decimals, which is upper 3.25 %" in text
    )
    assert verdict(3.26, rounded())[0]["outcome"] == "reject"
    absolute = verdict(3.24, a_requirement())[0]["comparison"]
    assert (absolute["kind"], absolute["effective_upper_tolerance_limit"]) == ("absolute", 3.2)


def test_a_limit_that_is_rounded_is_stated_in_the_unit_of_the_characteristic() -> None:
    with pytest.raises(LimitsError, match="rounded in %: state the limit in that, not g/kg") as caught:
        tolerance(rounded(32, unit="g/kg"), MOISTURE)
    assert caught.value.where == ("upper_tolerance_limit", "unit")
    strict = tolerance(rounded(inclusive=False), MOISTURE)
    assert (strict.upper, strict.upper_inclusive) == (3.15, False)


def test_probabilities_within_the_domain_are_asked_for_by_the_requirement() -> None:
    near = a_requirement(upper_tolerance_limit=ToleranceLimit(0.3, "%"), within_domain=True)
    budget = a_budget(validated_range=(0.0, 5.0))
    in_force = {("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(budget=budget)}
    found, _ = verdict(0.05, near, budgets=in_force)
    u = STANDARD_UNCERTAINTY
    tail = norm.sf(0.25 / u) / norm.sf(-0.05 / u)
    assert found["within_domain"] is True
    assert found["specific_consumers_risk"] == pytest.approx(tail, rel=1e-6)
    with pytest.raises(NotSupportedError, match="guarded rejection"):
        compile_rule(
            budget,
            planned_counts(budget.procedure),
            a_requirement(within_domain=True, decision_rule=GUARDED),
            MOISTURE,
        )


def test_a_verdict_says_how_sure_its_uncertainty_is() -> None:
    known, _ = verdict(3.1, a_requirement())
    assert known["standard_uncertainty_interval"] is known["conformance_probability_interval"] is None
    assert known["error_distribution"] == "normal"
    assert known["display"]["how_sure"] == "u is taken as known: it has infinite degrees of freedom."
    line = a_component("repeatability", "moisture", "reading", 0.1)
    few = a_budget(
        components=(replace(line, terms=(Term(1.0, MeanSquare("test/few", 0.01, 8.0)),)),), bias=None
    )
    in_force = {("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(budget=few)}
    found, _ = verdict(3.1 - BIAS, a_requirement(), budgets=in_force)
    u, nu = found["combined_standard_uncertainty"], found["effective_degrees_of_freedom"]
    assert (nu, found["error_distribution"]) == (8.0, "t")
    ends = [u * math.sqrt(nu / chi2.ppf(p, nu)) for p in (0.975, 0.025)]
    interval = found["standard_uncertainty_interval"]
    assert [interval["lower"], interval["upper"]] == pytest.approx(ends)
    assert interval["coverage_probability"] == 0.95
    distance = 3.2 - found["estimate"]
    probabilities = sorted(norm.cdf(distance / end) for end in ends)
    between = found["conformance_probability_interval"]
    assert [between["lower"], between["upper"]] == pytest.approx(probabilities)
    assert found["display"]["how_sure"].startswith("u rests on 8 degrees of freedom: it lies from 0.04")
    assert found["display"]["how_sure"].endswith("The verdict stays.")


def test_what_a_verdict_rests_on_is_said() -> None:
    found, _ = verdict(3.1, a_requirement())
    assert (found["prior"], found["judged"], found["within_domain"]) == (None, "lot_mean", False)


def with_items(**changes: Any) -> Any:
    """Give a budget whose samples differ, read in two samples of two."""
    items = a_component("items", "moisture", "sample", 0.05)
    members = {
        "components": (*a_budget().components, items),
        "procedure": Procedure(Count(1, 2, 3), Count(2, 2, 4)),
        "bias": 0.0,
        "validated_range": (0.5, 4.6),
    }
    return a_budget_in_force(budget=a_budget(**members | changes))


@pytest.mark.parametrize("spread", ["known", "from_lot"])
def test_items_are_judged_by_their_share(spread: str) -> None:
    requirement = a_requirement(judged="item", item_share=0.9, item_spread=spread)
    specification = a_specification("customer-b", requirement)
    register = a_register(
        specifications={"customer-b": specification},
        budgets={("whole-milk-powder", "moisture", "nir-1"): with_items()},
    )
    request = a_request(
        *(a_reading(2.60, second) for second in (1, 2)),
        *(a_reading(2.64, second, sample="2") for second in (3, 4)),
    )
    found = judge(register, request, NOW)["verdicts"][0]
    assert found["judged"] == "item"
    assert found["items"]["least_share"] == 0.9
    assert found["error_distribution"] == "items"
    assert "Tolerance limits for at least 90 % of the items: upper 3.2 %" in found["display"]["statement"]
    if spread == "known":
        assert (found["outcome"], found["acceptance_limits"]) == ("release", "fixed")
        u = math.sqrt(0.06**2 / 2 + 0.05**2 / 2 + 0.08**2)
        limit = 3.2 - norm.ppf(0.9) * 0.05 - norm.ppf(0.95) * u
        assert found["upper_acceptance_limit"] == pytest.approx(limit)
        assert found["items"]["standard_deviation"] == pytest.approx(0.05)
        assert found["items"]["degrees_of_freedom"] is None
    else:
        # Two samples say little of the spread, and it is hardly more than that of their readings.
        assert (found["outcome"], found["acceptance_limits"]) == ("hold", "at_this_reading")
        assert found["items"]["degrees_of_freedom"] == 1
    assert "spread of the items" in found["display"]["how_sure"]


def test_rules_of_items_are_stored_and_read_again() -> None:
    budget = with_items().budget
    for spread in ("known", "from_lot"):
        requirement = a_requirement(judged="item", item_share=0.9, item_spread=spread)
        rules = compile_pair(budget, requirement, MOISTURE, label="here")
        # One sample shows no spread.
        assert ("2" in rules) == (spread == "known")
        numbers = json.loads(json.dumps(rules["2,2"]))
        assert stored_rule(numbers) == compile_rule(budget, Counts((2, 2)), requirement, MOISTURE)
    with pytest.raises(NotSupportedError, match="items within the natural domain"):
        compile_rule(budget, Counts((2, 2)), replace(requirement, within_domain=True), MOISTURE)
    quantiles = Tabulated((0.01, 0.5, 0.99), (-2.0, 0.0, 2.0), 10_000)
    with pytest.raises(NotSupportedError, match="Monte Carlo quantiles where items"):
        compile_rule(budget, Counts((2, 2)), requirement, MOISTURE, distribution=quantiles)


def test_a_tie_is_that_of_the_decimals_that_were_read() -> None:
    """Readings of 3.35, 3.35 and 3.35 have a mean of 3.35, which rounds to 3.4; of 3.45, to 3.4 as well."""
    budget = a_budget(bias=0.0, procedure=Procedure(Count(1, 1, 2), Count(2, 3, 4)))
    in_force = {("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(budget=budget)}
    requirement = rounded(3.4)
    for value, outcome in ((3.35, "hold"), (3.45, "hold"), (3.46, "reject")):
        register = a_register(
            specifications={"customer-b": a_specification("customer-b", requirement)}, budgets=in_force
        )
        readings = (a_reading(value + step, second) for second, step in ((1, -0.1), (2, 0.0), (3, 0.1)))
        found = judge(register, a_request(*readings), NOW)["verdicts"][0]
        assert (found["estimate"], found["outcome"]) == (value, outcome)


def test_an_estimate_at_a_strict_limit_is_not_within_it() -> None:
    """Readings of 3.1, 3.2 and 3.3 have the mean 3.2; in binary numbers it is 3.1999999999999997."""
    budget = a_budget(bias=0.0, procedure=Procedure(Count(1, 1, 2), Count(2, 3, 4)))
    rule = RuleOfDecision("simple", largest_standard_uncertainty=1.0)
    for inclusive, outcome in ((True, "release"), (False, "reject")):
        requirement = a_requirement(
            decision_rule=rule, upper_tolerance_limit=ToleranceLimit(3.2, "%", inclusive)
        )
        register = a_register(
            specifications={"customer-b": a_specification("customer-b", requirement)},
            budgets={("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force(budget=budget)},
        )
        readings = (a_reading(value, second) for second, value in enumerate((3.1, 3.2, 3.3), 1))
        found = judge(register, a_request(*readings), NOW)["verdicts"][0]
        assert (found["estimate"], found["outcome"]) == (3.2, outcome)
