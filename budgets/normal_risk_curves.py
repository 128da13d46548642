"""Rates over a production for many nested acceptance intervals, where true value and estimate are normal.

Two acceptance intervals of a curve differ by two strips of estimates. What lies in a strip, and does not
conform, is one smooth integral over the strip; so a curve costs two sums for its ends and a few nodes for
each point between, instead of a whole sum for each.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from budgets.joint_laws import NODES, WEIGHTS, JointLaw, LimitRows, Rates

Array = NDArray[np.float64]

_STEP = 2.0
_ROOT = math.sqrt(2 * math.pi)


def is_normal(law: JointLaw) -> bool:
    """Say whether true value and estimate are jointly normal.

    Parameters
    ----------
    law : JointLaw

    Returns
    -------
    bool
    """
    varies = law.spread.proportional or (law.truth_spread is not None and law.truth_spread.proportional)
    return law.prior.distribution == "normal" and math.isinf(law.degrees_of_freedom) and not varies


def nested_rates(law: JointLaw, rows: LimitRows) -> Rates:
    """Return the rates of a normal law for acceptance intervals each of which lies in the one before.

    Parameters
    ----------
    law : JointLaw
        Normal.
    rows : LimitRows
        With the same tolerance limits in every row.

    Returns
    -------
    Rates
        As `JointLaw.rates` gives them; sums of positive parts throughout.
    """
    ends = law.rates(rows.chosen(slice(None, None, rows.size - 1)))
    estimates = NormalEstimates.of(law)
    wrong = np.zeros(rows.size - 1)
    right = np.zeros(rows.size - 1)
    if rows.upper_acceptance is not None:
        estimates.add(rows, rows.upper_acceptance[1:], rows.upper_acceptance[:-1], wrong, right)
    if rows.lower_acceptance is not None:
        estimates.add(rows, rows.lower_acceptance[:-1], rows.lower_acceptance[1:], wrong, right)
    return Rates(
        _outwards(wrong) + ends.nonconforming_accepted[1],
        _inwards(right) + ends.conforming_not_accepted[0],
        _inwards(wrong) + ends.nonconforming_not_accepted[0],
        _outwards(right) + ends.conforming_accepted[1],
    )


def _outwards(strips: Array) -> Array:
    """Return what lies in the strips between the innermost interval and each."""
    return np.append(strips[::-1].cumsum()[::-1], 0.0)


def _inwards(strips: Array) -> Array:
    """Return what lies in the strips between the outermost interval and each."""
    return np.insert(strips.cumsum(), 0, 0.0)


@dataclass(frozen=True)
class NormalEstimates:
    """The estimates of all lots, and the true value given an estimate.

    Notes
    -----
    ``X | y`` is normal around ``m_x + cov/s_y^2 (y - m_y)``. Source: JCGM 106:2012, 6.2 and Annex A (from
    memory), for the independent case.
    """

    mean: float
    deviation: float
    mean_of_truth: float
    slope: float
    deviation_given_estimate: float

    @classmethod
    def of(cls, law: JointLaw) -> NormalEstimates:
        """Return the estimates of a normal law."""
        prior, tau = law.prior, law.spread.constant
        spread = 0.0 if law.truth_spread is None else law.truth_spread.constant
        deviation = math.hypot(law.slope * prior.standard_deviation, tau)
        slope = law.slope * (prior.standard_deviation / deviation) ** 2
        # var z given y = s^2 tau^2 / s_y^2, without a difference
        given = math.hypot(prior.standard_deviation * tau / deviation, spread)
        return cls(law.intercept + law.slope * prior.mean, deviation, prior.mean, slope, given)

    def add(self, rows: LimitRows, start: Array, end: Array, wrong: Array, right: Array) -> None:
        """Add what lies in strips of estimates.

        Parameters
        ----------
        rows : LimitRows
        start, end : ndarray, shape (n - 1,), unit of the characteristic
            Of the strips.
        wrong, right : ndarray, shape (n - 1,)
            Probability of a lot there that does not conform, that conforms; added to.
        """
        scale = self.deviation
        if self.slope:
            scale = min(scale, self.deviation_given_estimate / abs(self.slope))
        pieces = max(1, math.ceil(float((end - start).max()) / (_STEP * scale)))
        half = (end - start) / (2 * pieces)
        offsets = (2 * np.arange(pieces)[:, None] + 1 + NODES).ravel()
        y = start[:, None] + half[:, None] * offsets
        standardised = (y - self.mean) / self.deviation
        mass = np.exp(-0.5 * standardised * standardised) * (half[:, None] / (_ROOT * self.deviation))
        mass *= np.tile(WEIGHTS, pieces)
        inside, outside = self.truths(y, rows)
        wrong += np.einsum("ij,ij->i", mass, outside)
        right += np.einsum("ij,ij->i", mass, inside)

    def truths(self, y: Array, rows: LimitRows) -> tuple[Array, Array]:
        """Return the probability that the true value conforms, and that it does not, given estimates.

        Parameters
        ----------
        y : ndarray, shape (n, m), unit of the characteristic
        rows : LimitRows
            With the same tolerance limits in every row.

        Returns
        -------
        tuple of ndarray, shape (n, m)
        """
        expected = self.mean_of_truth + self.slope * (y - self.mean)
        given = self.deviation_given_estimate
        lower, upper = (
            None if limit is None else (limit[0] - expected) / given
            for limit in (rows.lower_tolerance, rows.upper_tolerance)
        )
        if lower is None or upper is None:
            z = upper if upper is not None else -lower  # type: ignore[operator]
            return ndtr(z), ndtr(-z)
        outside = ndtr(-upper) + ndtr(lower)
        # From the side on which the true value is expected: nothing cancels far outside.
        near, far = np.minimum(upper, -lower), np.maximum(upper, -lower)
        return np.maximum(ndtr(near) - ndtr(-far), 0.0), outside
