"""Production priors estimated from readings of lots, from a production study, or from reference values.

Readings of lots scatter more than the lots do: the variance that the measurement draws anew with every lot
is taken out. What all readings share (calibration, reference) does not scatter between them. A process that
is steered by its analyzer is the exception: there the readings say little about the lots, and reference
values of lots are needed beside them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from budgets.budget import Budget
from budgets.errors import EvidenceError
from budgets.evidence.evaluation import (
    Evaluation,
    EvaluationWarning,
    MeanSquare,
    Term,
    effective_degrees_of_freedom,
    variance,
)
from budgets.evidence.mean_square_intervals import variance_interval
from budgets.evidence.production import LEAST_LOTS
from budgets.evidence.sums import f_quantile, mean, sum_of_squares
from budgets.measurement_errors import RANDOM_LEVELS, error_terms
from budgets.production_priors import LEAST_EMPIRICAL_VALUES, ProductionPrior, Steering
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern

_STEERING = (
    "a process that is steered by these readings shows less variation than there is; take the prior from "
    "reference values of lots instead"
)


@dataclass(frozen=True)
class PriorEstimate:
    """A production prior and what it was made of.

    Parameters
    ----------
    prior : ProductionPrior
    lots : int
    observed_standard_deviation : float, unit of the characteristic
        Of the lots as they were read.
    removed_standard_deviation : float, unit of the characteristic
        Of what the measurement drew anew with every lot, and that was taken out.
    interval_lower, interval_upper : float, unit of the characteristic
        95 % interval of the standard deviation of the lots, clipped at 0.
    degrees_of_freedom : float
        Of the variance of the lots.
    warnings : tuple of EvaluationWarning
    """

    prior: ProductionPrior
    lots: int
    observed_standard_deviation: float
    removed_standard_deviation: float
    interval_lower: float
    interval_upper: float
    degrees_of_freedom: float
    warnings: tuple[EvaluationWarning, ...] = ()


def prior_of_readings(
    readings: Sequence[float],
    budget: Budget,
    counts: Counts | ReadingPattern,
    *,
    steered: bool,
    distribution: str = "normal",
) -> PriorEstimate:
    """Return the prior behind the readings of lots.

    Parameters
    ----------
    readings : sequence of float, unit of the characteristic
        One for each lot: the estimate by which it was judged first, lots that were held or rejected included.
    budget : Budget
        Without a measurement model.
    counts : Counts or ReadingPattern
        What was done for each of those estimates.
    steered : bool
        Whether the process is corrected by these readings.
    distribution : {"normal", "t", "empirical"}
        ``t``: allows for the number of lots; ``empirical``: keeps their shape, from 30 lots on.

    Returns
    -------
    PriorEstimate

    Raises
    ------
    EvidenceError
        If the process is steered, there are too few lots, or they vary less than the measurement alone.
    LimitsError
        If the lots leave too few degrees of freedom for ``t``.
    NotSupportedError
        For a budget with a measurement model.

    Notes
    -----
    ``s_process^2 = s_obs^2 - u_random^2``. Source: common practice, no source; the interval as in
    `variance_interval`.
    """
    values = [float(value) for value in readings]
    if steered:
        raise EvidenceError(_STEERING, where=("steered_by_this_analyzer",))
    least = LEAST_EMPIRICAL_VALUES if distribution == "empirical" else LEAST_LOTS
    _check_number(values, least)
    centre = mean(values)
    observed = Term(
        1.0, MeanSquare("lots/readings", sum_of_squares(values) / (len(values) - 1), len(values) - 1)
    )
    removed = error_terms(budget, counts, RANDOM_LEVELS, centre)
    spread = _Spread.of([observed], removed, len(values))
    if distribution == "empirical":
        shrunk = spread.deviation / math.sqrt(observed.mean_square.value)
        around = [centre + (value - centre) * shrunk for value in values]
        prior = ProductionPrior.empirical(around, anchor="readings")
    else:
        prior = spread.prior(distribution, centre)
    return spread.estimate(prior)


def prior_of_study(evaluation: Evaluation, budget: Budget, *, distribution: str = "normal") -> PriorEstimate:
    """Return the prior from the evaluation of a production study.

    Parameters
    ----------
    evaluation : Evaluation
        Of the design ``production``, on the analyzer of the budget, with single readings.
    budget : Budget
        Without a measurement model; what it draws anew with every lot is still in the study's lots.
    distribution : {"normal", "t"}

    Returns
    -------
    PriorEstimate
        In the scale of estimates: less the bias, where the budget corrects it.

    Raises
    ------
    EvidenceError
        If it is another design, the process is steered by these readings or nothing says that it is not, or
        the lots vary less than the measurement alone.
    LimitsError
        If the lots leave too few degrees of freedom for ``t``.
    NotSupportedError
        For a budget with a measurement model, or another distribution.

    Notes
    -----
    Lots and periods together. Source: common practice, no source.
    """
    _check_study(evaluation)
    if distribution == "empirical":
        raise EvidenceError("a study gives a normal prior or a t", where=("distribution",))
    names = [estimate.name for estimate in evaluation.estimates]
    process = [item for item in evaluation.estimates if item.name in ("lot_to_lot", "period_to_period")]
    observed = [
        term for item in process if item.name == "lot_to_lot" or item.variance > 0 for term in item.terms
    ]
    inside: set[str] = {"reading"} if "repeatability" in names else set()
    if "within_lot" in names:
        inside = {"reading", "presentation", "increment", "sample"}
    levels = [level for level in RANDOM_LEVELS if level not in inside]
    centre = float(evaluation.diagnostics["mean_of_lots"])
    if budget.bias is not None and budget.bias_treatment == "corrected":
        centre -= budget.bias
    removed = error_terms(budget, Counts((1,)), levels, centre)
    spread = _Spread.of(observed, removed, int(evaluation.diagnostics["lots"]))
    return spread.estimate(spread.prior(distribution, centre))


def prior_of_reference_values(
    references: Sequence[float],
    reference_term: Term | None,
    *,
    readings: Sequence[float] | None = None,
) -> PriorEstimate:
    """Return the prior from reference values of lots, with readings of the same lots a steered one.

    Parameters
    ----------
    references : sequence of float, unit of the characteristic
        One for each lot, of lots taken as they came.
    reference_term : Term or None
        Variance of the reference values that is drawn anew with every lot; None where it is negligible.
    readings : sequence of float or None, unit of the characteristic
        The estimates of the same lots by the analyzer that steers the process; None where none does.

    Returns
    -------
    PriorEstimate

    Raises
    ------
    EvidenceError
        If there are too few lots, as many readings are missing, they do not vary, or vary less than the
        reference method alone.

    Notes
    -----
    The error of a reference value has nothing to do with the reading, so the covariance of both is that of
    true value and reading. Source: common practice, no source.
    """
    values = [float(value) for value in references]
    _check_number(values, LEAST_LOTS)
    square = MeanSquare("lots/references", sum_of_squares(values) / (len(values) - 1), len(values) - 1)
    removed = [] if reference_term is None else [reference_term]
    spread = _Spread.of([Term(1.0, square)], removed, len(values), steering=False)
    steering = None if readings is None else _steering(values, readings, spread.deviation)
    prior = ProductionPrior("normal", mean(values), spread.deviation, steering=steering)
    return spread.estimate(prior)


def _steering(references: Sequence[float], readings: Sequence[float], deviation: float) -> Steering:
    array = np.asarray(readings, dtype=np.float64)
    if array.size != len(references):
        raise EvidenceError(
            f"{array.size} readings of {len(references)} lots; both are needed of every lot",
            where=("readings",),
        )
    scatter = float(array.std(ddof=1))
    if not scatter > 0:
        raise EvidenceError("the readings do not differ", where=("readings",))
    correlation = float(np.cov(references, array)[0, 1]) / (deviation * scatter)
    if not -1 < correlation < 1:
        raise EvidenceError(
            "readings and reference values go together more closely than the scatter of the reference method "
            "allows: it is stated too large",
            where=("references",),
        )
    return Steering(float(array.mean()), scatter, correlation)


@dataclass(frozen=True)
class _Spread:
    """A variance of lots, as terms: what was observed less what was taken out."""

    terms: tuple[Term, ...]
    observed: float
    removed: float
    lots: int
    warnings: tuple[EvaluationWarning, ...]

    @classmethod
    def of(
        cls, observed: Sequence[Term], removed: Sequence[Term], lots: int, *, steering: bool = True
    ) -> _Spread:
        """Take out what is to be taken out.

        Raises
        ------
        EvidenceError
            When nothing is left.
        """
        whole, part = variance(observed), variance(removed)
        if not whole > part:
            raise EvidenceError(
                f"the lots vary by {math.sqrt(max(0.0, whole)):.4g}, less than the measurement alone "
                f"({math.sqrt(part):.4g}) makes them: no variation of the process is left. "
                + (_STEERING.capitalize() if steering else "The reference method is stated too large"),
                where=("readings",) if steering else ("references",),
            )
        terms = (*observed, *(Term(-term.coefficient, term.mean_square) for term in removed))
        return cls(terms, math.sqrt(whole), math.sqrt(part), lots, _warnings(observed, removed))

    @property
    def deviation(self) -> float:
        return math.sqrt(variance(self.terms))

    def prior(self, distribution: str, centre: float) -> ProductionPrior:
        """Return the prior from readings: normal, or t for the next lot after a limited number of them."""
        if distribution != "t":
            return ProductionPrior(distribution, centre, self.deviation, anchor="readings")
        nu = effective_degrees_of_freedom(self.terms)
        # The next lot differs from the mean of n by s sqrt(1 + 1/n); of that t, the standard deviation.
        factor = math.sqrt((1 + 1 / self.lots) * nu / (nu - 2)) if nu > 2 else 1.0
        return ProductionPrior("t", centre, self.deviation * factor, nu, anchor="readings")

    def estimate(self, prior: ProductionPrior) -> PriorEstimate:
        """Return the prior with its interval."""
        lower, upper = variance_interval(self.terms)
        return PriorEstimate(
            prior,
            self.lots,
            self.observed,
            self.removed,
            math.sqrt(max(0.0, lower)),
            math.sqrt(upper),
            effective_degrees_of_freedom(self.terms),
            self.warnings,
        )


def _warnings(observed: Sequence[Term], removed: Sequence[Term]) -> tuple[EvaluationWarning, ...]:
    part = variance(removed)
    if part == 0:
        return ()
    ratio = variance(observed) / part
    freedom = effective_degrees_of_freedom(observed), effective_degrees_of_freedom(removed)
    if ratio > f_quantile(0.05, *freedom):
        return ()
    detail = (
        f"the lots do not vary significantly more than the measurement alone (F = {ratio:.3g}): their own "
        "variation is hardly known, see its interval"
    )
    return (EvaluationWarning("process-not-significant", detail),)


def _check_number(values: Sequence[float], least: int) -> None:
    if len(values) < least:
        raise EvidenceError(f"{len(values)} lots; a prior is made from {least} on", where=("readings",))
    if not all(map(math.isfinite, values)):
        raise EvidenceError("every value must be a finite number", where=("readings",))
    if sum_of_squares(values) == 0:
        raise EvidenceError("the lots do not differ: they show no production", where=("readings",))


def _check_study(evaluation: Evaluation) -> None:
    if evaluation.design != "production":
        text = f"a prior is made of a production study, not of the design {evaluation.design}"
        raise EvidenceError(text, where=("study",))
    codes = {warning.code for warning in evaluation.warnings}
    if "steered" in codes:
        raise EvidenceError(_STEERING, where=("study",))
    if "steering-unknown" in codes:
        raise EvidenceError(
            "the study does not say whether the process is steered by these readings; record it anew with "
            "the option steered_by_this_analyzer, true or false",
            where=("study",),
        )
