"""Distributions of the standardised error (true value - estimate)/u: Student's t, and Monte Carlo quantiles.

All of conformity asks for nothing but tails and quantiles, so a rule works alike with either. Tails are
computed as tails, never as one minus the rest.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol, TypeVar, cast

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri, stdtr, stdtrit

from budgets.errors import LimitsError, ModelError

Real = TypeVar("Real", float, NDArray[np.float64])

_SMALLEST_TRIALS = 1000


class ErrorDistribution(Protocol):
    """What conformity needs to know of a standardised error."""

    def upper_tail(self, z: Real) -> Real:
        """Return the probability that the error exceeds z."""

    def lower_tail(self, z: Real) -> Real:
        """Return the probability that the error lies below z."""

    def within(self, lower: Real | None, upper: Real | None) -> Real:
        """Return the probability that the error lies between two values, None where there is no such end."""

    def upper_quantile(self, probability: float) -> float:
        """Return the error that is exceeded with a probability."""

    def lower_quantile(self, probability: float) -> float:
        """Return the error that lies above all but a probability: below zero for a small one."""


@dataclass(frozen=True)
class StudentT:
    """Student's t on the scale of the standard uncertainty; the normal distribution for infinite degrees.

    Parameters
    ----------
    degrees_of_freedom : float
        Real-valued, above zero; ``math.inf`` for the normal distribution.

    Notes
    -----
    The scale is u itself, not the standard deviation of t. Source: JCGM 100:2008, G.3.2 (from memory).

    Examples
    --------
    >>> round(float(StudentT(8).upper_tail(1.96)), 4), round(float(StudentT(math.inf).upper_tail(1.96)), 3)
    (0.0428, 0.025)
    """

    degrees_of_freedom: float

    def upper_tail(self, z: Real) -> Real:
        """Return the probability that the error exceeds z.

        Parameters
        ----------
        z : float or ndarray
            In units of the standard uncertainty.

        Returns
        -------
        float or ndarray
            Relative error below 1e-12 for z from -37 to 37.
        """
        return self.lower_tail(-z)

    def lower_tail(self, z: Real) -> Real:
        """Return the probability that the error lies below z, as precisely as `upper_tail`.

        Parameters
        ----------
        z : float or ndarray
            In units of the standard uncertainty.

        Returns
        -------
        float or ndarray
        """
        nu = self.degrees_of_freedom
        probability: Any
        if nu == math.inf:
            probability = ndtr(z)
        elif nu == 1:
            # The Cauchy distribution; the general routine loses digits next to z = 0 here.
            probability = np.arctan2(1.0, -z) / np.pi
        else:
            probability = stdtr(nu, z)
        return cast("Real", probability)

    def within(self, lower: Real | None, upper: Real | None) -> Real:
        """Return the probability that the error lies between two values.

        Parameters
        ----------
        lower, upper : float or ndarray or None
            None where there is no such end.

        Returns
        -------
        float or ndarray
            See `probability_between`.
        """
        return _within(self, lower, upper)

    def upper_quantile(self, probability: float) -> float:
        """Return the error that is exceeded with a probability.

        Parameters
        ----------
        probability : float
            Of the one tail; taken as such, because ``1 - probability`` would lose its digits.

        Returns
        -------
        float
            In units of the standard uncertainty.
        """
        return -self.lower_quantile(probability)

    def lower_quantile(self, probability: float) -> float:
        """Return the error below which lies a probability.

        Parameters
        ----------
        probability : float

        Returns
        -------
        float
            In units of the standard uncertainty.
        """
        if self.degrees_of_freedom == math.inf:
            return float(ndtri(probability))
        return float(stdtrit(self.degrees_of_freedom, probability))


@dataclass(frozen=True)
class Tabulated:
    """Quantiles of a Monte Carlo run, which need not be symmetric nor centred on the estimate.

    Parameters
    ----------
    probabilities : tuple of float, shape (n,)
        Strictly increasing, between 0 and 1.
    quantiles : tuple of float, shape (n,)
        ``(q_p - y)/u``, strictly increasing: y and u are those of the law of propagation.
    trials : int
        Of the run.

    Raises
    ------
    ModelError
        If they are not such.

    Notes
    -----
    Between the quantiles the normal score of the probability is linear in the error, which is exact for a
    normal distribution. Beyond the last quantile nothing, or next to nothing, was seen in all the trials: the
    risk there is reported as the bound ``3/trials`` (95 %, no event in so many trials), or as the probability
    of that last quantile where it is larger; never as 0. Source: JCGM 101:2008, 7.5 (from memory) for the
    quantiles; the "rule of three" for the bound, common practice, no source.
    """

    probabilities: tuple[float, ...]
    quantiles: tuple[float, ...]
    trials: int

    def __post_init__(self) -> None:
        p, q = np.asarray(self.probabilities), np.asarray(self.quantiles)
        if p.ndim != 1 or p.shape != q.shape or p.size < 2:
            raise ModelError("a table needs a quantile for each of at least two probabilities")
        if not (np.isfinite(q).all() and (np.diff(q) > 0).all() and (np.diff(p) > 0).all()):
            raise ModelError("the quantiles and probabilities of a table must increase")
        if not 0 < p[0] < p[-1] < 1:
            raise ModelError("the probabilities of a table lie between 0 and 1")
        if self.trials < _SMALLEST_TRIALS:
            raise ModelError(f"a table of quantiles needs at least {_SMALLEST_TRIALS} trials")

    @cached_property
    def _table(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        return np.asarray(self.quantiles), np.asarray(ndtri(self.probabilities))

    @cached_property
    def _scores(self) -> tuple[float, ...]:
        return tuple(float(score) for score in self._table[1])

    @cached_property
    def _least(self) -> tuple[float, float]:
        """The smallest risks that the run can speak of, below and above."""
        least = 3 / self.trials
        return max(least, self.probabilities[0]), max(least, 1 - self.probabilities[-1])

    def lower_tail(self, z: Real) -> Real:
        """Return the probability that the error lies below z.

        Parameters
        ----------
        z : float or ndarray

        Returns
        -------
        float or ndarray
            Not below what the run can speak of.
        """
        below, above = self._least
        if isinstance(z, np.ndarray):
            return np.clip(ndtr(np.interp(z, *self._table)), below, 1 - above)
        return min(max(float(ndtr(self._score(z))), below), 1 - above)

    def upper_tail(self, z: Real) -> Real:
        """Return the probability that the error exceeds z.

        Parameters
        ----------
        z : float or ndarray

        Returns
        -------
        float or ndarray
            Not below what the run can speak of.
        """
        below, above = self._least
        if isinstance(z, np.ndarray):
            return np.clip(ndtr(-np.interp(z, *self._table)), above, 1 - below)
        return min(max(float(ndtr(-self._score(z))), above), 1 - below)

    def _score(self, z: float) -> float:
        """Return the normal score of one error: as numpy's interpolation, without its cost for one value."""
        quantiles, scores = self.quantiles, self._scores
        place = bisect_right(quantiles, z)
        if place in (0, len(quantiles)):
            return scores[0 if place == 0 else -1]
        left, right = quantiles[place - 1], quantiles[place]
        return scores[place - 1] + (z - left) / (right - left) * (scores[place] - scores[place - 1])

    def within(self, lower: Real | None, upper: Real | None) -> Real:
        """Return the probability that the error lies between two values.

        Parameters
        ----------
        lower, upper : float or ndarray or None
            None where there is no such end.

        Returns
        -------
        float or ndarray
            See `probability_between`.
        """
        return _within(self, lower, upper)

    def lower_quantile(self, probability: float) -> float:
        """Return the error below which lies a probability.

        Parameters
        ----------
        probability : float

        Returns
        -------
        float

        Raises
        ------
        LimitsError
            If the run cannot speak of so small a probability.
        """
        self._check(probability, *self._least)
        quantiles, scores = self._table
        return float(np.interp(ndtri(probability), scores, quantiles))

    def upper_quantile(self, probability: float) -> float:
        """Return the error that is exceeded with a probability.

        Parameters
        ----------
        probability : float

        Returns
        -------
        float

        Raises
        ------
        LimitsError
            If the run cannot speak of so small a probability.
        """
        below, above = self._least
        self._check(probability, above, below)
        quantiles, scores = self._table
        return float(np.interp(-ndtri(probability), scores, quantiles))

    def _check(self, probability: float, least: float, other: float) -> None:
        if not least <= probability <= 1 - other:
            raise LimitsError(
                f"a Monte Carlo run of {self.trials} trials cannot show a risk of {probability:.3g}; the "
                f"smallest that it can speak of is {least:.3g}. More trials are needed."
            )

    def to_document(self) -> dict[str, Any]:
        """Return the table as JSON-able members."""
        return {
            "probabilities": list(self.probabilities),
            "quantiles": list(self.quantiles),
            "trials": self.trials,
        }

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> Tabulated:
        """Return the table that `to_document` wrote, to the last bit."""
        return cls(tuple(document["probabilities"]), tuple(document["quantiles"]), document["trials"])


def probability_between(distribution: ErrorDistribution, lower: Real, upper: Real) -> Real:
    """Return the probability that a standardised error lies between two values.

    Parameters
    ----------
    distribution : ErrorDistribution
    lower, upper : float or ndarray
        In units of the standard uncertainty.

    Returns
    -------
    float or ndarray
        Not below 0, where the two cross. Keeps its relative digits also where it is small: it is taken as a
        difference of the tails on the side that lies farther out, so that nothing cancels.
    """
    if isinstance(lower, np.ndarray):
        found = np.where(
            lower + upper > 0,
            distribution.upper_tail(lower) - distribution.upper_tail(upper),
            distribution.lower_tail(upper) - distribution.lower_tail(lower),
        )
        return np.maximum(found, 0.0)
    if lower + upper > 0:
        return max(0.0, float(distribution.upper_tail(lower) - distribution.upper_tail(upper)))
    return max(0.0, float(distribution.lower_tail(upper) - distribution.lower_tail(lower)))


def _within(distribution: ErrorDistribution, lower: Real | None, upper: Real | None) -> Real:
    if lower is not None and upper is not None:
        return probability_between(distribution, lower, upper)
    if upper is not None:
        return distribution.lower_tail(upper)
    assert lower is not None  # a tolerance has at least one limit
    return distribution.upper_tail(lower)
