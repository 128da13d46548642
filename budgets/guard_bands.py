"""Guard bands of decision rules, before a tolerance is known: by a risk, a factor of u, or a width."""

from __future__ import annotations

from dataclasses import dataclass

from budgets.decision_rules import DecisionRule
from budgets.error_distributions import ErrorDistribution
from budgets.errors import LimitsError


@dataclass(frozen=True)
class Guard:
    """How far inside of tolerance a rule accepts.

    Parameters
    ----------
    risk : float or None
        Largest probability of nonconformity at an acceptance limit, over both tails at once.
    lower_factor, upper_factor : float
        Guard bands in standard uncertainties at the lower and upper limit, each as if it stood alone.
    width : float, unit of the characteristic
        A part of the guard band that does not depend on u.
    """

    risk: float | None
    lower_factor: float
    upper_factor: float
    width: float = 0.0


def guard_of(
    rule: DecisionRule,
    distribution: ErrorDistribution,
    *,
    risk_per_look: float | None = None,
    guard_band: float | None = None,
) -> Guard:
    """Return the guard of a decision rule.

    Parameters
    ----------
    rule : DecisionRule
    distribution : ErrorDistribution
    risk_per_look : float or None
        Of a rule with several rounds: the risk of each look that holds the overall one. It takes the place of
        the largest risk, or of the risk that the factor of the rule implies.
    guard_band : float or None, unit of the characteristic
        Of a rule by global risk: the guard band that holds it.

    Returns
    -------
    Guard

    Raises
    ------
    LimitsError
        If the rule needs a risk per look or a guard band and has none, or has one that it does not take.

    Notes
    -----
    Source: JCGM 106:2012, 8.3.2 and 8.3.3 (from memory).
    """
    _check_found(rule, risk_per_look, guard_band)
    if guard_band is not None:
        # The cap on the specific risk of the lot at hand is seen to where the limits are made.
        return Guard(None, 0.0, 0.0, guard_band)
    if rule.multiple is not None and rule.coverage_probability is not None and rule.sides is not None:
        tail = (1 - rule.coverage_probability) / rule.sides
        multiple = rule.multiple
        if risk_per_look is not None:
            tail, multiple = risk_per_look, 1.0
        return Guard(
            None, -multiple * distribution.lower_quantile(tail), multiple * distribution.upper_quantile(tail)
        )
    risk = rule.largest_risk if risk_per_look is None else risk_per_look
    return Guard(None, 0.0, 0.0) if risk is None else guard_by_risk(risk, distribution)


def guard_by_risk(risk: float, distribution: ErrorDistribution) -> Guard:
    """Return the guard that holds a specific risk.

    Parameters
    ----------
    risk : float
    distribution : ErrorDistribution

    Returns
    -------
    Guard
    """
    return Guard(risk, -distribution.lower_quantile(risk), distribution.upper_quantile(risk))


def _check_found(rule: DecisionRule, risk_per_look: float | None, guard_band: float | None) -> None:
    if (rule.rounds > 1) != (risk_per_look is not None):
        raise LimitsError(
            f"a rule of {rule.rounds} rounds {'needs' if rule.rounds > 1 else 'has no'} risk per look",
            where=("rounds",),
        )
    if risk_per_look is not None and not 0 < risk_per_look < 0.5:
        raise LimitsError("the risk per look must lie between 0 and 0.5", where=("rounds",))
    is_global = rule.kind == "guarded_by_global_risk"
    if is_global != (guard_band is not None):
        raise LimitsError(
            f"the rule {rule.kind} {'needs a' if is_global else 'takes no'} guard band from elsewhere",
            where=("kind",),
        )
    if guard_band is not None and not 0 <= guard_band < float("inf"):
        raise LimitsError("a guard band must be a finite number, not below 0", where=("kind",))
