"""Design ``repeatability``: groups of replicate readings of the same sample."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from budgets.errors import BudgetsError, EvidenceError, raise_collected
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning, MeanSquare, Term
from budgets.evidence.screening import Finding, cochran_findings, grubbs_findings
from budgets.evidence.study_tables import Layout, Study
from budgets.evidence.sums import (
    grouped,
    mean,
    standard_deviation_factors,
    standard_deviation_interval,
    sum_of_squares,
)
from budgets.evidence.variance_over_level import VarianceOverLevel, enough_levels, variance_over_level

LAYOUT = Layout(required=("sample", "reading"), optional=("replicate",), numbers=("reading",))

# With the upper end of its interval farther off than this, a standard deviation comes with a warning.
_WELL_KNOWN = 0.25


def evaluate(study: Study) -> Evaluation:
    """Return the pooled repeatability standard deviation of an analyzer.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`; samples may have unequal numbers of readings.

    Returns
    -------
    Evaluation
        Estimate ``repeatability``: one mean square with ``sum (n_i - 1)`` degrees of freedom; where the
        scatter grows with the level, ``repeatability_over_level`` beside it.

    Raises
    ------
    EvidenceError
        If no sample was read twice, a replicate occurs twice, or the replicates show no scatter.

    Notes
    -----
    Source: ISO 5725-2:1994, 7.4.5.1 and 7.5 (from memory).
    """
    readings = study.full("reading")
    _check_replicates(study)
    groups = grouped(study.labels["sample"], readings)
    replicated = {label: values for label, values in groups.items() if len(values) > 1}
    if not replicated:
        raise EvidenceError(
            "no sample has two replicates; repeatability needs at least two readings of the same sample",
            where=("rows",),
        )
    if len(set(readings)) == 1:
        raise EvidenceError("all readings are equal; they say nothing about repeatability", where=("rows",))
    freedom = sum(len(values) - 1 for values in replicated.values())
    # ISO 5725-2, 7.4.5.1: s_r^2 = sum (n_i - 1) s_i^2 / sum (n_i - 1)
    square = math.fsum(sum_of_squares(values) for values in replicated.values()) / freedom
    if square == 0:
        raise EvidenceError(
            "the replicates of every sample are equal: the display hides the repeatability; declare its "
            "resolution instead",
            where=("rows",),
        )
    deviation = math.sqrt(square)
    fit = _over_level(replicated)
    findings = cochran_findings(list(replicated.items()))
    findings += [found for label, values in replicated.items() for found in grubbs_findings(label, values)]
    return Evaluation(
        design="repeatability",
        estimates=(
            repeatability_estimate(study.code, square, freedom, ("reading", "presentation")),
            *_estimates_over_level(study.code, fit),
        ),
        used=sum(map(len, replicated.values())),
        diagnostics={
            "repeatability_standard_deviation": deviation,
            "samples": len(groups),
            "samples_with_replicates": len(replicated),
            "groups": _group_figures(replicated),
            "level_dependence": None if fit is None else fit.to_document(),
            "findings": [found.to_document() for found in findings],
        },
        warnings=(
            *precision_warnings(sum(map(len, replicated.values())), freedom),
            *_warnings_of_samples(len(groups), len(replicated)),
            *_warnings_of_level(fit),
            *resolution_warnings(deviation, study.decimals),
            *finding_warnings(findings),
        ),
    )


def _check_replicates(study: Study) -> None:
    """Refuse the same replicate of a sample twice: it is one reading, copied."""
    if "replicate" not in study.labels:
        return
    first: dict[tuple[str, str], int] = {}
    faults: list[BudgetsError] = []
    keys = zip(study.labels["sample"], study.labels["replicate"], strict=True)
    for row, key in zip(study.rows, keys, strict=True):
        if first.setdefault(key, row) != row:
            faults.append(
                EvidenceError(
                    f"replicate {key[1]} of sample {key[0]} stands in row {first[key] + 1} already",
                    where=("rows", row),
                )
            )
    raise_collected(faults)


def _over_level(groups: Mapping[str, Sequence[float]]) -> VarianceOverLevel | None:
    """Fit the scatter over the level, where the study has levels enough to tell."""
    levels = [mean(values) for values in groups.values()]
    freedom = [len(values) - 1 for values in groups.values()]
    variances = [sum_of_squares(values) / (len(values) - 1) for values in groups.values()]
    if not enough_levels(levels, variances, freedom):
        return None
    return variance_over_level(levels, variances, freedom)


def _estimates_over_level(code: str, fit: VarianceOverLevel | None) -> tuple[Estimate, ...]:
    """Return the repeatability as a constant and a proportional part, where the level matters."""
    if fit is None or not fit.significant:
        return ()
    constant, proportional = (
        (Term(1.0, MeanSquare(f"{code}/repeatability_{name}", square, nu)),) if square > 0 else ()
        for name, (square, nu) in zip(("constant", "proportional"), fit.parts, strict=True)
    )
    return (
        Estimate(
            name="repeatability_over_level",
            terms=constant,
            value=None,
            interval=None,
            may_feed=("reading", "presentation"),
            usable=True,
            contains=("repeatability", "resolution"),
            relative_terms=proportional,
        ),
    )


def _warnings_of_level(fit: VarianceOverLevel | None) -> tuple[EvaluationWarning, ...]:
    if fit is None or not fit.significant:
        return ()
    low, high = (math.sqrt(fit.variance(level)) for level in (fit.levels[0], fit.levels[-1]))
    detail = (
        f"the scatter depends on the level: {low:.2g} at {fit.levels[0]:.4g}, {high:.2g} at "
        f"{fit.levels[-1]:.4g}; one pooled figure is wrong at both ends, repeatability_over_level is not"
    )
    return (EvaluationWarning("level-dependent", detail),)


def repeatability_estimate(
    code: str, square: float, degrees_of_freedom: int, may_feed: tuple[str, ...]
) -> Estimate:
    """Return the estimate ``repeatability`` of a study from its pooled mean square."""
    return Estimate(
        name="repeatability",
        terms=(Term(1.0, MeanSquare(f"{code}/repeatability", square, degrees_of_freedom)),),
        value=None,
        interval=standard_deviation_interval(math.sqrt(square), degrees_of_freedom),
        may_feed=may_feed,
        usable=True,
        contains=("repeatability", "resolution"),
    )


def _group_figures(groups: Mapping[str, Sequence[float]]) -> list[dict[str, Any]]:
    return [
        {
            "sample": label,
            "readings": len(values),
            "mean": mean(values),
            "standard_deviation": math.sqrt(sum_of_squares(values) / (len(values) - 1)),
        }
        for label, values in groups.items()
    ]


def precision_warnings(
    number: int, degrees_of_freedom: float, *, of: str = "replicates"
) -> tuple[EvaluationWarning, ...]:
    """Say in plain words how well so many values know a standard deviation."""
    lower, upper = standard_deviation_factors(degrees_of_freedom)
    if upper - 1 <= _WELL_KNOWN:
        return ()
    detail = (
        f"{number} {of} know the standard deviation to within {100 * (lower - 1):.0f} % / "
        f"+{100 * (upper - 1):.0f} % ({degrees_of_freedom:g} degrees of freedom)"
    )
    return (EvaluationWarning("few-degrees-of-freedom", detail),)


def _warnings_of_samples(samples: int, replicated: int) -> tuple[EvaluationWarning, ...]:
    warnings = []
    if replicated == 1:
        detail = (
            "only one sample was read repeatedly; whether repeatability is the same elsewhere is not known"
        )
        warnings.append(EvaluationWarning("one-sample", detail))
    if replicated < samples:
        detail = f"{samples - replicated} samples were read once only and say nothing about repeatability"
        warnings.append(EvaluationWarning("samples-without-replicates", detail))
    return tuple(warnings)


def resolution_warnings(deviation: float, decimals: int | None) -> tuple[EvaluationWarning, ...]:
    """Warn when the last digit of the readings is coarser than their scatter."""
    if decimals is None or deviation >= 10.0**-decimals / math.sqrt(12):
        return ()
    detail = (
        f"the standard deviation {deviation:.2g} is below that of the last digit shown "
        f"({10.0**-decimals / math.sqrt(12):.2g}); keep the larger of the two"
    )
    return (EvaluationWarning("resolution-larger", detail),)


def finding_warnings(findings: list[Finding]) -> tuple[EvaluationWarning, ...]:
    """Put the findings of outlier tests into words; nothing was dropped."""
    warnings = []
    for found in findings:
        what = "the spread" if not found.values else " and ".join(f"{value:g}" for value in found.values)
        detail = (
            f"{found.grade} in {found.group}: {what} ({found.test}: {found.statistic:.3f}, critical value "
            f"{found.critical_value:.3f}); nothing was left out"
        )
        warnings.append(EvaluationWarning(found.grade, detail))
    return tuple(warnings)
