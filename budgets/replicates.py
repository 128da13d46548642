"""Replicates: whether readings that repeat each other lie as close together as their spread lets expect.

Two or more readings of one sample differ by what is drawn anew between them. The largest difference that is
to be expected is the critical difference; readings farther apart say that something else went wrong, and
their mean is not to be trusted.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import gammaln, ndtr

from budgets.budget import LARGEST_COUNT, Budget
from budgets.components import Component
from budgets.decision_rules import LARGEST_LEVEL, LEAST_LEVEL
from budgets.errors import LimitsError, ModelError
from budgets.evidence.evaluation import effective_degrees_of_freedom
from budgets.evidence.mean_square_matrices import covariance_of
from budgets.linear_propagation import CompiledPropagation, Line
from budgets.measurement_models import MeasurementModel, Quantity

# Readings of a sample, in several looks at it.
MOST_REPLICATES = 20 * LARGEST_COUNT
# What lies beyond exp(-40) of a density is lost in rounding.
_EXPONENT = 40.0
_WHOLE = 30.0
_ONE = MeasurementModel("reading", (Quantity("reading"),))


@dataclass(frozen=True)
class ReplicateSpread:
    """What separates the readings of one sample, without a number of them: a standard deviation.

    Parameters
    ----------
    standard_deviation : float, unit of the quantity
        Of a single reading among its replicates.
    degrees_of_freedom : float
        ``math.inf`` where it counts as known.
    """

    standard_deviation: float
    degrees_of_freedom: float


@dataclass(frozen=True)
class ReplicateCheck:
    """Whether replicates agree.

    Parameters
    ----------
    number : int
    range : float, unit of the quantity
        Largest minus smallest.
    critical_difference : float, unit of the quantity
    factor : float
        Critical difference over the standard deviation of a reading.
    level : float
        Probability that replicates agree when nothing but their own spread separates them.
    """

    number: int
    range: float
    critical_difference: float
    factor: float
    level: float

    @property
    def agrees(self) -> bool:
        """Whether the range is not larger than the critical difference."""
        return self.range <= self.critical_difference


def replicate_check(values: Sequence[float], spread: ReplicateSpread, level: float) -> ReplicateCheck:
    """Check whether replicates agree.

    Parameters
    ----------
    values : sequence of float, shape (n,), unit of the quantity
        At least two.
    spread : ReplicateSpread
    level : float
        Probability that they agree when nothing but their own spread separates them.

    Returns
    -------
    ReplicateCheck

    Raises
    ------
    LimitsError
        If there are fewer than two values, or the level is out of its range.

    Notes
    -----
    Source: ISO 5725-6:1994, 4.1.4 and 5.2 (from memory) for a known standard deviation; the studentised
    range takes its place where the deviation is estimated.

    Examples
    --------
    >>> check = replicate_check([3.05, 3.20], ReplicateSpread(0.04, math.inf), 0.95)
    >>> round(check.factor, 2), round(check.critical_difference, 3), check.agrees
    (2.77, 0.111, False)
    """
    factor = critical_range_factor(len(values), level, spread.degrees_of_freedom)
    return ReplicateCheck(
        number=len(values),
        range=max(values) - min(values),
        critical_difference=factor * spread.standard_deviation,
        factor=factor,
        level=level,
    )


def false_hold_rate(level: float, sets: int) -> float:
    """Return how often a good lot is held because of its replicates, at most.

    Parameters
    ----------
    level : float
        Of each check.
    sets : int
        Checks that are made of one lot.

    Returns
    -------
    float
        Exact for a known standard deviation; with one that is estimated the checks share it, and fail
        together rather than one by one (Kimball 1951, from memory).

    Examples
    --------
    >>> round(false_hold_rate(0.95, 1), 4), round(false_hold_rate(0.99, 3), 4)
    (0.05, 0.0297)
    """
    return -math.expm1(sets * math.log(level))


@lru_cache(maxsize=4096)
def critical_range_factor(number: int, level: float, degrees_of_freedom: float = math.inf) -> float:
    """Return the critical difference of replicates over the standard deviation of one of them.

    Parameters
    ----------
    number : int
        Replicates, 2 to ``MOST_REPLICATES``.
    level : float
        From ``LEAST_LEVEL`` to ``LARGEST_LEVEL``.
    degrees_of_freedom : float
        Of the standard deviation; ``math.inf`` when it is known.

    Returns
    -------
    float
        Quantile of the studentised range.

    Raises
    ------
    LimitsError
        If an argument is out of its range.

    Notes
    -----
    Source: ISO 5725-6:1994, 4.1.4, table 1 (from memory): f(n) for a known standard deviation, printed
    with one decimal. The value is kept, so that it costs its millisecond or two once.

    Examples
    --------
    >>> [round(critical_range_factor(n, 0.95), 2) for n in (2, 3, 4, 5)]
    [2.77, 3.31, 3.63, 3.86]
    >>> [round(critical_range_factor(n, 0.95, 15.0), 2) for n in (2, 3, 4)]
    [3.01, 3.67, 4.08]
    """
    if not 2 <= number <= MOST_REPLICATES:
        raise LimitsError(f"replicates are 2 to {MOST_REPLICATES} readings, not {number}", where=("number",))
    if not LEAST_LEVEL <= level <= LARGEST_LEVEL:
        raise LimitsError(
            f"the level of the check of replicates lies between {LEAST_LEVEL:g} and {LARGEST_LEVEL:g}",
            where=("replicate_level",),
        )
    if not degrees_of_freedom > 0:
        raise LimitsError("degrees of freedom are above 0", where=("degrees_of_freedom",))

    def excess(ratio: float) -> float:
        return studentised_range_probability(ratio, number, degrees_of_freedom) - level

    highest = 4.0
    while excess(highest) < 0:
        highest *= 2
    return float(brentq(excess, 0.0, highest, xtol=1e-13, rtol=1e-13))


def studentised_range_probability(ratio: float, number: int, degrees_of_freedom: float = math.inf) -> float:
    """Return the probability that the range of replicates is at most so many estimated deviations.

    Parameters
    ----------
    ratio : float
        Range over standard deviation, from 0 up.
    number : int
    degrees_of_freedom : float
        Of the standard deviation; ``math.inf`` when it is known.

    Returns
    -------
    float

    Notes
    -----
    ``P(R <= r) = n int phi(z) [Phi(z) - Phi(z - r)]^(n-1) dz``, z the largest of them, averaged over the
    estimated deviation. Both integrals by the trapezoidal rule, which for such integrands converges faster
    than any power of the step. Source: Tippett 1925 and Hartley 1942 (from memory).
    """
    if ratio <= 0:
        return 0.0
    if math.isinf(degrees_of_freedom):
        return min(1.0, float(_range_probability(np.array([ratio]), number)[0]))
    # s = exp(y), estimated over true: f(y) = 2 (nu/2)^(nu/2) / Gamma(nu/2) exp(nu (y - exp(2y)/2))
    nu = degrees_of_freedom
    wide = 2 * _EXPONENT / nu
    highest = 0.5 * math.log1p(wide + math.sqrt(2 * wide))
    lowest = max(
        -wide / 2 - math.sqrt(wide / 2),
        -max(0.0, math.log(ratio)) - (_EXPONENT + nu / 2) / (number - 1 + nu),
    )
    # The range of many values scatters little, so that its distribution is steep.
    step = min(0.14, 0.6 / math.sqrt(2 * nu), 1.25 / math.log(number) ** 2)
    y = np.arange(lowest, highest + step, step)
    density = np.exp(-nu / 2 * (np.expm1(2 * y) - 2 * y))
    if nu < _WHOLE:
        whole = math.exp(float(gammaln(nu / 2)) - nu / 2 * (math.log(nu / 2) - 1)) / 2
    else:
        # The grid holds all of it, and the closed form loses digits.
        whole = step * float(density.sum())
    return min(1.0, step * float(density @ _range_probability(ratio * np.exp(y), number)) / whole)


def _range_probability(ranges: NDArray[np.float64], number: int) -> NDArray[np.float64]:
    """Return the distribution function of the range of independent standard normal values."""
    step = 0.45 / math.sqrt(1 + math.log(number))
    # All lie below the largest: on its lower side the density falls off twice.
    z = np.arange(-math.sqrt(_EXPONENT), math.sqrt(2 * _EXPONENT) + step, step)
    density = np.exp(-z * z / 2) / math.sqrt(2 * math.pi)
    # Phi(z) - Phi(z - r), turned round where it would be a difference of numbers near 1.
    lower = np.where(z > 0, -z, z - ranges[:, np.newaxis])
    upper = np.where(z > 0, ranges[:, np.newaxis] - z, z)
    between = ndtr(upper) - ndtr(lower)
    return np.asarray(number * step * (density * between ** (number - 1)).sum(axis=1))


@dataclass(frozen=True)
class ReplicateLaw:
    """The spread of replicates of one quantity by a budget, ready for any value.

    Parameters
    ----------
    quantity : str
    law : CompiledPropagation or None
        None when the budget has no component that separates them: then nothing can be checked.
    """

    quantity: str
    law: CompiledPropagation | None

    @classmethod
    def compile(cls, budget: Budget, quantity: str, levels: Collection[str]) -> ReplicateLaw:
        """Gather the components that separate replicates.

        Parameters
        ----------
        budget : Budget
        quantity : str
            That is read: the characteristic of a budget without a model, else one of the model.
        levels : collection of str
            At which the errors of the replicates are drawn anew: ``reading``, and others where the readings
            do not share a presentation, an increment or a session. Where they share it in groups, it counts
            as drawn anew for each, which makes the check a little wide.

        Returns
        -------
        ReplicateLaw

        Raises
        ------
        ModelError
            If the quantity is not one that is read.
        """
        read = (budget.characteristic,) if budget.model is None else budget.model.read
        if quantity not in read:
            raise ModelError(f"{quantity!r} is no quantity that is read", where=("quantity",))
        lines = tuple(
            # One reading among others is a whole draw, whatever another component covers in the mean.
            Line.of(replace(item, covered_weight=0.0), 1.0)
            for item in budget.components
            if item.level in levels and _moves(item, quantity)
        )
        return cls(quantity, CompiledPropagation(_ONE, lines, budget.correlations) if lines else None)

    @cached_property
    def depends_on_value(self) -> bool:
        """Whether a part of the spread is proportional to the value."""
        return self.law is not None and any(line.relative_terms for line in self.law.lines)

    def at(self, estimates: Mapping[str, float]) -> ReplicateSpread | None:
        """Return the spread at a value.

        Parameters
        ----------
        estimates : mapping of str to float
            Of the quantities that proportional parts are proportional to.

        Returns
        -------
        ReplicateSpread or None
            None when no component speaks of it.

        Raises
        ------
        ComponentError
            If correlated parts leave no spread, or it is too large to be computed.
        """
        if self.law is None:
            return None
        return self._spread(self.law, estimates) if self.depends_on_value else self._constant

    @cached_property
    def _constant(self) -> ReplicateSpread:
        assert self.law is not None  # the caller asked
        return self._spread(self.law, {})

    def _spread(self, law: CompiledPropagation, estimates: Mapping[str, float]) -> ReplicateSpread:
        coefficients = {name: 0.0 for line in law.lines for name in line.inputs} | {self.quantity: 1.0}
        total, terms, _ = law.combination(coefficients, estimates)
        return ReplicateSpread(math.sqrt(total), effective_degrees_of_freedom(terms))


def _moves(component: Component, quantity: str) -> bool:
    """Say whether a component gives an error to one quantity."""
    if not component.matrix_terms:
        return component.quantity == quantity
    place = component.quantities.index(quantity) if quantity in component.quantities else None
    return place is not None and covariance_of(component.matrix_terms)[place, place] > 0
