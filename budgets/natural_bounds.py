"""Probabilities near a natural bound: the true value is known to lie within the characteristic's domain.

Near zero moisture, or near full purity, a part of the distribution of the true value lies where no true value
can. Where a requirement asks for it, all probabilities are those given that the true value is in the domain.
An estimate outside of the domain counts as one at its end.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from budgets.conformity import Tolerance, conformance_probability, tails
from budgets.decision_rules import DecisionRule
from budgets.empty_acceptance import nothing_left
from budgets.error_distributions import ErrorDistribution, Real, probability_between
from budgets.errors import LimitsError, NotSupportedError
from budgets.limit_search import least_between, limit_between

Ends = tuple[float | None, float | None]


def check_truncation(rule: DecisionRule, domain: Ends, bias: float) -> None:
    """Check that probabilities within the domain can be used.

    Parameters
    ----------
    rule : DecisionRule
    domain : tuple of float or None, unit of the characteristic
    bias : float, unit of the characteristic
        Uncorrected.

    Raises
    ------
    LimitsError
        If the domain has no end.
    NotSupportedError
        With an uncorrected bias, guarded rejection or further rounds.
    """
    if domain == (None, None):
        raise LimitsError("the natural domain has no end that probabilities could stop at")
    for what, there in (
        ("an uncorrected bias", bias != 0),
        ("guarded rejection", rule.rejection == "guarded"),
        ("further rounds", rule.rounds > 1),
    ):
        if there:
            raise NotSupportedError(f"probabilities within the natural domain beside {what}")


def truncated_probabilities(
    estimate: Real,
    standard_uncertainty: float,
    distribution: ErrorDistribution,
    tolerance: Tolerance,
    domain: Ends,
) -> tuple[Real, Real, Real]:
    """Return the probabilities below, within and above tolerance, given that the value is in the domain.

    Parameters
    ----------
    estimate : float or ndarray, unit of the characteristic
    standard_uncertainty : float, unit of the characteristic
    distribution : ErrorDistribution
    tolerance : Tolerance
    domain : tuple of float or None, unit of the characteristic

    Returns
    -------
    tuple of float or ndarray

    Notes
    -----
    ``[F(T_U) - F(0)]/[1 - F(0)]`` for an upper limit and a domain that begins at 0. Source: own rule; the
    prior of JCGM 106:2012, 6.2 (from memory), uniform over the domain.
    """
    start = -math.inf if domain[0] is None else domain[0]
    end = math.inf if domain[1] is None else domain[1]
    lower = start if tolerance.lower is None else max(start, min(tolerance.lower, end))
    upper = end if tolerance.upper is None else min(end, max(tolerance.upper, start))
    y: Any = (
        np.clip(estimate, start, end) if isinstance(estimate, np.ndarray) else _clipped(estimate, start, end)
    )

    def between(first: float, last: float) -> Real:
        z: tuple[Real, Real] = (first - y) / standard_uncertainty, (last - y) / standard_uncertainty
        return probability_between(distribution, *z)

    whole = between(start, end)
    return between(start, lower) / whole, between(lower, upper) / whole, between(upper, end) / whole


def _clipped(value: float, start: float, end: float) -> float:
    return min(max(value, start), end)


def probabilities(
    estimate: float,
    standard_uncertainty: float,
    distribution: ErrorDistribution,
    tolerance: Tolerance,
    *,
    bias: float = 0.0,
    truncated_to: Ends | None = None,
) -> tuple[float, float, float]:
    """Return the probabilities that the true value lies below, within and above tolerance.

    Parameters
    ----------
    estimate, standard_uncertainty, distribution, tolerance, bias
        As in `budgets.conformity.tails`.
    truncated_to : tuple of float or None, or None
        The natural domain, where probabilities are those within it.

    Returns
    -------
    tuple of float
    """
    u = standard_uncertainty
    if truncated_to is not None:
        found = truncated_probabilities(estimate, u, distribution, tolerance, truncated_to)
        return float(found[0]), float(found[1]), float(found[2])
    below, above = tails(estimate, u, distribution, tolerance, bias=bias)
    within = conformance_probability(estimate, u, distribution, tolerance, bias=bias)
    return float(below), float(within), float(above)


def truncated_limits(
    risk: float,
    tolerance: Tolerance,
    standard_uncertainty: float,
    distribution: ErrorDistribution,
    domain: Ends,
) -> Ends:
    """Return the acceptance limits that hold a specific risk within the domain.

    Parameters
    ----------
    risk : float
    tolerance, standard_uncertainty, distribution, domain
        As in `truncated_probabilities`.

    Returns
    -------
    tuple of float or None, unit of the characteristic

    Raises
    ------
    EmptyAcceptanceError
        If no estimate in the domain has so small a risk.
    """

    def excess(estimate: float) -> float:
        below, _, above = truncated_probabilities(
            estimate, standard_uncertainty, distribution, tolerance, domain
        )
        return below + above - risk

    lower, upper = tolerance.lower, tolerance.upper
    if lower is not None and upper is not None:
        best = least_between(excess, lower, upper)
    elif upper is not None:
        reach = distribution.upper_quantile(risk) * standard_uncertainty
        # Without an end there, far inside is as good as it gets.
        best = upper - 2 * reach if domain[0] is None else min(domain[0], upper)
    else:
        assert lower is not None  # a tolerance has at least one limit
        reach = distribution.lower_quantile(risk) * standard_uncertainty
        best = lower - 2 * reach if domain[1] is None else max(domain[1], lower)
    if excess(best) > 0:
        nothing_left("even the best estimate in the natural domain leaves too large a risk")
    return (
        None if lower is None else limit_between(excess, best, lower),
        None if upper is None else limit_between(excess, best, upper),
    )
