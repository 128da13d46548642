import math
from dataclasses import replace

import pytest

from budgets.changed_measurements import (
    ChangedBudget,
    ChangedComponent,
    ChangedLooks,
    CorrectedBias,
    Measuring,
    ReferenceDeterminations,
    go_together,
)
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.errors import BudgetsError, ComponentError, LimitsError, ProcedureError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.improvements import Option, Situation, improvements
from budgets.lot_procedures import Demand, LotProcedure
from budgets.money import Money
from budgets.planned_measurements import planned_measurement
from budgets.process_variation import ProcessVariation
from budgets.set_point_figures import Production
from budgets.set_point_search import Wanted
from budgets.set_points import cheapest_set_point

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
CUSTOMER = Demand("customer-b", Tolerance(None, 3.2), RISK)
PROCESS = ProcessVariation(2.9, 0.08, 0.03)
MONEY = Money(25.0, 2000.0, 120.0, 300.0, 40.0, 20_000.0, 1500.0)
LOOKS = LotProcedure(1, 2)


@pytest.fixture
def situation(a_budget, a_component):
    components = (
        a_component("repeatability", 0.04, 30),
        a_component("sampling", 0.03, 8, level="sample"),
        a_component("remainder", 0.05, 40, level="lot"),
        a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
        a_component("trueness", 0.05, 8, level="reference", quantity="bias"),
    )

    def make(money=MONEY, looks=LOOKS, **changes):
        budget = a_budget(components=components, **changes)
        return Situation(budget, looks, (CUSTOMER,), PROCESS, money, Wanted(0.9))

    return make


OPTIONS = (
    Option("four-readings", ChangedLooks(readings_per_sample=4), cost_per_lot=2.0),
    Option("two-samples", ChangedLooks(samples=2), cost_per_lot=10.0),
    Option("better-trueness", ChangedComponent("trueness", standard_uncertainty=0.02), cost_per_year=3000.0),
    Option("half-the-remainder", ChangedComponent("remainder", factor=0.5), cost_per_year=1e6),
    Option("increments", ChangedLooks(increments_per_sample=4), cost_per_lot=1.0),
)


def test_options_are_ranked_by_what_they_bring_after_their_cost(situation):
    found = improvements(situation(), OPTIONS)
    nets = [item.net_gain_per_year for item in found.ranked]
    assert nets == sorted(nets, reverse=True)
    assert len(found.ranked) == 5 + 10
    assert found.best is found.ranked[0]
    single = {item.options: item for item in found.ranked}
    assert single["half-the-remainder",].gain_per_year > single["four-readings",].gain_per_year > 0
    assert single["half-the-remainder",].net_gain_per_year < 0
    assert single["four-readings",].cost_per_year == 4000.0
    both = single["four-readings", "better-trueness"]
    assert both.gain_per_year > max(single[name,].gain_per_year for name in both.options)
    assert both.cost_per_year == 7000.0


def test_an_option_gives_what_its_measurement_gives(situation):
    found = improvements(situation(), OPTIONS[1:2])
    (two,) = found.ranked
    measurement = planned_measurement(situation().budget, LotProcedure(2, 2), (CUSTOMER,))
    figures = cheapest_set_point(Production(PROCESS, measurement, MONEY), Wanted(0.9))
    assert two.set_point == figures
    assert two.standard_uncertainty == measurement.standard_uncertainty
    assert two.upper_acceptance_limit == measurement.limits[0].upper_acceptance_limit
    assert two.lower_acceptance_limit is None
    assert two.gain_per_year == pytest.approx((found.as_it_is.set_point.cost - figures.cost) * 2000)


def test_the_frontier_holds_what_no_other_beats(situation):
    found = improvements(situation(), OPTIONS)
    assert found.frontier[0] is found.as_it_is
    for cheaper, dearer in zip(found.frontier, found.frontier[1:], strict=False):
        assert cheaper.cost_per_year < dearer.cost_per_year
        assert cheaper.gain_per_year < dearer.gain_per_year
    for item in found.ranked:
        assert any(
            kept.cost_per_year <= item.cost_per_year and kept.gain_per_year >= item.gain_per_year
            for kept in found.frontier
        )


def test_nothing_pays_is_an_answer(situation):
    dear = [replace(option, cost_per_year=1e8) for option in OPTIONS]
    found = improvements(situation(), dear)
    assert found.best is None
    assert found.ranked[0].net_gain_per_year < 0
    impossible = improvements(situation(), [Option("bias", CorrectedBias())])
    assert impossible.best is None
    assert impossible.ranked == ()


def test_what_does_not_help_a_reading_is_said(situation):
    # mathematics.md, rule 51.
    determinations = Option("duplicates", ReferenceDeterminations("bias", 0.05, 2, 1, 60), 0.0, 500.0)
    found = {item.options: item for item in improvements(situation(), [*OPTIONS, determinations]).ranked}
    remarks = " ".join(found["duplicates",].remarks)
    assert "noise is in no reading" in remarks
    assert "It does not help a reading" in " ".join(found["increments",].remarks)
    assert found["increments",].gain_per_year == pytest.approx(0, abs=1e-6)
    assert found["four-readings",].remarks == ()


def test_fewer_looks_are_no_matter_of_uncertainty(situation):
    rule = replace(RISK, rounds=2)
    two = replace(
        situation(looks=LotProcedure(1, 2, looks=2)), demands=(replace(CUSTOMER, decision_rule=rule),)
    )
    found = improvements(two, [Option("one-look", ChangedLooks(looks=1))])
    (one,) = found.ranked
    assert one.remarks == ()
    assert one.set_point.further_looks == 0 < found.as_it_is.set_point.further_looks
    # One look may take the whole risk, of two each takes less.
    assert one.upper_acceptance_limit > found.as_it_is.upper_acceptance_limit


def test_a_worse_measurement_is_said_to_be_worse(situation):
    found = improvements(situation(), [Option("one-reading", ChangedLooks(readings_per_sample=1))])
    (worse,) = found.ranked
    assert worse.gain_per_year < 0
    assert "rises from" in worse.remarks[0]


def test_another_budget_has_its_own_bias(situation):
    """The same measurement with another bias: set points move in reading scale, and nothing is gained."""
    other = replace(situation().budget, bias=0.1)
    found = improvements(situation(), [Option("other", ChangedBudget(other))])
    (same,) = found.ranked
    assert same.gain_per_year == pytest.approx(0, abs=1e-5)
    assert same.set_point.set_point == pytest.approx(found.as_it_is.set_point.set_point + 0.07, abs=1e-6)


def test_a_bias_in_the_guard_band_is_worth_correcting(situation):
    found = improvements(
        situation(bias_treatment="in_guard_band", bias=-0.03), [Option("correct", CorrectedBias())]
    )
    (correct,) = found.ranked
    # A bias that hides moisture costs its whole size at the limit.
    assert correct.gain_per_year > 0
    assert correct.set_point.true_mean > found.as_it_is.set_point.true_mean


def test_what_cannot_be_had_is_told_apart_and_not_paired(situation):
    wrong = Option("wrong", ChangedComponent("colour", factor=0.5))
    found = improvements(situation(), [*OPTIONS[:2], wrong])
    (impossible,) = found.impossible
    assert impossible.options == ("wrong",)
    assert "there are repeatability, sampling" in impossible.reason
    assert {item.options for item in found.ranked} == {
        ("four-readings",),
        ("two-samples",),
        ("four-readings", "two-samples"),
    }


def test_a_pair_that_is_too_much_together_is_impossible_as_a_pair(situation):
    many = [
        Option("samples", ChangedLooks(samples=20)),
        Option("readings", ChangedLooks(readings_per_sample=30)),
    ]
    found = improvements(situation(looks=LotProcedure(1, 2, looks=2)), many)
    assert len(found.ranked) == 3
    both = [Option("samples", ChangedLooks(samples=26)), Option("looks", ChangedLooks(looks=1))]
    found = improvements(situation(looks=LotProcedure(1, 2, looks=2)), both)
    assert [item.options for item in found.impossible] == [("samples",)]


@pytest.mark.parametrize("options", [(), OPTIONS[:1] * 2, OPTIONS * 3])
def test_options_are_named_apart_and_bounded(situation, options):
    with pytest.raises(LimitsError, match="1 to 12 options"):
        improvements(situation(), options)


@pytest.mark.parametrize("cost", [-1.0, math.nan])
def test_a_cost_is_not_negative(cost):
    with pytest.raises(LimitsError, match="not below 0"):
        Option("x", CorrectedBias(), cost_per_year=cost)


# --- single changes ------------------------------------------------------------------------------------


def test_new_evidence_has_its_own_degrees_of_freedom(situation):
    now = Measuring(situation().budget, LOOKS, (CUSTOMER,))
    made = ChangedComponent("trueness", factor=0.5, degrees_of_freedom=50).made(now)
    line = made.budget.components[-1]
    assert line.standard_uncertainty == pytest.approx(0.025)
    assert line.degrees_of_freedom == 50
    kept = ChangedComponent("trueness", factor=0.5).made(now).budget.components[-1]
    assert kept.degrees_of_freedom == 8


def test_a_part_proportional_to_the_value_takes_a_factor_only(situation, a_component):
    relative = a_component("relative", terms=(), relative_terms=(Term(1.0, MeanSquare("r", 1e-4, 40)),))
    budget = situation().budget
    now = Measuring(replace(budget, components=(*budget.components, relative)), LOOKS, (CUSTOMER,))
    with pytest.raises(ComponentError, match="give a factor"):
        ChangedComponent("relative", standard_uncertainty=0.01).made(now)
    made = ChangedComponent("relative", factor=0.5, degrees_of_freedom=9).made(now).budget.components[-1]
    (term,) = made.relative_terms
    assert (term.mean_square.value, term.mean_square.degrees_of_freedom) == (pytest.approx(0.25e-4), 9)


def test_more_determinations_take_their_part_out_of_the_bias(situation):
    now = Measuring(situation().budget, LOOKS, (CUSTOMER,))
    made = ReferenceDeterminations("bias", 0.08, 2, 1, 60).made(now)
    assert made.budget.components[3].variance == pytest.approx(0.02**2 - 0.08**2 * 0.5 / 60)


@pytest.mark.parametrize(
    ("change", "error", "words"),
    [
        (ChangedLooks(), ProcedureError, "changes no number"),
        (ChangedLooks(looks=2), ProcedureError, "agreed with the customer"),
        (ChangedComponent("bias"), ComponentError, "one of the two"),
        (ChangedComponent("bias", 0.1, 0.5), ComponentError, "one of the two"),
        (ChangedComponent("bias", factor=0.0), ComponentError, "above 0"),
        (CorrectedBias(), ComponentError, "no bias that is left"),
        (
            ReferenceDeterminations("remainder", 0.04, 2, 1, 60),
            ComponentError,
            "in no reading; name the line",
        ),
        (ReferenceDeterminations("bias", 0.05, 1, 2, 60), ComponentError, "are an improvement"),
        (ReferenceDeterminations("bias", 0.5, 2, 1, 60), ComponentError, "account for more"),
    ],
)
def test_changes_that_cannot_be_made_are_refused(situation, change, error, words):
    with pytest.raises(error, match=words) as raised:
        change.made(Measuring(situation().budget, LOOKS, (CUSTOMER,)))
    assert isinstance(raised.value, BudgetsError)


def test_changes_of_one_thing_exclude_each_other(situation):
    budget = ChangedBudget(situation().budget)
    trueness, remainder = ChangedComponent("trueness", factor=0.5), ChangedComponent("remainder", factor=0.5)
    assert go_together(trueness, remainder)
    assert not go_together(trueness, trueness)
    assert not go_together(budget, trueness)
    assert not go_together(CorrectedBias(), budget)
    assert go_together(budget, ChangedLooks(samples=2))
    assert not go_together(ChangedLooks(samples=2), ChangedLooks(samples=3, readings_per_sample=1))
    assert not go_together(
        ReferenceDeterminations("bias", 0.05, 2, 1, 60), ChangedComponent("bias", factor=0.5)
    )
