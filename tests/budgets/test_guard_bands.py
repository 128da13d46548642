"""What is found elsewhere and handed in: the risk per look, the guard band of a global risk, its cap."""

import math

import pytest

from budgets.acceptance import acceptance_interval
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT, Tabulated
from budgets.errors import EmptyAcceptanceError, LimitsError
from budgets.level_dependence import LevelDependence, level_dependent_acceptance

NORMAL = StudentT(math.inf)
UPPER, BOTH = Tolerance(None, 4.0), Tolerance(2.0, 4.0)
TWO_ROUNDS = DecisionRule("guarded_by_specific_risk", largest_risk=0.05, rounds=2)
FACTOR = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=1, rounds=2)


@pytest.fixture
def by_global_risk():
    """Give a rule whose meaning another part of the program gives."""
    return DecisionRule("guarded_by_global_risk", largest_risk=0.01, specific_risk_cap=0.1)


def test_the_risk_per_look_takes_the_place_of_the_largest_risk():
    for rule in (TWO_ROUNDS, FACTOR):
        accepted = acceptance_interval(rule, UPPER, 0.1, NORMAL, risk_per_look=0.0304)
        assert accepted.upper == pytest.approx(4 - 0.1 * NORMAL.upper_quantile(0.0304), rel=1e-14)
    both = acceptance_interval(TWO_ROUNDS, BOTH, 0.1, NORMAL, risk_per_look=0.0304)
    assert both.lower == pytest.approx(2 + 0.1 * NORMAL.upper_quantile(0.0304), rel=1e-9)


def test_guard_bands_of_trade_standards():
    """ISO 14253-1 at 95 %, one-sided: 1.645 u; ISO 4259: 0.59 R, with R = 2.77 standard deviations.

    Both from memory (mathematics of the project, rule 28).
    """
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    assert acceptance_interval(rule, UPPER, 0.1, NORMAL).guard_band_upper == pytest.approx(0.1645, abs=5e-5)
    reproducibility = 0.5
    accepted = acceptance_interval(rule, UPPER, reproducibility / 2.77, NORMAL)
    assert accepted.guard_band_upper / reproducibility == pytest.approx(0.59, abs=5e-3)


@pytest.mark.parametrize(
    ("rule", "options", "words"),
    [
        (TWO_ROUNDS, {}, "2 rounds needs"),
        (DecisionRule("guarded_by_specific_risk", largest_risk=0.05), {"risk_per_look": 0.03}, "has no"),
        (TWO_ROUNDS, {"risk_per_look": 0.5}, "between 0 and 0.5"),
        (TWO_ROUNDS, {"risk_per_look": 0.03, "guard_band": 0.1}, "takes no guard band"),
    ],
)
def test_what_does_not_fit_the_rule_is_refused(rule, options, words):
    with pytest.raises(LimitsError, match=words):
        acceptance_interval(rule, UPPER, 0.1, NORMAL, **options)


def test_a_guard_band_found_elsewhere_stands_unless_the_cap_needs_more(by_global_risk):
    wide = acceptance_interval(by_global_risk, BOTH, 0.1, NORMAL, guard_band=0.3)
    assert (wide.lower, wide.upper) == (pytest.approx(2.3), pytest.approx(3.7))
    narrow = acceptance_interval(by_global_risk, BOTH, 0.1, NORMAL, guard_band=0.0)
    assert narrow.upper == pytest.approx(4 - 0.1 * NORMAL.upper_quantile(0.1), rel=1e-9)
    with pytest.raises(LimitsError, match="needs a guard band"):
        acceptance_interval(by_global_risk, BOTH, 0.1, NORMAL)
    with pytest.raises(LimitsError, match="finite"):
        acceptance_interval(by_global_risk, BOTH, 0.1, NORMAL, guard_band=-0.1)
    with pytest.raises(EmptyAcceptanceError, match="overlap"):
        acceptance_interval(by_global_risk, BOTH, 0.1, NORMAL, guard_band=1.1)


def test_a_guard_band_beside_an_uncertainty_that_depends_on_the_estimate(by_global_risk):
    dependence = LevelDependence(0.05, 0.01)
    found = level_dependent_acceptance(by_global_risk, BOTH, dependence, NORMAL, guard_band=0.3)
    assert (found.lower, found.upper) == (pytest.approx(2.3), pytest.approx(3.7))
    capped = level_dependent_acceptance(by_global_risk, BOTH, dependence, NORMAL, guard_band=0.0)
    k = NORMAL.upper_quantile(0.1)
    assert capped.upper + k * dependence.at(capped.upper) == pytest.approx(4.0, rel=1e-9)


def test_an_interval_that_lies_outside_of_the_validated_range_says_what_would_open_it():
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    with pytest.raises(
        EmptyAcceptanceError, match=r"validated range.*Validate the method.*at most 0\.06079\."
    ) as e:
        acceptance_interval(rule, UPPER, 0.1, NORMAL, validated_range=(3.9, 6.0))
    largest = float(e.value.remedy.split()[-1].rstrip("."))
    acceptance_interval(rule, UPPER, largest, NORMAL, validated_range=(3.9, 6.0))


def test_a_cap_that_leaves_nothing_beside_the_guard_band_says_so(by_global_risk):
    # All of the error lies above: the cap asks for the upper end, the guard band for the lower one.
    p = (1e-4, 0.05, 0.5, 0.95, 1 - 1e-4)
    table = Tabulated(p, (3.0, 3.1, 3.2, 3.3, 3.4), 1_000_000)
    narrow = Tolerance(2.0, 2.5)
    with pytest.raises(EmptyAcceptanceError, match="the cap on the specific risk"):
        acceptance_interval(by_global_risk, narrow, 0.15, table, guard_band=0.2)
