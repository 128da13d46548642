"""Guarded rejection: which estimates prove that the specification is not met."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from budgets.conformity import Tolerance, conformance_probability
from budgets.error_distributions import ErrorDistribution
from budgets.guard_bands import Guard
from budgets.level_dependence import LevelDependence, lower_acceptance_limit, upper_acceptance_limit
from budgets.limit_search import limit_between


@dataclass(frozen=True)
class RejectionLimits:
    """Rejection limits in the scale of the estimate.

    Parameters
    ----------
    lower, upper : float or None, unit of the characteristic
        Only an estimate beyond is rejected, one exactly at a limit is held. None: nothing is ever rejected on
        that side, because there is no tolerance limit or no estimate proves that it is missed.
    """

    lower: float | None
    upper: float | None


def rejection_limits(
    guard: Guard,
    tolerance: Tolerance,
    dependence: LevelDependence,
    distribution: ErrorDistribution,
    *,
    bias: float = 0.0,
) -> RejectionLimits:
    """Return the rejection limits of a guard: acceptance mirrored at the tolerance limits.

    Parameters
    ----------
    guard : Guard
        Of the decision rule.
    tolerance : Tolerance
    dependence : LevelDependence
        How the standard uncertainty depends on the estimate; without a proportional part it does not.
    distribution : ErrorDistribution
    bias : float, unit of the characteristic
        Uncorrected. Here it counts in the direction that would reject what conforms.

    Returns
    -------
    RejectionLimits

    Notes
    -----
    ``T + w`` at the upper limit; for a specific risk where the conformance probability has fallen to that
    risk. A bias moves the upper limit out by ``max(0, b)`` and the lower by ``max(0, -b)``. Source:
    JCGM 106:2012, 8.3.2.2, guarded rejection; ISO 14253-1 (from memory).
    """
    lower = None if tolerance.lower is None else tolerance.lower - max(0.0, -bias)
    upper = None if tolerance.upper is None else tolerance.upper + max(0.0, bias)
    beyond_lower = None if lower is None else _below(lower - guard.width, guard.upper_factor, dependence)
    beyond_upper = None if upper is None else _above(upper + guard.width, guard.lower_factor, dependence)
    if guard.risk is None or lower is None or upper is None:
        return RejectionLimits(beyond_lower, beyond_upper)
    # With two limits the other tail adds to the nonconformity, so that the limits lie nearer.
    excess = _excess_conformance(guard.risk, Tolerance(lower, upper), dependence, distribution)
    return RejectionLimits(
        None if beyond_lower is None else _nearer(excess, lower, beyond_lower),
        None if beyond_upper is None else _nearer(excess, upper, beyond_upper),
    )


def _above(limit: float, factor: float, dependence: LevelDependence) -> float | None:
    if dependence.proportional == 0:
        return limit + factor * dependence.constant
    # y - k u(y) >= T is the condition of a lower acceptance limit.
    return lower_acceptance_limit(limit, factor, dependence)


def _below(limit: float, factor: float, dependence: LevelDependence) -> float | None:
    if dependence.proportional == 0:
        return limit - factor * dependence.constant
    # y + k u(y) <= T is that of an upper one; below zero nothing is ever rejected.
    found = upper_acceptance_limit(limit, factor, dependence) if limit > 0 else limit
    return found if found > 0 else None


def _excess_conformance(
    risk: float, tolerance: Tolerance, dependence: LevelDependence, distribution: ErrorDistribution
) -> Callable[[float], float]:
    def excess(estimate: float) -> float:
        u = dependence.at(estimate)
        return float(conformance_probability(estimate, u, distribution, tolerance)) - risk

    return excess


def _nearer(excess: Callable[[float], float], limit: float, one_sided: float) -> float:
    """Return where the conformance probability has fallen to the risk, not inside of the tolerance limit."""
    return limit_between(excess, one_sided, limit)
