"""Design ``agreement``: an analyzer against a reference method over a validation set."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from budgets.errors import EvidenceError
from budgets.evidence.agreement_lines import agreement_lines
from budgets.evidence.agreement_options import (
    OPTIONS,
    AgreementOptions,
    agreement_options,
)
from budgets.evidence.agreement_warnings import (
    warnings_of_averages,
    warnings_of_calibration,
    warnings_of_extremes,
    warnings_of_number,
    warnings_of_remainder,
    warnings_of_runs,
)
from budgets.evidence.agreement_with_limits import evaluate_with_limits, has_limits
from budgets.evidence.bias import BiasTest, bias_estimate, bias_warnings
from budgets.evidence.deviating_pairs import deviating_pairs, deviation_warnings
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning, MeanSquare, Term
from budgets.evidence.extreme_differences import Deviate, extremes
from budgets.evidence.local_agreement import (
    agreement_near_limits,
    differences_over_level,
    warnings_near_limits,
)
from budgets.evidence.remainder import (
    NEEDED,
    Remainder,
    checked_sources,
    remainder,
    subtracted_terms,
)
from budgets.evidence.repeatability import finding_warnings
from budgets.evidence.screening import grubbs_findings
from budgets.evidence.study_tables import Layout, NamedSource, Study
from budgets.evidence.sums import is_rounding, mean, standard_deviation_interval, sum_of_squares
from budgets.evidence.validation_pairs import BULK, UNCERTAINTIES, Pair, validation_pairs, values_of

__all__ = ["LAYOUT", "OPTIONS", "NamedSource", "evaluate"]

LAYOUT = Layout(
    required=("pair", "reading", "reference"),
    optional=("group", "run", *UNCERTAINTIES),
    numbers=("reading", "reference", *UNCERTAINTIES),
    nullable=("reading", "reference", *UNCERTAINTIES),
    censorable=("reading", "reference"),
)


def evaluate(study: Study) -> Evaluation:
    """Return bias, standard error of prediction and remainder of a validation set.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`, several rows of one pair being replicates; standard uncertainties are of the
        means. Options: see `budgets.evidence.agreement_options`; ``independent`` must be true.

    Returns
    -------
    Evaluation
        Estimates ``bias``, ``standard_error_of_prediction`` and, where the repeatabilities of analyzer and
        reference are known, ``remainder`` and ``repeatability_beyond_study``.

    Raises
    ------
    EvidenceError
        If the pairs are not independent of the calibration, do not scatter, or a named source cannot be used.

    Notes
    -----
    ``SEP^2 = sum (d - mean d)^2 / (n - 1)``, ``RMSEP^2 = sum d^2 / n``, d = reading - reference. The RMSEP
    holds the bias, so it stands in the diagnostics only: no component can be made of it, and it cannot be
    counted beside a bias. Lines, the agreement near limits and the side that deviates are diagnostics: they
    say where the two figures do not tell all. Values below a reporting limit: see
    `budgets.evidence.agreement_with_limits`. Source: ISO 12099:2017, validation (from memory).
    """
    options = agreement_options(study.options)
    pairs = validation_pairs(study)
    if any(has_limits(pair) for pair in pairs):
        return evaluate_with_limits(study, pairs)
    differences = [pair.difference for pair in pairs]
    n = len(pairs)
    square = MeanSquare(
        f"{study.code}/standard_error_of_prediction", sum_of_squares(differences) / (n - 1), n - 1
    )
    # A scatter so small that its square over n vanishes is none.
    if square.value / n**2 == 0 or is_rounding(square.value, values_of(pairs)):
        raise EvidenceError("all pairs differ by the same amount: they show no scatter", where=("rows",))
    sources = checked_sources(study.named_sources, pairs, study.code)
    one_run = len({pair.run for pair in pairs}) == 1 and pairs[0].run is not None
    test = bias_estimate(
        pairs, square, study.code, whole_run=sources.get("reference_run", ()) if one_run else ()
    )
    left = None
    if all(name in sources for name in NEEDED):
        left = remainder(square, subtracted_terms(sources, pairs, options.presentations), sources)
    looks = _looks(pairs, square, sources, options)
    return Evaluation(
        design="agreement",
        estimates=_estimates(test, square, left, sources.get("analyzer_repeatability"), pairs),
        used=len(study.rows),
        diagnostics={
            **_diagnostics(pairs, square, test),
            **({} if left is None else left.diagnostics),
            **looks.diagnostics,
        },
        warnings=(
            *warnings_of_number(n),
            *bias_warnings(test, pairs),
            *warnings_of_runs(one_run, "reference_run" in sources),
            *warnings_of_remainder(left, sources),
            *warnings_of_averages(pairs),
            *looks.warnings,
        ),
    )


@dataclass(frozen=True)
class _Looks:
    """Diagnostics that no estimate is made of, and their warnings."""

    diagnostics: Mapping[str, Any]
    warnings: tuple[EvaluationWarning, ...]


def _looks(
    pairs: Sequence[Pair],
    square: MeanSquare,
    sources: Mapping[str, tuple[Term, ...]],
    options: AgreementOptions,
) -> _Looks:
    differences = [pair.difference for pair in pairs]
    deviation, freedom = math.sqrt(square.value), len(pairs) - 1
    lines = agreement_lines(pairs, square, sources, options)
    fit = differences_over_level(pairs)
    near = agreement_near_limits(pairs, deviation, options.tolerance_limits, fit)
    deviating = deviating_pairs(pairs, deviation)
    standing_out = extremes(differences)
    without = _without(differences, standing_out)
    findings = grubbs_findings("differences", differences)
    return _Looks(
        {
            **lines.to_document(),
            "calibration_error": None
            if options.calibration is None
            else options.calibration.to_document(deviation, freedom),
            "near_limits": list(near),
            "level_dependence": None if fit is None else fit.to_document(),
            "deviating_pairs": [item.to_document() for item in deviating],
            "extreme_differences": [_extreme_document(item, pairs) for item in standing_out],
            "standard_error_of_prediction_without_extremes": without,
            "findings": [found.to_document() for found in findings],
        },
        (
            *lines.warnings(),
            *warnings_of_calibration(options.calibration, deviation, freedom),
            *warnings_near_limits(near, fit),
            *warnings_of_extremes(standing_out, pairs, without),
            *deviation_warnings(deviating),
            *finding_warnings(findings),
        ),
    )


def _without(differences: Sequence[float], standing_out: Sequence[Deviate]) -> float | None:
    if not standing_out:
        return None
    left_out = {item.index for item in standing_out}
    kept = [d for i, d in enumerate(differences) if i not in left_out]
    return math.sqrt(sum_of_squares(kept) / (len(kept) - 1))


def _extreme_document(item: Deviate, pairs: Sequence[Pair]) -> dict[str, Any]:
    return {
        "pair": pairs[item.index].label,
        "difference": item.value,
        "statistic": item.statistic,
        "critical_value": item.critical_value,
    }


def _estimates(
    test: BiasTest,
    square: MeanSquare,
    left: Remainder | None,
    repeatability: tuple[Term, ...] | None,
    pairs: Sequence[Pair],
) -> tuple[Estimate, ...]:
    n = len(pairs)
    reading_weight = math.fsum(1 / len(pair.readings) for pair in pairs) / n
    whole = Estimate(
        name="standard_error_of_prediction",
        terms=(Term(1.0, square),),
        value=None,
        interval=standard_deviation_interval(math.sqrt(square.value), n - 1),
        may_feed=("lot",),
        usable=True,
        contains=(
            "repeatability",
            "presentation",
            "resolution",
            "reference_repeatability",
            "subsampling",
            "remainder",
        ),
        reading_weight=reading_weight,
    )
    estimates = [test.estimate, whole]
    if left is not None:
        estimates.append(left.estimate)
    if repeatability is not None:
        beyond = Estimate(
            name="repeatability_beyond_study",
            terms=repeatability,
            value=None,
            interval=None,
            may_feed=("reading",),
            usable=True,
            covered_weight=reading_weight,
            contains=("repeatability",),
        )
        estimates.append(beyond)
    return tuple(estimates)


def _diagnostics(pairs: Sequence[Pair], square: MeanSquare, test: BiasTest) -> dict[str, Any]:
    n = len(pairs)
    differences = [pair.difference for pair in pairs]
    references = [mean(pair.references) for pair in pairs]
    lower, upper = np.percentile(references, BULK)
    return {
        "pairs": n,
        "bias": test.estimate.value,
        "bias_t_statistic": test.statistic,
        "bias_p_value": test.p_value,
        "bias_uncertainty_from": test.basis,
        "standard_error_of_prediction": math.sqrt(square.value),
        "root_mean_square_error_of_prediction": math.sqrt(math.fsum(d * d for d in differences) / n),
        "mean_reciprocal_readings": math.fsum(1 / len(pair.readings) for pair in pairs) / n,
        "mean_reciprocal_references": math.fsum(1 / len(pair.references) for pair in pairs) / n,
        "validated_range_lower": float(lower),
        "validated_range_upper": float(upper),
        "reference_lowest": min(references),
        "reference_highest": max(references),
    }
