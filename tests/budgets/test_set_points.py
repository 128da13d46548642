import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq, minimize_scalar
from scipy.stats import norm

from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import Tabulated
from budgets.errors import EmptyAcceptanceError, LimitsError, ModelError, ProcedureError
from budgets.global_risks import risks_of_acceptance
from budgets.lot_procedures import Demand, LotProcedure
from budgets.measurement_errors import MeasurementErrors, measurement_errors
from budgets.money import Money
from budgets.planned_looks import risk_per_look_of
from budgets.planned_measurements import planned_measurement, scaled
from budgets.process_variation import ProcessVariation, steered_process
from budgets.production_priors import ProductionPrior
from budgets.propagation import Counts
from budgets.release import ReleaseRule
from budgets.required_uncertainty import required_uncertainty
from budgets.set_point_figures import Production
from budgets.set_point_search import Wanted
from budgets.set_points import cheapest_set_point, nearest_set_point, set_points

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
FACTOR = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=1)
SIMPLE = DecisionRule("simple", largest_standard_uncertainty=1.0)
CUSTOMER = Demand("customer-b", Tolerance(None, 3.2), RISK)
LEGAL = Demand("legal", Tolerance(None, 5.0), FACTOR, legal=True)
TWO_LIMITS = Demand("customer-c", Tolerance(2.6, 3.3), RISK)
PROCESS = ProcessVariation(2.9, 0.08, 0.03)
MONEY = Money(25.0, 2000.0, 120.0, 300.0, 40.0, 20_000.0, 1500.0)
WANTED = Wanted(0.95)


@pytest.fixture
def production(a_budget):
    def make(
        demands=(LEGAL, CUSTOMER), process=PROCESS, money=MONEY, towards=None, looks=1, factor=1.0, **changes
    ):
        budget = scaled(a_budget(**changes), factor)
        return Production(
            process, planned_measurement(budget, LotProcedure(1, 2, looks=looks), demands), money, towards
        )

    return make


# --- the set points ------------------------------------------------------------------------------------


def test_the_nearest_set_point_is_the_closed_form_for_one_look(production):
    found = set_points(production(), WANTED)
    measurement = production().measurement
    # mathematics.md, rule 49: P(release) = Phi((A_U - m_obs)/s_obs), in the scale of the readings.
    spread = math.sqrt(0.08**2 + 0.03**2 + measurement.random_covariance[0, 0])
    limit = measurement.limits[0].upper_acceptance_limit + 0.03
    assert found.nearest.set_point == pytest.approx(limit - norm.ppf(0.95) * spread, abs=1e-7)
    assert found.nearest.release_rate >= 0.95
    assert found.nearest_bound_by == "release_rate"
    assert found.nearest.true_mean == pytest.approx(found.nearest.set_point - 0.03)
    assert found.today.set_point == pytest.approx(2.9)


def test_the_risk_can_be_what_holds_the_process_back(production):
    wanted = Wanted(0.5, 1e-4)
    found = set_points(production(), wanted)
    assert found.nearest_bound_by == "largest_risk"
    assert found.nearest.conditional_global_consumers_risk == pytest.approx(1e-4, rel=1e-4)

    def excess(centre):
        return production().figures([centre])[0].conditional_global_consumers_risk - 1e-4

    assert found.nearest.set_point == pytest.approx(brentq(excess, 2.5, 3.05) + 0.03, abs=1e-6)
    held_back = set_points(production(), Wanted(0.5, 1e-5))
    assert held_back.cheapest.conditional_global_consumers_risk == pytest.approx(1e-5, rel=1e-4)
    assert held_back.cheapest_bound_by == "largest_risk"
    assert held_back.cheapest.cost > found.cheapest.cost


def test_the_cheapest_set_point_is_that_of_another_method(production):
    for looks in (1, 2):
        made = production(looks=looks)
        found = cheapest_set_point(made, WANTED)
        other = minimize_scalar(
            lambda centre, made=made: made.figures([centre])[0].cost,
            bounds=made.measurement.centres,
            method="bounded",
            options={"xatol": 1e-10},
        )
        assert found.set_point == pytest.approx(other.x + 0.03, abs=1e-6)
        assert found.cost == pytest.approx(other.fun, rel=1e-12)
        # The slope changes its sign there.
        step = 1e-4
        before, after = made.figures([other.x - step, other.x + step])
        assert before.cost > found.cost < after.cost


def test_gain_per_year_is_the_difference_of_costs(production):
    found = set_points(production(), WANTED)
    assert found.gain_of_cheapest == pytest.approx((found.today.cost - found.cheapest.cost) * 2000)
    assert found.gain_of_cheapest >= found.gain_of_nearest > 0
    assert sum(found.cheapest.cost_parts.values()) == pytest.approx(found.cheapest.cost)


def test_without_money_the_wanted_set_point_is_given_alone(production):
    found = set_points(production(money=None), WANTED)
    assert found.nearest is not None
    assert (
        found.cheapest is found.gain_of_nearest is found.gain_of_cheapest is found.cheapest_bound_by is None
    )
    assert found.nearest.cost is None
    with pytest.raises(LimitsError, match="without money"):
        cheapest_set_point(production(money=None), WANTED)


def test_two_limits_have_a_best_centre(production):
    found = set_points(production((TWO_LIMITS,), money=None), Wanted(0.8))
    assert found.nearest is found.nearest_bound_by is None
    middle = sum(production((TWO_LIMITS,), money=None).measurement.centres) / 2
    assert found.best_centre.set_point == pytest.approx(middle + 0.03, abs=1e-5)
    assert found.lowest < found.best_centre.set_point < found.highest
    towards = set_points(production((TWO_LIMITS,), towards="upper"), Wanted(0.8))
    assert towards.nearest.set_point == pytest.approx(found.highest)
    lower = set_points(production((TWO_LIMITS,), towards="lower"), Wanted(0.8))
    assert lower.nearest.set_point == pytest.approx(found.lowest)
    assert lower.cheapest.set_point < found.best_centre.set_point < towards.cheapest.set_point
    with pytest.raises(LimitsError, match="towards which"):
        nearest_set_point(production((TWO_LIMITS,), money=None), Wanted(0.8))


def test_the_best_centre_keeps_what_is_wanted(production):
    low = Demand("legal", Tolerance(2.6, None), replace(RISK, largest_risk=0.001), legal=True)
    two = production((low, Demand("plain", Tolerance(None, 3.2), SIMPLE)), money=None)
    free, bound = (set_points(two, Wanted(0.5, risk)) for risk in (None, 0.002))
    # Most lots are released where too many of them do not conform: the risk decides.
    assert free.best_centre.conditional_global_consumers_risk > 0.004
    assert bound.best_centre.set_point == pytest.approx(bound.highest, abs=1e-9)
    assert bound.best_centre.conditional_global_consumers_risk == pytest.approx(0.002, rel=1e-4)


def test_a_process_beyond_the_limit_is_counted_as_one_at_it(production):
    # What is not released would else be worth more than the lots that are.
    at, beyond = (
        set_points(production(process=ProcessVariation(mean, 0.08)), WANTED) for mean in (3.2 + 0.03, 9.0)
    )
    assert at.today.true_mean == pytest.approx(3.2, abs=1e-9)
    assert beyond.cheapest.set_point == pytest.approx(at.cheapest.set_point, abs=1e-6)
    assert beyond.cheapest.cost == pytest.approx(at.cheapest.cost, rel=1e-9)
    assert beyond.gain_of_cheapest > 0


def test_the_lower_limit_is_the_mirror_of_the_upper_one(production):
    upper = set_points(production((CUSTOMER,), bias=0.0), WANTED)
    mirrored = Demand("mirror", Tolerance(-3.2, None), RISK)
    lower = set_points(
        production((mirrored,), replace(PROCESS, mean=-2.9), bias=0.0, validated_range=(-5.5, -1.5)), WANTED
    )
    assert lower.nearest.set_point == pytest.approx(-upper.nearest.set_point, abs=1e-7)
    assert lower.cheapest.set_point == pytest.approx(-upper.cheapest.set_point, abs=1e-6)
    assert lower.cheapest.cost == pytest.approx(upper.cheapest.cost)
    quantile = upper.today.conditional_global_consumers_risk_quantile
    assert lower.today.conditional_global_consumers_risk_quantile == pytest.approx(quantile)


def test_drift_is_told_apart(production):
    found = set_points(production(), WANTED)
    steady = production(process=replace(PROCESS, drift=0.0))
    assert found.without_drift == pytest.approx(nearest_set_point(steady, WANTED))
    assert found.without_drift > found.nearest.set_point
    assert set_points(steady, WANTED).without_drift is None
    only_drift = production(process=ProcessVariation(2.9, 0.0, 0.03))
    assert set_points(only_drift, WANTED).without_drift is None


def test_an_uncorrected_bias_moves_the_truth_and_not_the_reading_scale(production):
    found = set_points(production(bias_treatment="in_guard_band"), WANTED)
    assert found.nearest.true_mean == pytest.approx(found.nearest.set_point - 0.03)
    measurement = production(bias_treatment="in_guard_band").measurement
    assert (measurement.reading_offset, measurement.residual_bias) == (0.0, 0.03)


def test_the_validated_range_bounds_what_may_be_released(production):
    made = production((LEGAL,), validated_range=(1.5, 4.0), money=MONEY)
    found = set_points(made, Wanted(0.5))
    assert found.nearest.set_point <= 4.03
    cheap_holds = replace(MONEY, cost_of_hold=0.1, cost_of_not_released=0.1, value_of_one_unit=1.0)
    pulled = set_points(
        production((LEGAL,), replace(PROCESS, mean=3.97), cheap_holds, validated_range=(1.5, 4.0)),
        Wanted(0.4),
    )
    assert pulled.cheapest_bound_by == "validated_range"
    assert pulled.cheapest.set_point == pytest.approx(4.03)


def test_the_acceptance_limit_bounds_where_money_pulls_further(production):
    cheap_holds = replace(MONEY, cost_of_hold=0.1, cost_of_not_released=0.1, cost_of_nonconforming=0.1)
    found = set_points(production(process=replace(PROCESS, mean=3.1), money=cheap_holds), Wanted(0.5))
    assert found.cheapest_bound_by == "acceptance_limit"
    assert found.nearest_bound_by in ("acceptance_limit", "release_rate")


# --- the risks -----------------------------------------------------------------------------------------


def test_the_quantile_over_the_common_error_is_that_of_many_errors(production):
    for demands in ((CUSTOMER,), (TWO_LIMITS,)):
        made = production(demands, money=None)
        found = made.figures_at(2.95)
        common = made.measurement.common_standard_uncertainty
        errors = common * norm.ppf((np.arange(1000) + 0.5) / 1000)
        known = replace(made.measurement, common_standard_uncertainty=0.0)
        risks = [
            Production(made.process, replace(known, residual_bias=error)).figures([2.95])[0]
            for error in errors
        ]
        conditional = sorted(item.conditional_global_consumers_risk for item in risks)
        assert found.conditional_global_consumers_risk_quantile == pytest.approx(
            np.quantile(conditional, 0.95), rel=0.02
        )
        assert found.conditional_global_consumers_risk == pytest.approx(np.mean(conditional), rel=0.01)


@pytest.mark.parametrize("demands", [(CUSTOMER,), (TWO_LIMITS,)], ids=["one limit", "two limits"])
def test_one_look_has_the_global_risks_of_its_acceptance_interval(production, a_budget, demands):
    """The same shares by another way: the joint law of true value and reading, with the prior of readings."""
    made = production(demands, money=None, validated_range=(0.0, 9.0))
    demand, rule = demands[0], made.measurement.rules[0]
    prior = ProductionPrior("normal", 2.95, PROCESS.unsteered_standard_deviation, anchor="readings")
    # Shares of lots are counted with the errors as they are, not with what is not known of them.
    known = measurement_errors(a_budget(), Counts((2,)), demand.tolerance)
    errors = MeasurementErrors.of(known.random.constant, known.common.constant)
    other = risks_of_acceptance(
        prior, errors, demand.tolerance, rule.lower_acceptance_limit, rule.upper_acceptance_limit
    )
    found = made.figures_at(2.95)
    assert found.release_rate == pytest.approx(other.release_rate[0], abs=1e-10)
    assert found.global_consumers_risk == pytest.approx(other.global_consumers_risk[0], abs=1e-10, rel=1e-6)
    assert found.global_producers_risk == pytest.approx(other.global_producers_risk[0], abs=1e-9)
    # With readings as they are, the rate of release is the same for every common error.
    joint = found.conditional_global_consumers_risk_quantile * found.release_rate
    assert joint == pytest.approx(other.global_consumers_risk_quantile[0], rel=1e-3)


def test_without_a_common_error_mean_and_quantile_are_one(production, a_component):
    made = production(components=(a_component("repeatability", 0.04),), bias=None)
    found = made.figures_at(2.95)
    assert found.conditional_global_consumers_risk_quantile == found.conditional_global_consumers_risk


# --- a simulated plant ---------------------------------------------------------------------------------

LOTS = 1_000_000


@pytest.mark.slow
@pytest.mark.parametrize("steered", [False, True], ids=["unsteered", "steered"])
@pytest.mark.parametrize("demands", [(LEGAL, CUSTOMER), (TWO_LIMITS,)], ids=["one limit", "two limits"])
def test_a_million_lots_show_rate_risk_cost_and_gain(production, a_budget, demands, steered):
    """Lots and readings drawn one by one and judged by the rules; held lots are read again and joined."""
    demands = tuple(
        replace(demand, decision_rule=replace(demand.decision_rule, rounds=2)) for demand in demands
    )
    process = PROCESS
    if steered:
        random = float(production(demands, towards="upper").measurement.random_covariance[0, 0])
        process = steered_process(2.9, 0.1, 0.07, random)
    made = production(demands, process, towards="upper", looks=2)
    simulated = {}
    for name, set_point in (("today", 2.9), ("there", 2.98)):
        predicted = made.figures([set_point - 0.03])[0]
        lots = SimulatedLots(a_budget(), demands, process, set_point, np.random.default_rng(7))
        costs = lots.costs(MONEY, today=2.9 - 0.03)
        for shown, figure in (
            (lots.released, predicted.release_rate),
            (lots.released & ~lots.conforming, predicted.global_consumers_risk),
            (lots.held_first, predicted.hold_rate),
            (~lots.released & lots.conforming, predicted.global_producers_risk),
            (costs, predicted.cost),
        ):
            assert abs(shown.mean() - figure) < 4 * shown.std() / math.sqrt(LOTS)
        simulated[name] = (costs, predicted.cost)
    (before, predicted_before), (after, predicted_after) = simulated["today"], simulated["there"]
    # The same lots at both set points: the gain is known better than either cost.
    gains = before - after
    assert abs(gains.mean() - (predicted_before - predicted_after)) < 4 * gains.std() / math.sqrt(LOTS)


class SimulatedLots:
    """A plant: errors of every component drawn at its own level, estimates formed, rules applied."""

    def __init__(self, budget, demands, process, set_point, rng):
        sd = {component.code: component.standard_uncertainty for component in budget.components}
        of_lot = rng.normal(0, sd["remainder"], LOTS)
        readings = rng.normal(0, sd["repeatability"], (LOTS, 4))
        # The bias that was corrected is wrong by one error for the plant: drawn anew, to show its mean.
        of_bias = rng.normal(0, sd["bias"], LOTS)
        first_error = of_lot + readings[:, :2].mean(axis=1)
        own = rng.normal(0, math.hypot(process.lot_to_lot, process.drift), LOTS)
        deviation = own - process.steering * first_error
        self.truth = set_point - budget.bias + deviation - of_bias
        shown = set_point - budget.bias + deviation
        first = self._judged(budget, demands, 1, shown + first_error)
        joined = shown + of_lot + readings.mean(axis=1)
        second = self._judged(budget, demands, 2, joined)
        self.held_first = first == 1
        self.released = (first == 0) | (self.held_first & (second == 0))
        tolerances = [demand.tolerance for demand in demands]
        self.conforming = np.ones(LOTS, bool)
        for tolerance in tolerances:
            if tolerance.upper is not None:
                self.conforming &= self.truth <= tolerance.upper
            if tolerance.lower is not None:
                self.conforming &= self.truth >= tolerance.lower
        self.limit = min(tolerance.upper for tolerance in tolerances)

    def _judged(self, budget, demands, looks, estimates):
        rules = [
            ReleaseRule.compile(
                budget,
                Counts((2,) * looks),
                demand.tolerance,
                demand.decision_rule,
                risk_per_look=risk_per_look_of(budget, demand.tolerance, demand.decision_rule),
            )
            for demand in demands
        ]
        return np.max([rule.judge_many(estimates).outcomes for rule in rules], axis=0)

    def costs(self, money, today):
        distance = np.where(self.released, self.limit - self.truth, self.limit - today)
        return (
            money.value_of_lot * distance
            + money.cost_of_hold * self.held_first
            + money.cost_of_retest * self.held_first
            + money.cost_of_not_released * ~self.released
            + money.cost_of_nonconforming * (self.released & ~self.conforming)
        )


# --- laws ----------------------------------------------------------------------------------------------


@settings(max_examples=25, deadline=None)
@given(
    factor=st.floats(0.3, 1.0),
    variation=st.floats(0.03, 0.2),
    rate=st.floats(0.6, 0.98),
)
def test_a_better_measurement_never_lowers_what_can_be_gained(factor, variation, rate):
    """At fixed degrees of freedom and looks, all errors smaller by one factor."""
    budget = _plain_budget()
    process = ProcessVariation(2.8, variation)
    costs, sets = [], []
    for each in (1.0, factor):
        measurement = planned_measurement(scaled(budget, each), LotProcedure(1, 2), (CUSTOMER,))
        made = Production(process, measurement, MONEY)
        costs.append(cheapest_set_point(made, WANTED).cost)
        sets.append(nearest_set_point(made, Wanted(rate)))
    assert costs[1] <= costs[0] * (1 + 1e-9)
    assert sets[1] >= sets[0] - 1e-7


@settings(max_examples=25, deadline=None)
@given(rates=st.lists(st.floats(0.5, 0.99), min_size=2, max_size=2), variation=st.floats(0.03, 0.2))
def test_a_higher_wanted_release_rate_never_moves_the_set_point_nearer(rates, variation):
    measurement = planned_measurement(_plain_budget(), LotProcedure(1, 2, looks=2), (CUSTOMER,))
    made = Production(ProcessVariation(2.8, variation), measurement)
    low, high = (nearest_set_point(made, Wanted(rate)) for rate in sorted(rates))
    assert high <= low + 1e-7


@settings(max_examples=15, deadline=None)
@given(scale=st.sampled_from([1e-3, 10.0, 1000.0]), variation=st.floats(0.03, 0.2))
def test_units_change_nothing(scale, variation):
    def found(by):
        budget = scaled(_plain_budget(by), by)
        demand = Demand("customer-b", Tolerance(None, 3.2 * by), RISK)
        money = replace(MONEY, value_of_one_unit=MONEY.value_of_one_unit / by)
        measurement = planned_measurement(budget, LotProcedure(1, 2), (demand,))
        return set_points(
            Production(ProcessVariation(2.8 * by, variation * by), measurement, money), Wanted(0.9)
        )

    one, other = found(1.0), found(scale)
    assert other.nearest.set_point == pytest.approx(one.nearest.set_point * scale, rel=1e-6)
    assert other.cheapest.set_point == pytest.approx(one.cheapest.set_point * scale, rel=1e-5)
    assert other.cheapest.cost == pytest.approx(one.cheapest.cost, rel=1e-9)


def _plain_budget(by=1.0):
    from budgets.budget import Budget, Count, Procedure
    from budgets.components import Component
    from budgets.evidence.evaluation import MeanSquare, Term

    def line(code, u, nu, level, quantity="moisture"):
        return Component(code, quantity, level, (Term(1.0, MeanSquare(code, u * u, nu)),), "A")

    return Budget(
        (
            line("repeatability", 0.04, 30, "reading"),
            line("remainder", 0.05, 40, "lot"),
            line("bias", 0.03, 59, "calibration", "bias"),
        ),
        Procedure(Count(1, 1, 3), Count(1, 2, 4)),
        0.95,
        0.0,
        "corrected",
        (1.0 * by, 5.5 * by),
    )


# --- the uncertainty that is needed --------------------------------------------------------------------


def test_the_uncertainty_needed_leads_back_to_the_set_point(a_budget):
    looks, demands = LotProcedure(1, 2), (CUSTOMER,)
    found = required_uncertainty(a_budget(), looks, demands, PROCESS, WANTED, 3.0)
    assert 0 < found.factor < 1
    better = planned_measurement(scaled(a_budget(), found.factor), looks, demands)
    assert found.standard_uncertainty == pytest.approx(better.standard_uncertainty)
    assert nearest_set_point(Production(PROCESS, better), WANTED) == pytest.approx(3.0, abs=1e-6)


def test_a_measurement_better_than_needed_says_by_how_much(a_budget):
    found = required_uncertainty(
        a_budget(), LotProcedure(1, 2), (CUSTOMER,), PROCESS, Wanted(0.95, 0.01), 2.85
    )
    assert found.factor > 1
    assert found.standard_uncertainty == pytest.approx(found.factor * found.todays_standard_uncertainty)


def test_where_only_the_risk_bounds_it_the_largest_factor_is_given(a_budget):
    simple = Demand("wide", Tolerance(None, 50.0), SIMPLE)
    budget = a_budget(validated_range=(1.5, 49.0))
    wide = Demand("wide", Tolerance(None, 50.0), replace(SIMPLE, largest_standard_uncertainty=100.0))
    found = required_uncertainty(budget, LotProcedure(1, 2), (wide,), PROCESS, Wanted(0.5), 20.0)
    assert found.factor == 16.0
    assert simple.tolerance == wide.tolerance


def test_two_limits_close_at_some_uncertainty(a_budget):
    found = required_uncertainty(
        a_budget(), LotProcedure(1, 2), (TWO_LIMITS,), ProcessVariation(2.98, 0.01), Wanted(0.5), 2.98
    )
    assert 1 < found.factor < 16


@pytest.mark.parametrize("set_point", [3.15, 3.5])
def test_a_set_point_that_no_measurement_allows_is_refused(a_budget, set_point):
    with pytest.raises(LimitsError, match="even an exact measurement"):
        required_uncertainty(a_budget(), LotProcedure(1, 2), (CUSTOMER,), PROCESS, WANTED, set_point)


# --- what is not possible ------------------------------------------------------------------------------


def test_a_release_rate_that_no_set_point_reaches_is_refused(production):
    with pytest.raises(LimitsError, match=r"no set point keeps a release rate of 0\.999: the best, 2\.9"):
        set_points(production((TWO_LIMITS,), money=None), Wanted(0.999))
    with pytest.raises(LimitsError, match="with at most 1e-09"):
        set_points(production((TWO_LIMITS,), money=None), Wanted(0.5, 1e-9))
    with pytest.raises(LimitsError, match="no set point keeps at most 1e-09"):
        cheapest_set_point(production((TWO_LIMITS,), towards="upper"), Wanted(0.5, 1e-9))


def test_a_narrow_window_between_the_points_of_the_grid_is_found(production):
    # Left of the middle of what is released both rate and risk grow: the window is small.
    made = production((CUSTOMER,), ProcessVariation(2.4, 0.3), money=None, validated_range=(2.0, 5.5))
    (there,) = made.figures([2.4321])
    wanted = Wanted(there.release_rate - 1e-4, there.conditional_global_consumers_risk * (1 + 1e-3))
    found = set_points(made, wanted)
    assert found.lowest < 2.4621 < found.highest < found.lowest + 2e-3
    # A bias left in the readings moves the least risk off the middle of the grid.
    risk = production((TWO_LIMITS,), towards="upper", bias_treatment="in_guard_band")
    least = min(p.conditional_global_consumers_risk for p in risk.figures(np.linspace(2.9, 3.05, 1501)))
    narrow = cheapest_set_point(risk, Wanted(0.5, least * (1 + 1e-7)))
    assert narrow.conditional_global_consumers_risk <= least * (1 + 1e-6)


def test_guarded_rejection_leaves_more_lots_on_hold(production):
    guarded = replace(CUSTOMER, decision_rule=replace(RISK, rejection="guarded"))
    own, other = (production((demand,)).figures([3.0])[0] for demand in (CUSTOMER, guarded))
    assert other.release_rate == pytest.approx(own.release_rate)
    assert other.reject_rate < own.reject_rate
    assert other.hold_rate + other.reject_rate == pytest.approx(own.hold_rate + own.reject_rate)


def test_holds_alone_have_a_price_between_two_limits(production):
    """Nothing is gained by running closer: the cheapest set point is the one with the fewest holds."""
    money = replace(MONEY, value_of_one_unit=0.0, cost_of_nonconforming=0.0)
    found = set_points(production((TWO_LIMITS,), money=money), Wanted(0.8))
    assert found.cheapest.set_point == pytest.approx(found.best_centre.set_point, abs=1e-5)
    assert found.cheapest.cost_parts["giveaway"] == 0
    assert found.gain_of_nearest is None


def test_money_beyond_the_law_is_refused(production):
    greedy = Money(25.0, 2000.0, 1e4, 0.001, 0.0, 0.001)
    law = Demand("legal", Tolerance(None, 3.2), SIMPLE, legal=True)
    process = ProcessVariation(3.15, 0.3)
    with pytest.raises(LimitsError, match=r"beyond the legal limit 3\.2"):
        set_points(production((law,), process, greedy), Wanted(0.4))
    lower = Demand("legal", Tolerance(2.8, None), SIMPLE, legal=True)
    with pytest.raises(LimitsError, match=r"beyond the legal limit 2\.8"):
        set_points(production((lower,), replace(process, mean=2.85), greedy), Wanted(0.4))


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        (
            {
                "value_of_one_unit": 0.0,
                "cost_of_hold": 0.0,
                "cost_of_retest": 0.0,
                "cost_of_nonconforming": 0.0,
                "cost_of_not_released": 0.0,
            },
            "all the money is zero",
        ),
        ({"lot_size": 0.0}, "lot_size must be"),
        ({"cost_of_hold": -1.0}, "not below 0"),
        ({"cost_of_not_released": math.nan}, "not below 0"),
    ],
)
def test_money_that_weighs_nothing_is_refused(changes, words):
    with pytest.raises(LimitsError, match=words):
        replace(MONEY, **changes)


def test_what_is_not_released_may_be_all_that_costs():
    assert Money(25.0, 2000.0, 0.0, 0.0, 0.0, 0.0, 400.0).not_released == 400.0


def test_a_lot_that_is_not_released_costs_a_hold_where_nothing_is_said():
    assert replace(MONEY, cost_of_not_released=None).not_released == MONEY.cost_of_hold


@pytest.mark.parametrize("wanted", [{"release_rate": 1.0}, {"release_rate": 0.9, "largest_risk": 0.0}])
def test_wishes_lie_between_0_and_1(wanted):
    with pytest.raises(LimitsError, match="between 0 and 1"):
        Wanted(**wanted)


def test_a_direction_without_a_limit_or_without_a_need_is_refused(production):
    with pytest.raises(LimitsError, match="no lower tolerance limit"):
        production(towards="lower")
    with pytest.raises(LimitsError, match="say towards which one"):
        production((TWO_LIMITS,))


# --- the planned measurement ---------------------------------------------------------------------------


@pytest.mark.parametrize("treatment", ["corrected", "in_guard_band"])
@pytest.mark.parametrize("rounds", [1, 2])
def test_limits_are_those_that_approval_compiles(a_budget, rounds, treatment):
    demand = replace(CUSTOMER, decision_rule=replace(RISK, rounds=rounds))
    budget = a_budget(bias_treatment=treatment)
    found = planned_measurement(budget, LotProcedure(1, 2, looks=rounds), (demand,))
    for look in range(rounds):
        rule = ReleaseRule.compile(
            budget,
            Counts((2,) * (look + 1)),
            demand.tolerance,
            demand.decision_rule,
            risk_per_look=risk_per_look_of(budget, demand.tolerance, demand.decision_rule),
        )
        assert found.limits[look].upper_acceptance_limit == pytest.approx(
            rule.upper_acceptance_limit, rel=1e-14
        )
        assert found.limits[look].upper_rejection_limit == rule.upper_tolerance_limit


def test_limits_by_monte_carlo_quantiles_are_those_that_approval_compiles(a_budget):
    """Whatever the quantiles, the risks of two looks add up to no more than the largest risk."""
    quantiles = Tabulated((0.001, 0.025, 0.5, 0.975, 0.999), (-4.0, -1.8, 0.1, 2.2, 4.5), 100_000)
    demand = replace(CUSTOMER, decision_rule=replace(RISK, rounds=2), distribution=quantiles)
    found = planned_measurement(a_budget(), LotProcedure(1, 2, looks=2), (demand,))
    rule = ReleaseRule.compile(
        a_budget(),
        Counts((2,)),
        demand.tolerance,
        demand.decision_rule,
        distribution=quantiles,
        risk_per_look=RISK.largest_risk / 2,
    )
    assert found.limits[0].upper_acceptance_limit == pytest.approx(rule.upper_acceptance_limit, rel=1e-14)


def test_demands_that_exclude_each_other_accept_nothing(a_budget):
    high = Demand("high", Tolerance(3.3, None), RISK)
    with pytest.raises(EmptyAcceptanceError, match="another one does not"):
        planned_measurement(a_budget(), LotProcedure(1, 2), (CUSTOMER, high))


def test_a_rule_without_a_further_round_keeps_what_it_holds(production, a_budget):
    """Two rules of two rounds and of one: what the second one holds is not read again."""
    twice = replace(CUSTOMER, decision_rule=replace(RISK, rounds=2))
    once = Demand("own", Tolerance(None, 3.16), RISK)
    made = production((twice, once), looks=2)
    first, last = made.measurement.limits
    own = planned_measurement(a_budget(), LotProcedure(1, 2), (once,)).limits[0]
    assert first.upper_further_limit == pytest.approx(own.upper_acceptance_limit)
    assert math.isinf(last.upper_further_limit)
    both = production((twice,), looks=2)
    (mixed,), (free,) = (each.figures([2.98]) for each in (made, both))
    assert mixed.further_looks < free.further_looks
    assert mixed.hold_rate + mixed.reject_rate + mixed.release_rate_of_first_look == pytest.approx(1)
    # The stricter rule of one round accepts less than what two rounds of the other one leave to hope for.
    assert mixed.release_rate < free.release_rate


def test_a_further_look_halves_what_is_drawn_anew_within_it(a_budget):
    found = planned_measurement(a_budget(), LotProcedure(1, 2, looks=2), (CUSTOMER,))
    lot, reading = 0.05**2, 0.04**2
    assert found.random_covariance[0, 0] == pytest.approx(lot + reading / 2)
    assert found.random_covariance[1, 1] == pytest.approx(lot + reading / 4)
    assert found.random_covariance[0, 1] == pytest.approx(lot + reading / 4)
    assert found.common_standard_uncertainty == pytest.approx(0.02)


def test_increments_are_parts_of_a_composite(a_budget, a_component):
    components = (
        a_component("increments", 0.06, level="increment"),
        a_component("cup", 0.02, level="presentation"),
    )
    budget = a_budget(components=components, bias=None)
    one = planned_measurement(budget, LotProcedure(1, 2), (CUSTOMER,))
    four = planned_measurement(budget, LotProcedure(1, 2, 4), (CUSTOMER,))
    assert one.random_covariance[0, 0] == pytest.approx(0.06**2 + 0.02**2)
    assert four.random_covariance[0, 0] == pytest.approx(0.06**2 / 4 + 0.02**2)


def test_an_uncertainty_that_grows_with_the_value_is_that_at_the_limit(a_budget, a_component):
    from budgets.evidence.evaluation import MeanSquare, Term

    relative = a_component("relative", terms=(), relative_terms=(Term(1.0, MeanSquare("r", 0.01**2, 40)),))
    found = planned_measurement(a_budget(components=(relative,), bias=None), LotProcedure(1, 1), (CUSTOMER,))
    assert found.random_covariance[0, 0] == pytest.approx((0.01 * 3.2) ** 2)


@pytest.mark.parametrize("changes", [{"samples": 0}, {"looks": 0}, {"samples": 26, "looks": 2}])
def test_impossible_numbers_of_looks_are_refused(changes):
    with pytest.raises(ProcedureError):
        LotProcedure(**{"samples": 1, "readings_per_sample": 1, **changes})


def test_one_line_can_be_scaled_alone(a_budget):
    changed = scaled(a_budget(), 0.5, component="remainder")
    assert [c.standard_uncertainty for c in changed.components] == pytest.approx([0.04, 0.025, 0.02])


def test_a_derived_characteristic_has_no_limit_to_run_towards(a_budget, a_component):
    from budgets.measurement_models import MeasurementModel, Quantity

    model = MeasurementModel("moisture", (Quantity("moisture"),))
    budget = a_budget(
        model=model, components=(a_component(),), bias=None, validated_box={"moisture": (1.5, 5.5)}
    )
    with pytest.raises(ModelError, match="no fixed acceptance limits"):
        planned_measurement(budget, LotProcedure(1, 2), (CUSTOMER,))
