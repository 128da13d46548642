"""What approval settles: the law where it holds, tables where it does not, refusal where neither will do."""

import json
import math
from dataclasses import replace

import pytest
from scipy import stats

from budgets.budget import Budget, Count, Procedure
from budgets.budget_validation import PROBABILITIES, ErrorTables, validate_budget
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.errors import ModelError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule

ONCE = Procedure(Count(1, 1, 1), Count(1, 1, 1))
BOX = {"a": (9.0, 11.0), "b": (4.0, 5.0)}


@pytest.fixture
def rectangular(a_component, a_budget):
    """Make a budget in which one rectangular error outweighs the rest."""
    parts = (
        a_component("d", 0.1, level="lot", distribution="rectangular"),
        a_component("r", 0.01, level="reading"),
    )
    return a_budget(components=parts, bias=None)


def a_quotient(a_component, deviation, box=BOX, procedure=ONCE, **changes):
    model = MeasurementModel("10*a/b", (Quantity("a"), Quantity("b")))
    parts = (
        a_component("a", deviation, quantity="a", **changes),
        a_component("b", deviation / 4, quantity="b", **changes),
    )
    return Budget(parts, procedure, 0.95, None, "corrected", (0.0, 99.0), model, validated_box=box)


def test_the_law_holds_for_an_ordinary_budget(a_budget):
    found = validate_budget(a_budget(), seed=1)
    assert found.agrees and found.tables is None
    # Planned, fewest and most readings, each in the middle of the validated range.
    counts = [place.counts.readings_per_sample for place in found.places]
    assert counts == [(2,), (1,), (4, 4, 4)]
    assert {place.estimates["moisture"] for place in found.places} == {3.5}
    assert found.sentence.endswith("the law of propagation is validated here.")


def test_an_uncertainty_that_depends_on_the_value_is_checked_over_the_range(a_component, a_budget):
    square = MeanSquare("relative", 0.02**2, math.inf)
    part = a_component("r", 0.03, relative_terms=(Term(1.0, square),))
    found = validate_budget(a_budget(components=(part,), bias=None, procedure=ONCE), seed=1)
    assert [place.estimates["moisture"] for place in found.places] == [3.5, 1.5, 5.5]


def test_tables_stand_in_where_it_does_not_hold(rectangular):
    found = validate_budget(rectangular, seed=1)
    assert not found.agrees
    assert "Decisions use the Monte Carlo distribution instead." in found.sentence
    table = found.tables.of(Counts((2,)))
    half = math.sqrt(3) * 0.1 / math.hypot(0.1, 0.01 / math.sqrt(2))
    # A rectangular error next to nothing else: its quantiles, in standard uncertainties of the whole.
    for p in (0.05, 0.3, 0.7, 0.95):
        assert table.lower_quantile(p) == pytest.approx(half * (2 * p - 1), abs=0.02)
    assert set(found.tables.by_counts) == {Counts((2,)), Counts((1,)), Counts((4, 4, 4))}


def test_other_readings_take_the_farthest_quantiles(rectangular):
    tables = validate_budget(rectangular, seed=1).tables
    other = tables.of(Counts((3, 3)))
    assert other == tables.of(ReadingPattern({"sample": ("1", "1")})) == tables.other
    for index, p in enumerate(PROBABILITIES):
        each = [table.quantiles[index] for table in tables.by_counts.values()]
        expected = sum(each) / len(each) if p == 0.5 else min(each) if p < 0.5 else max(each)
        assert other.quantiles[index] == pytest.approx(expected, rel=1e-12)


def test_tables_are_kept_to_the_last_bit(rectangular):
    tables = validate_budget(rectangular, seed=1).tables
    assert ErrorTables.from_document(json.loads(json.dumps(tables.to_document()))) == tables


def test_a_rule_by_tables_holds_the_risk_that_the_law_would_not(rectangular):
    """At the acceptance limit 5 % of the true values lie beyond tolerance: of the rectangle, not of t."""
    tables = validate_budget(rectangular, seed=1).tables
    counts, limit = Counts((2,)), Tolerance(None, 3.2)
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    by_law, by_table = (
        ReleaseRule.compile(rectangular, counts, limit, rule, distribution=distribution)
        for distribution in (None, tables.of(counts))
    )
    half = 0.1 * math.sqrt(3)
    exact = stats.uniform(-half, 2 * half)
    assert exact.sf(3.2 - by_table.upper_acceptance_limit) == pytest.approx(0.05, abs=0.005)
    assert exact.sf(3.2 - by_law.upper_acceptance_limit) < 0.03


def test_few_degrees_of_freedom_beyond_what_one_t_can_say(a_component, a_budget):
    parts = (a_component("a", 0.1, 3.0, level="lot"), a_component("b", 0.1, 3.0, level="lot"))
    found = validate_budget(a_budget(components=parts, bias=None, procedure=ONCE), seed=1)
    first = found.places[0].validation
    assert not found.agrees and first.shape.agrees
    assert "more than the tolerance" in first.sentence and "taken as known" in first.sentence


def test_a_model_is_checked_where_it_curves(a_component):
    found = validate_budget(a_quotient(a_component, 0.1), seed=1)
    assert found.agrees
    points = [tuple(place.estimates.values()) for place in found.places]
    # The middle; then the smallest denominator, where it curves most, and the least and largest quotient.
    assert points[0] == (10.0, 4.5)
    assert points[1][1] == 4.0
    assert {(9.0, 5.0), (11.0, 4.0)} <= set(points)


def test_one_table_may_speak_for_a_box(a_component):
    budget = a_quotient(a_component, 0.05)
    arcsine = replace(budget.components[0], distribution="arcsine")
    known = a_component("b", 0.0002, quantity="b")
    found = validate_budget(replace(budget, components=(arcsine, known)), seed=1)
    assert not found.agrees
    # At every point the arcsine distribution of a: its end lies at the root of 2.
    assert found.tables.other.upper_quantile(0.025) == pytest.approx(math.sqrt(2), abs=0.02)


def test_a_distribution_that_changes_over_the_box_is_refused(a_component):
    """Where b is small its rectangular error outweighs, where it is large the normal one of a."""
    model = MeasurementModel("a + 0.3*b**4", (Quantity("a"), Quantity("b")))
    parts = (
        a_component("a", 0.1, quantity="a"),
        a_component("b", 0.05, quantity="b", distribution="arcsine"),
    )
    box = {"a": (9.0, 11.0), "b": (0.5, 3.0)}
    budget = Budget(parts, ONCE, 0.95, None, "corrected", (0.0, 99.0), model, validated_box=box)
    with pytest.raises(ModelError, match="changes over the validated box") as caught:
        validate_budget(budget, seed=1)
    assert caught.value.where == ("validated_box",)


def test_a_model_that_curves_too_much_is_refused_for_the_planned_readings_only(a_component):
    procedure = Procedure(Count(1, 1, 1), Count(1, 25, 25))
    # Of a single reading the model curves too much, of twenty-five it does not.
    wide = a_quotient(a_component, 2.5, level="reading", procedure=procedure)
    found = validate_budget(wide, seed=1)
    assert {place.counts.readings_per_sample for place in found.places} == {(25,)}
    once = replace(wide, procedure=ONCE)
    with pytest.raises(ModelError, match="curves within its uncertainty"):
        validate_budget(once, seed=1)
