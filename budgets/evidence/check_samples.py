"""Design ``check_samples``: results of one control sample in time order."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, replace
from typing import Any

from scipy.special import stdtr

from budgets.errors import EvidenceError
from budgets.evidence.control_tests import LONGEST_RUN, ControlChart, control_chart
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning, Interval, MeanSquare, Term
from budgets.evidence.nested_means import NestedComponent, component_estimate, nested_components
from budgets.evidence.repeatability import (
    finding_warnings,
    precision_warnings,
    repeatability_estimate,
    resolution_warnings,
)
from budgets.evidence.screening import cochran_findings
from budgets.evidence.study_tables import Layout, Study
from budgets.evidence.sums import CONFIDENCE, grouped, mean, sum_of_squares
from budgets.levels import levels_from
from budgets.propagation import coverage_factor

LAYOUT = Layout(
    required=("session", "result"),
    optional=("sample", "assigned_value"),
    numbers=("result", "assigned_value"),
)

LEAST_SESSIONS = 5
_SIGNIFICANT = 0.05
_FEW_SESSIONS = 20


def evaluate(study: Study) -> Evaluation:
    """Return the long-term precision, and the bias, that a control sample shows.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`, rows in time order; results of one session (a day, a run) are its replicates.

    Returns
    -------
    Evaluation
        Estimates ``intermediate_precision``; where sessions have replicates ``between_sessions`` and
        ``repeatability``; with an assigned value ``bias``.

    Raises
    ------
    EvidenceError
        If there are fewer than five sessions, several samples or assigned values, or nothing scatters.

    Notes
    -----
    ``s_I^2 = V + (1 - h) s_r^2``, V the variance of the session means, h the mean of 1/(results of a
    session): the intermediate precision of one result. The uncertainty of the assigned value is no part of
    u(bias); it stands in the budget at the level ``reference``. Source: ISO 5725-3:1994, clause 8 (from
    memory); control limits as in `control_chart`.
    """
    results = study.full("result")
    _check_sample(study)
    sessions = grouped(study.labels["session"], results)
    if len(sessions) < LEAST_SESSIONS:
        raise EvidenceError(
            f"{len(sessions)} sessions; a control sample is evaluated from {LEAST_SESSIONS} on",
            where=("rows",),
        )
    means = [mean(values) for values in sessions.values()]
    if sum_of_squares(means) == 0:
        raise EvidenceError("the sessions do not differ: they show no long-term precision", where=("rows",))
    components = nested_components(
        study.code, ("sessions", "repeatability"), [study.labels["session"]], results
    )
    chart = control_chart(means)
    findings = cochran_findings(list(sessions.items()))
    bias, bias_figures, bias_warnings = _bias(study, means, components[0].mean_square)
    precision = _precision(study.code, components)
    deviation = math.sqrt(precision[0].variance)
    return Evaluation(
        design="check_samples",
        estimates=(*precision, *bias),
        used=len(results),
        diagnostics={
            "sessions": len(sessions),
            "intermediate_precision_standard_deviation": deviation,
            **_chart_figures(chart, list(sessions)),
            "chart": [[label, value] for label, value in zip(sessions, means, strict=True)],
            **bias_figures,
            "findings": [found.to_document() for found in findings],
        },
        warnings=(
            *precision_warnings(len(sessions), precision[0].degrees_of_freedom, of="sessions"),
            *_warnings_of_number(len(sessions)),
            *_warnings_of_components(components, precision),
            *_warnings_of_control(chart, list(sessions)),
            *bias_warnings,
            *resolution_warnings(deviation, study.decimals),
            *finding_warnings(findings),
        ),
    )


def _check_sample(study: Study) -> None:
    if len(set(study.labels.get("sample", ()))) > 1:
        raise EvidenceError(
            "several samples: each control sample is a study of its own, with its own chart", where=("rows",)
        )
    if len(set(study.numbers.get("assigned_value", ()))) > 1:
        raise EvidenceError(
            "the assigned value changes: a new lot of the control sample is a new study", where=("rows",)
        )


def _precision(code: str, components: Sequence[NestedComponent]) -> tuple[Estimate, ...]:
    """Return intermediate precision, and its parts where sessions have replicates."""
    between = components[0]
    contains = ("repeatability", "resolution", "session")
    if len(components) == 1:
        return (
            component_estimate("intermediate_precision", between.terms, levels_from("session"), contains),
        )
    within = components[1].mean_square
    if not within.value:
        # The display hides the repeatability: there is nothing to take out.
        alone = (Term(1.0, between.mean_square),)
        return (component_estimate("intermediate_precision", alone, levels_from("session"), contains),)
    h = -between.terms[1].coefficient
    whole = (Term(1.0, between.mean_square), Term(1 - h, within))
    return (
        component_estimate("intermediate_precision", whole, levels_from("session"), contains),
        component_estimate("between_sessions", between.terms, levels_from("session"), ("session",)),
        repeatability_estimate(code, within.value, round(within.degrees_of_freedom), levels_from("reading")),
    )


def _bias(
    study: Study, means: Sequence[float], square: MeanSquare
) -> tuple[tuple[Estimate, ...], dict[str, Any], tuple[EvaluationWarning, ...]]:
    """Return the bias against the assigned value, its figures, and what they mean; nothing without one."""
    if "assigned_value" not in study.numbers:
        return (), {}, ()
    assigned = study.full("assigned_value")[0]
    value = mean([own - assigned for own in means])
    u = math.sqrt(square.value / len(means))
    nu = square.degrees_of_freedom
    reach = coverage_factor(CONFIDENCE, nu) * u
    probability = min(1.0, 2 * float(stdtr(nu, -abs(value / u))))
    estimate = Estimate(
        name="bias",
        terms=(Term(1 / len(means), square),),
        value=value,
        interval=Interval(value - reach, value + reach, CONFIDENCE, "t"),
        may_feed=("calibration",),
        usable=True,
        contains=("bias",),
    )
    significant = probability < _SIGNIFICANT
    detail = (
        f"the bias {value:.3g} with standard uncertainty {u:.2g} (p = {probability:.2g}) is "
        f"{'' if significant else 'not '}significant; its standard uncertainty is a component in all cases, "
        "and that of the assigned value beside it, at the level 'reference'"
    )
    code = "bias-significant" if significant else "bias-not-significant"
    figures = {"assigned_value": assigned, "bias": value, "bias_p_value": probability}
    return (estimate,), figures, (EvaluationWarning(code, detail),)


def _chart_figures(chart: ControlChart, labels: Sequence[str]) -> dict[str, Any]:
    named = {
        "beyond_limits": [labels[i] for i in chart.beyond_limits],
        "jumps": [labels[i] for i in chart.jumps],
    }
    return {**asdict(replace(chart, beyond_limits=(), jumps=())), **named, "in_control": chart.is_in_control}


def _warnings_of_number(sessions: int) -> tuple[EvaluationWarning, ...]:
    if sessions >= _FEW_SESSIONS:
        return ()
    detail = f"{sessions} sessions are few for control limits; {_FEW_SESSIONS} are usual"
    return (EvaluationWarning("few-sessions", detail),)


def _warnings_of_components(
    components: Sequence[NestedComponent], precision: Sequence[Estimate]
) -> tuple[EvaluationWarning, ...]:
    if len(components) == 1:
        return ()
    if len(precision) == 1:
        detail = "the replicates of every session are equal: the display hides the repeatability"
        return (EvaluationWarning("replicates-equal", detail),)
    if precision[1].usable and components[0].is_significant:
        return ()
    detail = (
        f"the variance between sessions ({precision[1].variance:.3g}) is not significantly above zero; "
        + (
            "the component stays"
            if precision[1].usable
            else "a negative one means zero: it is shown but cannot be used"
        )
    )
    code = "sessions-not-significant" if precision[1].usable else "component-negative"
    return (EvaluationWarning(code, detail),)


def _warnings_of_control(chart: ControlChart, labels: Sequence[str]) -> tuple[EvaluationWarning, ...]:
    """Put into words what speaks against statistical control."""
    found: list[tuple[str, str]] = []
    if chart.beyond_limits:
        places = ", ".join(labels[i] for i in chart.beyond_limits[:10])
        found.append(("beyond-control-limits", f"beyond the control limits: {places}"))
    if chart.jumps:
        places = ", ".join(labels[i] for i in chart.jumps[:10])
        found.append(("jump", f"jumps from one session to the next, at {places}"))
    if chart.longest_run >= LONGEST_RUN:
        found.append(("run", f"{chart.longest_run} sessions in a row lie on one side of the mean"))
    if chart.has_trend:
        text = f"the results drift by {chart.slope:.2g} a session (p = {chart.slope_p_value:.2g})"
        found.append(("trend", text))
    if chart.is_dependent:
        found.append(
            (
                "dependent",
                f"results follow the ones before them (p = {chart.dependence_p_value:.2g}): the uncertainty "
                "of their mean is larger than shown",
            )
        )
    why = "; not in statistical control, so the past says less about the future than the figures claim"
    return tuple(EvaluationWarning(code, detail + why) for code, detail in found)
