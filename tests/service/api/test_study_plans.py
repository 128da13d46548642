"""Plans over HTTP; the figures themselves are held to other sources in tests/budgets/test_study_plans.py."""

from __future__ import annotations

from typing import Any

import pytest
from scipy import stats

from tests.service.api.conftest import Callers
from tests.service.api.house import done
from tests.service.api.test_bad_input import pointers, problem

PLANS = "/v1/study-plans"


def test_a_standard_deviation_is_known_as_well_as_was_wished(callers: Callers) -> None:
    wish = {"precision": {"relative_uncertainty": 0.25}}
    plan = done(callers["mes"].send("POST", PLANS, wish), 200)
    assert plan["bias"] is None
    found = plan["precision"]
    # The interval of a standard deviation by the quantiles of scipy's chi-square distribution.
    ends = [(nu / stats.chi2.ppf(0.025, nu)) ** 0.5 - 1 for nu in (found["degrees_of_freedom"] - 1, 48)]
    assert ends[0] > 0.25 >= ends[1]
    assert found["interval_upper"] == pytest.approx(ends[1], rel=1e-9)
    assert (found["samples"], found["values_per_sample"], found["values"]) == (48, 2, 96)


def test_both_wishes_are_answered_at_once(callers: Callers) -> None:
    wish = {
        "precision": {"relative_uncertainty": 0.1, "design": "agreement"},
        "bias": {"bias": 0.5, "standard_deviation": 1.0, "power": 0.8},
    }
    plan = done(callers["engineer"].send("POST", PLANS, wish), 200)
    # 34 pairs for half a standard deviation at 80 %: common practice, no source; the power by scipy.
    t = stats.t.ppf(0.975, 33)
    assert plan["bias"]["pairs"] == 34
    assert plan["bias"]["power"] == pytest.approx(stats.nct.sf(t, 33, 0.5 * 34**0.5), abs=1e-6)
    assert plan["precision"]["values"] == plan["precision"]["degrees_of_freedom"] + 1


@pytest.mark.parametrize(
    ("wish", "places"),
    [
        ({}, ["#"]),
        ({"precision": None, "bias": None}, ["#"]),
        ({"precision": {}}, ["#/precision/relative_uncertainty"]),
        ({"precision": {"relative_uncertainty": "0.1"}}, ["#/precision/relative_uncertainty"]),
        ({"precision": {"relative_uncertainty": 0}}, ["#/precision/relative_uncertainty"]),
        ({"precision": {"relative_uncertainty": 1e-9}}, ["#/precision/relative_uncertainty"]),
        ({"precision": {"relative_uncertainty": 0.1, "design": "fleet"}}, ["#/precision/design"]),
        ({"precision": {"relative_uncertainty": 0.1, "colour": 1}}, ["#/precision/colour"]),
        (
            {"precision": {"relative_uncertainty": 20}, "bias": {"bias": 0, "standard_deviation": 1}},
            ["#/precision/relative_uncertainty", "#/bias/bias"],
        ),
        ({"bias": {"bias": 1, "standard_deviation": 1, "pairs_per_group": 0}}, ["#/bias/pairs_per_group"]),
        ({"bias": {"bias": 1e-9, "standard_deviation": 1}}, ["#/bias/bias"]),
    ],
)
def test_wishes_that_no_study_meets_are_refused(
    callers: Callers, wish: dict[str, Any], places: list[str]
) -> None:
    found = problem(callers["engineer"].send("POST", PLANS, wish), 422, "invalid-request")
    assert pointers(found) == places
