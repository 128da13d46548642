"""Acceptance limits when the standard uncertainty depends on the estimate: ``u^2 = s0^2 + (s1 y)^2``."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Unpack

from budgets.acceptance import AcceptanceInterval, AcceptanceOptions, Ends, guards_of, reached
from budgets.conformity import Tolerance, shifted, tails
from budgets.decision_rules import DecisionRule
from budgets.empty_acceptance import nothing_left, opened
from budgets.error_distributions import ErrorDistribution
from budgets.errors import NotSupportedError
from budgets.guard_bands import Guard
from budgets.limit_search import least_between, limit_between


@dataclass(frozen=True)
class LevelDependence:
    """A standard uncertainty with a constant part and one proportional to the estimate.

    Parameters
    ----------
    constant : float, unit of the characteristic
        s0.
    proportional : float
        s1.
    """

    constant: float
    proportional: float

    def at(self, estimate: float) -> float:
        """Return the standard uncertainty at an estimate."""
        return math.hypot(self.constant, self.proportional * estimate)

    def times(self, factor: float) -> LevelDependence:
        """Return both parts multiplied by a factor."""
        return LevelDependence(factor * self.constant, factor * self.proportional)


def upper_acceptance_limit(limit: float, factor: float, dependence: LevelDependence) -> float:
    """Return the largest estimate y with ``y + k u(y) <= T``.

    Parameters
    ----------
    limit : float, unit of the characteristic
        T, above zero.
    factor : float
        k.
    dependence : LevelDependence

    Returns
    -------
    float, unit of the characteristic
        Below zero where not even an estimate of zero could be accepted.

    Notes
    -----
    The root of ``(T - y)^2 = k^2 (s0^2 + s1^2 y^2)`` in the form that loses no digits and holds for any k s1.
    Source: own derivation; no published clause.

    Examples
    --------
    >>> round(upper_acceptance_limit(5.0, 2.0, LevelDependence(0.05, 0.02)), 12)
    4.784083515826
    """
    k, s0, s1 = factor, dependence.constant, dependence.proportional
    if k == 0 or limit == s0 == 0:
        return limit
    root = math.sqrt(max(0.0, s0**2 * (1 - (k * s1) ** 2) + (s1 * limit) ** 2))
    return (limit - k * s0) * (limit + k * s0) / (limit + k * root)


def lower_acceptance_limit(limit: float, factor: float, dependence: LevelDependence) -> float | None:
    """Return the smallest estimate y with ``y - k u(y) >= T``.

    Parameters
    ----------
    limit : float, unit of the characteristic
        T, not below zero.
    factor, dependence
        As in `upper_acceptance_limit`.

    Returns
    -------
    float or None
        None where k s1 >= 1: the uncertainty grows as fast as the estimate, and nothing proves the limit.

    Examples
    --------
    >>> round(lower_acceptance_limit(5.0, 2.0, LevelDependence(0.05, 0.02)), 12)
    5.2319421252
    """
    k, s0, s1 = factor, dependence.constant, dependence.proportional
    if k * s1 >= 1:
        return None
    root = math.sqrt(s0**2 * (1 - (k * s1) ** 2) + (s1 * limit) ** 2)
    return (limit + k * root) / (1 - (k * s1) ** 2)


def level_dependent_acceptance(
    rule: DecisionRule,
    tolerance: Tolerance,
    dependence: LevelDependence,
    distribution: ErrorDistribution,
    **options: Unpack[AcceptanceOptions],
) -> AcceptanceInterval:
    """Return the estimates that a decision rule accepts when u depends on the estimate.

    Parameters
    ----------
    rule : DecisionRule
    tolerance : Tolerance
        Its limits must not be below zero.
    dependence : LevelDependence
    distribution : ErrorDistribution
        One for all estimates: that at the limits.
    **options
        See `budgets.acceptance.AcceptanceOptions`.

    Returns
    -------
    AcceptanceInterval

    Raises
    ------
    NotSupportedError
        For a tolerance limit below zero, or probabilities within the domain.
    LimitsError
        If the condition of simple acceptance is not met at a limit.
    EmptyAcceptanceError
        If no estimate could be accepted, with what would open the interval.

    Notes
    -----
    Source: JCGM 106:2012, 8.3 (from memory), solved for u(y). With two limits and a specific risk both tails
    count at once: the smallest risk is found first, and the limits on either side of it.
    """
    if any(limit is not None and limit < 0 for limit in (tolerance.lower, tolerance.upper)):
        raise NotSupportedError("an uncertainty proportional to a value that may be below zero")
    if options.get("truncated", False):
        raise NotSupportedError(
            "probabilities within the natural domain beside parts proportional to the value"
        )
    largest = max(dependence.at(limit) for limit in (tolerance.lower, tolerance.upper) if limit is not None)
    rule.check_condition(tolerance, largest)
    guards = guards_of(rule, distribution, options)
    moved = shifted(tolerance, options.get("bias", 0.0))

    def limits(factor: float) -> AcceptanceInterval:
        scaled = dependence.times(factor)
        return reached(tolerance, [_inside(guard, moved, scaled, distribution) for guard in guards], options)

    return opened(limits, tolerance, largest)


def _inside(guard: Guard, moved: Ends, dependence: LevelDependence, distribution: ErrorDistribution) -> Ends:
    lower, upper = moved
    accepted_upper = (
        None
        if upper is None
        else upper_acceptance_limit(max(upper - guard.width, 0.0), guard.upper_factor, dependence)
    )
    accepted_lower = (
        None if lower is None else lower_acceptance_limit(lower + guard.width, guard.lower_factor, dependence)
    )
    if lower is not None and accepted_lower is None:
        nothing_left(
            "the uncertainty grows as fast as the value, so that no value proves the lower limit",
            "Make the proportional part of the uncertainty smaller.",
        )
    if accepted_upper is not None and accepted_upper < max(0.0, accepted_lower or 0.0):
        nothing_left("the guard bands overlap, or the upper one leaves nothing above zero")
    if guard.risk is None or lower is None or accepted_lower is None or accepted_upper is None:
        return accepted_lower, accepted_upper
    one_sided = accepted_lower, accepted_upper
    return _both_tails(guard.risk, Tolerance(*moved), one_sided, dependence, distribution)


def _both_tails(
    risk: float,
    tolerance: Tolerance,
    one_sided: tuple[float, float],
    dependence: LevelDependence,
    distribution: ErrorDistribution,
) -> tuple[float, float]:
    """Solve both tails at once, from the estimate of the smallest risk outwards to the one-sided limits."""

    def excess(estimate: float) -> float:
        return float(math.fsum(tails(estimate, dependence.at(estimate), distribution, tolerance))) - risk

    best = least_between(excess, *one_sided)
    if excess(best) > 0:
        nothing_left("the guard bands overlap")
    return limit_between(excess, best, one_sided[0]), limit_between(excess, best, one_sided[1])
