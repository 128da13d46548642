"""Trials of a budget: each component as it is averaged, shared mean squares drawn once."""

import math

import numpy as np
import pytest
from scipy import integrate, stats

from budgets.budget import Budget, Count, Procedure
from budgets.budget_trials import budget_trials
from budgets.components import Component
from budgets.correlations import Correlation
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts, averaging_weights, combined, group_shares
from budgets.reading_patterns import ReadingPattern

ANY = Procedure(Count(1, 1, 50), Count(1, 1, 50))
MANY = 40_000


ONCE = Counts((1,))


def drawn(budget, counts=ONCE, estimates=None):
    return budget_trials(budget, counts, estimates=estimates).draw(np.random.default_rng(1), MANY)


def plain(*components, bias=None, **changes):
    return Budget(components, ANY, 0.95, bias, "corrected", (0.0, 10.0), **changes)


def modelled(expression, names, components, correlations=()):
    model = MeasurementModel(expression, tuple(Quantity(name) for name in names))
    return Budget(tuple(components), ANY, 0.95, None, "corrected", (-99.0, 99.0), model, tuple(correlations))


def agrees(values, exact):
    return stats.kstest(values, exact.cdf).pvalue > 0.001


def test_normal_components_are_averaged_at_their_levels(a_component, a_budget):
    budget = plain(
        a_component("r", 0.3, level="reading"),
        a_component("s", 0.2, level="sample"),
        a_component("l", 0.1, level="lot"),
        a_component("b", 0.05, level="calibration", quantity="bias"),
        bias=0.03,
    )
    for counts in (Counts((1,)), Counts((2, 2)), Counts((3, 1))):
        u = combined(budget, counts).standard_uncertainty
        assert agrees(drawn(budget, counts), stats.norm(0, u))
    assert agrees(
        drawn(budget, Counts((2,)), {"moisture": 3.0}),
        stats.norm(3.0, math.sqrt(0.1**2 + 0.2**2 + 0.045 + 0.05**2)),
    )


def test_one_mean_square_gives_student(a_component):
    budget = plain(a_component("r", 0.3, 4.0, level="reading"))
    trials = budget_trials(budget, Counts((4,)))
    assert trials.smallest_degrees_of_freedom == 4.0
    assert agrees(trials.draw(np.random.default_rng(2), MANY), stats.t(4, 0, 0.15))


def test_two_of_few_degrees_of_freedom_are_added_as_independent(a_component):
    """The sum of two scaled t: the difference of means of Behrens and Fisher, against direct draws."""
    budget = plain(a_component("a", 0.3, 5.0), a_component("b", 0.4, 3.0))
    generator = np.random.default_rng(9)
    direct = 0.3 * generator.standard_t(5, MANY) + 0.4 * generator.standard_t(3, MANY)
    assert stats.ks_2samp(drawn(budget), direct).pvalue > 0.001
    assert budget_trials(budget, Counts((1,))).smallest_degrees_of_freedom == 3.0


def test_what_cancels_in_the_budget_cancels_in_every_trial():
    """Rule 10 of the project's mathematics: remainder and one reading of the same repeatability."""
    sep, ref, rep = MeanSquare("sep", 0.09, 59), MeanSquare("ref", 0.02, 20), MeanSquare("rep", 0.04, 10)
    remainder = Component("rem", "m", "lot", (Term(1, sep), Term(-1, ref), Term(-1, rep)), "A")
    reading = Component("r", "m", "reading", (Term(1, rep),), "A")
    budget = plain(remainder, reading)
    generator = np.random.default_rng(5)
    variances = 0.09 * 59 / generator.chisquare(59, MANY) - 0.02 * 20 / generator.chisquare(20, MANY)
    direct = np.sqrt(np.maximum(variances, 0)) * generator.standard_normal(MANY)
    assert stats.ks_2samp(drawn(budget), direct).pvalue > 0.001
    # Nothing heavy is left of the 10 degrees of freedom, nor of what is taken out.
    assert budget_trials(budget, Counts((1,))).smallest_degrees_of_freedom == 59


def test_a_difference_below_zero_counts_as_zero():
    one, other = MeanSquare("one", 1.0, 6), MeanSquare("other", 0.8, 6)
    budget = plain(Component("d", "m", "lot", (Term(1, one), Term(-1, other)), "A"))
    values = drawn(budget)
    ratio = 0.8  # below zero when F(6, 6) of the two draws is beyond it
    share = np.count_nonzero(values == 0) / MANY
    assert share == pytest.approx(stats.f(6, 6).cdf(ratio), abs=0.01)


@pytest.mark.parametrize("readings", [1, 3])
def test_a_mean_of_rectangular_errors(a_component, readings):
    budget = plain(a_component("d", 0.3, level="reading", distribution="rectangular"))
    generator = np.random.default_rng(4)
    a = 0.3 * math.sqrt(3)
    direct = generator.uniform(-a, a, (readings, MANY)).mean(axis=0)
    assert stats.ks_2samp(drawn(budget, Counts((readings,))), direct).pvalue > 0.001


def test_a_mean_of_very_many_is_normal(a_component):
    budget = plain(a_component("d", 0.3, level="reading", distribution="arcsine"))
    assert agrees(drawn(budget, Counts((40,))), stats.norm(0, 0.3 / math.sqrt(40)))


def test_a_shape_whose_width_is_itself_uncertain(a_component):
    budget = plain(a_component("d", 0.3, 8.0, distribution="rectangular"))
    a = 0.3 * math.sqrt(3)

    def at(x):
        def given(c):
            w = a * math.sqrt(8 / c)
            return min(1.0, max(0.0, (x + w) / (2 * w))) * stats.chi2(8).pdf(c)

        return integrate.quad(given, 0, 60)[0]

    values = drawn(budget)
    for x in (-0.6, -0.3, 0.1, 0.5):
        assert np.mean(values <= x) == pytest.approx(at(x), abs=0.01)


def test_a_part_that_another_component_covers(a_component):
    whole = a_component("sep", 0.3, level="lot", contains=("repeatability", "remainder"), reading_weight=0.5)
    part = a_component(
        "beyond",
        0.2,
        level="reading",
        distribution="rectangular",
        covered_weight=0.5,
        contains=("repeatability",),
    )
    budget = plain(whole, part)
    assert drawn(budget, Counts((1,))).std() == pytest.approx(math.sqrt(0.09 + 0.02), rel=0.02)
    assert agrees(drawn(budget, Counts((2,))), stats.norm(0, 0.3))


def test_parts_proportional_to_the_value(a_component):
    square = MeanSquare("relative", 0.02**2, math.inf)
    budget = plain(a_component("r", 0.03, relative_terms=(Term(1.0, square),)))
    assert agrees(drawn(budget, estimates={"moisture": 4.0}), stats.norm(4.0, math.hypot(0.03, 0.08)))


def test_correlated_components(a_component):
    both = [a_component("a", 0.3, quantity="x"), a_component("b", 0.4, quantity="y")]
    pair = (Correlation(("a", "b"), "reading", -0.8),)
    budget = modelled("x - y", "xy", both, pair)
    at = {"x": 1.0, "y": 0.5}
    u = combined(budget, Counts((1,)), estimates=at).standard_uncertainty
    assert agrees(drawn(budget, estimates=at), stats.norm(0.5, u))
    boxes = [a_component("a", 0.3, quantity="x", distribution="rectangular"), both[1]]
    trials = budget_trials(modelled("x - y", "xy", boxes, pair), Counts((1,)), estimates=at)
    assert agrees(trials.draw(np.random.default_rng(1), MANY), stats.norm(0.5, u))
    assert "jointly normal" in trials.remarks[0]


def test_components_of_several_quantities():
    matrix = MeanSquareMatrix("v", ("x", "y"), ((0.09, 0.1), (0.1, 0.16)), 6.0)
    joint = Component("v", "", "lot", (), "A", quantities=("x", "y"), matrix_terms=(MatrixTerm(1.0, matrix),))
    budget = modelled("x - y", "xy", [joint])
    at = {"x": 1.0, "y": 0.5}
    assert agrees(drawn(budget, estimates=at), stats.t(6, 0.5, math.sqrt(0.25 - 0.2)))


def test_inputs_with_freedoms_of_their_own_are_drawn_apart(a_component):
    """A factor of 3 degrees of freedom and a known one: a product beyond first order."""
    budget = modelled(
        "x*y", "xy", [a_component("x", 0.5, 3.0, quantity="x"), a_component("y", 0.4, quantity="y")]
    )
    generator = np.random.default_rng(12)
    direct = (2 + 0.5 * generator.standard_t(3, MANY)) * (1 + 0.4 * generator.standard_normal(MANY))
    assert stats.ks_2samp(drawn(budget, estimates={"x": 2.0, "y": 1.0}), direct).pvalue > 0.001


def test_a_model_that_stands_still_at_the_estimates(a_component):
    """To first order nothing moves the measurand; its distribution is chi-square all the same."""
    budget = modelled(
        "x**2", "x", [a_component("x", 0.5, quantity="x"), a_component("z", 0.5, 7.0, quantity="x")]
    )
    generator = np.random.default_rng(13)
    direct = np.square(0.5 * generator.standard_normal(MANY) + 0.5 * generator.standard_t(7, MANY))
    assert stats.ks_2samp(drawn(budget, estimates={"x": 0.0}), direct).pvalue > 0.001


@pytest.mark.parametrize(
    "counts",
    [
        Counts((2, 3, 1)),
        ReadingPattern({"sample": ("a", "a", "b"), "session": ("1", "2", "2")}),
        ReadingPattern({"sample": ("a", "b"), "increment": (("i", "j"), ("k",))}),
    ],
)
def test_shares_are_those_of_the_averaging_weights(counts):
    weights = averaging_weights(counts)
    for level, weight in weights.items():
        shares = group_shares(counts, level)
        assert math.fsum(shares) == pytest.approx(1.0)
        assert math.fsum(share**2 for share in shares) == pytest.approx(weight)
