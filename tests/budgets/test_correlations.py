import numpy as np
import pytest

from budgets.correlations import (
    Correlation,
    check_correlation_matrix,
    check_correlations,
    correlation_matrix,
    is_possible,
)
from budgets.errors import CorrelationError

LEVELS = {"a": "reading", "b": "reading", "c": "reading", "d": "lot"}


@pytest.mark.parametrize(
    ("matrix", "where", "message"),
    [
        ([[1.0, 0.5]], (), "as many rows as columns"),
        ([1.0], (), "as many rows as columns"),
        ([[1.0, 0.5], [0.4, 1.0]], (0, 1), "not symmetric"),
        ([[1.0, 0.5], [0.5, 0.9]], (1, 1), "the diagonal"),
        ([[1.0, 1.5], [1.5, 1.0]], (0, 1), "no correlation coefficient"),
        ([[1.0, np.nan], [np.nan, 1.0]], (0, 1), "no correlation coefficient"),
        ([[1, 0.9, -0.9], [0.9, 1, 0.9], [-0.9, 0.9, 1]], (), "not positive semi-definite"),
    ],
)
def test_an_impossible_matrix_is_refused(matrix, where, message):
    with pytest.raises(CorrelationError, match=message) as caught:
        check_correlation_matrix(matrix)
    assert caught.value.each()[0].where == where


def test_possible_matrices_pass():
    assert check_correlation_matrix([[1.0, -1.0], [-1.0, 1.0]]).shape == (2, 2)
    assert check_correlation_matrix(np.ones((4, 4))).shape == (4, 4)
    assert check_correlation_matrix(np.empty((0, 0))).size == 0


@pytest.mark.parametrize("coefficient", [1.01, float("nan")])
def test_a_coefficient_out_of_range_is_refused(coefficient):
    with pytest.raises(CorrelationError) as caught:
        Correlation(("a", "b"), "reading", coefficient)
    assert caught.value.where == ("coefficient",)


def test_nothing_is_correlated_with_itself():
    with pytest.raises(CorrelationError) as caught:
        Correlation(("a", "a"), "reading", 0.5)
    assert caught.value.where == ("between",)


def test_all_faults_of_the_correlations_of_a_budget_are_told():
    given = [
        Correlation(("a", "b"), "reading", 0.5),
        Correlation(("b", "a"), "reading", 0.4),
        Correlation(("a", "x"), "reading", 0.4),
        Correlation(("a", "d"), "reading", 0.4),
        Correlation(("b", "c"), "lot", 0.4),
    ]
    with pytest.raises(CorrelationError) as caught:
        check_correlations(given, LEVELS)
    assert [fault.where for fault in caught.value.each()] == [
        ("correlations", 1, "between"),
        ("correlations", 2, "between"),
        ("correlations", 3, "level"),
        ("correlations", 4, "level"),
    ]


def test_correlations_of_one_level_hold_together():
    good = [Correlation(("a", "b"), "reading", 0.9), Correlation(("b", "c"), "reading", 0.9)]
    with pytest.raises(CorrelationError, match="level reading: these correlations cannot hold together"):
        check_correlations(good, LEVELS)  # a and c are not said to be correlated
    check_correlations([*good, Correlation(("a", "c"), "reading", 0.9)], LEVELS)
    matrix = correlation_matrix(["a", "b"], [*good, Correlation(("a", "d"), "lot", 0.1)])
    assert matrix.tolist() == [[1.0, 0.9], [0.9, 1.0]]


@pytest.mark.parametrize(
    ("matrix", "possible"),
    [
        ([[4e-12, 1e-6], [1e-6, 0.25]], True),
        ([[4e-12, 1.01e-6], [1.01e-6, 0.25]], False),
        ([[0.0, 0.0], [0.0, 1.0]], True),
        ([[0.0, 1e-9], [1e-9, 1.0]], False),
        ([[-1e-9, 0.0], [0.0, 1.0]], False),
    ],
)
def test_covariance_matrices_of_any_scale(matrix, possible):
    assert is_possible(np.array(matrix)) is possible
