"""A production and its measurement: the joint law of true values and estimates, and what it comes to.

The common error of the measurement is one constant for the plant that nobody knows. Where the prior is known
from reference values, it moves the readings; where it is known from the analyzer's own readings, these stay
where they were seen, and it moves the true values behind them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import cast

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from budgets.conformity import Tolerance
from budgets.error_distributions import StudentT
from budgets.errors import LimitsError
from budgets.joint_laws import JointLaw, LimitRows, Rates
from budgets.level_dependence import LevelDependence
from budgets.measurement_errors import MeasurementErrors
from budgets.normal_risk_curves import is_normal, nested_rates
from budgets.production_priors import ProductionPrior

Array = NDArray[np.float64]

QUANTILE = 0.95
"""Of the distribution of a risk over the common error."""

# The common error in its standard uncertainties: where risks are computed, and where interpolated.
_COARSE = np.linspace(-5.0, 5.0, 41)
_FINE = np.linspace(-5.0, 5.0, 5001)
_SMALLEST = 1e-300
# An acceptance limit that lets everything pass, and is finite.
_FAR = 1e100


@dataclass(frozen=True)
class Production:
    """A production and its measurement: the joint law on the average, and for one common error.

    Parameters
    ----------
    prior : ProductionPrior
    errors : MeasurementErrors
    tolerance : Tolerance
    """

    prior: ProductionPrior
    errors: MeasurementErrors
    tolerance: Tolerance

    def rows(self, lower: ArrayLike | None, upper: ArrayLike | None) -> LimitRows:
        """Return rows of acceptance limits beside the tolerance limits.

        Parameters
        ----------
        lower, upper : array_like of float, shape (n,), or None, unit of the characteristic

        Returns
        -------
        LimitRows

        Raises
        ------
        LimitsError
            If acceptance limits cross.
        """
        tolerance = self.tolerance
        low = None if tolerance.lower is None else _column(lower)
        high = None if tolerance.upper is None else _column(upper)
        if low is not None and high is not None and (low > high).any():
            raise LimitsError("a guard band leaves nothing between the limits", where=("guard_bands",))
        size = cast("Array", low if low is not None else high).size
        return LimitRows(
            None if tolerance.lower is None else np.full(size, tolerance.lower),
            None if tolerance.upper is None else np.full(size, tolerance.upper),
            low,
            high,
        )

    def mean(self, rows: LimitRows) -> Rates:
        """Return the rates as means over the common error.

        Parameters
        ----------
        rows : LimitRows

        Returns
        -------
        Rates
        """
        law, shift = self.mean_law()
        return _rates(law, rows.moved(shift, 0.0))

    def mean_law(self) -> tuple[JointLaw, float]:
        """Return the joint law on the average over the common error.

        Returns
        -------
        tuple
            The law, and by how much the tolerance limits move on its axis.
        """
        errors, prior = self.errors, self.prior
        if prior.steering is not None:
            return _steered_law(prior, math.hypot(prior.standard_deviation, self._common)), 0.0
        nu = errors.degrees_of_freedom
        if prior.anchor == "readings":
            spread = errors.common if self._common else None
            return JointLaw(prior, spread, 0.0, 1.0, errors.random, nu), errors.bias
        return JointLaw(prior, None, errors.bias, 1.0, errors.whole, nu), 0.0

    def given(self, rows: LimitRows, common_error: float) -> Rates:
        """Return the rates for one common error of all readings.

        Parameters
        ----------
        rows : LimitRows
        common_error : float, unit of the characteristic

        Returns
        -------
        Rates
        """
        errors, prior = self.errors, self.prior
        if prior.steering is not None:
            return _rates(_steered_law(prior, prior.standard_deviation), rows.moved(common_error, 0.0))
        if prior.anchor == "readings":
            law = JointLaw(prior, None, 0.0, 1.0, errors.random, errors.degrees_of_freedom)
            return _rates(law, rows.moved(errors.bias + common_error, 0.0))
        law = JointLaw(prior, None, errors.bias, 1.0, errors.random, errors.degrees_of_freedom)
        return _rates(law, rows.moved(0.0, -common_error))

    @property
    def _common(self) -> float:
        """Standard uncertainty of the common error, the largest one at a tolerance limit."""
        limits = (self.tolerance.lower, self.tolerance.upper)
        return max(self.errors.common.at(limit) for limit in limits if limit is not None)

    def quantiles(self, rows: LimitRows, mean: Rates) -> tuple[Array, Array]:
        """Return the quantiles of consumer's and producer's risk over the common error.

        Parameters
        ----------
        rows : LimitRows
        mean : Rates
            On the average.

        Returns
        -------
        tuple of ndarray, shape (n,)
        """
        u, nu = self._common, self.errors.degrees_of_freedom
        if u == 0:
            return mean.nonconforming_accepted, mean.conforming_not_accepted
        if rows.lower_tolerance is None or rows.upper_tolerance is None:
            # With one limit each risk rises or falls with the common error all the way.
            end = u * StudentT(nu).upper_quantile(1 - QUANTILE)
            harmful = -end if rows.lower_tolerance is None else end
            return (
                self.given(rows, harmful).nonconforming_accepted,
                self.given(rows, -harmful).conforming_not_accepted,
            )
        given = [self.given(rows, u * z) for z in _places(nu)]
        return (
            _quantile(np.array([rates.nonconforming_accepted for rates in given])),
            _quantile(np.array([rates.conforming_not_accepted for rates in given])),
        )

    def nonconforming_share(self) -> float:
        """Return the probability that a lot does not conform: what passes where everything is accepted.

        Returns
        -------
        float
        """
        return float(self.mean(self.rows(-_FAR, _FAR)).nonconforming_accepted[0])


def _column(limits: ArrayLike | None) -> Array:
    return np.atleast_1d(np.asarray(limits, dtype=np.float64))


def _rates(law: JointLaw, rows: LimitRows) -> Rates:
    return nested_rates(law, rows) if rows.size > 2 and is_normal(law) else law.rates(rows)


def _steered_law(prior: ProductionPrior, deviation: float) -> JointLaw:
    """Return the law of a steered process, its true values with a given standard deviation.

    A common error widens it and leaves the covariance with the readings: they stay where they are steered to.
    """
    steering = prior.steering
    assert steering is not None
    of_readings = steering.standard_deviation_of_readings
    correlation = steering.correlation * prior.standard_deviation / deviation
    slope = correlation * of_readings / deviation
    return JointLaw(
        replace(prior, standard_deviation=deviation),
        None,
        steering.mean_of_readings - slope * prior.mean,
        slope,
        LevelDependence(of_readings * math.sqrt(1 - correlation**2), 0.0),
        math.inf,
    )


def _places(nu: float) -> list[float]:
    """Return common errors in their standard uncertainties, by the normal places of `_COARSE`."""
    normal, student = StudentT(math.inf), StudentT(nu)
    return [student.upper_quantile(float(normal.upper_tail(x))) for x in _COARSE.tolist()]


def _quantile(risks: Array) -> Array:
    """Return the quantile of risks that are known at `_COARSE`, for each column."""
    smooth = CubicSpline(_COARSE, np.log(np.maximum(risks, _SMALLEST)))(_FINE)
    order = np.argsort(smooth, axis=0)
    weights = np.exp(-0.5 * _FINE**2)
    weights /= weights.sum()
    middle = np.cumsum(weights[order], axis=0) - weights[order] / 2
    smooth = np.take_along_axis(smooth, order, axis=0)
    found = [np.interp(QUANTILE, middle[:, i], smooth[:, i]) for i in range(risks.shape[1])]
    return np.exp(np.array(found))
