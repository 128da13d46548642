import math

import numpy as np
import pytest

from budgets.budget import Count, Procedure
from budgets.errors import ProcedureError
from budgets.joined_looks import covariance_of_looks, draws_of
from budgets.looks import chain_of_looks
from budgets.propagation import Counts, combined
from budgets.reading_patterns import ReadingPattern


@pytest.fixture
def budget(a_component, a_budget):
    return a_budget(
        components=(
            a_component("repeatability", 0.04, 30, level="reading"),
            a_component("sampling", 0.06, 20, level="sample"),
            a_component("days", 0.03, 10, level="session"),
            a_component("remainder", 0.05, 40, level="lot"),
            a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
        )
    )


def test_the_variance_of_a_look_is_that_of_the_budget(budget):
    pattern = ReadingPattern({"sample": ("1", "1", "2")})
    found = covariance_of_looks(budget, [pattern])
    assert found[0, 0] == pytest.approx(combined(budget, pattern).variance, rel=1e-12)
    assert found[0, 0] == pytest.approx(combined(budget, Counts((2, 1))).variance, rel=1e-12)


def test_joined_looks_agree_with_a_simulation(budget):
    """A sample read twice, then another one in a new session, then the first once more: errors drawn anew."""
    samples, sessions = ("a", "a", "b", "b", "a"), ("i", "i", "ii", "ii", "i")
    patterns = [ReadingPattern({"sample": samples[:n], "session": sessions[:n]}) for n in (2, 4, 5)]
    found = covariance_of_looks(budget, patterns)
    trials = 400_000
    generator = np.random.default_rng(7)
    sigma = {draw.level: math.sqrt(draw.variance) for draw in draws_of(budget)}
    sample = {name: generator.normal(0, sigma["sample"], trials) for name in "ab"}
    session = {name: generator.normal(0, sigma["session"], trials) for name in ("i", "ii")}
    # The bias is in every reading, whatever was read.
    shared = generator.normal(0, math.hypot(sigma["lot"], sigma[None]), trials)
    errors = [
        sample[one] + session[other] + shared + generator.normal(0, sigma["reading"], trials)
        for one, other in zip(samples, sessions, strict=True)
    ]
    looks = np.array(
        [sum(w * e for w, e in zip(pattern.reading_weights(), errors, strict=False)) for pattern in patterns]
    )
    assert np.cov(looks) == pytest.approx(found, abs=3 * 0.01 * math.sqrt(2 / trials) + 5e-5)


def test_looks_that_join_all_readings_at_equal_weights_are_a_chain(budget):
    patterns = [
        ReadingPattern({"sample": tuple(str(i) for i in range(n) for _ in range(2))}) for n in (1, 2, 4)
    ]
    found = covariance_of_looks(budget, patterns)
    assert found[0, 1] == pytest.approx(found[1, 1], rel=1e-12)
    deviations = np.sqrt(np.diag(found))
    assert chain_of_looks(found) == pytest.approx(deviations[1:] / deviations[:-1], rel=1e-12)


@pytest.mark.parametrize(("covered", "first"), [(0.5, 0.0033), (1.0, 0.0025)])
def test_what_another_component_covers_is_taken_off_each_look(a_component, a_budget, covered, first):
    """SEP of two readings at lot level, and of the repeatability only what those do not hold already."""
    budget = a_budget(
        components=(
            a_component("sep", 0.05, level="lot", contains=("repeatability", "remainder", "resolution")),
            a_component("beyond", 0.04, contains=("repeatability",), covered_weight=covered),
        ),
        bias=None,
    )
    found = covariance_of_looks(budget, [ReadingPattern({"sample": ("1",) * n}) for n in (1, 2)])
    assert found == pytest.approx(np.array([[first, 0.0025], [0.0025, 0.0025]]))


def test_parts_proportional_to_the_value_are_those_at_the_estimate(a_component, a_budget):
    member = a_component("repeatability", 0.02)
    budget = a_budget(
        components=(a_component("repeatability", 0.0, terms=(), relative_terms=member.terms),), bias=None
    )
    pattern = ReadingPattern({"sample": ("1", "1")})
    found = covariance_of_looks(budget, [pattern], {"moisture": 3.0})
    assert found[0, 0] == pytest.approx(0.06**2 / 2)


def test_a_look_does_not_forget_readings(budget):
    patterns = [ReadingPattern({"sample": ("1",) * n}) for n in (2, 1)]
    with pytest.raises(ProcedureError, match="joins its readings"):
        covariance_of_looks(budget, patterns)


def test_the_readings_of_some_rounds_are_so_many_times_those_of_one():
    joined = Procedure(Count(1, 1, 3), Count(2, 2, 20)).joined(3)
    assert joined == Procedure(Count(1, 1, 9), Count(2, 2, 50))
