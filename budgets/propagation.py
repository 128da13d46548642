"""The law of propagation for the default model: combined and expanded uncertainty."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scipy.special import ndtri, stdtrit

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.errors import LimitsError, ProcedureError
from budgets.evidence.evaluation import Term, effective_degrees_of_freedom
from budgets.levels import LEVELS


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
        ``sqrt(weight) * standard uncertainty of one draw``.
    share_of_variance : float
        Of the combined variance; the shares add up to 1.
    """

    component: Component
    weight: float
    standard_uncertainty_of_one_draw: float
    contribution: float
    share_of_variance: float


@dataclass(frozen=True)
class CombinedUncertainty:
    """Combined standard uncertainty, its effective degrees of freedom and what it is made of."""

    variance: float
    standard_uncertainty: float
    effective_degrees_of_freedom: float
    contributions: tuple[Contribution, ...]


def averaging_weights(counts: Counts) -> dict[str, float]:
    """Return by how much the mean of sample means reduces the variance of each level.

    Parameters
    ----------
    counts : Counts

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
    samples = len(counts.readings_per_sample)
    per_sample = 1.0 / samples
    # sum over the readings j of w_j^2, with w_j = 1/(samples n_i)
    per_reading = math.fsum(1.0 / number for number in counts.readings_per_sample) / samples**2
    weights = dict.fromkeys(LEVELS, 1.0)
    weights.update(reading=per_reading, presentation=per_sample, increment=per_sample, sample=per_sample)
    return weights


def combined(budget: Budget, counts: Counts) -> CombinedUncertainty:
    """Return the combined standard uncertainty of an estimate made with these counts.

    Parameters
    ----------
    budget : Budget
    counts : Counts
        Not checked against the procedure here; see `Counts.check`.

    Returns
    -------
    CombinedUncertainty
        In the unit of the characteristic.

    Notes
    -----
    Source: JCGM 100:2008, 5.1.2, eq. (10), and G.4.1, eq. (G.2b) (from memory). Coefficients of equal mean
    squares are added over the whole budget before the effective degrees of freedom are taken.
    """
    weights = averaging_weights(counts)
    applied = [
        (component, max(0.0, weights[component.level] - component.covered_weight))
        for component in budget.components
    ]
    # JCGM 100 eq. (10) with c = +1 (reading) and -1 (bias): u_c^2 = sum W_l u_l^2
    terms = [
        Term(weight * term.coefficient, term.mean_square)
        for component, weight in applied
        for term in component.terms
    ]
    total = math.fsum(weight * component.variance for component, weight in applied)
    contributions = tuple(
        Contribution(
            component=component,
            weight=weight,
            standard_uncertainty_of_one_draw=component.standard_uncertainty,
            contribution=math.sqrt(weight * component.variance),
            share_of_variance=weight * component.variance / total,
        )
        for component, weight in applied
    )
    return CombinedUncertainty(total, math.sqrt(total), effective_degrees_of_freedom(terms), contributions)


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
