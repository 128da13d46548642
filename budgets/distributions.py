"""Distributions of input quantities: standard uncertainty, fourth moment, quantiles and draws.

All are symmetric about zero and scaled by their standard uncertainty, so that a component needs only the name
of its shape (and, for the trapezoid, the ratio of top to base) beside its variance.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri, stdtrit

from budgets.errors import ComponentError

SHAPES: tuple[str, ...] = ("normal", "rectangular", "triangular", "trapezoidal", "arcsine")


def check_shape(shape: str, top_to_base_ratio: float | None = None) -> None:
    """Check the name of a shape and its ratio.

    Parameters
    ----------
    shape : str
        One of ``SHAPES``.
    top_to_base_ratio : float or None
        Of a trapezoid, from 0 (a triangle) to 1 (a rectangle); of no other shape.

    Raises
    ------
    ComponentError
        If it is not such.
    """
    if shape not in SHAPES:
        raise ComponentError(f"{shape!r} is none of {', '.join(SHAPES)}", where=("distribution",))
    if shape != "trapezoidal" and top_to_base_ratio is not None:
        raise ComponentError(f"a ratio of top to base is not of {shape}", where=("top_to_base_ratio",))
    if top_to_base_ratio is not None and not 0 <= top_to_base_ratio <= 1:
        raise ComponentError("the ratio of top to base lies from 0 to 1", where=("top_to_base_ratio",))


def relative_half_width(shape: str, top_to_base_ratio: float | None = None) -> float:
    """Return the half-width of a bounded distribution in standard uncertainties.

    Parameters
    ----------
    shape : str
        Bounded: not ``normal``.
    top_to_base_ratio : float or None
        Needed for a trapezoid.

    Returns
    -------
    float

    Raises
    ------
    ComponentError
        If the shape is not bounded, or the ratio is missing.

    Notes
    -----
    Source: JCGM 100:2008, 4.3.7, eq. (7), 4.3.9, eq. (9a) and (9b); JCGM 101:2008, 6.4.6 (from memory).

    Examples
    --------
    >>> round(relative_half_width("rectangular"), 6)
    1.732051
    """
    match shape:
        case "rectangular":
            return math.sqrt(3)
        case "triangular":
            return math.sqrt(6)
        case "arcsine":
            return math.sqrt(2)
        case "trapezoidal" if top_to_base_ratio is not None:
            return math.sqrt(6 / (1 + top_to_base_ratio**2))
    raise ComponentError(f"{shape} has no half-width here, or lacks its ratio", where=("distribution",))


def excess(shape: str, top_to_base_ratio: float | None = None) -> float:
    """Return the fourth central moment over u^4, less the 3 of the normal distribution.

    Parameters
    ----------
    shape : str
    top_to_base_ratio : float or None
        Needed for a trapezoid.

    Returns
    -------
    float

    Raises
    ------
    ComponentError
        If the ratio is missing.

    Notes
    -----
    A trapezoid is the sum of two rectangles of half-widths a (1 + b)/2 and a (1 - b)/2, b its ratio: fourth
    cumulants add. Source: moments of the distributions (from memory).
    """
    if shape != "trapezoidal":
        return {"normal": 0.0, "rectangular": -1.2, "triangular": -0.6, "arcsine": -1.5}[shape]
    if top_to_base_ratio is None:
        raise ComponentError("a trapezoid needs its ratio of top to base", where=("top_to_base_ratio",))
    wide, narrow = (1 + top_to_base_ratio) ** 2, (1 - top_to_base_ratio) ** 2
    return -1.2 * (wide**2 + narrow**2) / (wide + narrow) ** 2


def quantile(
    shape: str,
    probability: float,
    *,
    degrees_of_freedom: float = math.inf,
    top_to_base_ratio: float | None = None,
) -> float:
    """Return a quantile in standard uncertainties.

    Parameters
    ----------
    shape : str
    probability : float
        Between 0 and 1.
    degrees_of_freedom : float
        Of ``normal``: finite ones give Student's t.
    top_to_base_ratio : float or None
        Needed for a trapezoid.

    Returns
    -------
    float

    Raises
    ------
    ComponentError
        If the ratio is missing.

    Notes
    -----
    Source: JCGM 101:2008, 6.4 (from memory).
    """
    p = probability
    if shape == "normal":
        infinite = math.isinf(degrees_of_freedom)
        return float(ndtri(p) if infinite else stdtrit(degrees_of_freedom, p))
    a = relative_half_width(shape, top_to_base_ratio)
    if shape == "rectangular":
        return a * (2 * p - 1)
    if shape == "arcsine":
        return -a * math.cos(math.pi * p)
    # Triangle and trapezoid: a rising side, a flat top, a falling side.
    ratio = 0.0 if shape == "triangular" else (top_to_base_ratio or 0.0)
    tail = min(p, 1 - p)
    side = (1 - ratio) / (1 + ratio) / 2  # probability below the flat top
    if tail < side:
        inner = a * (1 - math.sqrt(2 * tail * (1 - ratio) * (1 + ratio)))
    else:
        inner = a * (1 + ratio) * (0.5 - tail)
    return -inner if p < 0.5 else inner


def draws(
    shape: str,
    standard_uncertainty: float,
    size: int | tuple[int, ...],
    generator: np.random.Generator,
    *,
    degrees_of_freedom: float = math.inf,
    top_to_base_ratio: float | None = None,
) -> NDArray[np.float64]:
    """Draw errors from a distribution.

    Parameters
    ----------
    shape : str
    standard_uncertainty : float
    size : int or tuple of int
    generator : numpy.random.Generator
    degrees_of_freedom : float
        Of ``normal``: finite ones give u times Student's t, whose standard deviation is larger than u.
    top_to_base_ratio : float or None
        Needed for a trapezoid.

    Returns
    -------
    ndarray

    Raises
    ------
    ComponentError
        If the ratio is missing.

    Notes
    -----
    Source: JCGM 101:2008, 6.4.2 to 6.4.9 (from memory).
    """
    if shape == "normal":
        if math.isinf(degrees_of_freedom):
            return standard_uncertainty * generator.standard_normal(size)
        return standard_uncertainty * generator.standard_t(degrees_of_freedom, size)
    a = standard_uncertainty * relative_half_width(shape, top_to_base_ratio)
    first = generator.random(size)
    if shape == "rectangular":
        return np.asarray(a * (2 * first - 1))
    if shape == "arcsine":
        return np.asarray(-a * np.cos(math.pi * first))
    ratio = 0.0 if shape == "triangular" else (top_to_base_ratio or 0.0)
    second = generator.random(size)
    return np.asarray(a / 2 * ((1 + ratio) * (2 * first - 1) + (1 - ratio) * (2 * second - 1)))
