"""Money: what a lot's distance from the limit, a hold, a further look and a wrong release cost."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.errors import BudgetsError, LimitsError, raise_collected
from budgets.retest_paths import PathOutcomes

Array = NDArray[np.float64]

_COSTS = ("cost_of_hold", "cost_of_retest", "cost_of_nonconforming")


@dataclass(frozen=True)
class Money:
    """What the distance from the limit and the fate of a lot are worth.

    Parameters
    ----------
    lot_size : float
        Quantity of a lot.
    lots_per_year : float
    value_of_one_unit : float
        What one unit of quantity is worth more when its true value lies one unit of the characteristic closer
        to the limit.
    cost_of_hold : float
        Of each lot that is held at its first look.
    cost_of_retest : float
        Of each further look.
    cost_of_nonconforming : float
        Of each lot that is released and does not conform.
    cost_of_not_released : float or None
        Of each lot that in the end is not released; None: that of a hold.

    Raises
    ------
    LimitsError
        With all faults; money that weighs nothing is one.
    """

    lot_size: float
    lots_per_year: float
    value_of_one_unit: float
    cost_of_hold: float
    cost_of_retest: float
    cost_of_nonconforming: float
    cost_of_not_released: float | None = None

    def __post_init__(self) -> None:
        faults: list[BudgetsError] = [
            LimitsError(f"{name} must be a finite number above 0", where=(name,))
            for name in ("lot_size", "lots_per_year")
            if not (math.isfinite(getattr(self, name)) and getattr(self, name) > 0)
        ]
        faults += [
            LimitsError(f"{name} must be a finite number, not below 0", where=(name,))
            for name in ("value_of_one_unit", *_COSTS, "cost_of_not_released")
            if getattr(self, name) is not None
            and not (math.isfinite(getattr(self, name)) and getattr(self, name) >= 0)
        ]
        raise_collected(faults)
        if self.value_of_one_unit == 0 and not any(
            getattr(self, name) for name in (*_COSTS, "cost_of_not_released")
        ):
            raise LimitsError(
                "all the money is zero: nothing is gained by running closer and nothing lost by a hold, so "
                "no set point costs less than another",
                where=("value_of_one_unit",),
            )

    @property
    def value_of_lot(self) -> float:
        """What one unit of the characteristic closer to the limit is worth for a lot."""
        return self.value_of_one_unit * self.lot_size

    @property
    def not_released(self) -> float:
        """The cost of a lot that in the end is not released."""
        return self.cost_of_hold if self.cost_of_not_released is None else self.cost_of_not_released


@dataclass(frozen=True)
class ExpectedCost:
    """Expected cost of a lot, in parts; arrays of one shape.

    Parameters
    ----------
    giveaway : ndarray
        Value of the distance between the limit and the true values of the lots. A lot that is not released
        gains nothing from running closer: it counts with today's distance.
    holds, retests, not_released, nonconforming : ndarray
    """

    giveaway: Array
    holds: Array
    retests: Array
    not_released: Array
    nonconforming: Array

    @property
    def total(self) -> Array:
        """The whole expected cost of a lot."""
        return np.asarray(
            self.giveaway + self.holds + self.retests + self.not_released + self.nonconforming,
            dtype=np.float64,
        )


def expected_cost(
    money: Money, outcomes: PathOutcomes, distances: NDArray[np.float64], todays_distance: float, side: int
) -> ExpectedCost:
    """Return what a lot is expected to cost.

    Parameters
    ----------
    money : Money
    outcomes : PathOutcomes
    distances : ndarray, shape (set points,), unit of the characteristic
        From the mean of the true values to the limit; positive inside.
    todays_distance : float, unit of the characteristic
        The same at today's set point; 0 where that lies beyond the limit.
    side : {1, 0, -1}
        1 when the value lies in running closer to the upper limit, -1 for the lower one, 0 for none.

    Returns
    -------
    ExpectedCost

    Notes
    -----
    ``E[(T - x) 1(released)]`` for the lots that are released: what is held and rejected are not random
    lots, they lie nearer to the limit than the mean does. Own derivation.
    """
    rate = outcomes.release_rate
    distance_of_released = distances * rate - side * outcomes.deviation_of_released
    giveaway = money.value_of_lot * abs(side) * (distance_of_released + todays_distance * (1 - rate))
    return ExpectedCost(
        giveaway=np.asarray(giveaway),
        holds=money.cost_of_hold * (outcomes.held[0] + outcomes.held_for_good[0]),
        retests=money.cost_of_retest * outcomes.further_looks,
        not_released=money.not_released * (1 - rate),
        nonconforming=money.cost_of_nonconforming * outcomes.nonconforming_released,
    )
