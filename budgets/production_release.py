"""Release rules that know the production: by global risk, or with a prior beside the verdict."""

from __future__ import annotations

from dataclasses import replace
from typing import TypedDict, Unpack

from budgets.acceptance import Ends
from budgets.budget import Budget
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import Tabulated
from budgets.errors import NotSupportedError
from budgets.global_guard_bands import global_guard_band
from budgets.known_productions import KnownProduction
from budgets.measurement_errors import MeasurementErrors, measurement_errors
from budgets.production_laws import Production
from budgets.production_priors import ProductionPrior
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule


class RuleOptions(TypedDict, total=False):
    """What `budgets.release.ReleaseRule.compile` takes beside budget, tolerance and rule."""

    domain: Ends
    truncated: bool
    distribution: Tabulated | None
    risk_per_look: float | None


def release_rule_over_production(
    budget: Budget,
    counts: Counts | ReadingPattern,
    tolerance: Tolerance,
    rule: DecisionRule,
    prior: ProductionPrior,
    **options: Unpack[RuleOptions],
) -> ReleaseRule:
    """Compile a release rule whose decision rule names a prior of the production.

    Parameters
    ----------
    budget : Budget
        Without a measurement model.
    counts : Counts or ReadingPattern
    tolerance : Tolerance
    rule : DecisionRule
        By global risk: the guard band is found here. Any other: the verdict rests on the reading alone, and
        the prior is shown beside it.
    prior : ProductionPrior
    **options
        See `RuleOptions`.

    Returns
    -------
    ReleaseRule

    Raises
    ------
    LimitsError
        As in `ReleaseRule.compile`, and if no guard band holds the global risk.
    NotSupportedError
        For a budget with a measurement model, probabilities within the natural domain, or an error that Monte
        Carlo tabulated: what is said of a production rests on the law of propagation.
    """
    if options.get("truncated"):
        raise NotSupportedError(
            "a production prior beside probabilities within the natural domain", where=("within_domain",)
        )
    if options.get("distribution") is not None:
        raise NotSupportedError("a production prior with a Monte Carlo distribution", where=("prior",))
    errors = measurement_errors(budget, counts, tolerance)
    if rule.kind != "guarded_by_global_risk":
        made = ReleaseRule.compile(budget, counts, tolerance, rule, **options)
        return _with_production(made, prior, errors)
    assert rule.largest_risk is not None  # a rule by global risk has one
    band = global_guard_band(prior, errors, tolerance, rule.largest_risk).guard_band
    made = ReleaseRule.compile(budget, counts, tolerance, rule, guard_band=band, **options)
    return _with_production(made, prior, errors)


def _with_production(made: ReleaseRule, prior: ProductionPrior, errors: MeasurementErrors) -> ReleaseRule:
    production = Production(prior, errors, made.tolerance)
    rates = production.mean(production.rows(made.lower_acceptance_limit, made.upper_acceptance_limit))
    known = KnownProduction(
        prior,
        errors,
        float(rates.nonconforming_accepted[0]),
        float(rates.conforming_not_accepted[0]),
        float(rates.accepted[0]),
    )
    return replace(made, production=known)
