"""Acceptance limits when the standard uncertainty depends on the estimate: ``u^2 = s0^2 + (s1 y)^2``."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NoReturn

from scipy.optimize import brentq, minimize_scalar

from budgets.acceptance import AcceptanceInterval, check_reach
from budgets.conformity import Tolerance, measurement_capability_index, shifted, tails
from budgets.decision_rules import DecisionRule
from budgets.errors import EmptyAcceptanceError, NotSupportedError
from budgets.propagation import coverage_factor, upper_quantile

_FULL_PRECISION = 4 * 2.220446049250313e-16


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
    if k == 0:
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
    degrees_of_freedom: float,
    *,
    bias: float = 0.0,
    domain: tuple[float | None, float | None] = (None, None),
    validated_range: tuple[float | None, float | None] = (None, None),
) -> AcceptanceInterval:
    """Return the estimates that a decision rule accepts when u depends on the estimate.

    Parameters
    ----------
    rule : DecisionRule
    tolerance : Tolerance
        Its limits must not be below zero.
    dependence : LevelDependence
    degrees_of_freedom : float
        One for all estimates: those at the limits.
    bias, domain, validated_range
        As in `budgets.acceptance.acceptance_interval`.

    Returns
    -------
    AcceptanceInterval

    Raises
    ------
    NotSupportedError
        For a tolerance limit below zero.
    LimitsError
        If the condition of simple acceptance is not met at a limit.
    EmptyAcceptanceError
        If no estimate could be accepted.

    Notes
    -----
    Source: JCGM 106:2012, 8.3 (from memory), solved for u(y). With two limits and a specific risk both tails
    count at once: the largest conformance probability is found first, and the limits on either side of it.
    """
    if any(limit is not None and limit < 0 for limit in (tolerance.lower, tolerance.upper)):
        raise NotSupportedError("an uncertainty proportional to a value that may be below zero")
    largest = max(dependence.at(limit) for limit in (tolerance.lower, tolerance.upper) if limit is not None)
    rule.check_condition(tolerance, largest)
    lower, upper = shifted(tolerance, bias)
    factor = _factor(rule, degrees_of_freedom)
    accepted_upper = None if upper is None else upper_acceptance_limit(max(upper, 0.0), factor, dependence)
    accepted_lower = None if lower is None else lower_acceptance_limit(lower, factor, dependence)
    hopeless = lower is not None and accepted_lower is None
    if hopeless or (accepted_upper is not None and accepted_upper < max(0.0, accepted_lower or 0.0)):
        _refuse(tolerance, largest)
    if rule.largest_risk is not None and accepted_lower is not None and accepted_upper is not None:
        moved = Tolerance(lower, upper)
        outer = (accepted_lower, accepted_upper)
        accepted_lower, accepted_upper = _both_tails(
            rule.largest_risk, moved, outer, dependence, degrees_of_freedom
        )
    accepted = AcceptanceInterval(
        accepted_lower,
        accepted_upper,
        None if accepted_lower is None or tolerance.lower is None else accepted_lower - tolerance.lower,
        None if accepted_upper is None or tolerance.upper is None else tolerance.upper - accepted_upper,
    )
    check_reach(accepted, tolerance, largest, domain, validated_range)
    return accepted


def _factor(rule: DecisionRule, degrees_of_freedom: float) -> float:
    if rule.largest_risk is not None:
        return upper_quantile(rule.largest_risk, degrees_of_freedom)
    if rule.multiple is not None and rule.coverage_probability is not None and rule.sides is not None:
        return rule.multiple * coverage_factor(
            rule.coverage_probability, degrees_of_freedom, sides=rule.sides
        )
    return 0.0


def _both_tails(
    risk: float, tolerance: Tolerance, one_sided: tuple[float, float], dependence: LevelDependence, nu: float
) -> tuple[float, float]:
    """Solve both tails at once, from the estimate of the smallest risk outwards to the one-sided limits."""

    def excess(estimate: float) -> float:
        return float(math.fsum(tails(estimate, dependence.at(estimate), nu, tolerance))) - risk

    lowest, highest = one_sided
    best = lowest
    if lowest < highest:
        found = minimize_scalar(excess, bounds=one_sided, method="bounded")
        best = min((float(found.x), lowest, highest), key=excess)
    if excess(best) > 0:
        _refuse(tolerance, dependence.at(tolerance.upper or 0.0))

    def limit(end: float) -> float:
        if excess(end) <= 0:
            return end
        return float(brentq(excess, best, end, xtol=_FULL_PRECISION, rtol=_FULL_PRECISION))

    return limit(lowest), limit(highest)


def _refuse(tolerance: Tolerance, standard_uncertainty: float) -> NoReturn:
    raise EmptyAcceptanceError(
        f"no estimate can be accepted with a standard uncertainty of {standard_uncertainty:.4g} at a limit; "
        "this measurement cannot prove this specification",
        capability_index=measurement_capability_index(tolerance, standard_uncertainty),
        remedy="Make the uncertainty at the limit smaller, above all its proportional part.",
    )
