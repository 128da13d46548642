"""Propagation of distributions by a Monte Carlo method: coverage intervals without any approximation.

The number of trials is chosen in two stages. A first stage shows by how much the figures scatter from batch
to batch; from that follows how many trials hold the tolerance asked for. The rule of JCGM 101, 7.9.4, which
looks again and again and stops at the first good look, holds it less often than it seems to.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from budgets.errors import LimitsError
from budgets.pooled_trials import CAPACITY, PooledTrials, Progress
from budgets.trials import Trials

MOST_TRIALS = 10**9
LARGEST_COVERAGE = 0.999
PROMISE = 0.99
"""Probability with which all figures lie within their tolerance of those of infinitely many trials."""

_BATCHES = 32
_SMALLEST_BATCH = 1024
# Values of a batch beyond either end of its interval: fewer would say little of how the end scatters.
_IN_THE_TAIL = 10
# Each of four figures may miss with a fourth of what is left; a half of it is kept as a margin.
_QUANTILE = float(stdtrit(_BATCHES - 1, 1 - (1 - PROMISE) / 16))
_MEAN_NEEDS, _DEVIATION_NEEDS = 4.0, 8.0


@dataclass(frozen=True)
class Scatter:
    """By how much figures would scatter from seed to seed: standard deviations, None where not known."""

    mean: float | None
    standard_deviation: float | None
    lower: float
    upper: float


@dataclass(frozen=True)
class MonteCarlo:
    """What a Monte Carlo run found.

    Parameters
    ----------
    trials : int
    seed : int
    coverage_probability : float
    mean, standard_deviation : float or None
        None where the distribution has none: with 1, or with 2, degrees of freedom or fewer.
    median : float
    symmetric, shortest : tuple of float, shape (2,)
        Probabilistically symmetric, and shortest, coverage interval.
    scatter : Scatter or None
        Of mean, standard deviation and the ends of the symmetric interval; None of fewer trials than batches
        need.
    tolerance : float or None
        Asked for; None where the number of trials was.
    holds_tolerance : bool or None
        Whether as many trials were allowed as hold the tolerance with the probability ``PROMISE``. Mean and
        standard deviation are promised where more than 4, or 8, degrees of freedom let them settle; the ends
        of the symmetric interval always; those of the shortest interval, which scatter more, never.
    quantiles : tuple of float
        At the probabilities asked for.
    remarks : tuple of str
        What was assumed beyond the distributions given.
    """

    trials: int
    seed: int
    coverage_probability: float
    mean: float | None
    standard_deviation: float | None
    median: float
    symmetric: tuple[float, float]
    shortest: tuple[float, float]
    scatter: Scatter | None
    tolerance: float | None = None
    holds_tolerance: bool | None = None
    quantiles: tuple[float, ...] = ()
    remarks: tuple[str, ...] = ()


def monte_carlo(
    drawn: Trials,
    *,
    coverage_probability: float,
    seed: int,
    trials: int | None = None,
    tolerance: float | None = None,
    most_trials: int = MOST_TRIALS,
    probabilities: Sequence[float] = (),
    progress: Progress | None = None,
) -> MonteCarlo:
    """Return what the propagation of distributions gives.

    Parameters
    ----------
    drawn : Trials
        As `budgets.trials.model_trials` or `budgets.budget_trials.budget_trials` gives them.
    coverage_probability : float
        Up to 0.999.
    seed : int
        From 0 up. The same call with the same seed gives the same result, with the same release of numpy.
    trials : int or None
        How many; None leaves it to the tolerance.
    tolerance : float or None, unit of the measurand
        By how much a figure may be off.
    most_trials : int
        If the tolerance needs more, so many are drawn and ``holds_tolerance`` is False.
    probabilities : sequence of float
        Of further quantiles.
    progress : callable or None
        Told after every block how many trials were drawn, of how many; what it raises ends the run.

    Returns
    -------
    MonteCarlo

    Raises
    ------
    LimitsError
        If a number is out of its range, or not exactly one of ``trials`` and ``tolerance`` is given.
    ModelError
        If the model has no value at a trial.

    Notes
    -----
    Source: JCGM 101:2008, 7.2 to 7.7 (from memory). The two stages: Stein 1945, applied to the four figures
    of JCGM 101, 7.9.4, as Wuebbeler, Harris, Cox and Elster 2010 do (from memory).

    Examples
    --------
    >>> import numpy as np
    >>> standard = Trials(lambda generator, size: generator.standard_normal(size))
    >>> found = monte_carlo(standard, coverage_probability=0.95, seed=1, tolerance=0.02)
    >>> found.holds_tolerance, abs(found.symmetric[1] - 1.96) < 0.02
    (True, True)
    """
    _check(coverage_probability, seed, trials, tolerance, most_trials, probabilities)
    batch = _batch(coverage_probability)
    pool = PooledTrials(drawn, seed, progress)
    first = min(trials or _BATCHES * batch, most_trials)
    pool.plan(trials or first)
    scatter, needed = _first_stage(pool, drawn, first, batch, coverage_probability, tolerance)
    number = min(trials or max(first, needed), most_trials)
    pool.plan(number)
    covered, low = _covered(number, coverage_probability)
    ranks = [low, low + covered, (number + 1) // 2]
    ranks += [min(number, max(1, math.ceil(p * number))) for p in probabilities]
    values, shortest = pool.ordered(number, ranks, covered)
    mean, deviation = pool.moments(number)
    freedom = drawn.smallest_degrees_of_freedom
    shrunk = math.sqrt(batch / number)
    return MonteCarlo(
        trials=number,
        seed=seed,
        coverage_probability=coverage_probability,
        mean=mean if freedom > 1 else None,
        standard_deviation=deviation if freedom > 2 else None,
        median=float(values[2]),
        symmetric=(float(values[0]), float(values[1])),
        shortest=shortest,
        scatter=None if scatter is None else _scaled(scatter, shrunk, freedom),
        tolerance=tolerance,
        holds_tolerance=None if tolerance is None else needed <= number,
        quantiles=tuple(float(value) for value in values[3:]),
        remarks=drawn.remarks,
    )


def _check(
    probability: float,
    seed: int,
    trials: int | None,
    tolerance: float | None,
    most_trials: int,
    probabilities: Sequence[float],
) -> None:
    def refuse(wrong: bool, message: str, where: str) -> None:
        if wrong:
            raise LimitsError(message, where=(where,))

    refuse(
        not 0 < probability <= LARGEST_COVERAGE,
        f"a Monte Carlo coverage probability lies above 0 and up to {LARGEST_COVERAGE}, not {probability}",
        "coverage_probability",
    )
    refuse(seed < 0, "a seed is an integer from 0 up", "seed")
    refuse((trials is None) == (tolerance is None), "give a number of trials or a tolerance", "trials")
    # JCGM 101, 7.2.1 recommends 10^4/(1 - p); with a hundredth of that an end is hardly known.
    least = math.ceil(100 / (1 - probability))
    refuse(
        not least <= most_trials <= MOST_TRIALS,
        f"at least {least} and at most {MOST_TRIALS} trials are possible for this coverage probability",
        "most_trials",
    )
    refuse(
        trials is not None and not least <= trials <= most_trials,
        f"{trials} trials: at least {least} and at most {most_trials} are possible here",
        "trials",
    )
    refuse(
        tolerance is not None and not (math.isfinite(tolerance) and tolerance > 0),
        "a tolerance is a finite number above 0",
        "tolerance",
    )
    refuse(any(not 0 <= p <= 1 for p in probabilities), "a probability lies from 0 to 1", "probabilities")


def _batch(coverage_probability: float) -> int:
    """Return the size of a batch, a power of two: every batch lies within one block or is made of several."""
    wanted = 2 * _IN_THE_TAIL / (1 - coverage_probability)
    return max(_SMALLEST_BATCH, 1 << math.ceil(math.log2(wanted)))


def _covered(number: int, coverage_probability: float) -> tuple[int, int]:
    """Return q and r of JCGM 101, 7.7.2: the difference of the ranks of both ends, and the lower rank."""
    covered = min(number - 1, math.floor(coverage_probability * number + 0.5))
    return covered, max(1, (number - covered + 1) // 2)


def _first_stage(
    pool: PooledTrials,
    drawn: Trials,
    first: int,
    batch: int,
    coverage_probability: float,
    tolerance: float | None,
) -> tuple[tuple[float, ...] | None, int]:
    """Return how the figures scatter from batch to batch, and how many trials the tolerance needs."""
    whole = min(first, CAPACITY, _BATCHES * batch)
    if whole < _BATCHES * batch:
        return None, MOST_TRIALS + 1
    batches = pool.first(whole).reshape(_BATCHES, batch)
    scatter = _deviations(batches, coverage_probability)
    if tolerance is None:
        return scatter, 0
    freedom = drawn.smallest_degrees_of_freedom
    promised = [
        size
        for size, enough in zip(
            scatter, (freedom > _MEAN_NEEDS, freedom > _DEVIATION_NEEDS, True, True), strict=True
        )
        if enough
    ]
    # Stein: batches enough that the mean of their figures is known to the tolerance.
    needed = max(math.ceil((_QUANTILE * size / tolerance) ** 2) for size in promised)
    return scatter, needed * batch


def _deviations(batches: NDArray[np.float64], coverage_probability: float) -> tuple[float, ...]:
    """Return the standard deviations from batch to batch of mean, standard deviation and both ends."""
    centre = float(np.median(batches[0]))
    away = batches - centre
    means = away.mean(axis=1)
    with np.errstate(over="ignore"):  # of tails that have no standard deviation
        deviations = np.sqrt(np.square(away).mean(axis=1) - np.square(means))
    covered, low = _covered(batches.shape[1], coverage_probability)
    away.partition((low - 1, low + covered - 1), axis=1)
    figures = (means, deviations, away[:, low - 1], away[:, low + covered - 1])
    return tuple(float(np.std(figure, ddof=1)) for figure in figures)


def _scaled(scatter: tuple[float, ...], factor: float, freedom: float) -> Scatter:
    mean, deviation, lower, upper = (size * factor for size in scatter)
    return Scatter(
        mean if freedom > _MEAN_NEEDS else None,
        deviation if freedom > _DEVIATION_NEEDS else None,
        lower,
        upper,
    )
