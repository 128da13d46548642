"""The acceptance interval of a decision rule: which estimates prove the specification."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypedDict, Unpack

from budgets.conformity import Tolerance, shifted
from budgets.decision_rules import DecisionRule
from budgets.empty_acceptance import nothing_left, opened
from budgets.error_distributions import ErrorDistribution, StudentT
from budgets.guard_bands import Guard, guard_by_risk, guard_of
from budgets.limit_search import least_between, limit_between
from budgets.natural_bounds import check_truncation, truncated_limits

Ends = tuple[float | None, float | None]


class AcceptanceOptions(TypedDict, total=False):
    """What beside the uncertainty bears on acceptance.

    ``bias``: uncorrected bias (analyzer - reference), 0 when corrected. ``domain``, ``validated_range``:
    where the characteristic can lie at all, and where the evidence speaks; they do not become acceptance
    limits, but the acceptance interval must leave something inside both. ``truncated``: probabilities are
    those within the domain (`budgets.natural_bounds`). ``risk_per_look``, ``guard_band``: as in
    `budgets.guard_bands.guard_of`.
    """

    bias: float
    domain: Ends
    validated_range: Ends
    truncated: bool
    risk_per_look: float | None
    guard_band: float | None


@dataclass(frozen=True)
class AcceptanceInterval:
    """Acceptance limits in the scale of the estimate, and the guard bands.

    Parameters
    ----------
    lower, upper : float or None, unit of the characteristic
        An estimate exactly at an acceptance limit is accepted. None where there is no tolerance limit.
    guard_band_lower, guard_band_upper : float or None, unit of the characteristic
        Distance from the tolerance limit to the acceptance limit; positive when acceptance is inside.
    """

    lower: float | None
    upper: float | None
    guard_band_lower: float | None
    guard_band_upper: float | None

    @classmethod
    def between(cls, tolerance: Tolerance, lower: float | None, upper: float | None) -> AcceptanceInterval:
        """Return the interval between two limits, with the guard bands that they leave."""
        return cls(
            lower,
            upper,
            None if lower is None or tolerance.lower is None else lower - tolerance.lower,
            None if upper is None or tolerance.upper is None else tolerance.upper - upper,
        )


def acceptance_interval(
    rule: DecisionRule,
    tolerance: Tolerance,
    standard_uncertainty: float,
    distribution: ErrorDistribution,
    **options: Unpack[AcceptanceOptions],
) -> AcceptanceInterval:
    """Return the estimates that a decision rule accepts.

    Parameters
    ----------
    rule : DecisionRule
    tolerance : Tolerance
    standard_uncertainty : float, unit of the characteristic
    distribution : ErrorDistribution
        Of (true value - estimate)/u.
    **options
        See `AcceptanceOptions`.

    Returns
    -------
    AcceptanceInterval

    Raises
    ------
    LimitsError
        If the condition of simple acceptance is not met.
    EmptyAcceptanceError
        If no estimate could be accepted, with what would open the interval.
    NotSupportedError
        For probabilities within the domain beside what they are not built for.

    Notes
    -----
    Source: JCGM 106:2012, 8.3.2 and 8.3.3 (from memory). The guard band is
    ``w(u) + max(0, -b)`` at the upper and ``w(u) + max(0, b)`` at the lower limit.
    """
    rule.check_condition(tolerance, standard_uncertainty)
    guards = guards_of(rule, distribution, options)
    truncated = options.get("truncated", False) and guards[0].risk is not None
    domain, bias = options.get("domain", (None, None)), options.get("bias", 0.0)
    if options.get("truncated", False):
        check_truncation(rule, domain, bias)
    moved = shifted(tolerance, bias)

    def limits(factor: float) -> AcceptanceInterval:
        u = factor * standard_uncertainty
        found = [
            truncated_limits(guard.risk, tolerance, u, distribution, domain)
            if truncated and guard.risk is not None
            else _inside(guard, moved, u, distribution)
            for guard in guards
        ]
        return reached(tolerance, found, options)

    return opened(limits, tolerance, standard_uncertainty)


def guards_of(
    rule: DecisionRule, distribution: ErrorDistribution, options: AcceptanceOptions
) -> tuple[Guard, ...]:
    """Return the guards of a rule, all of which must be kept.

    Parameters
    ----------
    rule : DecisionRule
    distribution : ErrorDistribution
    options : AcceptanceOptions

    Returns
    -------
    tuple of Guard
        The guard of its kind, and its cap on the specific risk.

    Raises
    ------
    LimitsError
        As in `budgets.guard_bands.guard_of`.
    """
    guard = guard_of(
        rule, distribution, risk_per_look=options.get("risk_per_look"), guard_band=options.get("guard_band")
    )
    if rule.specific_risk_cap is None:
        return (guard,)
    return guard, guard_by_risk(rule.specific_risk_cap, distribution)


def reached(tolerance: Tolerance, found: Sequence[Ends], options: AcceptanceOptions) -> AcceptanceInterval:
    """Return what several guards accept together, checked that the evidence speaks of some of it.

    Parameters
    ----------
    tolerance : Tolerance
    found : sequence of tuple of float or None, unit of the characteristic
        Acceptance limits, without one on the same sides.
    options : AcceptanceOptions

    Returns
    -------
    AcceptanceInterval

    Raises
    ------
    EmptyAcceptanceError
        If nothing is left, or nothing that lies in the natural domain and in the validated range.
    """
    lower = max((low for low, _ in found if low is not None), default=None)
    upper = min((high for _, high in found if high is not None), default=None)
    lowest = -math.inf if lower is None else lower
    highest = math.inf if upper is None else upper
    if lowest > highest:
        nothing_left("the cap on the specific risk leaves nothing")
    accepted = AcceptanceInterval.between(tolerance, lower, upper)
    for name, (start, end), remedy in (
        (
            "natural domain of the characteristic",
            options.get("domain", (None, None)),
            "Check the limits and their unit.",
        ),
        (
            "validated range",
            options.get("validated_range", (None, None)),
            "Validate the method over the range that is to be accepted.",
        ),
    ):
        lowest = max(lowest, -math.inf if start is None else start)
        highest = min(highest, math.inf if end is None else end)
        if lowest > highest:
            nothing_left(f"the acceptance interval ({_words(accepted)}) lies outside of the {name}", remedy)
    return accepted


def _words(accepted: AcceptanceInterval) -> str:
    parts = []
    if accepted.lower is not None:
        parts.append(f"from {accepted.lower:.6g}")
    if accepted.upper is not None:
        parts.append(f"up to {accepted.upper:.6g}")
    return " ".join(parts)


def _inside(guard: Guard, moved: Ends, u: float, distribution: ErrorDistribution) -> Ends:
    """Return the limits that a guard leaves inside of tolerance limits that a bias has moved."""
    lower, upper = moved
    if lower is None or upper is None:
        return (
            None if lower is None else lower + guard.lower_factor * u + guard.width,
            None if upper is None else upper - guard.upper_factor * u - guard.width,
        )
    width = upper - lower
    if width <= 0:
        nothing_left(
            "the uncorrected bias alone uses up the tolerance interval",
            "Correct the bias instead of leaving it to the guard band.",
        )
    factors = guard.lower_factor, guard.upper_factor
    if guard.risk is not None:
        factors = _guards_by_risk(guard, guard.risk, width / u, distribution)
    elif sum(factors) * u > width - 2 * guard.width:
        nothing_left("the guard bands overlap")
    lower, upper = lower + factors[0] * u + guard.width, upper - factors[1] * u - guard.width
    if lower > upper:
        # Only rounding can cross them here: the interval is the single point in the middle.
        lower = upper = (lower + upper) / 2
    return lower, upper


def _guards_by_risk(
    guard: Guard, risk: float, width: float, distribution: ErrorDistribution
) -> tuple[float, float]:
    """Return the guard bands, in units of u, that hold the risk of both tails at once.

    z is the distance inside of the upper limit. The point of the smallest risk is found first, so that it is
    seen whether anything is accepted; from there to the one-sided quantiles the risk grows steadily, which
    brackets the roots.
    """

    def excess(z: float) -> float:
        # JCGM 106, 8.3.3: the risks beyond both limits.
        return float(distribution.upper_tail(z) + distribution.lower_tail(z - width)) - risk

    if isinstance(distribution, StudentT):
        # Symmetric: the smallest risk is that of the middle.
        if width < 2 * distribution.upper_quantile(risk / 2):
            nothing_left("the guard bands overlap")
        factor = limit_between(excess, width / 2, guard.upper_factor)
        return factor, factor
    best = least_between(excess, guard.upper_factor, width - guard.lower_factor)
    if excess(best) > 0:
        nothing_left("the guard bands overlap")
    return (
        width - limit_between(excess, best, width - guard.lower_factor),
        limit_between(excess, best, guard.upper_factor),
    )
