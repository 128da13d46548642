"""The law of propagation: combined and expanded uncertainty of a budget."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

from scipy.special import ndtri, stdtrit

from budgets.budget import Budget, Count, Procedure
from budgets.budget_models import BIAS
from budgets.components import Component
from budgets.errors import ComponentError, LimitsError, ModelError, ProcedureError
from budgets.evidence.evaluation import EvaluationWarning, effective_degrees_of_freedom, variance
from budgets.levels import LEVELS
from budgets.linear_propagation import CompiledPropagation, Line, lines_of
from budgets.measurement_models import MeasurementModel, Quantity, SecondOrder
from budgets.reading_patterns import ReadingPattern
from budgets.second_order import second_order_terms, second_order_warnings

# A budget without a model: the estimate, and the error of the bias that was taken off or left in.
ESTIMATE, _ERROR = "estimate", "bias_error"
_WITHOUT_BIAS = MeasurementModel(ESTIMATE, (Quantity(ESTIMATE),))
_WITH_BIAS = MeasurementModel(
    f"{ESTIMATE} - {_ERROR}", (Quantity(ESTIMATE), Quantity(_ERROR, source="given", estimate=0.0))
)


@dataclass(frozen=True)
class Counts:
    """What was done: the number of readings of each sample.

    Parameters
    ----------
    readings_per_sample : tuple of int, shape (samples,)
        All readings of a sample share one presentation and one increment; all belong to one session.

    Raises
    ------
    ProcedureError
        If there is no sample or a sample without a reading.
    """

    readings_per_sample: tuple[int, ...]

    def __post_init__(self) -> None:
        if not self.readings_per_sample or min(self.readings_per_sample) < 1:
            raise ProcedureError("at least one sample with at least one reading each is needed")

    def check(self, procedure: Procedure) -> None:
        """Check the counts against the procedure of a budget.

        Parameters
        ----------
        procedure : Procedure

        Raises
        ------
        ProcedureError
            If fewer than ``least`` or more than ``most`` were done.
        """
        _check_count("samples", len(self.readings_per_sample), procedure.samples)
        for number in self.readings_per_sample:
            _check_count("readings of a sample", number, procedure.readings_per_sample)


def check_counts(counts: Counts | ReadingPattern, procedure: Procedure) -> None:
    """Check what was done against the procedure of a budget.

    Parameters
    ----------
    counts : Counts or ReadingPattern
    procedure : Procedure

    Raises
    ------
    ProcedureError
        If fewer than ``least`` or more than ``most`` samples or readings of a sample were done.
    """
    Counts(counts.readings_per_sample).check(procedure)


def _check_count(what: str, number: int, planned: Count) -> None:
    if not planned.least <= number <= planned.most:
        raise ProcedureError(
            f"{number} {what}: the procedure of the budget allows {planned.least} to {planned.most}",
            where=("readings",),
        )


@dataclass(frozen=True)
class Contribution:
    """One line of a combination.

    Parameters
    ----------
    component : Component
    weight : float
        Averaging weight of its level, less what another component covers.
    standard_uncertainty_of_one_draw : float, unit of the characteristic
    contribution : float, unit of the characteristic
        ``|sensitivity coefficient| * sqrt(weight) * standard uncertainty of one draw``.
    share_of_variance : float
        Of the combined variance of first order; the shares add up to 1, correlated ones may be negative.
    sensitivity_coefficient : float or None
        Signed; None for a component of several quantities, whose one draw is given as it moves the measurand.
    degrees_of_freedom : float
        Of the component at these estimates.
    """

    component: Component
    weight: float
    standard_uncertainty_of_one_draw: float
    contribution: float
    share_of_variance: float
    sensitivity_coefficient: float | None = 1.0
    degrees_of_freedom: float = math.inf


@dataclass(frozen=True)
class CombinedUncertainty:
    """Combined standard uncertainty, its effective degrees of freedom and what it is made of."""

    variance: float
    standard_uncertainty: float
    effective_degrees_of_freedom: float
    contributions: tuple[Contribution, ...]
    estimate: float | None = None
    second_order: SecondOrder | None = None
    warnings: tuple[EvaluationWarning, ...] = ()


def averaging_weights(counts: Counts | ReadingPattern) -> dict[str, float]:
    """Return by how much the mean of sample means reduces the variance of each level.

    Parameters
    ----------
    counts : Counts or ReadingPattern

    Returns
    -------
    dict of str to float
        For every level ``sum over its groups of (sum of the weights in the group)^2``.

    Notes
    -----
    The estimate is the mean of the sample means, so a reading of sample i has the weight 1/(samples * n_i).
    Source: JCGM 100:2008, 5.1.2, eq. (10) (from memory), applied to errors shared by groups of readings.

    Examples
    --------
    >>> weights = averaging_weights(Counts((2, 2)))
    >>> weights["reading"], weights["sample"], weights["lot"]
    (0.25, 0.5, 1.0)
    """
    if isinstance(counts, ReadingPattern):
        return counts.averaging_weights()
    samples = len(counts.readings_per_sample)
    per_sample = 1.0 / samples
    # sum over the readings j of w_j^2, with w_j = 1/(samples n_i)
    per_reading = math.fsum(1.0 / number for number in counts.readings_per_sample) / samples**2
    weights = dict.fromkeys(LEVELS, 1.0)
    weights.update(reading=per_reading, presentation=per_sample, increment=per_sample, sample=per_sample)
    return weights


def group_shares(counts: Counts | ReadingPattern, level: str) -> tuple[float, ...]:
    """Return what every group of a level weighs in the mean of sample means.

    Parameters
    ----------
    counts : Counts or ReadingPattern
    level : str

    Returns
    -------
    tuple of float, shape (groups,)
        Adding up to 1. Without populations their squares add up to the averaging weight of the level.
    """
    if isinstance(counts, ReadingPattern):
        return tuple(counts.shares(level).values())
    numbers = counts.readings_per_sample
    samples = len(numbers)
    if level == "reading":
        return tuple(1 / samples / number for number in numbers for _ in range(number))
    return (1 / samples,) * samples if level in ("presentation", "increment", "sample") else (1.0,)


def compiled(budget: Budget, counts: Counts | ReadingPattern) -> CompiledPropagation:
    """Return the law of propagation of a budget, for any number of evaluations.

    Parameters
    ----------
    budget : Budget
    counts : Counts or ReadingPattern
        Not checked against the procedure here; see `Counts.check`.

    Returns
    -------
    CompiledPropagation
        Of a budget without a model: of the quantity ``estimate``, that is the mean reading less the bias, or
        the mean reading where the bias is in the guard band.
    """
    return compiled_with(budget, averaging_weights(counts))


def compiled_with(budget: Budget, weights: Mapping[str, float]) -> CompiledPropagation:
    """Return the law of propagation of a budget, for averaging weights that are known already.

    Parameters
    ----------
    budget : Budget
    weights : mapping of str to float
        Of every level.

    Returns
    -------
    CompiledPropagation
        As `compiled`.
    """
    if budget.model is not None:
        lines = lines_of(budget.components, weights, tuple(budget.model.given))
        return CompiledPropagation(budget.model, lines, budget.correlations)
    # The estimate itself is what proportional parts are proportional to, those of the bias too.
    lines = tuple(
        replace(line, inputs=(_ERROR if line.inputs == (BIAS,) else ESTIMATE,), relative_to=ESTIMATE)
        for line in lines_of(budget.components, weights, (BIAS,))
    )
    has_bias = any(line.inputs == (_ERROR,) for line in lines)
    return CompiledPropagation(_WITH_BIAS if has_bias else _WITHOUT_BIAS, lines, budget.correlations)


def combined(
    budget: Budget,
    counts: Counts | ReadingPattern,
    *,
    estimates: Mapping[str, float] | None = None,
    second_order: bool = False,
) -> CombinedUncertainty:
    """Return the combined standard uncertainty of an estimate made with these counts.

    Parameters
    ----------
    budget : Budget
    counts : Counts or ReadingPattern
        Not checked against the procedure here; see `Counts.check`.
    estimates : mapping of str to float or None
        Of the quantities that are read, by their names; without a model that of the characteristic (less its
        bias, where it is corrected). Needed with a model and with parts proportional to the value.
    second_order : bool
        True adds the terms of second order of a model.

    Returns
    -------
    CombinedUncertainty
        In the unit of the measurand.

    Raises
    ------
    ModelError
        If estimates are needed and missing, or the model fails at them.
    CorrelationError
        If terms of second order are asked for with correlated inputs.
    ComponentError
        If the combined variance is not above zero.

    Notes
    -----
    Source: JCGM 100:2008, 5.1.2, eq. (10) with its note, 5.2.2, eq. (16), G.4.1, eq. (G.2b) (from memory).
    Coefficients of equal mean squares are added over the whole budget before the effective degrees of freedom
    are taken; the terms of second order add to the variance and leave the degrees of freedom as they are.
    """
    law = compiled(budget, counts)
    full = law.model.estimates(estimates_for(budget, estimates))
    value, coefficients = law.model.linearised(full)
    total, terms, parts = law.combination(coefficients, full)
    beyond = second_order_terms(law, budget.components, full) if second_order else None
    whole = total + (0.0 if beyond is None else beyond.variance)
    if not whole > 0:
        raise ComponentError("with its terms of second order the combined variance is not above zero")
    return CombinedUncertainty(
        variance=whole,
        standard_uncertainty=math.sqrt(whole),
        effective_degrees_of_freedom=effective_degrees_of_freedom(terms),
        contributions=tuple(
            _contribution(component, line, part / total, coefficients, full)
            for component, line, part in zip(budget.components, law.lines, parts, strict=True)
        ),
        estimate=None if estimates is None else value,
        second_order=beyond,
        warnings=second_order_warnings(total, beyond),
    )


def estimates_for(budget: Budget, estimates: Mapping[str, float] | None) -> Mapping[str, float]:
    """Return estimates under the names that `compiled` knows.

    Parameters
    ----------
    budget : Budget
    estimates : mapping of str to float or None

    Returns
    -------
    mapping of str to float

    Raises
    ------
    ModelError
        If the budget needs estimates and none are given, or others than it has.
    """
    if budget.model is not None:
        return estimates or {}
    if estimates is None:
        if any(component.relative_terms for component in budget.components):
            raise ModelError(
                "the budget has parts that are proportional to the value: say at which estimate",
                where=("estimates", budget.characteristic),
            )
        return {ESTIMATE: 0.0}
    if set(estimates) != {budget.characteristic}:
        raise ModelError(
            f"the one estimate of this budget is that of {budget.characteristic}",
            where=("estimates", budget.characteristic),
        )
    return {ESTIMATE: estimates[budget.characteristic]}


def _contribution(
    component: Component,
    line: Line,
    share: float,
    coefficients: Mapping[str, float],
    estimates: Mapping[str, float],
) -> Contribution:
    terms = line.terms_at(coefficients, estimates)
    moved = math.sqrt(max(0.0, variance(terms)))
    single = None if line.matrix_terms else coefficients[line.inputs[0]]
    # Of several quantities, or where the model stands still, one draw is given as it moves the measurand.
    one_draw = (
        moved if single is None else math.sqrt(variance(line.terms_at({line.inputs[0]: 1.0}, estimates)))
    )
    return Contribution(
        component=component,
        weight=line.weight,
        standard_uncertainty_of_one_draw=one_draw,
        contribution=math.sqrt(line.weight) * moved,
        share_of_variance=share,
        sensitivity_coefficient=single,
        degrees_of_freedom=effective_degrees_of_freedom(terms),
    )


def coverage_factor(coverage_probability: float, degrees_of_freedom: float, *, sides: int = 2) -> float:
    """Return the coverage factor for a coverage probability.

    Parameters
    ----------
    coverage_probability : float
    degrees_of_freedom : float
        Real-valued; ``math.inf`` gives the normal quantile.
    sides : {1, 2}
        2: the interval has both ends; 1: only one end is of interest.

    Returns
    -------
    float

    Raises
    ------
    LimitsError
        If the probability is not between 0 and 1 (one-sided: 0.5 and 1), or sides is not 1 or 2.

    Notes
    -----
    Source: JCGM 100:2008, G.3.2 and Table G.2 (from memory): k_p = t_p(nu). Degrees of freedom are not
    truncated.

    Examples
    --------
    >>> round(coverage_factor(0.95, 9), 2)
    2.26
    """
    if sides not in (1, 2):
        raise LimitsError(f"a coverage interval has 1 or 2 sides, not {sides}", where=("sides",))
    least = 0.5 if sides == 1 else 0.0
    if not least < coverage_probability < 1:
        raise LimitsError(
            f"the coverage probability {coverage_probability} is not between {least:g} and 1",
            where=("coverage_probability",),
        )
    return upper_quantile((1 - coverage_probability) / sides, degrees_of_freedom)


def upper_quantile(tail_probability: float, degrees_of_freedom: float) -> float:
    """Return the standardised value that is exceeded with a given probability.

    Parameters
    ----------
    tail_probability : float
        Of the one tail; taken as such, because ``1 - tail`` would lose its digits.
    degrees_of_freedom : float
        ``math.inf`` for the normal distribution.

    Returns
    -------
    float
        In units of the standard uncertainty.
    """
    if math.isinf(degrees_of_freedom):
        return -float(ndtri(tail_probability))
    return -float(stdtrit(degrees_of_freedom, tail_probability))


def expanded_uncertainty(
    standard_uncertainty: float, coverage_probability: float, degrees_of_freedom: float, *, sides: int = 2
) -> float:
    """Return U = k u.

    Parameters
    ----------
    standard_uncertainty : float, unit of the characteristic
    coverage_probability, degrees_of_freedom, sides
        As in `coverage_factor`.

    Returns
    -------
    float, unit of the characteristic

    Notes
    -----
    Source: JCGM 100:2008, 6.2.1, eq. (18) (from memory).
    """
    return coverage_factor(coverage_probability, degrees_of_freedom, sides=sides) * standard_uncertainty
