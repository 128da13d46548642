"""Variance components of nested groups by unweighted means: exact for balanced data, unbiased for others.

The mean square of a level is the scatter of the means of its units within the unit above. Its expectation is
a known sum of the variance components of its own level and of all below, whatever the numbers.
"""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from dataclasses import dataclass

from budgets.evidence.evaluation import Estimate, Interval, MeanSquare, Term, variance
from budgets.evidence.mean_square_intervals import variance_interval
from budgets.evidence.sums import CONFIDENCE, f_quantile, mean, sum_of_squares


@dataclass(frozen=True)
class NestedComponent:
    """The variance component of one level.

    Parameters
    ----------
    name : str
    mean_square : MeanSquare
        Scatter of the means of this level's units within the unit above.
    terms : tuple of Term
        The component as a sum over mean squares.
    f_statistic, f_critical_value : float or None
        Of the test that the component is zero; None where there is nothing below to test it against.
    """

    name: str
    mean_square: MeanSquare
    terms: tuple[Term, ...]
    f_statistic: float | None
    f_critical_value: float | None

    @property
    def is_significant(self) -> bool:
        """Whether the component is significantly above zero."""
        if self.f_statistic is None or self.f_critical_value is None:
            return True
        return self.f_statistic > self.f_critical_value


@dataclass(frozen=True)
class _Unit:
    """Mean of a unit, and the weights with which variance components stand in the variance of that mean."""

    mean: float
    weights: tuple[float, ...]


def nested_components(
    code: str, names: Sequence[str], labels: Sequence[Sequence[Hashable]], values: Sequence[float]
) -> tuple[NestedComponent, ...]:
    """Return the variance components of values in nested groups, outermost level first.

    Parameters
    ----------
    code : str
        Of the study.
    names : sequence of str, shape (m,)
        Names of the components, outermost first; the last is that of the values themselves.
    labels : sequence of sequence, shape (m - 1, n)
        Group of each value at every level but the last. A group is told apart by its labels at all levels.
    values : sequence of float, shape (n,)

    Returns
    -------
    tuple of NestedComponent
        Levels at which nothing is repeated have no degrees of freedom and are left out; their component is
        then part of the one above.

    Notes
    -----
    A unit with k units below it has the mean of their means, and
    ``E sum (mean_c - mean)^2 = (1 - 1/k) sum_c Var(mean_c)``. Source: ISO 5725-3:1994, Annex B (from memory)
    for the balanced case; unweighted means for unequal numbers are common practice, no source.
    """
    depth = len(names)
    paths = [tuple(level[i] for level in labels) for i in range(len(values))]
    units: dict[tuple[Hashable, ...], list[_Unit]] = {}
    own = tuple(float(level == depth - 1) for level in range(depth))
    for path, value in zip(paths, values, strict=True):
        units.setdefault(path, []).append(_Unit(value, own))
    found: list[tuple[int, MeanSquare, tuple[float, ...]]] = []
    for level in reversed(range(depth)):
        freedom = sum(len(children) - 1 for children in units.values())
        if freedom:
            squares = math.fsum(sum_of_squares([child.mean for child in unit]) for unit in units.values())
            name = names[level]
            found.append(
                (
                    level,
                    MeanSquare(f"{code}/{name}", squares / freedom, freedom),
                    _expected(list(units.values()), depth, freedom),
                )
            )
        if level:
            units = _means(units, level - 1)
    return _solved(names, found)


def _means(
    units: dict[tuple[Hashable, ...], list[_Unit]], level: int
) -> dict[tuple[Hashable, ...], list[_Unit]]:
    """Return the units one level up, each with its own component added."""
    above: dict[tuple[Hashable, ...], list[_Unit]] = {}
    for path, children in units.items():
        k = len(children)
        weights = [math.fsum(column) / k**2 for column in zip(*(c.weights for c in children), strict=True)]
        weights[level] = 1.0
        above.setdefault(path[:level], []).append(_Unit(mean([c.mean for c in children]), tuple(weights)))
    return above


def _expected(units: Sequence[Sequence[_Unit]], depth: int, freedom: int) -> tuple[float, ...]:
    """Return the coefficients of the components in the expectation of a mean square."""
    return tuple(
        math.fsum((1 - 1 / len(unit)) * math.fsum(child.weights[level] for child in unit) for unit in units)
        / freedom
        for level in range(depth)
    )


def _solved(
    names: Sequence[str], found: Sequence[tuple[int, MeanSquare, tuple[float, ...]]]
) -> tuple[NestedComponent, ...]:
    """Solve the expectations from the innermost level outwards."""
    solved: dict[int, tuple[Term, ...]] = {}
    components: list[NestedComponent] = []
    for level, square, expected in found:
        below = [
            Term(-expected[lower] * term.coefficient, term.mean_square)
            for lower, terms in solved.items()
            for term in terms
        ]
        collected: dict[str, Term] = {}
        for term in below:
            before = collected.get(term.mean_square.code, Term(0.0, term.mean_square))
            collected[term.mean_square.code] = Term(before.coefficient + term.coefficient, term.mean_square)
        terms = (Term(1.0, square), *(term for term in collected.values() if term.coefficient != 0))
        solved[level] = terms
        components.append(NestedComponent(names[level], square, terms, *_f_test(square, terms[1:])))
    return tuple(reversed(components))


def _f_test(square: MeanSquare, below: Sequence[Term]) -> tuple[float | None, float | None]:
    """Test a mean square against what it would be if its own component were zero."""
    expected = -variance(below)
    if not below or expected <= 0:
        return None, None
    spread = math.fsum(
        (term.coefficient * term.mean_square.value) ** 2 / term.mean_square.degrees_of_freedom
        for term in below
    )
    freedom = expected**2 / spread
    return square.value / expected, f_quantile(1 - CONFIDENCE, square.degrees_of_freedom, freedom)


def component_interval(terms: Sequence[Term]) -> Interval:
    """Return the interval of the standard deviation that a sum over mean squares stands for.

    Parameters
    ----------
    terms : sequence of Term

    Returns
    -------
    Interval
        Clipped at zero.
    """
    lower, upper = variance_interval(terms)
    return Interval(
        math.sqrt(max(0.0, lower)), math.sqrt(max(0.0, upper)), CONFIDENCE, "modified large-sample"
    )


def component_estimate(
    name: str, terms: Sequence[Term], may_feed: tuple[str, ...], contains: tuple[str, ...]
) -> Estimate:
    """Return a variance component as an estimate, usable while its variance is above zero."""
    return Estimate(
        name=name,
        terms=tuple(terms),
        value=None,
        interval=component_interval(terms),
        may_feed=may_feed,
        usable=variance(terms) > 0,
        contains=contains,
    )
