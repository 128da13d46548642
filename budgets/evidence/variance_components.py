"""Variance components from the mean squares of an analysis of variance and their expectations.

However a study is arranged, its analysis of variance gives lines in order, each with a sum of squares whose
expectation holds the component of its own line and of later ones only. From there on all arrangements are
alike: components are linear combinations of mean squares.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.special import fdtrc

from budgets.errors import EvidenceError
from budgets.evidence.evaluation import MeanSquare, Term, effective_degrees_of_freedom, variance

# A coefficient below this part of the largest one is the rounding of a zero.
_ROUNDING = 1e-11
# Ratio of two mean squares below which it makes no difference.
_SMALLEST = 1e-60


@dataclass(frozen=True)
class Line:
    """One line of an analysis of variance.

    Parameters
    ----------
    source : str
    sum_of_squares : float, unit squared
    degrees_of_freedom : int
    expectation : tuple of float
        Coefficient of the component of every line in the expected mean square; 0 for earlier lines.
    effective_degrees_of_freedom : float
        Of the chi-square distribution with the mean and variance of the mean square; in balanced data the
        degrees of freedom themselves.
    """

    source: str
    sum_of_squares: float
    degrees_of_freedom: int
    expectation: tuple[float, ...]
    effective_degrees_of_freedom: float

    @property
    def mean_square(self) -> float:
        """The mean square, unit squared."""
        return self.sum_of_squares / self.degrees_of_freedom


@dataclass(frozen=True)
class FTest:
    """Whether a component is zero: its mean square against what it would then be expected to be."""

    statistic: float | None
    denominator_degrees_of_freedom: float | None
    p_value: float | None


@dataclass(frozen=True)
class VarianceComponent:
    """The component of one line: its variance over mean squares, and its test (None for the last line)."""

    source: str
    terms: tuple[Term, ...]
    test: FTest | None

    @property
    def variance(self) -> float:
        """The estimate, unit squared; may be negative."""
        return variance(self.terms)


def with_effective_freedom(
    lines: Sequence[Line], spreads: Callable[[Sequence[float]], Sequence[float]]
) -> tuple[Line, ...]:
    """Return the lines of unbalanced data with the degrees of freedom that their mean squares amount to.

    Parameters
    ----------
    lines : sequence of Line
    spreads : callable
        From the components, negative ones as zero, to ``tr (P V)^2`` of every line but the last.

    Returns
    -------
    tuple of Line

    Notes
    -----
    A quadratic form y'Py with covariance V has the mean tr PV and the variance 2 tr (PV)^2, so it is
    approximately chi-square with (tr PV)^2 / tr (PV)^2 degrees of freedom. Source: Satterthwaite, Biometrics
    Bulletin 2 (1946); Searle, Casella and McCulloch, Variance Components (1992), S.5 (from memory).
    """
    squares = np.array([line.mean_square for line in lines])
    # Only ratios count; within bounds, so that no fourth power of a very small number is lost.
    ratios = np.maximum(squares / squares.max(), _SMALLEST)
    components = np.maximum(0.0, _solution(lines) @ ratios).tolist()
    found = []
    for line, spread in zip(lines[:-1], spreads(components), strict=True):
        trace = line.degrees_of_freedom * math.fsum(
            c * component for c, component in zip(line.expectation, components, strict=True)
        )
        found.append(replace(line, effective_degrees_of_freedom=trace * trace / spread))
    # What is left within groups is chi-square whatever their sizes.
    return (*found, lines[-1])


def check_residual(lines: Sequence[Line]) -> None:
    """Refuse data in which nothing scatters within the groups.

    Parameters
    ----------
    lines : sequence of Line

    Raises
    ------
    EvidenceError
        If the residual is zero.
    """
    if lines[-1].sum_of_squares == 0:
        raise EvidenceError(
            "the values of every group are equal: the display hides the repeatability; declare its "
            "resolution instead",
            where=("rows",),
        )


def variance_components(lines: Sequence[Line], code: str) -> tuple[VarianceComponent, ...]:
    """Return the component of every line with its F test.

    Parameters
    ----------
    lines : sequence of Line
        The last one is the residual.
    code : str
        Of the study.

    Returns
    -------
    tuple of VarianceComponent
        In the order of the lines.

    Notes
    -----
    Components are found by equating mean squares with their expectations. The denominator of an F test is the
    linear combination of mean squares that has the same expectation as the numerator without its own
    component; of balanced data that is the next mean square, else its degrees of freedom are Satterthwaite's
    and the test is approximate. Source: Searle, Casella and McCulloch, Variance Components (1992), 5.1 to
    5.3; ISO 5725-3:1994, annexes B and C, for balanced nested data (both from memory).
    """
    squares = [
        MeanSquare(f"{code}/{line.source}", line.mean_square, line.effective_degrees_of_freedom)
        for line in lines
    ]
    found = []
    for k, (line, row) in enumerate(zip(lines, _solution(lines), strict=True)):
        terms = tuple(Term(float(a), square) for a, square in zip(row, squares, strict=True) if a != 0)
        test = None
        if k < len(lines) - 1:
            own = line.expectation[k]
            below = [Term(-own * term.coefficient, term.mean_square) for term in terms[1:]]
            test = _test(line, below)
        found.append(VarianceComponent(line.source, terms, test))
    return tuple(found)


def _test(line: Line, denominator: Sequence[Term]) -> FTest:
    below = variance(denominator)
    if below <= 0:
        return FTest(None, None, None)
    nu = effective_degrees_of_freedom(denominator)
    statistic = line.mean_square / below
    return FTest(statistic, nu, float(fdtrc(line.degrees_of_freedom, nu, statistic)))


def _solution(lines: Sequence[Line]) -> np.ndarray[Any, np.dtype[np.float64]]:
    """Return the matrix from mean squares to components, zeros exactly so."""
    solution = np.linalg.inv(np.array([line.expectation for line in lines]))
    solution[np.abs(solution) < _ROUNDING * np.abs(solution).max(axis=1, keepdims=True)] = 0.0
    return np.asarray(solution)
