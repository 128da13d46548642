"""What studies of variance components say alike: estimates with intervals, tables, warnings in words."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from budgets.evidence.evaluation import Estimate, EvaluationWarning, Interval, Term, merged, variance
from budgets.evidence.mean_square_intervals import variance_interval
from budgets.evidence.sums import CONFIDENCE
from budgets.evidence.variance_components import Line, VarianceComponent
from budgets.levels import levels_from

METHOD = "modified large-sample"
_SIGNIFICANT = 0.05
# With fewer degrees of freedom than this a factor comes with the width of its interval in words.
_FEW = 5


def component_estimate(
    name: str, terms: Sequence[Term], level: str, contains: tuple[str, ...], *, method: str | None = None
) -> Estimate:
    """Return a variance over mean squares as an estimate with its interval.

    Parameters
    ----------
    name : str
    terms : sequence of Term
    level : str
        The default level; the user may choose another one.
    contains : tuple of str
    method : str or None
        Of the interval, in words; by default what it is for so many terms.

    Returns
    -------
    Estimate
        Not usable unless its variance is above zero.
    """
    single = tuple(term for term in merged(terms) if term.coefficient != 0)
    lower, upper = (math.sqrt(max(0.0, bound)) for bound in variance_interval(single))
    if method is None:
        method = "chi-square" if len(single) == 1 else METHOD
    return Estimate(
        name=name,
        terms=single,
        value=None,
        interval=Interval(lower, upper, CONFIDENCE, method),
        may_feed=levels_from(level),
        usable=variance(single) > 0,
        contains=contains,
    )


def positive_sum(components: Sequence[VarianceComponent]) -> tuple[Term, ...]:
    """Return the sum of components, negative ones counted as zero."""
    return merged(term for item in components if item.variance > 0 for term in item.terms)


def table_of_variance(lines: Sequence[Line], components: Sequence[VarianceComponent]) -> list[dict[str, Any]]:
    """Return the analysis of variance for the diagnostics."""
    names = [line.source for line in lines]
    return [
        {
            "source": line.source,
            "degrees_of_freedom": line.degrees_of_freedom,
            "effective_degrees_of_freedom": line.effective_degrees_of_freedom,
            "sum_of_squares": line.sum_of_squares,
            "mean_square": line.mean_square,
            "expected_mean_square": {
                name: c for name, c in zip(names, line.expectation, strict=True) if c != 0
            },
            "f_statistic": None if item.test is None else item.test.statistic,
            "f_denominator_degrees_of_freedom": None
            if item.test is None
            else item.test.denominator_degrees_of_freedom,
            "p_value": None if item.test is None else item.test.p_value,
        }
        for line, item in zip(lines, components, strict=True)
    ]


def table_of_components(components: Sequence[VarianceComponent]) -> list[dict[str, Any]]:
    """Return the components for the diagnostics: as estimated, and as counted."""
    total = variance(positive_sum(components))
    rows = []
    for item in components:
        lower, upper = variance_interval(item.terms)
        counted = max(0.0, item.variance)
        rows.append(
            {
                "source": item.source,
                "variance": item.variance,
                "variance_lower": lower,
                "variance_upper": upper,
                "standard_deviation": math.sqrt(counted),
                "set_to_zero": item.variance < 0,
                "share_of_total": counted / total,
            }
        )
    return rows


def component_warnings(
    lines: Sequence[Line], components: Sequence[VarianceComponent]
) -> tuple[EvaluationWarning, ...]:
    """Say which components are negative, not significant or known from few groups only."""
    warnings = []
    for line, item in zip(lines[:-1], components[:-1], strict=True):
        words = line.source.replace("_", " ")
        lower, upper = (math.sqrt(max(0.0, bound)) for bound in variance_interval(item.terms))
        if item.variance < 0:
            warnings.append(EvaluationWarning("negative-component", _of_negative(words, item, upper)))
        elif not _significant(item):
            detail = (
                f"{words}: not significantly above zero; that is no proof of absence, the standard deviation "
                f"may be as large as {upper:.3g}"
            )
            warnings.append(EvaluationWarning("component-not-significant", detail))
        if line.degrees_of_freedom < _FEW and upper > 0:
            detail = (
                f"{words}: {line.degrees_of_freedom} degrees of freedom know the standard deviation only to "
                f"lie between {lower:.3g} and {upper:.3g}"
            )
            warnings.append(EvaluationWarning("few-groups", detail))
    return tuple(warnings)


def _of_negative(words: str, item: VarianceComponent, upper: float) -> str:
    start = (
        f"{words}: the variance was estimated as {item.variance:.3g}, which is negative and counts as zero; "
    )
    if upper > 0:
        return start + f"that happens by chance, and the standard deviation may be as large as {upper:.3g}"
    return start + "the groups differ less than chance alone makes them: find out how the data came about"


def _significant(item: VarianceComponent) -> bool:
    return item.test is not None and item.test.p_value is not None and item.test.p_value < _SIGNIFICANT
