"""Evidence that goes on serving beyond its time: what is known of it counts for less."""

from __future__ import annotations

import math
from dataclasses import replace

from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Estimate, Interval


def widened(estimate: Estimate, factor: float) -> Estimate:
    """Return an estimate with its standard uncertainty multiplied by a factor.

    Parameters
    ----------
    estimate : Estimate
    factor : float
        Above 1.

    Returns
    -------
    Estimate
        Of the same value and with the same degrees of freedom; every term of its variance, those relative to
        the value and those of a covariance among them, is multiplied by the square of the factor. What is
        averaged, covered or taken out stays as it was.

    Raises
    ------
    EvidenceError
        If the factor is not a finite number above 1.

    Notes
    -----
    How far a measurement has drifted since it was studied is a judgement, not data: the factor states it.
    The interval of a value keeps its middle and becomes wider, that of a standard deviation is multiplied.
    Source: common practice, no source.

    Examples
    --------
    >>> from budgets.evidence.evaluation import MeanSquare, Term
    >>> terms = (Term(0.5, MeanSquare("rep/repeatability", 0.0008, 20)),)
    >>> single = Estimate("repeatability", terms, None, None, ("reading",), True)
    >>> round(widened(single, 1.5).standard_uncertainty, 6), widened(single, 1.5).degrees_of_freedom
    (0.03, 20)
    """
    if not (math.isfinite(factor) and factor > 1):
        raise EvidenceError(
            f"a factor that widens is a finite number above 1, not {factor}", where=("widening_factor",)
        )
    square = factor**2
    return replace(
        estimate,
        interval=_interval(estimate.interval, estimate.value, factor),
        terms=tuple(replace(term, coefficient=term.coefficient * square) for term in estimate.terms),
        relative_terms=tuple(
            replace(term, coefficient=term.coefficient * square) for term in estimate.relative_terms
        ),
        matrix_terms=tuple(
            replace(term, coefficient=term.coefficient * square) for term in estimate.matrix_terms
        ),
    )


def _interval(interval: Interval | None, value: float | None, factor: float) -> Interval | None:
    if interval is None:
        return None
    middle = 0.0 if value is None else value
    return replace(
        interval,
        lower=middle + factor * (interval.lower - middle),
        upper=middle + factor * (interval.upper - middle),
    )
