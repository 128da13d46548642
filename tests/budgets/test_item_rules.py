"""Items instead of the mean: against the noncentral t distribution, published factors, simulations."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import nct, norm

from budgets.budget import Count, Procedure
from budgets.conformity import Tolerance
from budgets.correlations import Correlation
from budgets.decision_rules import DecisionRule
from budgets.derived_release import release_rule_kind
from budgets.errors import EmptyAcceptanceError, LimitsError, NotSupportedError, ProcedureError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.item_rules import ItemRequirement, LotSpreadRule, item_rule
from budgets.item_spread import ItemSpread, share_factor
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from budgets.rounded_comparison import rounded_tolerance
from budgets.sureness import sureness

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
KNOWN, FROM_LOT = ItemRequirement(0.95), ItemRequirement(0.95, "from_lot")
UPPER, LOWER, BOTH = Tolerance(None, 4.0), Tolerance(2.0, None), Tolerance(2.0, 4.0)
Q = norm.ppf(0.95)


@pytest.fixture
def budget(a_budget, a_component):
    """Give a budget with readings, items and a calibration, all of known standard deviations."""
    return a_budget(
        components=(
            a_component("repeatability", 0.04, level="reading"),
            a_component("items", 0.1, level="sample"),
            a_component("bias", 0.03, level="calibration", quantity="bias"),
        ),
        procedure=Procedure(Count(1, 3, 6), Count(1, 2, 4)),
    )


def pure(samples, share):
    """Return the spread of so many samples without any other error, s = 1."""
    root = math.sqrt(samples)
    return ItemSpread(
        1 / root, 1.0, samples - 1, 0.0, 1 / samples, 0.0, math.inf, share_factor(share, 1), share
    )


# ISO 16269-6, factors of one-sided tolerance intervals, unknown spread, confidence 95 % (from memory).
@pytest.mark.parametrize(
    ("samples", "share", "factor"),
    [(2, 0.95, 26.260), (5, 0.95, 4.203), (10, 0.95, 2.911), (20, 0.99, 3.295)],
)
def test_published_factors_of_tolerance_intervals(samples, share, factor):
    assert pure(samples, share).upper_quantile(0.05) / math.sqrt(samples) == pytest.approx(factor, abs=5e-4)


@pytest.mark.parametrize("samples", [2, 3, 8, 9, 30])
@pytest.mark.parametrize(("share", "risk"), [(0.9, 0.05), (0.99, 0.001), (0.5, 0.3)])
def test_without_other_errors_it_is_the_noncentral_t_distribution(samples, share, risk):
    root = math.sqrt(samples)
    found = pure(samples, share).upper_quantile(risk) / root
    assert found == pytest.approx(nct.ppf(1 - risk, samples - 1, norm.ppf(share) * root) / root, rel=1e-7)


def test_a_known_spread_has_the_closed_form(budget):
    rule = item_rule(budget, Counts((2, 2)), UPPER, RISK, KNOWN)
    u_mean = math.sqrt(0.04**2 / 4 + 0.1**2 / 2 + 0.03**2)
    # A_U = T_U - z_share sigma - z_risk u(mean)
    assert rule.upper_acceptance_limit == pytest.approx(4 - Q * 0.1 - Q * u_mean, rel=1e-12)
    assert rule.combined_standard_uncertainty == pytest.approx(u_mean)
    assert rule.expanded_uncertainty == pytest.approx(1.959964 * u_mean)
    verdict = rule.judge(3.7)
    assert verdict.conformance_probability == pytest.approx(norm.cdf((4 - Q * 0.1 - 3.7) / u_mean))
    assert verdict.specific_consumers_risk == pytest.approx(1 - verdict.conformance_probability)
    lower = item_rule(budget, Counts((2, 2)), LOWER, RISK, KNOWN)
    assert lower.lower_acceptance_limit == pytest.approx(2 + Q * 0.1 + Q * u_mean, rel=1e-12)
    assert lower.judge(2.3).conformance_probability == pytest.approx(norm.cdf((0.3 - Q * 0.1) / u_mean))
    # With two limits each takes half of the share that may lie outside.
    both = item_rule(budget, Counts((2, 2)), BOTH, RISK, KNOWN)
    assert both.upper_acceptance_limit == pytest.approx(4 - norm.ppf(0.975) * 0.1 - Q * u_mean, rel=1e-9)


def test_a_known_spread_of_few_degrees_of_freedom_costs_something(budget, a_component):
    few = replace(budget.components[1], terms=(Term(1.0, MeanSquare("few", 0.01, 9.0)),))
    vague = replace(budget, components=(budget.components[0], few, budget.components[2]))
    sure, unsure = (item_rule(b, Counts((2, 2, 2)), UPPER, RISK, KNOWN) for b in (budget, vague))
    assert unsure.upper_acceptance_limit < sure.upper_acceptance_limit
    judged = unsure.judge(unsure.upper_acceptance_limit)
    assert judged.specific_consumers_risk == pytest.approx(0.05, rel=1e-9)
    assert sureness(unsure, 3.5) is None


def test_other_errors_of_few_degrees_of_freedom_are_students_t():
    # Hardly any spread: what is left is the mean with its own t distribution.
    alone = ItemSpread(0.1, 1e-9, math.inf, 0.0, 0.5, 0.1, 8.0, 1.645, 0.95)
    assert float(alone.upper_tail(1.96)) == pytest.approx(0.0428, abs=5e-5)


@pytest.mark.parametrize("samples", [2, 4])
@pytest.mark.parametrize(("noise", "common"), [(0.0, 0.0), (0.5, 0.4)])
def test_a_lot_with_too_few_good_items_is_accepted_no_oftener_than_the_risk(samples, noise, common):
    """Items of spread 1 whose 95 % quantile lies exactly at the limit."""
    generator, runs, accepted = np.random.default_rng(5), 1500, 0
    for _ in range(runs):
        means = generator.normal(0, math.hypot(1, noise), samples) + generator.normal(0, common)
        s = means.std(ddof=1)
        u = math.hypot(s / math.sqrt(samples), common)
        spread = ItemSpread(u, s, samples - 1, noise, 1 / samples, common, math.inf, Q, 0.95)
        accepted += float(spread.upper_tail((Q - means.mean()) / u)) <= 0.05
    assert accepted / runs <= 0.05 + 4 * math.sqrt(0.05 * 0.95 / runs)
    if noise == common == 0:
        assert accepted / runs >= 0.05 - 4 * math.sqrt(0.05 * 0.95 / runs)


def test_the_spread_of_the_lot_at_hand(budget):
    rule = item_rule(budget, Counts((2, 2, 2)), UPPER, RISK, FROM_LOT)
    assert isinstance(rule, LotSpreadRule)
    means = [3.0, 3.1, 3.3]
    here = rule.at(means)
    s, u_r = np.std(means, ddof=1), 0.04 / math.sqrt(2)
    assert here.combined_standard_uncertainty == pytest.approx(math.sqrt(s**2 / 3 + 0.03**2))
    assert here.items.standard_deviation == pytest.approx(s)
    assert here.items.measurement_standard_deviation == pytest.approx(u_r)
    assert here.items.item_standard_deviation == pytest.approx(math.sqrt(s**2 - u_r**2))
    # Between the factor of noncentral t without other errors, and that with all of them added.
    k = pure(3, 0.95).upper_quantile(0.05) / math.sqrt(3)
    assert 4 - k * s - Q * 0.03 - 0.01 < here.upper_acceptance_limit < 4 - k * s * 0.95
    # A lot whose samples agree better than readings can: the measurement alone.
    same = rule.at([3.0, 3.0, 3.0])
    assert same.items.standard_deviation == pytest.approx(u_r)
    assert same.upper_acceptance_limit > here.upper_acceptance_limit
    with pytest.raises(LimitsError, match="3 samples, not 2"):
        rule.at([3.0, 3.1])
    with pytest.raises(EmptyAcceptanceError, match=r"The spread of the items, 0\.9996, would have to shrink"):
        item_rule(budget, Counts((2, 2, 2)), BOTH, RISK, FROM_LOT).at([2.0, 3.0, 4.0])


def test_nothing_known_and_nothing_seen_is_no_spread(budget):
    only = replace(budget, components=(replace(budget.components[1]),), bias=None)
    with pytest.raises(LimitsError, match="all samples read the same"):
        item_rule(only, Counts((1, 1)), UPPER, RISK, FROM_LOT)


def test_arrays_and_documents(budget):
    both = item_rule(budget, Counts((2, 2)), BOTH, RISK, KNOWN)
    estimates = np.linspace(1.8, 4.2, 13)
    many = both.judge_many(estimates)
    assert many.conformance_probability == pytest.approx(
        [both.judge(x).conformance_probability for x in estimates], abs=1e-14
    )
    assert ReleaseRule.from_document(json.loads(json.dumps(both.to_document()))) == both
    for tolerance in (UPPER, rounded_tolerance(None, 4.0, decimals=1)):
        lot = item_rule(budget, Counts((2, 2)), tolerance, RISK, FROM_LOT)
        document = json.loads(json.dumps(lot.to_document()))
        assert LotSpreadRule.from_document(document) == lot
        assert release_rule_kind(document) == "spread_from_lot"


@pytest.mark.parametrize(
    ("share", "spread", "where"), [(0.4, "known", "item_share"), (0.9, "guess", "item_spread")]
)
def test_what_is_no_requirement_of_items(share, spread, where):
    with pytest.raises(LimitsError) as caught:
        ItemRequirement(share, spread)
    assert caught.value.where == (where,)


def test_what_items_cannot_stand_beside(budget, a_component):
    counts = Counts((2, 2))
    factor = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=2)
    with pytest.raises(LimitsError, match="specific risk"):
        item_rule(budget, counts, UPPER, factor, KNOWN)
    for rule in (replace(RISK, rejection="guarded"), replace(RISK, rounds=2)):
        with pytest.raises(NotSupportedError, match="judging items beside"):
            item_rule(budget, counts, UPPER, rule, KNOWN)
    relative = replace(budget.components[0], relative_terms=budget.components[0].terms)
    with pytest.raises(NotSupportedError, match="proportional"):
        item_rule(replace(budget, components=(relative, *budget.components[1:])), counts, UPPER, RISK, KNOWN)
    with pytest.raises(NotSupportedError, match="correlations"):
        other = a_component("other", 0.01, level="reading")
        tied = Correlation(("repeatability", "other"), "reading", 0.5)
        item_rule(
            replace(budget, components=(*budget.components, other), correlations=(tied,)),
            counts,
            UPPER,
            RISK,
            KNOWN,
        )
    model = MeasurementModel("moisture", (Quantity("moisture"),))
    derived = replace(
        budget,
        components=budget.components[:2],
        bias=None,
        model=model,
        validated_box={"moisture": (1.0, 5.0)},
    )
    with pytest.raises(NotSupportedError, match="computed from"):
        item_rule(derived, counts, UPPER, RISK, KNOWN)
    with pytest.raises(LimitsError, match="no component at the level 'sample'"):
        without = replace(budget, components=(budget.components[0], budget.components[2]))
        item_rule(without, counts, UPPER, RISK, KNOWN)
    with pytest.raises(LimitsError, match="two samples at least"):
        item_rule(budget, Counts((2,)), UPPER, RISK, FROM_LOT)
    with pytest.raises(NotSupportedError, match="read unequally"):
        item_rule(budget, Counts((1, 2)), UPPER, RISK, FROM_LOT)
    with pytest.raises(NotSupportedError, match="read unequally"):
        item_rule(budget, ReadingPattern({"sample": ("a", "a", "b", "b")}), UPPER, RISK, FROM_LOT)
    with pytest.raises(ProcedureError):
        item_rule(budget, Counts((9,)), UPPER, RISK, KNOWN)


def test_a_spread_that_is_hardly_known_reaches_no_small_risk():
    with pytest.raises(LimitsError, match="known too badly"):
        ItemSpread(1.0, 1.0, 0.05, 0.0, 0.5, 0.0, math.inf, Q, 0.95).upper_quantile(1e-4)


def test_quantiles_undo_the_tails_also_far_down():
    spread = pure(5, 0.9)
    for p in (1e-4, 0.3, 0.9999):
        assert float(spread.upper_tail(spread.upper_quantile(p))) == pytest.approx(p, rel=1e-9)
        assert float(spread.lower_tail(spread.lower_quantile(p))) == pytest.approx(p, rel=1e-9)
