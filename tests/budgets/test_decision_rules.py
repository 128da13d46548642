import math

import pytest

from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.errors import LimitsError, NotSupportedError

FACTOR = {"multiple": 1.0, "coverage_probability": 0.95, "sides": 2}


@pytest.mark.parametrize(
    ("kind", "members", "where"),
    [
        ("lenient", {}, "kind"),
        ("simple", {}, "largest_standard_uncertainty"),
        ("simple", {"largest_standard_uncertainty": 0.1, "largest_risk": 0.05}, "largest_risk"),
        ("simple", {"largest_standard_uncertainty": -0.1}, "largest_standard_uncertainty"),
        ("simple", {"least_capability_index": math.inf}, "least_capability_index"),
        ("guarded_by_factor", {**FACTOR, "multiple": None}, "multiple"),
        ("guarded_by_factor", {**FACTOR, "multiple": 0.0}, "multiple"),
        ("guarded_by_factor", {**FACTOR, "sides": 3}, "sides"),
        ("guarded_by_factor", {**FACTOR, "coverage_probability": 1.0}, "coverage_probability"),
        ("guarded_by_factor", {**FACTOR, "sides": 1, "coverage_probability": 0.5}, "coverage_probability"),
        ("guarded_by_factor", {**FACTOR, "largest_risk": 0.1}, "largest_risk"),
        ("guarded_by_specific_risk", {}, "largest_risk"),
        ("guarded_by_specific_risk", {"largest_risk": 0.5}, "largest_risk"),
        ("guarded_by_specific_risk", {"largest_risk": 0.0}, "largest_risk"),
        ("guarded_by_specific_risk", {"largest_risk": 0.05, "specific_risk_cap": 0.1}, "specific_risk_cap"),
        ("guarded_by_specific_risk", {"largest_risk": 0.05, "rejection": "never"}, "rejection"),
        ("guarded_by_specific_risk", {"largest_risk": 0.05, "rounds": 0}, "rounds"),
        ("guarded_by_specific_risk", {"largest_risk": 0.05, "rounds": 11}, "rounds"),
        ("simple", {"largest_standard_uncertainty": 0.1, "rejection": "guarded"}, "rejection"),
        ("simple", {"largest_standard_uncertainty": 0.1, "rounds": 2}, "rounds"),
    ],
)
def test_members_that_are_missing_misplaced_or_out_of_range_are_named(kind, members, where):
    with pytest.raises(LimitsError) as caught:
        DecisionRule(kind, **members)
    assert caught.value.where == (where,)


def test_several_faults_of_a_rule_are_told_at_once():
    with pytest.raises(LimitsError) as caught:
        DecisionRule("guarded_by_factor", sides=2)
    assert [fault.where for fault in caught.value.each()] == [("multiple",), ("coverage_probability",)]


def test_what_has_no_meaning_yet_is_not_supported():
    with pytest.raises(NotSupportedError) as several:
        DecisionRule("guarded_by_global_risk", largest_risk=0.01, specific_risk_cap=0.1, rounds=2)
    assert several.value.where == ("rounds",)


@pytest.mark.parametrize(
    "kind",
    [
        {"kind": "guarded_by_specific_risk", "largest_risk": 0.05},
        {"kind": "simple", "largest_standard_uncertainty": 0.1},
    ],
)
def test_every_kind_may_check_replicates_and_cap_the_risk_of_the_lot(kind):
    rule = DecisionRule(**kind, replicate_level=0.99, largest_lot_risk=0.08)
    assert (rule.replicate_level, rule.largest_lot_risk) == (0.99, 0.08)
    for member, value in (
        ("replicate_level", 0.4),
        ("replicate_level", 1.0),
        ("largest_lot_risk", 0.5),
        ("largest_lot_risk", 0.0),
    ):
        with pytest.raises(LimitsError, match=member) as caught:
            DecisionRule(**kind, **{member: value})
        assert caught.value.where == (member,)


def test_the_condition_of_simple_acceptance():
    two, one = Tolerance(2.0, 4.0), Tolerance(None, 4.0)
    by_u = DecisionRule("simple", largest_standard_uncertainty=0.1)
    by_index = DecisionRule("simple", least_capability_index=5.0)
    by_u.check_condition(one, 0.1)
    by_index.check_condition(two, 0.1)
    with pytest.raises(LimitsError, match=r"at most 0\.1; this measurement has 0\.11"):
        by_u.check_condition(one, 0.11)
    with pytest.raises(LimitsError, match=r"at least 5; this measurement has 4\.545"):
        by_index.check_condition(two, 0.11)
    with pytest.raises(LimitsError, match="needs two tolerance limits"):
        by_index.check_condition(one, 0.01)
    DecisionRule("guarded_by_specific_risk", largest_risk=0.05).check_condition(one, 1e9)
