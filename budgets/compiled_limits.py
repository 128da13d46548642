"""All limits of a release rule: of acceptance and rejection, and the risk that they leave."""

from __future__ import annotations

from dataclasses import dataclass

from budgets.acceptance import AcceptanceInterval, AcceptanceOptions, acceptance_interval, guards_of
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import ErrorDistribution
from budgets.level_dependence import LevelDependence, level_dependent_acceptance
from budgets.natural_bounds import probabilities
from budgets.rejection import RejectionLimits, rejection_limits
from budgets.uncertainty_at_limits import UncertaintyAtLimits


@dataclass(frozen=True)
class CompiledLimits:
    """The limits of a rule.

    Parameters
    ----------
    acceptance : AcceptanceInterval
    rejection : RejectionLimits
        Under guarded rejection; else both None.
    largest_specific_risk : float
        Of an estimate exactly at an acceptance limit.
    """

    acceptance: AcceptanceInterval
    rejection: RejectionLimits
    largest_specific_risk: float


def compiled_limits(
    uncertain: UncertaintyAtLimits,
    tolerance: Tolerance,
    rule: DecisionRule,
    distribution: ErrorDistribution,
    options: AcceptanceOptions,
) -> CompiledLimits:
    """Return the limits of a rule for an uncertainty.

    Parameters
    ----------
    uncertain : UncertaintyAtLimits
    tolerance : Tolerance
    rule : DecisionRule
    distribution : ErrorDistribution
    options : AcceptanceOptions

    Returns
    -------
    CompiledLimits

    Raises
    ------
    LimitsError, NotSupportedError
        As in `budgets.acceptance.acceptance_interval` and
        `budgets.level_dependence.level_dependent_acceptance`.

    Notes
    -----
    Source: JCGM 106:2012, clause 8 (from memory).
    """
    u, dependence = uncertain.standard_uncertainty, uncertain.dependence
    accepted = (
        acceptance_interval(rule, tolerance, u, distribution, **options)
        if dependence is None
        else level_dependent_acceptance(rule, tolerance, dependence, distribution, **options)
    )
    at = dependence or LevelDependence(u, 0.0)
    bias = options.get("bias", 0.0)
    rejected = RejectionLimits(None, None)
    if rule.rejection == "guarded":
        # A cap on the specific risk is about acceptance only.
        guard = guards_of(rule, distribution, options)[0]
        rejected = rejection_limits(guard, tolerance, at, distribution, bias=bias)
    risks = [
        probabilities(
            limit, at.at(limit), distribution, tolerance, bias=bias, truncated_to=truncation(options)
        )
        for limit in (accepted.lower, accepted.upper)
        if limit is not None
    ]
    return CompiledLimits(accepted, rejected, max(below + above for below, _, above in risks))


def truncation(options: AcceptanceOptions) -> tuple[float | None, float | None] | None:
    """Return the domain that probabilities are truncated to; None where they are not."""
    return options.get("domain") if options.get("truncated") else None
