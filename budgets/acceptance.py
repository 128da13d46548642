"""The acceptance interval of a decision rule: which estimates prove the specification."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NoReturn

from scipy.optimize import brentq

from budgets.conformity import Tolerance, measurement_capability_index, shifted, upper_tail
from budgets.decision_rules import DecisionRule
from budgets.errors import EmptyAcceptanceError
from budgets.propagation import coverage_factor, upper_quantile

_FULL_PRECISION = 4 * 2.220446049250313e-16


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


def acceptance_interval(
    rule: DecisionRule,
    tolerance: Tolerance,
    standard_uncertainty: float,
    degrees_of_freedom: float,
    *,
    bias: float = 0.0,
    domain: tuple[float | None, float | None] = (None, None),
    validated_range: tuple[float | None, float | None] = (None, None),
) -> AcceptanceInterval:
    """Return the estimates that a decision rule accepts.

    Parameters
    ----------
    rule : DecisionRule
    tolerance : Tolerance
    standard_uncertainty : float, unit of the characteristic
    degrees_of_freedom : float
    bias : float, unit of the characteristic
        Uncorrected bias (analyzer - reference); 0 when corrected.
    domain, validated_range : tuple of float or None, unit of the characteristic
        Where the characteristic can lie at all, and where the evidence speaks. They do not become
        acceptance limits, but the acceptance interval must leave something inside both.

    Returns
    -------
    AcceptanceInterval

    Raises
    ------
    LimitsError
        If the condition of simple acceptance is not met.
    EmptyAcceptanceError
        If no estimate could be accepted, with what would open the interval.

    Notes
    -----
    Source: JCGM 106:2012, 8.3.2 and 8.3.3 (from memory). The guard band is
    ``w(u) + max(0, -b)`` at the upper and ``w(u) + max(0, b)`` at the lower limit.
    """
    rule.check_condition(tolerance, standard_uncertainty)
    lower, upper = shifted(tolerance, bias)
    width = math.inf if lower is None or upper is None else upper - lower
    factor, largest = _guard(rule, width, standard_uncertainty, degrees_of_freedom)
    if factor is None:
        _refuse(tolerance, standard_uncertainty, width, largest)
    accepted = _limits(tolerance, lower, upper, factor * standard_uncertainty)
    check_reach(accepted, tolerance, standard_uncertainty, domain, validated_range)
    return accepted


def _limits(
    tolerance: Tolerance, lower: float | None, upper: float | None, guard_band: float
) -> AcceptanceInterval:
    accepted_lower = None if lower is None else lower + guard_band
    accepted_upper = None if upper is None else upper - guard_band
    if accepted_lower is not None and accepted_upper is not None and accepted_lower > accepted_upper:
        # Only rounding can cross them here: the interval is the single point in the middle.
        accepted_lower = accepted_upper = (accepted_lower + accepted_upper) / 2
    return AcceptanceInterval(
        accepted_lower,
        accepted_upper,
        None if accepted_lower is None or tolerance.lower is None else accepted_lower - tolerance.lower,
        None if accepted_upper is None or tolerance.upper is None else tolerance.upper - accepted_upper,
    )


def _guard(rule: DecisionRule, width: float, u: float, nu: float) -> tuple[float | None, float]:
    """Return the guard band in units of u (None: nothing is left) and the largest u that leaves something."""
    if rule.largest_risk is not None:
        return _guard_by_risk(rule.largest_risk, width, u, nu)
    factor = 0.0
    if rule.multiple is not None and rule.coverage_probability is not None and rule.sides is not None:
        factor = rule.multiple * coverage_factor(rule.coverage_probability, nu, sides=rule.sides)
    largest = math.inf if factor == 0 else max(width, 0.0) / (2 * factor)
    return (factor if 2 * factor * u <= width else None), largest


def _guard_by_risk(risk: float, width: float, u: float, nu: float) -> tuple[float | None, float]:
    """Solve both tails at once; a single limit has the quantile itself.

    The conformance probability is largest in the middle, so that is where it is seen whether anything is
    accepted; from there to the one-sided quantile the risk grows steadily, which brackets the root.
    """
    one_sided = upper_quantile(risk, nu)
    if math.isinf(width):
        return one_sided, math.inf
    in_the_middle = upper_quantile(risk / 2, nu)
    largest = max(width, 0.0) / (2 * in_the_middle)
    half = width / (2 * u)
    if half < in_the_middle:
        return None, largest

    def excess(z: float) -> float:
        # JCGM 106, 8.3.3: the risks beyond both limits at distance z (in u) inside the nearer one.
        return float(upper_tail(z, nu) + upper_tail(2 * half - z, nu)) - risk

    if excess(one_sided) <= 0:
        return one_sided, largest
    if excess(half) >= 0:
        return half, largest
    return float(brentq(excess, one_sided, half, xtol=_FULL_PRECISION, rtol=_FULL_PRECISION)), largest


def check_reach(
    accepted: AcceptanceInterval,
    tolerance: Tolerance,
    standard_uncertainty: float,
    domain: tuple[float | None, float | None],
    validated_range: tuple[float | None, float | None],
) -> None:
    """Check that something of an acceptance interval lies where the evidence speaks.

    Parameters
    ----------
    accepted : AcceptanceInterval
    tolerance : Tolerance
    standard_uncertainty : float, unit of the characteristic
    domain, validated_range : tuple of float or None, unit of the characteristic

    Raises
    ------
    EmptyAcceptanceError
        If nothing does.
    """
    lowest = -math.inf if accepted.lower is None else accepted.lower
    highest = math.inf if accepted.upper is None else accepted.upper
    for name, (start, end), remedy in (
        ("natural domain of the characteristic", domain, "Check the limits and their unit."),
        ("validated range", validated_range, "Validate the method over the range that is to be accepted."),
    ):
        lowest = max(lowest, -math.inf if start is None else start)
        highest = min(highest, math.inf if end is None else end)
        if lowest > highest:
            raise EmptyAcceptanceError(
                f"no estimate can be accepted: the acceptance interval ({_words(accepted)}) lies outside of "
                f"the {name}",
                capability_index=measurement_capability_index(tolerance, standard_uncertainty),
                remedy=remedy,
            )


def _words(accepted: AcceptanceInterval) -> str:
    parts = []
    if accepted.lower is not None:
        parts.append(f"from {accepted.lower:.6g}")
    if accepted.upper is not None:
        parts.append(f"up to {accepted.upper:.6g}")
    return " ".join(parts)


def _refuse(tolerance: Tolerance, standard_uncertainty: float, width: float, largest: float) -> NoReturn:
    index = measurement_capability_index(tolerance, standard_uncertainty)
    if width <= 0:
        reason = "the uncorrected bias alone uses up the tolerance interval"
        remedy = "Correct the bias instead of leaving it to the guard band."
    else:
        reason = f"the guard bands of a standard uncertainty of {standard_uncertainty:.4g} overlap"
        remedy = f"The standard uncertainty would have to be at most {largest:.4g}."
    raise EmptyAcceptanceError(
        f"no estimate can be accepted: {reason}; this measurement (capability index "
        f"{0.0 if index is None else index:.3g}) cannot prove this specification. {remedy}",
        capability_index=index,
        remedy=remedy,
    )
