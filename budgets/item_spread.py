"""Judging items instead of the lot's mean: so large a share of the items must lie within tolerance.

The spread between items is then no uncertainty but what is judged. An upper limit is met by the lot when
``mu + q sigma <= T_U``, with mu the mean of the lot, sigma the spread between its items and q the normal
quantile of the share. Both mu and sigma are known only so well; the distribution of the error of
``mu + q sigma`` is given here, so that everything else works as for a mean.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from functools import cached_property
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaincinv, ndtr, ndtri, stdtr

from budgets.error_distributions import Real
from budgets.errors import LimitsError
from budgets.limit_search import limit_between

# Steps of a normal score for the integral over the spread, by the trapezoidal rule: fine for few
# samples, whose spread may be many times the one that was seen. Relative errors of quantiles below 1e-12.
_FINE = np.arange(-8.25, 8.26, 0.0625)
_COARSE = np.arange(-8.25, 8.26, 0.25)
_FEW = 8.0


@dataclass(frozen=True)
class ItemSpread:
    """The error of mean and spread together, in standard uncertainties of the mean.

    Parameters
    ----------
    standard_uncertainty : float, unit of the characteristic
        Of the mean: the scale of z.
    standard_deviation : float, unit of the characteristic
        s, of single samples.
    degrees_of_freedom : float
        That s rests on; ``math.inf`` for a known spread.
    measurement_standard_deviation : float, unit of the characteristic
        The part of s that the measurement of a sample brings; known, and taken out of the spread of items.
    averaging_weight : float
        What is left of the variance s^2 in the mean: 1/n for n samples.
    other_standard_uncertainty : float, unit of the characteristic
        Of the mean, from all that the samples share.
    other_degrees_of_freedom : float
    factor : float
        q.
    least_share : float
        Of the items, that q was made for.

    Notes
    -----
    ``sigma^2 = nu s^2/chi-square``, and given sigma the mean is normal about its estimate (Student's t as far
    as other errors have few degrees of freedom, by their effective number). Without other errors this is the
    noncentral t distribution: upper limit minus estimate over s exceeds its quantile over root n. Source:
    ISO 16269-6, statistical tolerance intervals (from memory); the part of other errors is an own derivation.
    """

    standard_uncertainty: float
    standard_deviation: float
    degrees_of_freedom: float
    measurement_standard_deviation: float
    averaging_weight: float
    other_standard_uncertainty: float
    other_degrees_of_freedom: float
    factor: float
    least_share: float

    @property
    def item_standard_deviation(self) -> float:
        """What is left of s as the spread between items."""
        return math.sqrt(max(0.0, self.standard_deviation**2 - self.measurement_standard_deviation**2))

    @cached_property
    def _nodes(self) -> tuple[NDArray[np.float64], ...]:
        """Shift ``q sigma_item``, scale and degrees of freedom of the mean, and weight, per node."""
        total = np.array([self.standard_deviation])
        weights = np.ones(1)
        if not math.isinf(self.degrees_of_freedom):
            half = self.degrees_of_freedom / 2
            scores = _FINE if self.degrees_of_freedom < _FEW else _COARSE
            chi_square = np.maximum(gammaincinv(half, ndtr(scores)), 1e-200)
            total = self.standard_deviation * np.sqrt(half / chi_square)
            weights = np.exp(-(scores**2) / 2)
            weights /= weights.sum()
        # What the measurement alone brings is there in any case.
        total = np.maximum(total, self.measurement_standard_deviation)
        item = np.sqrt(np.maximum(0.0, total**2 - self.measurement_standard_deviation**2))
        of_mean, other = total**2 * self.averaging_weight, self.other_standard_uncertainty**2
        freedom = np.full(total.shape, math.inf)
        if other > 0 and not math.isinf(self.other_degrees_of_freedom):
            freedom = (of_mean + other) ** 2 / other**2 * self.other_degrees_of_freedom
        return self.factor * item, np.sqrt(of_mean + other), freedom, weights

    def _mean_below(self, z: Real, sign: float) -> Real:
        """Return the probability that mu lies below ``estimate + z u + sign q sigma``."""
        shift, scale, freedom, weights = self._nodes
        reached = np.asarray(z)[..., np.newaxis] * self.standard_uncertainty
        found: Any = _cumulative((reached + sign * shift) / scale, freedom) @ weights
        return cast("Real", found)

    def upper_tail(self, z: Real) -> Real:
        """Return the probability that ``mu + q sigma`` exceeds the estimate by z.

        Parameters
        ----------
        z : float or ndarray

        Returns
        -------
        float or ndarray
        """
        return self._mean_below(-z, 1.0)

    def lower_tail(self, z: Real) -> Real:
        """Return the probability that ``mu - q sigma`` lies below the estimate by more than -z.

        Parameters
        ----------
        z : float or ndarray

        Returns
        -------
        float or ndarray
        """
        return self._mean_below(z, 1.0)

    def within(self, lower: Real | None, upper: Real | None) -> Real:
        """Return the probability that the items lie within limits.

        Parameters
        ----------
        lower, upper : float or ndarray or None
            Limits less the estimate, in standard uncertainties of the mean.

        Returns
        -------
        float or ndarray
        """
        if lower is None or upper is None:
            if upper is not None:
                return self._mean_below(upper, -1.0)
            assert lower is not None  # a tolerance has at least one limit
            return self._mean_below(-lower, -1.0)
        shift, scale, freedom, weights = self._nodes
        low, high = (np.asarray(z)[..., np.newaxis] * self.standard_uncertainty for z in (lower, upper))
        between = _cumulative((high - shift) / scale, freedom) - _cumulative((low + shift) / scale, freedom)
        found: Any = np.maximum(between, 0.0) @ weights
        return cast("Real", found)

    def upper_quantile(self, probability: float) -> float:
        """Return the z that `upper_tail` gives a probability.

        Parameters
        ----------
        probability : float

        Returns
        -------
        float

        Raises
        ------
        LimitsError
            If the spread is known so badly that no estimate reaches so small a risk.
        """

        def excess(z: float) -> float:
            return float(self.upper_tail(z)) - probability

        far = 1.0
        while excess(far) > 0:
            far *= 2
            if far > 1e12:
                raise LimitsError(
                    f"the spread of the items is known too badly for a risk of {probability:.3g}, on "
                    f"{self.degrees_of_freedom:.3g} degrees of freedom",
                    where=("largest_risk",),
                )
        near = -1.0
        while excess(near) <= 0:
            near *= 2
        # From far inside, where the risk is small enough, to where it is not.
        return limit_between(excess, far, near)

    def lower_quantile(self, probability: float) -> float:
        """Return the z that `lower_tail` gives a probability.

        Parameters
        ----------
        probability : float

        Returns
        -------
        float

        Raises
        ------
        LimitsError
            As `upper_quantile`.
        """
        return -self.upper_quantile(probability)

    def to_document(self) -> dict[str, Any]:
        """Return the numbers as JSON-able members; null stands for infinite degrees of freedom."""
        return {name: None if value == math.inf else value for name, value in asdict(self).items()}

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> ItemSpread:
        """Return what `to_document` wrote, to the last bit."""
        return cls(**{name: math.inf if value is None else value for name, value in document.items()})


def share_factor(least_share: float, limits: int) -> float:
    """Return q: how many spreads of the items a limit must be away from the mean of the lot.

    Parameters
    ----------
    least_share : float
        Of the items that must lie within tolerance.
    limits : {1, 2}
        With two limits each takes half of the share that may lie outside, which is on the safe side.

    Returns
    -------
    float

    Examples
    --------
    >>> round(share_factor(0.95, 1), 3), round(share_factor(0.95, 2), 3)
    (1.645, 1.96)
    """
    return -float(ndtri((1 - least_share) / limits))


def _cumulative(z: NDArray[np.float64], degrees_of_freedom: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the distribution function of Student's t, of the normal distribution for infinite degrees."""
    if np.isinf(degrees_of_freedom).all():
        return np.asarray(ndtr(z))
    return np.asarray(stdtr(degrees_of_freedom, z))
