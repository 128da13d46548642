"""Searches for a limit: where a risk is least, and where it reaches what is allowed."""

from __future__ import annotations

from collections.abc import Callable

from scipy.optimize import brentq, minimize_scalar

_FULL_PRECISION = 4 * 2.220446049250313e-16


def least_between(excess: Callable[[float], float], first: float, last: float) -> float:
    """Return where an excess risk with one valley is least.

    Parameters
    ----------
    excess : callable
    first, last : float
        Ends of the search; where they have crossed, ``first`` is returned.

    Returns
    -------
    float
    """
    if not first < last:
        return first
    found = minimize_scalar(excess, bounds=(first, last), method="bounded")
    return min((float(found.x), first, last), key=excess)


def limit_between(excess: Callable[[float], float], inside: float, outside: float) -> float:
    """Return how far an excess risk stays at or below zero.

    Parameters
    ----------
    excess : callable
        Not above zero at ``inside``, and growing from there on.
    inside, outside : float
        Either may be the larger one.

    Returns
    -------
    float
        ``outside`` where the excess is not above zero there either; else the root, to the last digits.
    """
    if excess(outside) <= 0:
        return outside
    if excess(inside) >= 0:
        return inside
    return float(brentq(excess, inside, outside, xtol=_FULL_PRECISION, rtol=_FULL_PRECISION))
