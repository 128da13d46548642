"""What a budget is made of, and what would change: the explanation of a combined uncertainty."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from budgets.acceptance import AcceptanceInterval, AcceptanceOptions, Ends, acceptance_interval
from budgets.budget import Budget
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.error_distributions import StudentT, Tabulated
from budgets.errors import BudgetsError, ComponentError
from budgets.evidence.evaluation import EvaluationWarning, effective_degrees_of_freedom
from budgets.level_dependence import level_dependent_acceptance
from budgets.levels import LEVELS
from budgets.linear_propagation import CompiledPropagation, Line
from budgets.planned_looks import risk_per_look_of
from budgets.propagation import (
    CombinedUncertainty,
    Contribution,
    Counts,
    combined,
    compiled,
    estimates_for,
    expanded_uncertainty,
)
from budgets.reading_patterns import ReadingPattern
from budgets.second_order import second_order_terms, second_order_warnings
from budgets.uncertainty_at_limits import uncertainty_of_law_at_limits

FEW_DEGREES_OF_FREEDOM = 5.0
_HALF = 0.25  # of the variance


@dataclass(frozen=True)
class Limits:
    """Acceptance limits, None where there is none; where nothing could be accepted, ``detail`` says why."""

    lower: float | None
    upper: float | None
    detail: str = ""


@dataclass(frozen=True)
class Alternative:
    """The budget with one component changed.

    Parameters
    ----------
    combined_standard_uncertainty, effective_degrees_of_freedom, expanded_uncertainty : float or None
        None where nothing is left without the component.
    acceptance_limits : Limits or None
        None without a decision rule.
    """

    combined_standard_uncertainty: float | None
    effective_degrees_of_freedom: float | None
    expanded_uncertainty: float | None
    acceptance_limits: Limits | None


@dataclass(frozen=True)
class ExplainedComponent:
    """One component of an explanation.

    Parameters
    ----------
    contribution : Contribution
    without, halved : Alternative
        The budget without it, and with half its standard uncertainty.
    remark : str
        Why the expanded uncertainty rises without it, where it does; else empty.
    """

    contribution: Contribution
    without: Alternative
    halved: Alternative
    remark: str


@dataclass(frozen=True)
class Subtotal:
    """What the components of one level give together.

    Parameters
    ----------
    level : str
    variance : float
    contribution : float
        Square root of the variance; 0 where correlations make that negative.
    share_of_variance : float
    """

    level: str
    variance: float
    contribution: float
    share_of_variance: float


@dataclass(frozen=True)
class Judged:
    """By what rule acceptance limits are found; ``fixed``: for every estimate, not for the one at hand."""

    tolerance: Tolerance
    rule: DecisionRule
    options: AcceptanceOptions
    fixed: bool
    tabulated: Tabulated | None = None


@dataclass(frozen=True)
class Basis:
    """What an explanation was computed from, for questions that come later.

    Parameters
    ----------
    law : CompiledPropagation
    coefficients, estimates : mapping of str to float
        Sensitivity coefficients, and the estimates they hold at.
    coverage_probability : float
    judged : Judged or None
    """

    law: CompiledPropagation
    coefficients: Mapping[str, float]
    estimates: Mapping[str, float]
    coverage_probability: float
    judged: Judged | None

    def alternative(self, law: CompiledPropagation) -> Alternative:
        """Return what another law would give at the same estimates."""
        try:
            variance, terms, _ = law.combination(self.coefficients, self.estimates)
        except ComponentError:
            # Nothing else moves the measurand: without this one there is no uncertainty to speak of.
            return Alternative(None, None, None, None)
        u, nu = math.sqrt(variance), effective_degrees_of_freedom(terms)
        expanded = expanded_uncertainty(u, self.coverage_probability, nu)
        return Alternative(u, nu, expanded, _limits(self.judged, law, u, nu))


@dataclass(frozen=True)
class Explanation:
    """The explanation of a budget.

    Parameters
    ----------
    result : CombinedUncertainty
    expanded_uncertainty : float
    components : tuple of ExplainedComponent
        In the order of the budget.
    subtotals : tuple of Subtotal
        By level, from the inside out; only those that have components.
    acceptance_limits : Limits or None
    warnings : tuple of EvaluationWarning
    basis : Basis
    """

    result: CombinedUncertainty
    expanded_uncertainty: float
    components: tuple[ExplainedComponent, ...]
    subtotals: tuple[Subtotal, ...]
    acceptance_limits: Limits | None
    warnings: tuple[EvaluationWarning, ...]
    basis: Basis = field(repr=False, compare=False)


def explain(
    budget: Budget,
    counts: Counts | ReadingPattern,
    *,
    estimates: Mapping[str, float] | None = None,
    tolerance: Tolerance | None = None,
    rule: DecisionRule | None = None,
    domain: Ends = (None, None),
    truncated: bool = False,
    tabulated: Tabulated | None = None,
) -> Explanation:
    """Explain the combined uncertainty of a budget.

    Parameters
    ----------
    budget : Budget
    counts : Counts or ReadingPattern
    estimates : mapping of str to float or None
        As in `budgets.propagation.combined`.
    tolerance : Tolerance or None
        With ``rule``: acceptance limits are given too, with a model for the uncertainty at these estimates,
        else those of the release rule.
    rule : DecisionRule or None
    domain : tuple of float or None
        Natural domain of the characteristic.
    truncated : bool
        Probabilities are those within the domain.
    tabulated : Tabulated or None
        Takes the place of Student's t for acceptance limits, also for those that would be otherwise.

    Returns
    -------
    Explanation

    Raises
    ------
    ModelError, ComponentError
        As in `budgets.propagation.combined`.

    Notes
    -----
    "Without it" takes the component out of the sum and leaves everything else, also what others have of its
    mean squares. The expanded uncertainty can rise without a component: k falls with the degrees of freedom
    that a well known component brings. The risk per look of a rule of several rounds stays that of the whole
    budget. Source: JCGM 100:2008, G.4 and G.6.4 (from memory).
    """
    result = combined(budget, counts, estimates=estimates)
    law = compiled(budget, counts)
    full = law.model.estimates(estimates_for(budget, estimates))
    coefficients = law.model.linearised(full)[1]
    judged = None
    if tolerance is not None and rule is not None:
        shift = 0.0 if budget.bias is None or budget.bias_treatment == "corrected" else budget.bias
        options: AcceptanceOptions = {
            "bias": shift,
            "domain": domain,
            "validated_range": budget.validated_range,
            "truncated": truncated,
        }
        if rule.kind != "guarded_by_global_risk":
            options["risk_per_look"] = risk_per_look_of(
                budget, tolerance, rule, any_distribution=tabulated is not None
            )
        judged = Judged(tolerance, rule, options, budget.model is None, tabulated)
    p = budget.coverage_probability
    basis = Basis(law, coefficients, full, p, judged)
    whole = expanded_uncertainty(result.standard_uncertainty, p, result.effective_degrees_of_freedom)
    components = []
    for index, contribution in enumerate(result.contributions):
        without, halved = (basis.alternative(_with_factor(law, index, factor)) for factor in (0.0, _HALF))
        remark = _remark(contribution, result, whole, without)
        components.append(ExplainedComponent(contribution, without, halved, remark))
    return Explanation(
        result,
        whole,
        tuple(components),
        _subtotals(result),
        _limits(judged, law, result.standard_uncertainty, result.effective_degrees_of_freedom),
        (*_curvature(law, budget, full, result), *_warnings(result)),
        basis,
    )


def _curvature(
    law: CompiledPropagation, budget: Budget, estimates: Mapping[str, float], result: CombinedUncertainty
) -> tuple[EvaluationWarning, ...]:
    """Return the warning that terms of second order matter, where they can be had."""
    if budget.model is None:
        return ()
    try:
        beyond = second_order_terms(law, budget.components, estimates)
    except BudgetsError:
        # Correlated inputs, or a model with a kink: there are no such terms.
        return ()
    return second_order_warnings(result.variance, beyond)


def _with_factor(law: CompiledPropagation, index: int, factor: float) -> CompiledPropagation:
    """Return the law with the variance of one line multiplied."""
    lines: list[Line] = list(law.lines)
    lines[index] = replace(lines[index], weight=factor * lines[index].weight)
    return replace(law, lines=tuple(lines))


def _limits(judged: Judged | None, law: CompiledPropagation, u: float, nu: float) -> Limits | None:
    if judged is None:
        return None
    if judged.rule.kind == "guarded_by_global_risk":
        return Limits(None, None, "by global risk the limits follow from the production too")
    try:
        accepted = _accepted(judged, law, u, nu)
    except BudgetsError as error:
        return Limits(None, None, error.message)
    return Limits(accepted.lower, accepted.upper)


def _accepted(judged: Judged, law: CompiledPropagation, u: float, nu: float) -> AcceptanceInterval:
    """Return what is accepted: as the release rule has it where limits are fixed, else at this estimate."""
    if judged.fixed:
        there = uncertainty_of_law_at_limits(law, judged.tolerance)
        u, nu = there.standard_uncertainty, there.degrees_of_freedom
        if there.dependence is not None:
            distribution = judged.tabulated or StudentT(nu)
            return level_dependent_acceptance(
                judged.rule, judged.tolerance, there.dependence, distribution, **judged.options
            )
    distribution = judged.tabulated or StudentT(nu)
    return acceptance_interval(judged.rule, judged.tolerance, u, distribution, **judged.options)


def _remark(
    contribution: Contribution, result: CombinedUncertainty, expanded: float, without: Alternative
) -> str:
    rises = without.expanded_uncertainty is not None and without.expanded_uncertainty > expanded * (1 + 1e-9)
    if not rises or without.effective_degrees_of_freedom is None:
        return ""
    if without.combined_standard_uncertainty is not None and (
        without.combined_standard_uncertainty > result.standard_uncertainty
    ):
        return (
            f"Without {contribution.component.code} the uncertainty rises: it is correlated with another "
            "component, and their errors partly cancel."
        )
    return (
        f"Without {contribution.component.code} the expanded uncertainty rises, the combined one falls: "
        f"what is left rests on {without.effective_degrees_of_freedom:.3g} instead of "
        f"{result.effective_degrees_of_freedom:.3g} degrees of freedom, so that the coverage factor grows. "
        "More data behind the least known component are what helps."
    )


def _subtotals(result: CombinedUncertainty) -> tuple[Subtotal, ...]:
    found = []
    for level in LEVELS:
        shares = [part.share_of_variance for part in result.contributions if part.component.level == level]
        if shares:
            share = math.fsum(shares)
            variance = share * result.variance
            found.append(Subtotal(level, variance, math.sqrt(max(0.0, variance)), share))
    return tuple(found)


def _warnings(result: CombinedUncertainty) -> tuple[EvaluationWarning, ...]:
    freedom = result.effective_degrees_of_freedom
    if freedom >= FEW_DEGREES_OF_FREEDOM:
        return ()
    detail = (
        f"the combined uncertainty rests on {freedom:.2g} effective degrees of freedom: it is itself poorly "
        "known, and the coverage factor is large"
    )
    return (EvaluationWarning("few-degrees-of-freedom", detail),)
