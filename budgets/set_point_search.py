"""The searches for set points: which keep what is wanted, and which costs least."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.errors import BudgetsError, LimitsError, raise_collected
from budgets.set_point_figures import Production, SetPointFigures

Array = NDArray[np.float64]

# Searched on a grid, then on ever finer ones about the place found: one call of the computation for each.
_GRID, _FINER, _ROUNDS, _SMOOTH_ROUNDS = 65, 33, 4, 2
_ANY_RATE = 1e-12
_AT_A_BOUND = 1e-5
# How far beyond the limit money is followed to see where it pulls, and at how many places.
_BEYOND, _COARSE = 4.0, 17


@dataclass(frozen=True)
class Wanted:
    """What a set point must keep.

    Parameters
    ----------
    release_rate : float
        Share of the lots to be released, at whatever look.
    largest_risk : float or None
        Largest share of the released lots that do not conform (conditional global consumer's risk, mean over
        the common error). The specific risk of every lot is bounded by the decision rules in any case.

    Raises
    ------
    LimitsError
        If a share does not lie between 0 and 1.
    """

    release_rate: float
    largest_risk: float | None = None

    def __post_init__(self) -> None:
        faults: list[BudgetsError] = [
            LimitsError(f"{name} must lie between 0 and 1", where=(name,))
            for name in ("release_rate", "largest_risk")
            if getattr(self, name) is not None and not 0 < getattr(self, name) < 1
        ]
        raise_collected(faults)


class SetPointSearch:
    """The searches over set points; a set point is the mean of the estimates here."""

    def __init__(self, production: Production, wanted: Wanted) -> None:
        self._production, self._wanted = production, wanted
        self.ends = production.measurement.centres

    def kept(self) -> tuple[float, float]:
        """Return the ends of the set points that keep release rate and risk.

        Raises
        ------
        LimitsError
            If none does.
        """
        grid = np.linspace(*self.ends, _GRID)
        slack = self._slack(grid)
        if not (slack >= 0).any():
            best = _minimum(lambda centres: -self._slack(centres), grid)
            # What only the search found stands beside the grid from here on.
            grid = np.sort(np.append(grid, best))
            slack = self._slack(grid)
            if not (slack >= 0).any():
                raise self._refusal(best)
        inside = np.flatnonzero(slack >= 0)
        first, last = int(inside[0]), int(inside[-1])
        low = grid[0] if first == 0 else _edge(self._slack, grid[first], grid[first - 1])
        high = grid[-1] if last == len(grid) - 1 else _edge(self._slack, grid[last], grid[last + 1])
        return float(low), float(high)

    def nearest(self, lowest: float, highest: float) -> float | None:
        """Return the end that lies towards the limit; None where no limit is run towards."""
        return {1: highest, -1: lowest, 0: None}[self._production.side]

    def best_centre(self, lowest: float, highest: float) -> float:
        """Return the set point of the highest release rate among those that keep what is wanted."""
        return _minimum(
            lambda centres: -self._production.outcomes(centres).release_rate,
            np.linspace(lowest, highest, _GRID),
        )

    def cheapest(self) -> float | None:
        """Return the set point of the least cost within acceptance and risk; None without money.

        Raises
        ------
        LimitsError
            If the money would put the process beyond the law, or no set point keeps the risk.
        """
        if self._production.money is None:
            return None
        grid = np.linspace(*self.ends, _GRID)
        costs = self._lawful_costs(grid)
        if np.isinf(costs).all():
            grid = np.linspace(*self.kept_risk(), _GRID)
            costs = self._cost(grid)
        return _minimum(self._cost, grid, costs)

    def kept_risk(self) -> tuple[float, float]:
        """Return the ends of the set points that keep the risk.

        Raises
        ------
        LimitsError
            If none does.
        """
        return SetPointSearch(self._production, Wanted(_ANY_RATE, self._wanted.largest_risk)).kept()

    def bound_of(self, figures: SetPointFigures, release_rate: float | None) -> str | None:
        """Say what keeps a set point where it is; None where it lies free."""
        low, high = self.ends
        centre = figures.set_point - self._production.measurement.reading_offset
        risk = self._wanted.largest_risk
        if release_rate is not None and figures.release_rate <= release_rate + _AT_A_BOUND:
            return "release_rate"
        if risk is not None and figures.conditional_global_consumers_risk >= risk * (1 - _AT_A_BOUND):
            return "largest_risk"
        if min(centre - low, high - centre) > _AT_A_BOUND * (high - low):
            return None
        first = self._production.measurement.limits[0]
        end = low if centre - low < high - centre else high
        return "validated_range" if end in (first.lower_range, first.upper_range) else "acceptance_limit"

    def _cost(self, centres: Array) -> Array:
        """Return the expected cost of a lot, infinite where the risk is not kept."""
        found = self._production.outcomes(centres)
        costs = self._production.costs(centres, found)
        assert costs is not None
        if self._wanted.largest_risk is None:
            return costs.total
        kept = found.conditional_global_consumers_risk <= self._wanted.largest_risk
        return np.where(kept, costs.total, math.inf)

    def _slack(self, centres: Array) -> Array:
        """Return by how much release rate and risk are kept; below 0 where one is not."""
        found = self._production.outcomes(centres)
        slack = found.release_rate - self._wanted.release_rate
        if self._wanted.largest_risk is None:
            return slack
        return np.minimum(slack, self._wanted.largest_risk - found.conditional_global_consumers_risk)

    def _lawful_costs(self, grid: Array) -> Array:
        """Return the costs on a grid, once money does not pull the process beyond the legal limit.

        Raises
        ------
        LimitsError
            If it does: if the cost without any bound is least with a true mean beyond it.
        """
        production = self._production
        measurement = production.measurement
        reach = _BEYOND * math.sqrt(production.lots.covariance[1, 1])
        (low, high), (bottom, top) = measurement.legal_tolerance, self.ends
        wide = np.concatenate(
            [
                grid,
                np.linspace(max(low, bottom - reach) - reach, bottom, _COARSE) if math.isfinite(low) else [],
                np.linspace(top, min(high, top + reach) + reach, _COARSE) if math.isfinite(high) else [],
            ]
        )
        found = production.outcomes(wide)
        costs = production.costs(wide, found)
        assert costs is not None
        true_mean = float(wide[int(np.argmin(costs.total))]) - measurement.residual_bias
        if not low <= true_mean <= high:
            raise LimitsError(_beyond_the_law(true_mean, high if true_mean > high else low), where=("money",))
        within = costs.total[: len(grid)]
        if self._wanted.largest_risk is None:
            return within
        kept = found.conditional_global_consumers_risk[: len(grid)] <= self._wanted.largest_risk
        return np.where(kept, within, math.inf)

    def _refusal(self, best: float) -> LimitsError:
        figures = self._production.figures([best])[0]
        wanted = self._wanted
        wishes = [f"a release rate of {wanted.release_rate:.12g}"] if wanted.release_rate > _ANY_RATE else []
        if wanted.largest_risk is not None:
            wishes.append(f"at most {wanted.largest_risk:.3g} of the released lots nonconforming")
        own = math.sqrt(self._production.lots.covariance[0, 0])
        error = self._production.measurement.random_standard_uncertainty
        return LimitsError(
            f"no set point keeps {' with '.join(wishes)}: the best, {figures.set_point:.5g}, releases "
            f"{figures.release_rate:.4g}, of them {figures.conditional_global_consumers_risk:.2g} "
            f"nonconforming. The process varies by {own:.3g}, its readings have a random error of "
            f"{error:.3g}: less variation, a smaller uncertainty or a smaller wish is needed",
            where=("wanted", "release_rate"),
        )


def _beyond_the_law(true_mean: float, limit: float) -> str:
    return (
        f"the money would put the process at a true mean of {true_mean:.4g}, beyond the legal limit "
        f"{limit:.4g}: what a hold, a lot that is not released and a nonconforming lot cost is too little "
        "beside the value of running closer. No set point is given; check these figures"
    )


def _edge(slack: Callable[[Array], Array], inside: float, outside: float) -> float:
    """Return the last place from ``inside`` towards ``outside`` where the slack is not below 0."""
    for _ in range(_ROUNDS):
        places = np.linspace(inside, outside, _FINER)
        # The far end is outside by what was found before, whatever rounding makes of it now.
        outer = int(np.argmax([*(slack(places[:-1]) < 0), True]))
        inside, outside = float(places[max(0, outer - 1)]), float(places[outer])
    return inside


def _minimum(function: Callable[[Array], Array], grid: Array, values: Array | None = None) -> float:
    """Return where a function is smallest: on the grid, then on finer ones, then by a parabola.

    A function that is infinite beside its smallest value has an edge there, which is followed further.
    """
    places, found = grid, function(grid) if values is None else values
    finer = 0
    while True:
        best = int(np.argmin(found))
        around = found[max(0, best - 1) : best + 2]
        if finer == _ROUNDS or (finer >= _SMOOTH_ROUNDS and len(around) == 3 and np.isfinite(around).all()):
            break
        low, high = places[max(0, best - 1)], places[min(len(places) - 1, best + 1)]
        places = np.linspace(low, high, _FINER)
        found = function(places)
        finer += 1
    if len(around) < 3 or not np.isfinite(around).all():
        return float(places[best])
    curvature = around[0] - 2 * around[1] + around[2]
    shift = 0.5 * (around[0] - around[2]) / curvature if curvature > 0 else 0.0
    return float(places[best] + shift * (places[1] - places[0]))
