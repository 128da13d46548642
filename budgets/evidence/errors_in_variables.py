"""Straight lines when both sides err: with a known ratio of variances, or with every uncertainty known.

These lines diagnose. What they find is no correction of an analyzer: for that the reference is regressed on
the reading, see `budgets.evidence.slope_test`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import stdtr

from budgets.errors import ConvergenceError, EvidenceError
from budgets.evidence.sums import CONFIDENCE, mean, sum_of_squares
from budgets.propagation import coverage_factor

_DIRECTIONS = 359
_STILL = 4 * 2.220446049250313e-16

_Array = NDArray[np.float64]


@dataclass(frozen=True)
class FittedLine:
    """A line ``y = intercept + slope x`` with the covariance of its two parameters.

    Parameters
    ----------
    intercept, slope : float
    intercept_standard_uncertainty, slope_standard_uncertainty : float
        As the given uncertainties have it, without regard to how well the line fits.
    covariance : float
        Of intercept and slope.
    sum_of_squares : float
        Weighted, at its minimum; chi-square with n - 2 degrees of freedom when the uncertainties are right.
    degrees_of_freedom : int
    """

    intercept: float
    slope: float
    intercept_standard_uncertainty: float
    slope_standard_uncertainty: float
    covariance: float
    sum_of_squares: float
    degrees_of_freedom: int


def line_with_uncertainties(
    x: Sequence[float], y: Sequence[float], u_x: Sequence[float], u_y: Sequence[float]
) -> FittedLine:
    """Fit a line to points with standard uncertainties of their own on both sides.

    Parameters
    ----------
    x, y : sequence of float, shape (n,)
    u_x, u_y : sequence of float, shape (n,)
        Standard uncertainties, independent of one another; those of x may be zero, those of y not.

    Returns
    -------
    FittedLine

    Raises
    ------
    EvidenceError
        With fewer than three points, x all equal, or an uncertainty out of range.
    ConvergenceError
        If the points determine no slope.

    Notes
    -----
    Source: York, Evensen, Lopez Martinez and De Basabe Delgado, American Journal of Physics 72 (2004) 367,
    eq. (13) (from memory); ISO/TS 28037:2010, clause 7 (from memory) minimises the same sum.

    Examples
    --------
    >>> line = line_with_uncertainties([1, 2, 3], [2.1, 3.9, 6.0], [0.1] * 3, [0.1] * 3)
    >>> round(line.slope, 3)
    1.953
    """
    _check(x, y, u_x, u_y)
    # From the first point on, so that a large common offset costs no digits.
    x0, y0 = x[0], y[0]
    xs, ys = np.asarray(x, dtype=float) - x0, np.asarray(y, dtype=float) - y0
    v_x, v_y = np.square(np.asarray(u_x, dtype=float)), np.square(np.asarray(u_y, dtype=float))
    slope = _settled_slope(xs, ys, v_x, v_y)
    weights = 1 / (v_y + slope**2 * v_x)
    x_mean, y_mean, beta = _centred(slope, weights, xs, ys, v_x, v_y)
    intercept = y_mean - slope * x_mean
    # York et al. eq. (13): the spread of the adjusted points gives the uncertainties.
    adjusted = x_mean + beta
    centre = float(np.average(adjusted, weights=weights))
    variance = 1 / float(np.sum(weights * (adjusted - centre) ** 2))
    distance = centre + x0
    return FittedLine(
        intercept + y0 - slope * x0,
        slope,
        math.sqrt(1 / float(np.sum(weights)) + distance**2 * variance),
        math.sqrt(variance),
        -distance * variance,
        float(np.sum(weights * (ys - intercept - slope * xs) ** 2)),
        len(x) - 2,
    )


def _check(x: Sequence[float], y: Sequence[float], u_x: Sequence[float], u_y: Sequence[float]) -> None:
    if not len(x) == len(y) == len(u_x) == len(u_y) or len(x) < 3:
        raise EvidenceError("a line with errors on both sides needs at least three points")
    if min(x) == max(x):
        raise EvidenceError("all points have the same x: there is no line")
    if not all(math.isfinite(u) and u >= 0 for u in u_x) or not all(math.isfinite(u) and u > 0 for u in u_y):
        raise EvidenceError("the standard uncertainties must be finite numbers, those of y above zero")


def _centred(
    slope: float, weights: _Array, xs: _Array, ys: _Array, v_x: _Array, v_y: _Array
) -> tuple[float, float, _Array]:
    """Return the weighted centre and the distances of the adjusted points from it."""
    x_mean, y_mean = (float(np.average(part, weights=weights)) for part in (xs, ys))
    beta = weights * (v_y * (xs - x_mean) + slope * v_x * (ys - y_mean))
    return x_mean, y_mean, beta


def _settled_slope(xs: _Array, ys: _Array, v_x: _Array, v_y: _Array) -> float:
    """Return the slope of least weighted squares: bracketed over all directions, then solved for.

    Raises
    ------
    ConvergenceError
        If no direction short of the vertical is best.
    """
    spread = float(np.std(ys)) or math.sqrt(float(np.mean(v_y)))
    unit = spread / float(np.std(xs))
    slopes = unit * np.tan(np.linspace(-math.pi / 2, math.pi / 2, _DIRECTIONS + 2)[1:-1])
    best = int(np.argmin([_weighted_squares(slope, xs, ys, v_x, v_y) for slope in slopes]))
    bracket = slopes[max(0, best - 1)], slopes[min(_DIRECTIONS - 1, best + 1)]
    if not _descent(bracket[0], xs, ys, v_x, v_y) > 0 > _descent(bracket[1], xs, ys, v_x, v_y):
        raise ConvergenceError("the points determine no slope: the line through them may be vertical")
    return float(brentq(_descent, *bracket, args=(xs, ys, v_x, v_y), xtol=1e-300, rtol=_STILL))


def _weighted_squares(slope: float, xs: _Array, ys: _Array, v_x: _Array, v_y: _Array) -> float:
    weights = 1 / (v_y + slope**2 * v_x)
    rest = ys - slope * xs
    return float(np.sum(weights * (rest - np.average(rest, weights=weights)) ** 2))


def _descent(slope: float, xs: _Array, ys: _Array, v_x: _Array, v_y: _Array) -> float:
    """Return half of how fast the weighted sum of squares falls with the slope."""
    weights = 1 / (v_y + slope**2 * v_x)
    x_mean, y_mean, beta = _centred(slope, weights, xs, ys, v_x, v_y)
    return float(np.sum(weights * beta * (ys - y_mean - slope * (xs - x_mean))))


@dataclass(frozen=True)
class LineOfKnownRatio:
    """A line fitted with a known ratio of the error variances.

    Parameters
    ----------
    ratio : float
        Variance of the errors of y over that of the errors of x.
    slope, intercept : float
    lower, upper : float or None
        95 % interval of the slope, exact when the ratio is; None where the data leave it open.
    p_value : float
        Of a slope of 1.
    """

    ratio: float
    slope: float
    intercept: float
    lower: float | None
    upper: float | None
    p_value: float


def line_with_known_ratio(x: Sequence[float], y: Sequence[float], ratio: float) -> LineOfKnownRatio | None:
    """Fit a line to points whose two sides err with a known ratio of variances.

    Parameters
    ----------
    x, y : sequence of float, shape (n,)
    ratio : float
        ``var(error of y) / var(error of x)``, above zero.

    Returns
    -------
    LineOfKnownRatio or None
        None with fewer than three points, or where neither direction is preferred.

    Notes
    -----
    With y in units of sqrt(ratio) the errors are round, and the line is the first principal axis at the angle
    phi. The interval and the test use that y - beta x and x + beta y are uncorrelated only at the true slope:
    ``sin^2 2(phi - phi_0) <= 4 t^2 (S_xx S_yy - S_xy^2) / ((n - 2) ((S_xx - S_yy)^2 + 4 S_xy^2))``.
    Source: Creasy, Journal of the Royal Statistical Society B 18 (1956) 65 (from memory).
    """
    n = len(x)
    root = math.sqrt(ratio)
    scaled = [value / root for value in y]
    sxx, syy = sum_of_squares(x), sum_of_squares(scaled)
    x_mean, y_mean = mean(x), mean(scaled)
    sxy = math.fsum((a - x_mean) * (b - y_mean) for a, b in zip(x, scaled, strict=True))
    length = math.hypot(sxx - syy, 2 * sxy)
    if n < 3 or length**2 == 0 or sxy == 0:
        return None
    angle = math.atan2(2 * sxy, sxx - syy) / 2
    along, across = _principal_squares(x, scaled, angle)
    area = along * across
    lower, upper = _angles(angle, 4 * area / ((n - 2) * length**2), n - 2)
    slope = root * math.tan(angle)
    return LineOfKnownRatio(
        ratio,
        slope,
        mean(y) - slope * x_mean,
        None if lower is None else root * math.tan(lower),
        None if upper is None else root * math.tan(upper),
        _p_value(angle - math.atan(1 / root), area, length, n - 2),
    )


def _principal_squares(x: Sequence[float], y: Sequence[float], angle: float) -> tuple[float, float]:
    """Return the sums of squares along the principal axis and across it, each from its own deviations."""
    cosine, sine = math.cos(angle), math.sin(angle)
    x_mean, y_mean = mean(x), mean(y)
    turned = [
        ((a - x_mean) * cosine + (b - y_mean) * sine, (b - y_mean) * cosine - (a - x_mean) * sine)
        for a, b in zip(x, y, strict=True)
    ]
    return math.fsum(a * a for a, _ in turned), math.fsum(b * b for _, b in turned)


def _angles(angle: float, spread: float, nu: int) -> tuple[float | None, float | None]:
    sine = math.sqrt(spread) * coverage_factor(CONFIDENCE, nu)
    if sine >= 1:
        return None, None
    reach = math.asin(sine) / 2
    ends = angle - reach, angle + reach
    # Past the vertical the interval of the slope would not be one piece.
    return ends if max(map(abs, ends)) < math.pi / 2 else (None, None)


def _p_value(distance: float, area: float, length: float, nu: int) -> float:
    # Points on a line exactly leave no doubt about its slope.
    root = math.sqrt(nu / area) if area > 0 else math.inf
    statistic = abs(math.sin(2 * distance)) * length / 2 * root
    return 2 * float(stdtr(nu, -statistic))
