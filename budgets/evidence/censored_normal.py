"""Mean and variance of normal values of which some are known only to lie below or above a limit."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import log_ndtr

from budgets.errors import ConvergenceError
from budgets.evidence.sums import mean, sum_of_squares

_MOST_STEPS = 10_000
_STILL = 1e-10

_Array = NDArray[np.float64]


@dataclass(frozen=True)
class CensoredNormal:
    """The fit by maximum likelihood.

    Parameters
    ----------
    mean, variance : float
        The variance as a sample variance: without limits it is the sum of squares over n - 1.
    mean_variance : float
        Of the mean, as a multiple of the variance; 1/n without limits.
    degrees_of_freedom : float
        Of the variance; n - 1 without limits.
    """

    mean: float
    variance: float
    mean_variance: float
    degrees_of_freedom: float


def censored_normal(exact: Sequence[float], below: Sequence[float], above: Sequence[float]) -> CensoredNormal:
    """Fit a normal distribution to values and limits.

    Parameters
    ----------
    exact : sequence of float
        Values that are known; at least two that differ.
    below, above : sequence of float
        Limits: of values known to lie below them, or above them.

    Returns
    -------
    CensoredNormal

    Raises
    ------
    ConvergenceError
        If the search does not end.

    Notes
    -----
    In mean/sigma and 1/sigma the logarithm of the likelihood is concave, so that shortened Newton
    steps find its only maximum. Uncertainties come from the observed information; the degrees of
    freedom are those of a chi-square with the same relative variance. Source: Olsen, Econometrica 46 (1978)
    1211 (from memory).
    """
    centre, unit = mean(exact), math.sqrt(sum_of_squares(exact) / len(exact))
    scaled = tuple((np.asarray(part, dtype=float) - centre) / unit for part in (exact, below, above))
    place, information = _maximum(*scaled)
    ratio, reciprocal = place
    covariance = np.linalg.inv(information)
    of_mean = np.array([1 / reciprocal, -ratio / reciprocal**2])
    square = reciprocal**-2
    variance_of_square = 4 * covariance[1, 1] * reciprocal**-6
    # Without limits 2 v^2 / Var(v) is n; the mean takes one.
    freedom = 2 * square**2 / variance_of_square - 1
    return CensoredNormal(
        float(centre + unit * ratio / reciprocal),
        float(unit**2 * square * (freedom + 1) / freedom),
        float(of_mean @ covariance @ of_mean) / square,
        float(freedom),
    )


def _maximum(exact: _Array, below: _Array, above: _Array) -> tuple[tuple[float, float], _Array]:
    """Return mean/sigma and 1/sigma of the greatest likelihood, and the information there.

    Raises
    ------
    ConvergenceError
        If the steps do not become small.
    """
    place = np.array([0.0, 1.0])
    for _ in range(_MOST_STEPS):
        slope, information = _slope_and_information(place, exact, below, above)
        step = np.linalg.solve(information, slope)
        if float(np.max(np.abs(step))) < _STILL:
            return (float(place[0]), float(place[1])), information
        # Shortened so that 1/sigma stays above zero, less and less as the maximum comes near.
        place = place + step / (1 + math.sqrt(max(0.0, float(slope @ step))))
    raise ConvergenceError("the likelihood of the values below a limit has no maximum that is found")


def _slope_and_information(
    place: _Array, exact: _Array, below: _Array, above: _Array
) -> tuple[_Array, _Array]:
    """Return the slope of the logarithm of the likelihood and the negative of its curvature."""
    ratio, reciprocal = place
    z = reciprocal * exact - ratio
    slope = np.array([np.sum(z), len(exact) / reciprocal - np.sum(z * exact)])
    information = np.array(
        [
            [len(exact), -np.sum(exact)],
            [-np.sum(exact), np.sum(exact * exact) + len(exact) / reciprocal**2],
        ]
    )
    for limits, sign in ((below, 1.0), (above, -1.0)):
        w = sign * (reciprocal * limits - ratio)
        hazard = np.exp(-0.5 * w * w - 0.5 * math.log(2 * math.pi) - log_ndtr(w))
        slope += sign * np.array([-np.sum(hazard), np.sum(hazard * limits)])
        bend = hazard * (w + hazard)
        information += np.array(
            [
                [np.sum(bend), -np.sum(bend * limits)],
                [-np.sum(bend * limits), np.sum(bend * limits * limits)],
            ]
        )
    return slope, information
