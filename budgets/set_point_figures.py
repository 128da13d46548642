"""What a process does at a set point: release rate, risks and cost, for many set points at once."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline
from scipy.special import ndtr, ndtri

from budgets.errors import LimitsError
from budgets.money import ExpectedCost, Money, expected_cost
from budgets.planned_measurements import PlannedMeasurement
from budgets.process_variation import ProcessVariation
from budgets.retest_paths import LotDistribution, PathOutcomes, path_outcomes

Array = NDArray[np.float64]

SIDES = {"upper": 1, "lower": -1}
QUANTILE = 0.95
# The common error is taken at these nodes where its quantile has no closed form.
_NODES, _FINE, _FAR = 49, 20001, 5.0


@dataclass(frozen=True)
class SetPointFigures:
    """What happens at a set point to the lots of a process, in shares of all lots.

    Parameters
    ----------
    set_point : float, unit of the characteristic
        Mean of the readings.
    true_mean : float, unit of the characteristic
        Mean of the true values: the set point less the bias.
    release_rate : float
        Released at some look.
    release_rate_of_first_look : float
    hold_rate : float
        Held at the first look.
    reject_rate : float
        Rejected at some look.
    further_looks : float
        Mean number of looks after the first one.
    global_consumers_risk : float
        Released and not conforming: joint, mean over the error that all lots share.
    conditional_global_consumers_risk : float
        Share of the released lots that do not conform.
    global_producers_risk : float
        Conforming and not released.
    cost : float or None
        Expected cost of a lot.
    cost_parts : dict of str to float, or None
    conditional_global_consumers_risk_quantile : float or None
        That risk for the common error beyond which 5 % lie.
    """

    set_point: float
    true_mean: float
    release_rate: float
    release_rate_of_first_look: float
    hold_rate: float
    reject_rate: float
    further_looks: float
    global_consumers_risk: float
    conditional_global_consumers_risk: float
    global_producers_risk: float
    cost: float | None
    cost_parts: dict[str, float] | None
    conditional_global_consumers_risk_quantile: float | None = None


@dataclass(frozen=True)
class Production:
    """A process, how its lots are measured and judged, and what they are worth.

    Parameters
    ----------
    process : ProcessVariation
    measurement : PlannedMeasurement
    money : Money or None
    towards : {"upper", "lower"} or None
        To which limit it pays to run; None for the only limit there is, or for none of two.

    Raises
    ------
    LimitsError
        If there is no such limit, or of two limits none is named although closeness has a value.
    """

    process: ProcessVariation
    measurement: PlannedMeasurement
    money: Money | None = None
    towards: str | None = None

    def __post_init__(self) -> None:
        lower, upper = map(math.isfinite, self.measurement.tolerance)
        if self.towards is None and lower != upper:
            object.__setattr__(self, "towards", "upper" if upper else "lower")
        if self.towards is not None and not (upper if self.towards == "upper" else lower):
            raise LimitsError(
                f"there is no {self.towards} tolerance limit to run towards", where=("towards",)
            )
        if self.towards is None and self.money is not None and self.money.value_of_one_unit > 0:
            raise LimitsError(
                "there are two tolerance limits, and running closer has a value: say towards which one",
                where=("towards",),
            )

    @property
    def side(self) -> int:
        """1 towards the upper limit, -1 towards the lower one, 0 towards none."""
        return 0 if self.towards is None else SIDES[self.towards]

    @property
    def lots(self) -> LotDistribution:
        """How the true values of lots and their estimates vary together."""
        measurement = self.measurement
        return self.process.distribution(
            measurement.random_covariance, measurement.common_standard_uncertainty
        )

    @property
    def todays_centre(self) -> float:
        """Mean of the estimates as the process runs today."""
        return self.process.mean - self.measurement.reading_offset

    def outcomes(self, centres: ArrayLike) -> PathOutcomes:
        """Return what becomes of the lots.

        Parameters
        ----------
        centres : array_like, shape (set points,), unit of the characteristic
            Means of the estimates.

        Returns
        -------
        PathOutcomes
        """
        estimates = np.atleast_1d(np.asarray(centres, dtype=np.float64))
        measurement = self.measurement
        return path_outcomes(
            estimates, estimates - measurement.residual_bias, self.lots, measurement.limits, self.tolerance
        )

    @property
    def tolerance(self) -> tuple[float, float]:
        """The tolerance limits of all demands together."""
        return self.measurement.tolerance

    def distance(self, centres: Array | float) -> Array:
        """Return the distance of the true mean from the limit it runs towards; positive inside."""
        limit = self.tolerance[1] if self.side > 0 else self.tolerance[0]
        if self.side == 0:
            return np.zeros_like(np.asarray(centres, dtype=np.float64))
        return np.asarray(self.side * (limit - (np.asarray(centres) - self.measurement.residual_bias)))

    def costs(self, centres: Array, outcomes: PathOutcomes) -> ExpectedCost | None:
        """Return the expected cost of a lot; None without money."""
        if self.money is None:
            return None
        # What is not released has no value from lying beyond the limit, where a process may run today.
        today = max(0.0, float(self.distance(self.todays_centre)))
        return expected_cost(self.money, outcomes, self.distance(centres), today, self.side)

    def figures(self, centres: ArrayLike) -> tuple[SetPointFigures, ...]:
        """Return the figures at set points.

        Parameters
        ----------
        centres : array_like, shape (set points,), unit of the characteristic
            Means of the estimates.

        Returns
        -------
        tuple of SetPointFigures
            Without the quantile over the common error; see `figures_at`.
        """
        estimates = np.atleast_1d(np.asarray(centres, dtype=np.float64))
        found = self.outcomes(estimates)
        costs = self.costs(estimates, found)
        rate = found.release_rate
        nonconforming = found.nonconforming
        parts = {} if costs is None else {part.name: getattr(costs, part.name) for part in fields(costs)}
        return tuple(
            SetPointFigures(
                set_point=float(estimates[i] + self.measurement.reading_offset),
                true_mean=float(estimates[i] - self.measurement.residual_bias),
                release_rate=float(rate[i]),
                release_rate_of_first_look=float(found.released[0][i]),
                hold_rate=float(found.held[0][i] + found.held_for_good[0][i]),
                reject_rate=float(sum(rejected[i] for rejected in found.rejected)),
                further_looks=float(found.further_looks[i]),
                global_consumers_risk=float(found.nonconforming_released[i]),
                conditional_global_consumers_risk=float(found.conditional_global_consumers_risk[i]),
                global_producers_risk=float(
                    max(0.0, 1 - rate[i] - (nonconforming[i] - found.nonconforming_released[i]))
                ),
                cost=None if costs is None else float(costs.total[i]),
                cost_parts=None if costs is None else {name: float(part[i]) for name, part in parts.items()},
            )
            for i in range(len(estimates))
        )

    def figures_at(self, centre: float) -> SetPointFigures:
        """Return the figures at one set point, with the quantile over the common error.

        Parameters
        ----------
        centre : float, unit of the characteristic
            Mean of the estimates.

        Returns
        -------
        SetPointFigures
        """
        (own,) = self.figures([centre])
        members = {item.name: getattr(own, item.name) for item in fields(own)}
        quantile = self._risk_quantile(centre, own.conditional_global_consumers_risk)
        return SetPointFigures(**{**members, "conditional_global_consumers_risk_quantile": quantile})

    def _risk_quantile(self, centre: float, mean: float) -> float:
        """Return the conditional risk that is not exceeded for 95 % of the values of the common error.

        With one limit the risk grows with the error on its side, so that the quantile of the error gives it;
        with two it is found among the errors on both sides.
        """
        common = self.measurement.common_standard_uncertainty
        if common == 0:
            return mean
        lower, upper = map(math.isfinite, self.tolerance)
        if lower and upper:
            errors = np.linspace(-_FAR, _FAR, _NODES)
        else:
            errors = np.array([float(ndtri(QUANTILE)) * (1.0 if upper else -1.0)])
        lots = LotDistribution(self.lots.covariance, 0.0)
        true_mean = centre - self.measurement.residual_bias
        found = path_outcomes(
            np.full(len(errors), centre),
            true_mean + common * errors,
            lots,
            self.measurement.limits,
            self.tolerance,
        ).conditional_global_consumers_risk
        if len(errors) == 1:
            return float(found[0])
        fine = np.linspace(-_FAR, _FAR, _FINE)
        step = fine[1] - fine[0]
        risks = np.exp(CubicSpline(errors, np.log(np.maximum(found, 1e-300)))(fine))
        order = np.argsort(risks)
        shares = (ndtr(fine + step / 2) - ndtr(fine - step / 2))[order]
        return float(np.interp(QUANTILE, np.cumsum(shares), risks[order]))
