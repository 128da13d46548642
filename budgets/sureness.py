"""How sure an uncertainty itself is, and what that does to a conformance probability."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scipy.special import gammaincinv

from budgets.error_distributions import StudentT
from budgets.release import ReleaseRule
from budgets.reporting import decimal_text, probability_text, significant_decimals

COVERAGE_PROBABILITY = 0.95
_NORMAL = StudentT(math.inf)


@dataclass(frozen=True)
class Sureness:
    """The standard uncertainty's own interval, and the conformance probability at its two ends.

    Parameters
    ----------
    degrees_of_freedom : float
        That the uncertainty rests on.
    coverage_probability : float
        Of the interval.
    lower_standard_uncertainty, upper_standard_uncertainty : float, unit of the characteristic
    lower_conformance_probability, upper_conformance_probability : float
        The smaller and the larger one.
    """

    degrees_of_freedom: float
    coverage_probability: float
    lower_standard_uncertainty: float
    upper_standard_uncertainty: float
    lower_conformance_probability: float
    upper_conformance_probability: float


def standard_uncertainty_interval(
    standard_uncertainty: float,
    degrees_of_freedom: float,
    coverage_probability: float = COVERAGE_PROBABILITY,
) -> tuple[float, float]:
    """Return the interval in which the true standard deviation behind an uncertainty lies.

    Parameters
    ----------
    standard_uncertainty : float, unit of the characteristic
    degrees_of_freedom : float
        Finite, real-valued.
    coverage_probability : float

    Returns
    -------
    tuple of float, unit of the characteristic

    Notes
    -----
    ``nu u^2/sigma^2`` is taken as chi-square with nu degrees of freedom, which is what effective degrees of
    freedom mean. Source: JCGM 100:2008, G.4.1 and E.4.3 (from memory); chi-square interval of a variance.

    Examples
    --------
    >>> lower, upper = standard_uncertainty_interval(0.07, 15)
    >>> round(lower, 3), round(upper, 3)
    (0.052, 0.108)
    """
    tail, half = (1 - coverage_probability) / 2, degrees_of_freedom / 2
    # A quantile of chi-square is twice that of the gamma distribution with half its degrees of freedom.
    lower, upper = (math.sqrt(half / float(gammaincinv(half, p))) for p in (1 - tail, tail))
    return lower * standard_uncertainty, upper * standard_uncertainty


def sureness(rule: ReleaseRule, estimate: float) -> Sureness | None:
    """Return how sure the uncertainty of an estimate is.

    Parameters
    ----------
    rule : ReleaseRule
    estimate : float, unit of the characteristic

    Returns
    -------
    Sureness or None
        None where the uncertainty has infinite degrees of freedom: it is taken as known. None too where items
        are judged: the doubt about their spread is in the probability already.

    Notes
    -----
    At an end of its interval the uncertainty counts as known, so the error is normal there: Student's t
    would let the same doubt in twice. Monte Carlo quantiles keep their shape. The verdict stays what it is.
    """
    nu = rule.effective_degrees_of_freedom
    if math.isinf(nu) or rule.items is not None:
        return None
    lower, upper = standard_uncertainty_interval(rule.standard_uncertainty_at(estimate), nu)
    distribution = rule.distribution or _NORMAL
    first, second = (rule.probabilities(estimate, u, distribution)[1] for u in (lower, upper))
    return Sureness(nu, COVERAGE_PROBABILITY, lower, upper, min(first, second), max(first, second))


def sureness_text(found: Sureness | None, unit: str, *, items: bool = False) -> str:
    """Return in a plain sentence how sure an uncertainty is.

    Parameters
    ----------
    found : Sureness or None
    unit : str
    items : bool
        Items are judged.

    Returns
    -------
    str

    Examples
    --------
    >>> sureness_text(Sureness(15.0, 0.95, 0.0517, 0.1083, 0.7123, 0.9634), "%").split(", the")[0]
    'u rests on 15 degrees of freedom: it lies from 0.052 to 0.108 % (95 %)'
    """
    if found is None:
        if items:
            return "How surely the spread of the items is known is in the probability already."
        return "u is taken as known: it has infinite degrees of freedom."
    decimals = significant_decimals(found.lower_standard_uncertainty)
    low, high = (
        decimal_text(value, decimals)
        for value in (found.lower_standard_uncertainty, found.upper_standard_uncertainty)
    )
    first, last = (
        probability_text(value)
        for value in (found.lower_conformance_probability, found.upper_conformance_probability)
    )
    then = f"is {first} either way" if first == last else f"then from {first} to {last}"
    return (
        f"u rests on {found.degrees_of_freedom:.3g} degrees of freedom: it lies from {low} to {high} {unit} "
        f"({found.coverage_probability * 100:g} %), the conformance probability {then}. The verdict stays."
    )
