"""Is a series of control results in statistical control? Control limits, runs, trend and dependence."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import groupby, pairwise

from scipy.special import ndtr, stdtr

from budgets.control_charts import chart_factors
from budgets.evidence.sums import mean, sum_of_squares

# Several tests speak at once, so each has to be sure of what it says.
SIGNIFICANCE = 0.01
LONGEST_RUN = 9


@dataclass(frozen=True)
class ControlChart:
    """A chart of single values with the limits of their moving range, and tests of the whole series.

    Parameters
    ----------
    centre, lower_control_limit, upper_control_limit : float, unit of the values
    mean_moving_range, moving_range_limit : float, unit of the values
    short_term_standard_deviation : float, unit of the values
        From the moving ranges: what a drift does not enlarge.
    beyond_limits, jumps : tuple of int
        Places of values beyond the limits, and of moving ranges (their second value) beyond theirs.
    longest_run : int
        Most values in a row on one side of the centre.
    slope, slope_p_value : float
        Change from one value to the next, and the t test that there is none.
    successive_difference_ratio, dependence_p_value : float
        Mean squared successive difference over the variance (2 on the average for independent values), and
        the probability of so small a one.
    """

    centre: float
    lower_control_limit: float
    upper_control_limit: float
    mean_moving_range: float
    moving_range_limit: float
    short_term_standard_deviation: float
    beyond_limits: tuple[int, ...]
    jumps: tuple[int, ...]
    longest_run: int
    slope: float
    slope_p_value: float
    successive_difference_ratio: float
    dependence_p_value: float

    @property
    def has_trend(self) -> bool:
        """Whether the series rises or falls."""
        return self.slope_p_value < SIGNIFICANCE

    @property
    def is_dependent(self) -> bool:
        """Whether values follow the ones before them."""
        return self.dependence_p_value < SIGNIFICANCE

    @property
    def is_in_control(self) -> bool:
        """Whether no test speaks."""
        run = self.longest_run >= LONGEST_RUN
        return not (self.beyond_limits or self.jumps or run or self.has_trend or self.is_dependent)


def control_chart(values: Sequence[float]) -> ControlChart:
    """Return the control chart of single values in time order, with its tests.

    Parameters
    ----------
    values : sequence of float, shape (n,)
        At least 5, not all equal.

    Returns
    -------
    ControlChart

    Notes
    -----
    Limits: centre +- 3 times the mean moving range over d2; moving ranges up to D4 times their mean; nine in
    a row on one side. Source: ISO 7870-2:2013, chart of individuals and tests for special causes (from
    memory).
    Dependence: von Neumann, Annals of Mathematical Statistics 12 (1941), with the normal approximation of
    Young (same volume) (from memory).
    """
    n = len(values)
    factors = chart_factors(2)
    centre = mean(values)
    ranges = [abs(later - earlier) for earlier, later in pairwise(values)]
    mean_range = math.fsum(ranges) / (n - 1)
    deviation = mean_range / factors.d2
    limit = factors.range_upper * mean_range
    slope, slope_p_value = _trend(values)
    ratio = math.fsum(r * r for r in ranges) / sum_of_squares(values)
    # Young: C = 1 - ratio/2 has mean 0 and variance (n - 2) / (n^2 - 1) for independent normal values
    dependence = float(ndtr(-(1 - ratio / 2) * math.sqrt((n * n - 1) / (n - 2))))
    sides = [value > centre for value in values if value != centre]
    return ControlChart(
        centre=centre,
        lower_control_limit=centre - 3 * deviation,
        upper_control_limit=centre + 3 * deviation,
        mean_moving_range=mean_range,
        moving_range_limit=limit,
        short_term_standard_deviation=deviation,
        beyond_limits=tuple(i for i, value in enumerate(values) if abs(value - centre) > 3 * deviation),
        jumps=tuple(i + 1 for i, value in enumerate(ranges) if value > limit),
        longest_run=max(len(list(run)) for _, run in groupby(sides)),
        slope=slope,
        slope_p_value=slope_p_value,
        successive_difference_ratio=ratio,
        dependence_p_value=dependence,
    )


def _trend(values: Sequence[float]) -> tuple[float, float]:
    """Return the slope over the order and the p value of its t test."""
    n = len(values)
    middle = (n - 1) / 2
    of_places = n * (n * n - 1) / 12
    slope = math.fsum((i - middle) * (value - values[0]) for i, value in enumerate(values)) / of_places
    squares = sum_of_squares(values)
    explained = slope * slope * of_places
    residual = squares - explained
    if residual <= 1e-14 * squares:
        return slope, 0.0
    t = slope * math.sqrt(of_places * (n - 2) / residual)
    return slope, min(1.0, 2 * float(stdtr(n - 2, -abs(t))))
