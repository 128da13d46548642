import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budgets.budget import Count, Procedure
from budgets.errors import ProcedureError
from budgets.levels import LEVELS
from budgets.propagation import Counts, averaging_weights, check_counts
from budgets.reading_patterns import ReadingPattern, least_squares_weights, mean_weights


@given(st.lists(st.integers(1, 5), min_size=1, max_size=5))
def test_counts_are_the_special_case(numbers):
    samples = tuple(str(i) for i, number in enumerate(numbers) for _ in range(number))
    general = averaging_weights(ReadingPattern({"sample": samples}))
    for level, weight in averaging_weights(Counts(tuple(numbers))).items():
        assert general[level] == pytest.approx(weight), level


def test_a_retest_on_two_analyzers_agrees_with_a_simulation():
    """Three sessions on two analyzers, composites, unequal weights: errors drawn anew in each group."""
    groups = {
        "sample": ("1", "1", "2", "2", "2", "3"),
        "increment": (("a", "b"), ("a", "b"), "c", "c", "c", ("d", "e", "f")),
        "presentation": ("p", "q", "r", "r", "s", "t"),
        "session": ("i", "ii", "i", "i", "ii", "iii"),
        "instrument": ("x", "y", "x", "x", "y", "y"),
    }
    pattern = ReadingPattern(groups, weights=(0.1, 0.2, 0.15, 0.15, 0.2, 0.2))
    found = pattern.averaging_weights()
    generator = np.random.default_rng(3)
    for level in LEVELS:
        labels = groups.get(level, tuple("012345") if level == "reading" else ("one",) * 6)
        names = sorted({part for label in labels for part in ((label,) if isinstance(label, str) else label)})
        errors = generator.normal(size=(60_000, len(names)))
        total = np.zeros(60_000)
        for label, weight in zip(labels, pattern.weights, strict=True):
            parts = (label,) if isinstance(label, str) else label
            total += weight * np.mean([errors[:, names.index(part)] for part in parts], axis=0)
        assert total.var() == pytest.approx(found[level], rel=0.03), level


def test_drawing_without_replacement_leaves_only_what_was_not_drawn():
    """A simulated lot of ten bags, four of them sampled: the error of their mean against the lot's own."""
    pattern = ReadingPattern({"sample": ("1", "2", "3", "4")}, populations={"sample": 10})
    generator = np.random.default_rng(5)
    lots = generator.normal(size=(200_000, 10))
    # With S^2 taken with N - 1 the variance of the error is S^2/n (1 - n/N).
    error = lots[:, :4].mean(axis=1) - lots.mean(axis=1)
    assert pattern.averaging_weights()["sample"] == pytest.approx(error.var(), rel=0.01)
    whole = ReadingPattern({"sample": ("1", "2")}, populations={"sample": 2, "increment": 4})
    assert whole.averaging_weights()["sample"] == 0.0
    assert whole.averaging_weights()["increment"] == pytest.approx(0.25)


@pytest.mark.parametrize(
    ("members", "where"),
    [
        ({"groups": {}}, ("groups", "sample")),
        ({"groups": {"sample": ()}}, ("groups", "sample")),
        ({"groups": {"sample": ("1",) * 2501}}, ("groups", "sample")),
        ({"groups": {"sample": ("1",), "reading": ("1",)}}, ("groups", "reading")),
        ({"groups": {"sample": ("1",), "session": ("1", "2")}}, ("groups", "session")),
        ({"groups": {"sample": ("1",), "increment": ((),)}}, ("groups", "increment")),
        ({"groups": {"sample": ("1",), "increment": (("a", "a"),)}}, ("groups", "increment")),
        ({"groups": {"sample": (("1", "2"),)}}, ("groups", "sample")),
        ({"groups": {"sample": ("1", "2"), "presentation": ("p", "p")}}, ("groups", "presentation")),
        ({"groups": {"sample": ("1", "2")}, "weights": (1.0,)}, ("weights",)),
        ({"groups": {"sample": ("1", "2")}, "weights": (1.5, -0.5)}, ("weights",)),
        ({"groups": {"sample": ("1", "2")}, "weights": (0.5, 0.4)}, ("weights",)),
        ({"groups": {"sample": ("1", "2")}, "populations": {"sample": 1}}, ("populations", "sample")),
        ({"groups": {"sample": ("1", "2")}, "populations": {"lot": 3}}, ("populations", "lot")),
    ],
)
def test_a_pattern_that_cannot_be_is_refused(members, where):
    with pytest.raises(ProcedureError) as caught:
        ReadingPattern(**members)
    assert caught.value.where == where


@settings(max_examples=30)
@given(st.lists(st.floats(0.01, 2), min_size=2, max_size=5), st.floats(0, 3))
def test_least_squares_weights_are_the_best(deviations, common):
    covariance = np.diag(np.square(deviations)) + common
    weights = np.array(least_squares_weights(covariance.tolist()))
    assert weights.sum() == pytest.approx(1)
    # Inverse variances, whatever all readings have in common.
    inverse = 1 / np.square(deviations)
    assert weights == pytest.approx(inverse / inverse.sum(), rel=1e-6)


@pytest.mark.parametrize("covariance", [[[1.0, 1.0], [1.0, 1.0]], [[1.0, 1.8], [1.8, 4.0]]])
def test_least_squares_that_do_not_exist_are_refused(covariance):
    with pytest.raises(ProcedureError):
        least_squares_weights(covariance)


def test_a_pattern_is_checked_against_the_procedure():
    pattern = ReadingPattern({"sample": ("b", "a", "b", "b")})
    assert pattern.readings_per_sample == (3, 1)
    check_counts(pattern, Procedure(Count(1, 1, 2), Count(1, 2, 3)))
    with pytest.raises(ProcedureError, match="3 readings of a sample"):
        check_counts(pattern, Procedure(Count(1, 1, 2), Count(1, 2, 2)))


def test_unequal_weights_without_replacement_agree_with_all_orders_of_drawing():
    """Simple random sampling, enumerated: S^2 has the divisor N - 1, as the variance of a component has."""
    lot = [1.0, 2.5, -0.5, 4.0, 0.25]
    weights = (0.5, 0.2, 0.2, 0.1)  # two readings of the first sample
    of_samples = (0.7, 0.2, 0.1)
    errors = [
        sum(w * x for w, x in zip(of_samples, drawn, strict=True)) - sum(lot) / 5
        for drawn in itertools.permutations(lot, 3)
    ]
    found = ReadingPattern({"sample": ("a", "a", "b", "c")}, weights, {"sample": 5}).averaging_weights()
    assert found["sample"] * np.var(lot, ddof=1) == pytest.approx(np.mean(np.square(errors)), rel=1e-12)


def test_the_mean_of_sample_means_is_what_its_weights_say():
    samples = ["b", "a", "b", "c", "b", "a"]
    values = [3.0, 3.4, 3.2, 2.7, 3.1, 3.6]
    means = [np.mean([v for v, s in zip(values, samples, strict=True) if s == name]) for name in "abc"]
    assert np.dot(mean_weights(samples), values) == pytest.approx(np.mean(means))
