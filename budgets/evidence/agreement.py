"""Design ``agreement``: an analyzer against a reference method over a validation set."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from budgets.errors import BudgetsError, EvidenceError, raise_collected
from budgets.evidence.bias import BiasTest, bias_estimate, bias_warnings
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning, MeanSquare, Term
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
from budgets.evidence.sums import mean, standard_deviation_interval, sum_of_squares
from budgets.evidence.validation_pairs import Pair, validation_pairs

__all__ = ["LAYOUT", "OPTIONS", "NamedSource", "evaluate"]

LAYOUT = Layout(
    required=("pair", "reading", "reference"),
    optional=("group", "run"),
    numbers=("reading", "reference"),
    nullable=("reading", "reference"),
)
OPTIONS = ("independent", "presentations_per_pair", "tolerance_limits")

# ISO 12099:2017 (from memory): at least 20 samples for a validation.
_FEW_PAIRS = 20
_PAIRS_NEAR_A_LIMIT = 10
_BULK = (5, 95)


def evaluate(study: Study) -> Evaluation:
    """Return bias, standard error of prediction and remainder of a validation set.

    Parameters
    ----------
    study : Study
        Columns of `LAYOUT`, several rows of one pair being replicates. Options: ``independent`` must be true;
        ``presentations_per_pair`` (1); ``tolerance_limits``, numbers near which pairs are counted.

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
    counted beside a bias. Source: ISO 12099:2017, validation (from memory).
    """
    presentations, limits = _checked_options(study)
    pairs = validation_pairs(study)
    differences = [pair.difference for pair in pairs]
    n = len(pairs)
    square = MeanSquare(
        f"{study.code}/standard_error_of_prediction", sum_of_squares(differences) / (n - 1), n - 1
    )
    if square.value == 0:
        raise EvidenceError("all pairs differ by the same amount: they show no scatter", where=("rows",))
    sources = checked_sources(study.named_sources, pairs, study.code)
    one_run = len({pair.run for pair in pairs}) == 1 and pairs[0].run is not None
    test = bias_estimate(
        pairs, square, study.code, whole_run=sources.get("reference_run", ()) if one_run else ()
    )
    left = None
    if all(name in sources for name in NEEDED):
        left = remainder(square, subtracted_terms(sources, pairs, presentations), sources)
    findings = grubbs_findings("differences", differences)
    return Evaluation(
        design="agreement",
        estimates=_estimates(test, square, left, sources.get("analyzer_repeatability"), pairs),
        used=len(study.rows),
        diagnostics={
            **_diagnostics(pairs, square, test),
            **({} if left is None else left.diagnostics),
            "findings": [found.to_document() for found in findings],
        },
        warnings=(
            *_warnings_of_number(n),
            *bias_warnings(test, pairs),
            *_warnings_of_runs(one_run, "reference_run" in sources),
            *_warnings_of_remainder(left, sources),
            *_warnings_of_averages(pairs),
            *_warnings_near_limits(pairs, math.sqrt(square.value), limits),
            *finding_warnings(findings),
        ),
    )


def _checked_options(study: Study) -> tuple[int, Sequence[float]]:
    options = study.options
    faults: list[BudgetsError] = []
    if options.get("independent") is not True:
        faults.append(
            EvidenceError(
                "an agreement study must say that its samples are independent of the calibration "
                "(independent: true); errors of calibration or cross-validation samples are too small",
                where=("options", "independent"),
            )
        )
    presentations = options.get("presentations_per_pair", 1)
    if isinstance(presentations, bool) or not isinstance(presentations, int) or presentations < 1:
        faults.append(
            EvidenceError("a whole number from 1 up is expected", where=("options", "presentations_per_pair"))
        )
    limits = options.get("tolerance_limits", ())
    if not isinstance(limits, (list, tuple)) or not all(
        isinstance(limit, (int, float)) and math.isfinite(limit) for limit in limits
    ):
        faults.append(EvidenceError("finite numbers are expected", where=("options", "tolerance_limits")))
    raise_collected(faults)
    return presentations, limits


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
    lower, upper = np.percentile(references, _BULK)
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


def _warnings_of_number(n: int) -> tuple[EvaluationWarning, ...]:
    if n >= _FEW_PAIRS:
        return ()
    detail = (
        f"{n} pairs are few: neither the bias nor the standard error of prediction is well known from them"
    )
    return (EvaluationWarning("few-pairs", detail),)


def _warnings_of_runs(one_run: bool, known: bool) -> tuple[EvaluationWarning, ...]:
    if not one_run:
        return ()
    if known:
        detail = (
            "all reference values are of one run: its error is in the bias, its variance was added in full"
        )
        return (EvaluationWarning("one-run", detail),)
    detail = (
        "all reference values are of one run: its error is in the bias but not in its uncertainty; name "
        "the run-to-run standard deviation of the reference method (reference_run)"
    )
    return (EvaluationWarning("one-run-unknown", detail),)


def _warnings_of_remainder(left: Remainder | None, sources: dict[str, Any]) -> tuple[EvaluationWarning, ...]:
    if left is None:
        missing = " and ".join(name for name in NEEDED if name not in sources)
        detail = (
            f"no remainder is offered without {missing}; the standard error of prediction is used whole, and "
            "more readings do not make it smaller"
        )
        return (EvaluationWarning("remainder-not-offered", detail),)
    if left.estimate.usable:
        return ()
    detail = (
        "the remainder is not significantly above zero: it is shown with its interval but cannot be used; "
        "the standard error of prediction is used whole, with the repeatability beyond the study beside it"
    )
    return (EvaluationWarning("remainder-not-significant", detail),)


def _warnings_of_averages(pairs: Sequence[Pair]) -> tuple[EvaluationWarning, ...]:
    if all(len(pair.readings) == 1 for pair in pairs):
        return ()
    detail = (
        "pairs have averaged readings, so the standard error of prediction holds only a part of the "
        "analyzer's repeatability: where it stands whole in a budget, repeatability_beyond_study belongs "
        "beside it"
    )
    return (EvaluationWarning("readings-averaged", detail),)


def _warnings_near_limits(
    pairs: Sequence[Pair], deviation: float, limits: Sequence[float]
) -> tuple[EvaluationWarning, ...]:
    warnings = []
    for limit in limits:
        near = sum(abs(mean(pair.references) - limit) <= 2 * deviation for pair in pairs)
        if near < _PAIRS_NEAR_A_LIMIT:
            detail = (
                f"only {near} pairs lie within two standard errors of prediction of the limit {limit:g}; "
                "what matters is how well the analyzer agrees there"
            )
            warnings.append(EvaluationWarning("few-pairs-near-limit", detail))
    return tuple(warnings)
