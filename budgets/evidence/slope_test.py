"""The slope of a validation set: the reference regressed on the reading, and its test against 1."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from scipy.special import stdtr

from budgets.evidence.evaluation import json_able
from budgets.evidence.sums import CONFIDENCE, mean, sum_of_squares
from budgets.propagation import coverage_factor


@dataclass(frozen=True)
class SlopeTest:
    """The line ``reference = intercept + slope * reading`` and the test of a slope of 1.

    Parameters
    ----------
    slope : float
    intercept, intercept_standard_uncertainty : float, unit of the characteristic
    slope_standard_uncertainty : float
    residual_standard_deviation : float, unit of the characteristic
        With n - 2 degrees of freedom.
    statistic, p_value : float
        Of slope = 1; the statistic is infinite where the pairs lie on a line exactly.
    degrees_of_freedom : int
    """

    slope: float
    intercept: float
    slope_standard_uncertainty: float
    intercept_standard_uncertainty: float
    residual_standard_deviation: float
    statistic: float
    p_value: float
    degrees_of_freedom: int

    @property
    def interval(self) -> tuple[float, float]:
        """The 95 % interval of the slope."""
        reach = coverage_factor(CONFIDENCE, self.degrees_of_freedom) * self.slope_standard_uncertainty
        return self.slope - reach, self.slope + reach

    def to_document(self) -> dict[str, Any]:
        """Return the test as JSON-able members."""
        lower, upper = self.interval
        document: dict[str, Any] = json_able(
            {
                "regressed": "reference on reading",
                "slope": self.slope,
                "slope_standard_uncertainty": self.slope_standard_uncertainty,
                "slope_lower": lower,
                "slope_upper": upper,
                "intercept": self.intercept,
                "intercept_standard_uncertainty": self.intercept_standard_uncertainty,
                "residual_standard_deviation": self.residual_standard_deviation,
                "t_statistic": self.statistic,
                "p_value": self.p_value,
            }
        )
        return document


def slope_test(readings: Sequence[float], references: Sequence[float]) -> SlopeTest | None:
    """Test whether reference values follow the readings with a slope of 1.

    Parameters
    ----------
    readings, references : sequence of float, shape (n,), unit of the characteristic

    Returns
    -------
    SlopeTest or None
        None with fewer than three pairs, or where all readings are equal: there is no slope then.

    Notes
    -----
    ``t = |slope - 1| sqrt(s_x^2 (n - 1) / s_res^2)`` with n - 2 degrees of freedom, x the reading. The other
    direction would find a slope below 1 for the best predictor that there is, because what a predictor cannot
    know shrinks it towards the mean. Source: ISO 12099:2017, slope and its test (from memory).
    """
    n = len(readings)
    squares = sum_of_squares(readings)
    if n < 3 or squares == 0:
        return None
    x_mean, y_mean = mean(readings), mean(references)
    products = math.fsum((x - x_mean) * (y - y_mean) for x, y in zip(readings, references, strict=True))
    slope = products / squares
    residuals = [y - y_mean - slope * (x - x_mean) for x, y in zip(readings, references, strict=True)]
    residual = math.sqrt(math.fsum(r * r for r in residuals) / (n - 2))
    u_slope = residual / math.sqrt(squares)
    # ISO 12099: t = |slope - 1| sqrt(s_x^2 (n - 1) / s_res^2)
    statistic = abs(slope - 1) / u_slope if u_slope > 0 else math.inf
    return SlopeTest(
        slope,
        y_mean - slope * x_mean,
        u_slope,
        residual * math.sqrt(1 / n + x_mean**2 / squares),
        residual,
        statistic,
        2 * float(stdtr(n - 2, -statistic)),
        n - 2,
    )
