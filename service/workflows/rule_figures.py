"""The figures of a release rule, as answers and the record show them."""

from __future__ import annotations

from typing import Any, Final

from budgets.conformity import Tolerance
from budgets.release import ReleaseRule

FIGURES: Final = (
    "combined_standard_uncertainty",
    "effective_degrees_of_freedom",
    "error_distribution",
    "coverage_probability",
    "coverage_factor",
    "expanded_uncertainty",
    "lower_tolerance_limit",
    "upper_tolerance_limit",
    "comparison",
    "lower_acceptance_limit",
    "upper_acceptance_limit",
    "acceptance_limits",
    "guard_band",
    "lower_rejection_limit",
    "upper_rejection_limit",
    "uncorrected_bias",
    "within_domain",
    "measurement_capability_index",
    "largest_specific_risk",
    "risk_per_look",
)


def figures_of(rule: ReleaseRule, acceptance_limits: str | None) -> dict[str, Any]:
    """Write the figures; ``acceptance_limits`` says how the limits are to be read."""
    nu = rule.effective_degrees_of_freedom
    guarded = rule.decision_rule.rejection == "guarded"
    return {
        "combined_standard_uncertainty": rule.combined_standard_uncertainty,
        "effective_degrees_of_freedom": None if nu == float("inf") else nu,
        "error_distribution": _distribution(rule),
        "coverage_probability": rule.coverage_probability,
        "coverage_factor": rule.coverage_factor,
        "expanded_uncertainty": rule.expanded_uncertainty,
        **tolerance_figures(rule.tolerance),
        "lower_acceptance_limit": rule.lower_acceptance_limit,
        "upper_acceptance_limit": rule.upper_acceptance_limit,
        "acceptance_limits": acceptance_limits,
        "guard_band": {"lower": rule.guard_band_lower, "upper": rule.guard_band_upper},
        "lower_rejection_limit": rule.lower_rejection_limit if guarded else rule.lower_tolerance_limit,
        "upper_rejection_limit": rule.upper_rejection_limit if guarded else rule.upper_tolerance_limit,
        "uncorrected_bias": rule.bias_shift,
        "within_domain": rule.truncated_to is not None,
        "measurement_capability_index": rule.measurement_capability_index,
        "largest_specific_risk": rule.largest_specific_risk,
        "risk_per_look": rule.risk_per_look,
    }


def tolerance_figures(tolerance: Tolerance) -> dict[str, Any]:
    """Write the stated limits, how estimates are compared with them, and what that makes of them."""
    lower, upper = tolerance.stated_ends
    stated = tolerance.stated
    return {
        "lower_tolerance_limit": lower,
        "upper_tolerance_limit": upper,
        "comparison": {
            "kind": "absolute" if stated is None else "rounded",
            "decimals": None if stated is None else stated.decimals,
            "effective_lower_tolerance_limit": tolerance.lower,
            "effective_upper_tolerance_limit": tolerance.upper,
            "lower_inclusive": tolerance.lower_inclusive,
            "upper_inclusive": tolerance.upper_inclusive,
        },
    }


def _distribution(rule: ReleaseRule) -> str:
    if rule.items is not None:
        return "items"
    if rule.distribution is not None:
        return "monte_carlo"
    return "normal" if rule.effective_degrees_of_freedom == float("inf") else "t"
