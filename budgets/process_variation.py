"""How the lots of a production vary about their set point: lot to lot, with drift, and when it is steered."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.errors import BudgetsError, EvidenceError, LimitsError, raise_collected
from budgets.prior_estimates import PriorEstimate
from budgets.retest_paths import LotDistribution

_ROUNDING = 1e-9


@dataclass(frozen=True)
class ProcessVariation:
    """The variation of the true means of lots about the set point.

    Parameters
    ----------
    mean : float, unit of the characteristic
        Mean of the readings of the lots as the process runs today: today's set point, in the scale of the
        readings.
    lot_to_lot : float, unit of the characteristic
        Standard deviation of the true means of lots within a period.
    drift : float, unit of the characteristic
        Standard deviation of the means of periods.
    within_lot : float or None, unit of the characteristic
        Standard deviation within a lot. It moves no lot's mean; what it does to a reading is a component of
        the budget at the level ``sample``.
    steering : float
        What the process answers to an error of the analyzer that steers it: an error e of a lot's first look
        moves the lot by ``-steering * e``. 0: the process does not know the readings; 1: it corrects all that
        it sees.

    Raises
    ------
    LimitsError
        With all faults: a figure that is not finite, or a standard deviation below zero.
    """

    mean: float
    lot_to_lot: float
    drift: float = 0.0
    within_lot: float | None = None
    steering: float = 0.0

    def __post_init__(self) -> None:
        faults: list[BudgetsError] = [
            LimitsError(f"{name} must be a finite number", where=(name,))
            for name in ("mean", "steering")
            if not math.isfinite(getattr(self, name))
        ]
        faults += [
            LimitsError(f"the standard deviation {name} must be a finite number, not below 0", where=(name,))
            for name in ("lot_to_lot", "drift", "within_lot")
            if getattr(self, name) is not None
            and not (math.isfinite(getattr(self, name)) and getattr(self, name) >= 0)
        ]
        raise_collected(faults)

    @property
    def unsteered_standard_deviation(self) -> float:
        """What moves the true mean of a lot beside the steering: lot to lot and drift together."""
        return math.hypot(self.lot_to_lot, self.drift)

    def true_standard_deviation(self, random_variance: float) -> float:
        """Return the standard deviation of the true means of lots.

        Parameters
        ----------
        random_variance : float, unit of the characteristic squared
            Of the error of the look that steers; only what scatters from lot to lot.

        Returns
        -------
        float, unit of the characteristic
        """
        return math.hypot(self.unsteered_standard_deviation, self.steering * math.sqrt(random_variance))

    def distribution(
        self, random_covariance: NDArray[np.float64], common_standard_uncertainty: float
    ) -> LotDistribution:
        """Return how the true means of lots and their estimates at the looks vary together.

        Parameters
        ----------
        random_covariance : ndarray, shape (looks, looks), unit of the characteristic squared
            Of the errors of the looks; only what scatters from lot to lot.
        common_standard_uncertainty : float, unit of the characteristic
            Of the error that all lots share.

        Returns
        -------
        LotDistribution

        Raises
        ------
        LimitsError
            If the lots do not vary at all.

        Notes
        -----
        Of a steered process the lot's deviation is ``d = r - beta e_1``, the look k shows ``d + e_k``. Own
        model; what it must reproduce: a process steered on the analyzer has readings that vary less than its
        true values, with truth and error anticorrelated.
        """
        own, beta = self.unsteered_standard_deviation**2, self.steering
        if not own + beta * beta > 0:
            raise LimitsError(
                "no variation of the process was given: without one every set point up to the acceptance "
                "limit would release every lot, which no plant does; take it from the record, from a study "
                "of the design production, or state it",
                where=("process_variation", "lot_to_lot"),
            )
        first = random_covariance[0]
        spread = own + beta * beta * first[0]
        whole = np.empty((len(first) + 1, len(first) + 1))
        whole[0, 0] = spread
        whole[0, 1:] = whole[1:, 0] = spread - beta * first
        whole[1:, 1:] = spread - beta * (first[:, None] + first[None, :]) + random_covariance
        return LotDistribution(whole, common_standard_uncertainty)


def steered_process(
    mean: float,
    true_standard_deviation: float,
    reading_standard_deviation: float,
    random_variance: float,
    *,
    drift: float = 0.0,
    within_lot: float | None = None,
) -> ProcessVariation:
    """Return the variation of a process that is steered by the analyzer that judges it.

    Parameters
    ----------
    mean : float, unit of the characteristic
        Of the first readings of lots.
    true_standard_deviation : float, unit of the characteristic
        Of the true means of lots, drift included: from reference values of lots, less the variance of the
        reference method.
    reading_standard_deviation : float, unit of the characteristic
        Of the first readings of the same lots.
    random_variance : float, unit of the characteristic squared
        Of the error of such a reading; only what scatters from lot to lot.
    drift : float, unit of the characteristic
        Standard deviation of the means of periods, which is told apart.
    within_lot : float or None, unit of the characteristic

    Returns
    -------
    ProcessVariation

    Raises
    ------
    EvidenceError
        If the three figures cannot be true together.

    Notes
    -----
    With the reading y = x + e: ``cov(x, e) = (s_y^2 - s_x^2 - u^2)/2``, and the steering is
    ``-cov(x, e)/u^2``. Source: variance of a sum.

    Examples
    --------
    >>> round(steered_process(3.0, 0.112, 0.05, 0.01).steering, 2)
    1.0
    """
    if not (random_variance > 0 and true_standard_deviation > 0 and reading_standard_deviation > 0):
        raise EvidenceError(
            "a steered process needs the variation of its true values, that of its readings, and an error of "
            "the readings, all above 0",
            where=("reading_standard_deviation",),
        )
    both = (reading_standard_deviation**2 - true_standard_deviation**2 - random_variance) / 2
    steering = -both / random_variance
    left = true_standard_deviation**2 - steering**2 * random_variance - drift**2
    if left < -_ROUNDING * true_standard_deviation**2:
        raise EvidenceError(
            f"true values that vary by {true_standard_deviation:.4g}, readings that vary by "
            f"{reading_standard_deviation:.4g} and an error of {math.sqrt(random_variance):.4g} with a drift "
            f"of {drift:.4g} cannot be true together: check which lots and which procedure they are of",
            where=("reading_standard_deviation",),
        )
    return ProcessVariation(mean, math.sqrt(max(0.0, left)), drift, within_lot, steering)


def process_of_prior(
    estimate: PriorEstimate, reading_offset: float, *, drift: float = 0.0, within_lot: float | None = None
) -> ProcessVariation:
    """Return the variation of a process from the prior that readings or a study gave.

    Parameters
    ----------
    estimate : PriorEstimate
        Of a normal distribution, in the scale of estimates, drift included.
    reading_offset : float, unit of the characteristic
        Reading less estimate.
    drift : float, unit of the characteristic
        Standard deviation of the means of periods, which is told apart; no more of it than there is.
    within_lot : float or None, unit of the characteristic

    Returns
    -------
    ProcessVariation
    """
    whole = estimate.prior.standard_deviation
    told_apart = min(drift, whole)
    lot_to_lot = math.sqrt(max(0.0, whole**2 - told_apart**2))
    return ProcessVariation(estimate.prior.mean + reading_offset, lot_to_lot, told_apart, within_lot)
