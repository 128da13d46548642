"""Design ``production``: readings of lots over weeks."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from budgets.errors import EvidenceError
from budgets.evidence.control_tests import ControlChart, control_chart
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning
from budgets.evidence.nested_means import NestedComponent, component_estimate, nested_components
from budgets.evidence.repeatability import precision_warnings, repeatability_estimate
from budgets.evidence.study_tables import Layout, Study
from budgets.evidence.sums import grouped, mean, sum_of_squares
from budgets.levels import levels_from

LAYOUT = Layout(required=("lot", "reading"), optional=("period", "sample"), numbers=("reading",))
OPTIONS = ("steered_by_this_analyzer",)

LEAST_LOTS = 5
_OF_THE_PROCESS = {"lots": "lot_to_lot", "periods": "period_to_period"}


def evaluate(study: Study) -> Evaluation:
    """Return how a product varies: within its lots, from lot to lot, and from one period to the next.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`, rows in the order in which the lots were made, held and rejected lots included;
        without samples every reading is of its own sample. Option ``steered_by_this_analyzer``: whether the
        process is corrected by these readings.

    Returns
    -------
    Evaluation
        Estimates ``within_lot`` where lots were read more than once, ``repeatability`` where samples were,
        and, unless the process is steered by these readings, ``lot_to_lot`` and ``period_to_period``. Those
        two describe the process: they serve set points and priors, and no component can be made of them.

    Raises
    ------
    EvidenceError
        If there are fewer than five lots, a lot is in two periods, an option is not possible, or the lots do
        not differ.

    Notes
    -----
    Nested analysis by unweighted means: see `nested_components`. What the measurement draws anew with every
    lot is still in ``lot_to_lot``. A process that is corrected by an analyzer has a truth that runs against
    the error of that analyzer, so its readings show less variation than there is. Source: ISO 5725-3:1994,
    Annex B (from memory) for the balanced case; drift and succession as in `control_chart`.
    """
    steered = study.options.get("steered_by_this_analyzer")
    if steered is not None and not isinstance(steered, bool):
        raise EvidenceError("true or false is expected", where=("options", "steered_by_this_analyzer"))
    readings = study.full("reading")
    lots = grouped(study.labels["lot"], readings)
    if len(lots) < LEAST_LOTS:
        raise EvidenceError(
            f"{len(lots)} lots; a production is evaluated from {LEAST_LOTS} on", where=("rows",)
        )
    names, labels = _levels(study)
    means = _lot_means(study, lots)
    if sum_of_squares(means) == 0:
        raise EvidenceError("the lots do not differ: they show no production", where=("rows",))
    components = nested_components(study.code, names, labels, readings)
    chart = control_chart(means)
    estimates = _estimates(study, components, steered is True)
    first = [values[0] for values in lots.values()]
    of_lots = next(part for part in components if part.name == "lots")
    return Evaluation(
        design="production",
        estimates=estimates,
        used=len(readings),
        diagnostics={
            "lots": len(lots),
            "mean_of_lots": chart.centre,
            "standard_deviation_of_lot_means": math.sqrt(sum_of_squares(means) / (len(means) - 1)),
            "standard_deviation_of_first_readings": math.sqrt(sum_of_squares(first) / (len(first) - 1)),
            "short_term_standard_deviation_of_lot_means": chart.short_term_standard_deviation,
            "drift_per_lot": chart.slope,
            "drift_p_value": chart.slope_p_value,
            "succession_p_value": chart.dependence_p_value,
            "components": [_component_figures(part) for part in components],
            "lot_means": [[label, value] for label, value in zip(lots, means, strict=True)],
        },
        warnings=(
            *precision_warnings(len(lots), of_lots.mean_square.degrees_of_freedom, of="lots"),
            *_warnings_of_steering(steered),
            *_warnings_of_order(chart),
            *_warnings_of_estimates(estimates, components),
        ),
    )


def _levels(study: Study) -> tuple[tuple[str, ...], list[Sequence[str]]]:
    """Return names and labels of the levels, outermost first; the last name is that of the readings.

    Raises
    ------
    EvidenceError
        If a lot is in two periods.
    """
    lots = study.labels["lot"]
    names: list[str] = ["lots"]
    labels: list[Sequence[str]] = [lots]
    if "period" in study.labels:
        periods = study.labels["period"]
        known: dict[str, str] = {}
        for row, lot, period in zip(study.rows, lots, periods, strict=True):
            if known.setdefault(lot, period) != period:
                text = f"lot {lot} is in the periods {known[lot]} and {period}"
                raise EvidenceError(text, where=("rows", row))
        # Where all lots are of one period there is none to compare it with.
        names.insert(0, "periods")
        labels.insert(0, periods)
    if "sample" in study.labels:
        return (*names, "within_lot", "repeatability"), [*labels, study.labels["sample"]]
    return (*names, "within_lot"), labels


def _lot_means(study: Study, lots: dict[str, list[float]]) -> list[float]:
    """Return the mean of the sample means of every lot."""
    if "sample" not in study.labels:
        return [mean(values) for values in lots.values()]
    keys = list(zip(study.labels["lot"], study.labels["sample"], strict=True))
    samples = grouped(keys, study.full("reading"))
    of_lots = grouped([lot for lot, _ in samples], [mean(values) for values in samples.values()])
    return [mean(values) for values in of_lots.values()]


def _estimates(study: Study, components: Sequence[NestedComponent], steered: bool) -> tuple[Estimate, ...]:
    found = []
    names = [part.name for part in components]
    for part in reversed(components):
        square = part.mean_square
        if part.name == "repeatability":
            if square.value:
                nu = round(square.degrees_of_freedom)
                found.append(repeatability_estimate(study.code, square.value, nu, levels_from("reading")))
        elif part.name == "within_lot":
            contains = ("sampling",) if "repeatability" in names else ("sampling", "repeatability")
            found.append(component_estimate("within_lot", part.terms, levels_from("sample"), contains))
        elif not steered:
            own = component_estimate(_OF_THE_PROCESS[part.name], part.terms, (), ("process",))
            found.append(replace(own, usable=False))
    return tuple(found)


def _component_figures(part: NestedComponent) -> dict[str, Any]:
    square = part.mean_square
    return {
        "name": part.name,
        "mean_square": square.value,
        "degrees_of_freedom": square.degrees_of_freedom,
        "variance": math.fsum(term.coefficient * term.mean_square.value for term in part.terms),
        "f_statistic": part.f_statistic,
        "f_critical_value": part.f_critical_value,
    }


def _warnings_of_steering(steered: bool | None) -> tuple[EvaluationWarning, ...]:
    if steered is False:
        return ()
    if steered:
        detail = (
            "the process is steered by these readings: its true values run against the analyzer's errors and "
            "vary more than the readings do; no variation from lot to lot is offered, take it from reference "
            "values of lots"
        )
        return (EvaluationWarning("steered", detail),)
    detail = (
        "nothing says whether the process is steered by these readings (steered_by_this_analyzer); if it is, "
        "its true values vary more than shown"
    )
    return (EvaluationWarning("steering-unknown", detail),)


def _warnings_of_order(chart: ControlChart) -> tuple[EvaluationWarning, ...]:
    warnings = []
    if chart.has_trend:
        detail = (
            f"the lots drift by {chart.slope:.2g} a lot (p = {chart.slope_p_value:.2g}); readings alone "
            "cannot tell whether the product or the analyzer does"
        )
        warnings.append(EvaluationWarning("drift", detail))
    if chart.is_dependent:
        detail = (
            f"lots follow the ones before them (p = {chart.dependence_p_value:.2g}): their variation over "
            "months is larger, and less well known, than the interval says"
        )
        warnings.append(EvaluationWarning("dependent", detail))
    return tuple(warnings)


def _warnings_of_estimates(
    estimates: Sequence[Estimate], components: Sequence[NestedComponent]
) -> tuple[EvaluationWarning, ...]:
    warnings = [
        EvaluationWarning(
            "component-negative",
            f"the variance {estimate.name} came out as {estimate.variance:.3g}, which means zero",
        )
        for estimate in estimates
        if estimate.variance <= 0
    ]
    if "within_lot" not in [part.name for part in components]:
        detail = "no lot has two samples: what varies within a lot is in the variation from lot to lot"
        warnings.append(EvaluationWarning("lots-sampled-once", detail))
    return tuple(warnings)
