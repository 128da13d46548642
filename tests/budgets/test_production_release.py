"""Release rules by global risk, and priors beside a verdict."""

import json
import math

import pytest

from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import Tabulated
from budgets.errors import EmptyAcceptanceError, LimitsError, NotSupportedError
from budgets.explanations import explain
from budgets.global_guard_bands import global_guard_band
from budgets.global_risks import mean_consumers_risk
from budgets.measurement_errors import measurement_errors
from budgets.production_priors import ProductionPrior, Steering
from budgets.production_release import release_rule_over_production
from budgets.propagation import Counts
from budgets.release import ReleaseRule
from budgets.reporting import rule_text

UPPER, BOTH = Tolerance(None, 3.2), Tolerance(2.4, 3.2)
ONE = Counts((2,))
PRIOR = ProductionPrior("normal", 2.95, 0.12)


def by_global_risk(risk=0.001, cap=0.2, **members):
    return DecisionRule("guarded_by_global_risk", largest_risk=risk, specific_risk_cap=cap, **members)


@pytest.mark.parametrize("tolerance", [UPPER, BOTH])
def test_the_rule_holds_both_risks(a_budget, tolerance):
    made = release_rule_over_production(a_budget(), ONE, tolerance, by_global_risk(), PRIOR)
    errors = measurement_errors(a_budget(), ONE, tolerance)
    risk, rate = mean_consumers_risk(
        PRIOR, errors, tolerance, made.lower_acceptance_limit, made.upper_acceptance_limit
    )
    known = made.production
    assert (known.global_consumers_risk, known.release_rate) == (risk, rate)
    assert risk <= 0.001 * (1 + 1e-9)
    assert made.largest_specific_risk <= 0.2 * (1 + 1e-9)
    band = global_guard_band(PRIOR, errors, tolerance, 0.001).guard_band
    assert made.guard_band_upper == pytest.approx(band, rel=1e-12)


def test_the_cap_holds_where_the_production_alone_would_not(a_budget):
    calm = ProductionPrior("normal", 2.7, 0.05)
    made = release_rule_over_production(a_budget(), ONE, UPPER, by_global_risk(0.01, 0.05), calm)
    alone = ReleaseRule.compile(
        a_budget(), ONE, UPPER, DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    )
    assert made.upper_acceptance_limit == alone.upper_acceptance_limit
    assert made.production.global_consumers_risk < 1e-6


def test_guarded_rejection_is_mirrored(a_budget):
    made = release_rule_over_production(a_budget(), ONE, UPPER, by_global_risk(rejection="guarded"), PRIOR)
    assert made.upper_rejection_limit == pytest.approx(3.2 + made.guard_band_upper)


def test_any_other_rule_is_the_same_with_a_prior_and_without(a_budget):
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    known = release_rule_over_production(a_budget(), ONE, UPPER, rule, PRIOR)
    bare = ReleaseRule.compile(a_budget(), ONE, UPPER, rule)
    for estimate in (2.9, 3.15, 3.3):
        assert known.judge(estimate) == bare.judge(estimate)
    found = known.production.posterior(known.tolerance, 3.15)
    assert found.used and found.conformance_probability > bare.judge(3.15).conformance_probability


@pytest.mark.parametrize(
    "prior",
    [
        PRIOR,
        ProductionPrior("t", 2.95, 0.12, 7.5, anchor="readings"),
        ProductionPrior.empirical([2.7 + 0.01 * i for i in range(40)]),
        ProductionPrior("normal", 2.9, 0.1, steering=Steering(2.9, 0.05, -0.2)),
    ],
    ids=["normal", "t", "empirical", "steered"],
)
def test_stored_numbers_give_the_same_rule_to_the_last_bit(a_budget, prior):
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    made = release_rule_over_production(a_budget(), ONE, UPPER, rule, prior)
    again = ReleaseRule.from_document(json.loads(json.dumps(made.to_document(), allow_nan=False)))
    assert again.production == made.production
    assert again.production.posterior(UPPER, 3.1) == made.production.posterior(UPPER, 3.1)
    old = made.to_document()
    del old["production"]
    assert ReleaseRule.from_document(old).production is None


def test_a_risk_out_of_reach_and_an_empty_interval_are_refused(a_budget):
    with pytest.raises(LimitsError, match="out of reach"):
        release_rule_over_production(
            a_budget(), ONE, UPPER, by_global_risk(), ProductionPrior("normal", 4.0, 0.1)
        )
    narrow = Tolerance(3.0, 3.05)
    with pytest.raises(EmptyAcceptanceError):
        release_rule_over_production(
            a_budget(), ONE, narrow, by_global_risk(0.4, 0.01), ProductionPrior("normal", 3.02, 0.02)
        )


def test_a_monte_carlo_distribution_is_not_supported_beside_a_prior(a_budget):
    levels = tuple((i + 0.5) / 999 for i in range(999))
    table = Tabulated(levels, tuple(-3 + 6 * level for level in levels), 100_000)
    for rule in (by_global_risk(), DecisionRule("guarded_by_specific_risk", largest_risk=0.05)):
        with pytest.raises(NotSupportedError, match="Monte Carlo"):
            release_rule_over_production(a_budget(), ONE, UPPER, rule, PRIOR, distribution=table)


def test_probabilities_within_the_domain_are_not_supported_beside_a_prior(a_budget):
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    with pytest.raises(NotSupportedError, match="within the natural domain"):
        release_rule_over_production(a_budget(), ONE, UPPER, rule, PRIOR, domain=(0.0, 100.0), truncated=True)


def test_the_rule_in_words():
    text = rule_text(by_global_risk(0.001, 0.1))
    assert text == (
        "guarded acceptance with a global consumer's risk of at most 0.1 % "
        "and a specific risk of at most 10 %"
    )


def test_an_explanation_leaves_the_limits_to_the_production(a_budget):
    found = explain(a_budget(), ONE, estimates={"moisture": 3.0}, tolerance=UPPER, rule=by_global_risk())
    assert found.acceptance_limits.upper is None
    assert "production" in found.acceptance_limits.detail
    assert math.isfinite(found.expanded_uncertainty)
