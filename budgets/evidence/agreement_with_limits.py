"""Agreement studies with values below a reporting limit: bias and standard error by maximum likelihood."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from scipy.special import stdtr

from budgets.errors import BudgetsError, EvidenceError, NotSupportedError, raise_collected
from budgets.evidence.agreement_warnings import warnings_of_averages, warnings_of_number
from budgets.evidence.bias import BiasTest, bias_warnings
from budgets.evidence.censored_normal import CensoredNormal, censored_normal
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning, Interval, MeanSquare, Term
from budgets.evidence.study_tables import BelowLimit, Study
from budgets.evidence.sums import CONFIDENCE, is_rounding, standard_deviation_interval, sum_of_squares
from budgets.evidence.validation_pairs import BULK, Pair, values_of
from budgets.propagation import coverage_factor

_LEAST_KNOWN = 10
# Less scatter than that has no digits left when it is squared.
_LEAST_SQUARES = 1e-100
_TAKEN = ("independent",)
_COLUMNS = {"pair", "reading", "reference"}


def has_limits(pair: Pair) -> bool:
    """Say whether a value of the pair is known only to lie below a limit."""
    return any(isinstance(value, BelowLimit) for value in (*pair.readings, *pair.references))


def evaluate_with_limits(study: Study, pairs: Sequence[Pair]) -> Evaluation:
    """Return bias and standard error of prediction where some differences are known one-sidedly.

    Parameters
    ----------
    study : Study
    pairs : sequence of Pair

    Returns
    -------
    Evaluation
        Estimates ``bias`` and ``standard_error_of_prediction``, whose variances are multiples of one mean
        square.

    Raises
    ------
    EvidenceError
        If fewer than 10 differences, or fewer than half of them, are known.
    NotSupportedError
        For clusters, runs, named sources, replicates of a value below its limit, or any further option.

    Notes
    -----
    A reading below L leaves the difference below L - reference, a reference below L leaves it above
    reading - L. The differences are taken as normal and independent of the level.
    Source: see `budgets.evidence.censored_normal`.
    """
    _check(study, pairs)
    known = [pair for pair in pairs if not has_limits(pair)]
    both = [pair for pair in pairs if _is_below(pair.readings) and _is_below(pair.references)]
    below = [p.difference for p in pairs if _is_below(p.readings) and not _is_below(p.references)]
    above = [p.difference for p in pairs if _is_below(p.references) and not _is_below(p.readings)]
    used = len(pairs) - len(both)
    differences = [pair.difference for pair in known]
    if len(known) < _LEAST_KNOWN or 2 * len(known) < used:
        raise EvidenceError(
            f"{len(known)} of {used} differences are known, the others lie beyond a limit; at least "
            f"{_LEAST_KNOWN} and half of them must be known",
            where=("rows",),
        )
    squares = sum_of_squares(differences)
    if squares < _LEAST_SQUARES or is_rounding(squares / len(known), values_of(known)):
        raise EvidenceError("all pairs differ by the same amount: they show no scatter", where=("rows",))
    fit = censored_normal(differences, below, above)
    square = MeanSquare(f"{study.code}/standard_error_of_prediction", fit.variance, fit.degrees_of_freedom)
    test = _bias(fit, square)
    return Evaluation(
        design="agreement",
        estimates=(test.estimate, _standard_error(square, known)),
        used=len(study.rows),
        diagnostics={
            **_diagnostics(known, square, test),
            "pairs": len(pairs),
            "differences_known": len(known),
            "differences_below": len(below),
            "differences_above": len(above),
            "pairs_below_on_both_sides": len(both),
        },
        warnings=(
            *warnings_of_number(len(known)),
            *bias_warnings(test, known),
            *warnings_of_averages(known),
            _warning(len(below) + len(above), len(both), used),
        ),
    )


def _check(study: Study, pairs: Sequence[Pair]) -> None:
    faults: list[BudgetsError] = [
        NotSupportedError(f"values below a reporting limit with the column {column}", where=("columns",))
        for column in (*study.labels, *study.numbers)
        if column not in _COLUMNS
    ]
    faults += [
        NotSupportedError("values below a reporting limit with this option", where=("options", name))
        for name in study.options
        if name not in _TAKEN
    ]
    if study.named_sources:
        faults.append(
            NotSupportedError(
                "a remainder of a study with values below a reporting limit", where=("named_sources",)
            )
        )
    faults += [
        NotSupportedError(
            f"pair {pair.label}: replicates of a value below a reporting limit", where=("rows",)
        )
        for pair in pairs
        for side in (pair.readings, pair.references)
        if len(side) > 1 and any(isinstance(value, BelowLimit) for value in side)
    ]
    raise_collected(faults)


def _is_below(side: Sequence[float]) -> bool:
    return isinstance(side[0], BelowLimit)


def _bias(fit: CensoredNormal, square: MeanSquare) -> BiasTest:
    u, nu = math.sqrt(fit.mean_variance * fit.variance), fit.degrees_of_freedom
    reach = coverage_factor(CONFIDENCE, nu) * u
    statistic = fit.mean / u
    estimate = Estimate(
        name="bias",
        terms=(Term(fit.mean_variance, square),),
        value=fit.mean,
        interval=Interval(fit.mean - reach, fit.mean + reach, CONFIDENCE, "maximum likelihood, t"),
        may_feed=("calibration",),
        usable=True,
        contains=("bias",),
    )
    p_value = min(1.0, 2 * float(stdtr(nu, -abs(statistic))))
    return BiasTest(estimate, statistic, p_value, "pairs")


def _standard_error(square: MeanSquare, known: Sequence[Pair]) -> Estimate:
    return Estimate(
        name="standard_error_of_prediction",
        terms=(Term(1.0, square),),
        value=None,
        interval=standard_deviation_interval(math.sqrt(square.value), square.degrees_of_freedom),
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
        reading_weight=math.fsum(1 / len(pair.readings) for pair in known) / len(known),
    )


def _diagnostics(known: Sequence[Pair], square: MeanSquare, test: BiasTest) -> dict[str, Any]:
    # The range is that of the values that are known: below the limit nothing was validated.
    references = [pair.reference for pair in known]
    lower, upper = np.percentile(references, BULK)
    return {
        "bias": test.estimate.value,
        "bias_t_statistic": test.statistic,
        "bias_p_value": test.p_value,
        "bias_uncertainty_from": test.basis,
        "standard_error_of_prediction": math.sqrt(square.value),
        "validated_range_lower": float(lower),
        "validated_range_upper": float(upper),
        "reference_lowest": min(references),
        "reference_highest": max(references),
    }


def _warning(one_sided: int, both: int, used: int) -> EvaluationWarning:
    nothing = f"; {both} pairs below on both sides say nothing" if both else ""
    return EvaluationWarning(
        "values-below-limit",
        f"{one_sided} of {used} differences are known one-sidedly, as a value lies below its limit: "
        "bias and standard error of prediction are by maximum likelihood, for normal differences that "
        f"do not depend on the level; no lines, remainder or outlier tests are offered{nothing}",
    )
