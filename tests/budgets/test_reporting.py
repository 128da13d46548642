import math
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.errors import ModelError
from budgets.propagation import Counts
from budgets.release import ReleaseRule
from budgets.reporting import (
    acceptance_limit_text,
    decimal_text,
    number_text,
    probability_text,
    rounded,
    rule_text,
    significant_decimals,
    statement,
)


@pytest.mark.parametrize(
    ("estimate", "expanded", "printed"),
    [
        (3.135, 0.1394, ("3.14", "0.14", 2)),  # half to even on the decimal digits
        (3.145, 0.14, ("3.14", "0.14", 2)),
        (2.675, 0.12, ("2.68", "0.12", 2)),  # the double is below 2.675
        (10.05762, 0.02723, ("10.058", "0.027", 3)),  # figures as in JCGM 100:2008, 7.2.6 (from memory)
        (1.0, 0.0996, ("1.00", "0.10", 2)),
        (12345.0, 1234.0, ("12300", "1200", -2)),
        (-0.004, 0.14, ("0.00", "0.14", 2)),
        (1e15, 1e-9, ("1000000000000000.0000000000", "0.0000000010", 10)),
    ],
)
def test_rounding(estimate, expanded, printed):
    shown = rounded(estimate, expanded)
    assert (shown.estimate, shown.expanded_uncertainty, shown.decimals) == printed


@given(st.floats(1e-12, 1e12))
def test_an_uncertainty_keeps_two_digits_and_loses_at_most_half_of_the_last(value):
    shown = rounded(0.0, value)
    printed = Decimal(shown.expanded_uncertainty)
    assert len(str(printed.scaleb(shown.decimals).to_integral_value())) == 2
    assert abs(printed - Decimal(repr(value))) <= Decimal("0.5").scaleb(-shown.decimals)


@pytest.mark.parametrize("value", [0.0, -1.0, math.nan, math.inf])
def test_what_is_no_uncertainty_is_not_printed(value):
    with pytest.raises(ModelError):
        significant_decimals(value)
    with pytest.raises(ModelError):
        rounded(math.inf, 0.1)


@given(st.floats(-1e6, 1e6), st.integers(0, 6))
def test_printed_acceptance_limits_never_accept_more(limit, decimals):
    assert Decimal(acceptance_limit_text(limit, decimals, side="upper")) <= Decimal(repr(limit))
    assert Decimal(acceptance_limit_text(limit, decimals, side="lower")) >= Decimal(repr(limit))


def test_decimal_places_round_half_to_even():
    assert [decimal_text(x, 2) for x in (3.135, 3.145, 2.675, -0.001)] == ["3.14", "3.14", "2.68", "0.00"]


def test_a_limit_has_one_of_two_sides():
    with pytest.raises(ModelError, match="lower or upper"):
        acceptance_limit_text(3.0, 2, side="left")


@pytest.mark.parametrize(
    ("probability", "text"),
    [
        (0.0, "< 0.01 %"),
        (0.0001, "0.01 %"),
        (0.00123, "0.12 %"),
        (0.5, "50.0 %"),
        (0.995, "99.50 %"),
        (0.9999, "99.99 %"),
        (1.0, "> 99.99 %"),
    ],
)
def test_probabilities_for_the_screen(probability, text):
    assert probability_text(probability) == text


@pytest.mark.parametrize("probability", [-0.1, 1.1, math.nan])
def test_what_is_no_probability_is_not_printed(probability):
    with pytest.raises(ModelError):
        probability_text(probability)


def test_stated_numbers_keep_their_digits():
    assert [number_text(x) for x in (3.2, 100.0, 0.0, 1e-7)] == ["3.2", "100", "0", "0.0000001"]


@pytest.mark.parametrize(
    ("rule", "text"),
    [
        (
            DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=1),
            "guarded acceptance with a guard band of 1 U (one-sided, p = 95 %)",
        ),
        (
            DecisionRule("guarded_by_factor", multiple=0.83, coverage_probability=0.95, sides=2),
            "guarded acceptance with a guard band of 0.83 U (two-sided, p = 95 %)",
        ),
        (
            DecisionRule("simple", largest_standard_uncertainty=0.1, least_capability_index=3.0),
            "simple acceptance, agreed for a standard uncertainty of at most 0.1 and a capability index of "
            "at least 3",
        ),
        (
            DecisionRule("simple", least_capability_index=3.0),
            "simple acceptance, agreed for a capability index of at least 3",
        ),
        (
            DecisionRule("simple", largest_standard_uncertainty=0.1),
            "simple acceptance, agreed for a standard uncertainty of at most 0.1",
        ),
    ],
)
def test_rules_in_words(rule, text):
    assert rule_text(rule) == text


@pytest.mark.parametrize(
    ("tolerance", "words"),
    [
        (Tolerance(None, 4.0), "Tolerance limits: upper 4 %; acceptance limits: upper 3.8"),
        (Tolerance(2.5, None), "Tolerance limits: lower 2.5 %; acceptance limits: lower 2.6"),
        (Tolerance(2.5, 4.0), "Tolerance limits: lower 2.5 %, upper 4 %; acceptance limits: lower 2.6"),
    ],
)
def test_the_statement_names_result_limits_outcome_and_rule(a_budget, tolerance, words):
    """ISO/IEC 17025:2017, 7.8.6.2 (from memory)."""
    rule = ReleaseRule.compile(
        a_budget(), Counts((2,)), tolerance, DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    )
    text = statement(
        characteristic="moisture", unit="%", estimate=3.135, rule=rule, judgement=rule.judge(3.135)
    )
    assert text.startswith("moisture: (3.14 ± 0.12) %, expanded uncertainty with k = 1.99")
    assert "coverage probability of 95 %" in text
    assert words in text
    assert "Outcome: release; conformance probability > 99.99 %." in text
    assert text.endswith("Decision rule: guarded acceptance with a specific risk of at most 5 %.")
