"""Design ``duplicates``: duplicate (or multiple) determinations of the same samples."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from scipy.special import stdtr

from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Evaluation, EvaluationWarning
from budgets.evidence.repeatability import (
    finding_warnings,
    precision_warnings,
    repeatability_estimate,
    resolution_warnings,
)
from budgets.evidence.screening import cochran_findings
from budgets.evidence.study_tables import Layout, Study
from budgets.evidence.sums import grouped, is_rounding, mean, sum_of_squares
from budgets.levels import levels_from

LAYOUT = Layout(required=("sample", "result"), optional=("determination",), numbers=("result",))

_SIGNIFICANT = 0.05
# A mean difference that chance alone exceeds less often than this is not taken as none. At the 5 % of a test
# of significance a real difference would mostly pass: of 2 to 5 pairs 95 % intervals then hold the truth of
# determinations that differ by one or two standard deviations in 71 to 90 % of studies, here in 95 %.
_TAKEN_AS_NONE = 0.5


def evaluate(study: Study) -> Evaluation:
    """Return the repeatability of a method from determinations of the same samples.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`. With a column ``determination`` the differences are first less second label;
        without it, in the order of the rows.

    Returns
    -------
    Evaluation
        Estimate ``repeatability``, of one determination.

    Raises
    ------
    EvidenceError
        If there are fewer than two samples with two determinations, or the determinations do not scatter.

    Notes
    -----
    Pairs: ``s^2 = sum d^2 / 2n`` with n degrees of freedom where chance alone would make a larger mean
    difference in half of the studies, else ``sum (d - mean d)^2 / 2(n - 1)`` with n - 1: one degree of
    freedom is a small price beside a difference that was not seen. It is told from 5 % on. More than two
    determinations: pooled within samples. Source: ISO 5725-2:1994, 7.4.5 (from memory); the test of the mean
    difference is common practice, no source.
    """
    groups = _groups(study)
    pairs = all(len(values) == 2 for values in groups.values())
    if pairs:
        square, freedom, diagnostics, warnings = _of_pairs(list(groups.values()))
    else:
        freedom = sum(len(values) - 1 for values in groups.values())
        square = math.fsum(sum_of_squares(values) for values in groups.values()) / freedom
        diagnostics, warnings = {}, ()
    if is_rounding(square, study.full("result")):
        raise EvidenceError(
            "the determinations of every sample agree exactly: they show no scatter", where=("rows",)
        )
    deviation = math.sqrt(square)
    findings = cochran_findings(list(groups.items()))
    used = sum(map(len, groups.values()))
    return Evaluation(
        design="duplicates",
        estimates=(repeatability_estimate(study.code, square, freedom, levels_from("reading")),),
        used=used,
        diagnostics={
            "repeatability_standard_deviation": deviation,
            "samples": len(groups),
            **diagnostics,
            "findings": [found.to_document() for found in findings],
        },
        warnings=(
            *precision_warnings(used, freedom),
            *warnings,
            *resolution_warnings(deviation, study.decimals),
            *finding_warnings(findings),
        ),
    )


def _groups(study: Study) -> Mapping[str, Sequence[float]]:
    results = study.full("result")
    if len(set(results)) == 1:
        raise EvidenceError("all results are equal; they say nothing about repeatability", where=("rows",))
    labels = study.labels["sample"]
    order: Sequence[int] = range(len(results))
    if "determination" in study.labels:
        determinations = study.labels["determination"]
        if len(set(zip(labels, determinations, strict=True))) < len(results):
            raise EvidenceError("a sample has two results under the same determination", where=("rows",))
        order = sorted(order, key=lambda i: determinations[i])
    groups = grouped([labels[i] for i in order], [results[i] for i in order])
    replicated = {label: values for label, values in groups.items() if len(values) > 1}
    if len(replicated) < 2:
        raise EvidenceError(
            f"{len(replicated)} samples have two determinations; at least two samples are needed",
            where=("rows",),
        )
    return replicated


def _of_pairs(
    pairs: Sequence[Sequence[float]],
) -> tuple[float, int, dict[str, Any], tuple[EvaluationWarning, ...]]:
    """Return mean square, degrees of freedom, diagnostics and warnings of duplicate determinations."""
    differences = [first - second for first, second in pairs]
    n = len(differences)
    centre = mean(differences)
    spread = sum_of_squares(differences)
    if spread == 0:
        probability = 0.0 if centre else 1.0
    else:
        t = abs(centre) / math.sqrt(spread / (n - 1) / n)
        probability = 2 * float(stdtr(n - 1, -t))
    diagnostics = {"mean_difference": centre, "mean_difference_p_value": probability}
    if probability >= _TAKEN_AS_NONE:
        return math.fsum(d * d for d in differences) / (2 * n), n, diagnostics, ()
    warnings: tuple[EvaluationWarning, ...] = ()
    if probability < _SIGNIFICANT:
        detail = (
            f"first and second determinations differ by {centre:.3g} on the average (p = {probability:.2g}); "
            "the standard deviation was taken around that difference, whose cause should be found"
        )
        warnings = (EvaluationWarning("determinations-differ", detail),)
    return spread / (2 * (n - 1)), n - 1, diagnostics, warnings
