"""The figures of a release rule, as answers and the record show them."""

from __future__ import annotations

from typing import Any, Final

from budgets.release import ReleaseRule

FIGURES: Final = (
    "combined_standard_uncertainty",
    "effective_degrees_of_freedom",
    "coverage_probability",
    "coverage_factor",
    "expanded_uncertainty",
    "lower_tolerance_limit",
    "upper_tolerance_limit",
    "lower_acceptance_limit",
    "upper_acceptance_limit",
    "acceptance_limits",
    "guard_band",
    "uncorrected_bias",
    "measurement_capability_index",
    "largest_specific_risk",
)


def figures_of(rule: ReleaseRule, acceptance_limits: str | None) -> dict[str, Any]:
    """Write the figures; ``acceptance_limits`` says how the limits are to be read."""
    nu = rule.effective_degrees_of_freedom
    return {
        "combined_standard_uncertainty": rule.combined_standard_uncertainty,
        "effective_degrees_of_freedom": None if nu == float("inf") else nu,
        "coverage_probability": rule.coverage_probability,
        "coverage_factor": rule.coverage_factor,
        "expanded_uncertainty": rule.expanded_uncertainty,
        "lower_tolerance_limit": rule.lower_tolerance_limit,
        "upper_tolerance_limit": rule.upper_tolerance_limit,
        "lower_acceptance_limit": rule.lower_acceptance_limit,
        "upper_acceptance_limit": rule.upper_acceptance_limit,
        "acceptance_limits": acceptance_limits,
        "guard_band": {"lower": rule.guard_band_lower, "upper": rule.guard_band_upper},
        "uncorrected_bias": rule.bias_shift,
        "measurement_capability_index": rule.measurement_capability_index,
        "largest_specific_risk": rule.largest_specific_risk,
    }
