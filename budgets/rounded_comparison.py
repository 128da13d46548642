"""Estimates that are rounded before they are compared with a limit.

Comparing a rounded estimate with a limit is comparing the estimate itself with an effective limit half a unit
of the last place away. The effective limit is computed in decimals and turned into a double once. A double
equals it exactly when its shortest decimal does, and lies on the same side of it as its shortest decimal, so
that the comparison is that of the rounded decimals, to the last tie.
"""

from __future__ import annotations

import math
from decimal import Context, Decimal

from budgets.conformity import StatedLimits, Tolerance
from budgets.errors import LimitsError

_CONTEXT = Context(prec=400)
_HALF = Decimal("0.5")


def rounded_tolerance(
    lower: float | None,
    upper: float | None,
    *,
    decimals: int,
    lower_inclusive: bool = True,
    upper_inclusive: bool = True,
) -> Tolerance:
    """Return the tolerance that unrounded estimates meet exactly when the rounded ones meet the stated one.

    Parameters
    ----------
    lower, upper : float or None, unit of the characteristic
        As the specification states them.
    decimals : int
        Decimal places that estimates are rounded to, half to even.
    lower_inclusive, upper_inclusive : bool
        Whether a rounded estimate exactly at the limit is inside.

    Returns
    -------
    Tolerance
        With the effective limits; inclusive where the tie counts inside.

    Raises
    ------
    LimitsError
        If a limit is not finite, has more decimals than estimates are rounded to or too many digits, or if
        the limits leave nothing between them.

    Notes
    -----
    An inclusive upper limit T moves out to ``T + 0.5 10^-d``, and the tie counts inside when the last digit
    of T is even; a strict one moves in to ``T - 0.5 10^-d``, with the tie inside when that digit is odd. The
    lower limit is their mirror image. Source: ASTM E29 (rounding method; from memory).

    Examples
    --------
    >>> tolerance = rounded_tolerance(None, 3.2, decimals=1)
    >>> tolerance.upper, tolerance.upper_inclusive
    (3.25, True)
    >>> tolerance.holds(3.25), tolerance.holds(3.26)
    (True, False)
    """
    low, low_tie = _effective(lower, decimals, lower_inclusive, "lower")
    high, high_tie = _effective(upper, decimals, upper_inclusive, "upper")
    stated = StatedLimits(lower, upper, lower_inclusive, upper_inclusive, decimals)
    if low is not None and high is not None and not low < high:
        raise LimitsError(
            f"no number with {decimals} decimals lies between the limits {lower:g} and {upper:g}",
            where=("lower_tolerance_limit",),
        )
    return Tolerance(low, high, low_tie, high_tie, stated)


def without_averaging_noise(estimate: float) -> float:
    """Return an estimate with the fifteen significant digits that every double keeps.

    Parameters
    ----------
    estimate : float, unit of the characteristic

    Returns
    -------
    float
        A mean of decimals is off by a last digit or two: 9.6/3 is 3.1999999999999997. That would round a tie
        the wrong way, and put an estimate that lies at a strict limit inside of it.

    Examples
    --------
    >>> without_averaging_noise((3.1 + 3.2 + 3.3) / 3)
    3.2
    """
    return float(f"{estimate:.15g}")


def _effective(limit: float | None, decimals: int, inclusive: bool, side: str) -> tuple[float | None, bool]:
    """Return the effective limit, and whether the tie counts inside.

    Raises
    ------
    LimitsError
        As in `rounded_tolerance`.
    """
    if limit is None:
        return None, inclusive
    where = (f"{side}_tolerance_limit",)
    if not math.isfinite(limit):
        raise LimitsError(f"the {side} tolerance limit must be a finite number", where=where)
    stated = Decimal(repr(float(limit)))
    unit = Decimal(1).scaleb(-decimals)
    digits = stated / unit
    if digits != digits.to_integral_value(context=_CONTEXT):
        raise LimitsError(
            f"the {side} limit {limit} has more decimals than the {decimals} that estimates are rounded to",
            where=where,
        )
    outward = 1 if (side == "upper") == inclusive else -1
    exact = _CONTEXT.add(stated, outward * unit * _HALF)
    effective = float(exact)
    # Up to fifteen digits a decimal is the shortest one of its double.
    if Decimal(repr(effective)) != exact:
        raise LimitsError(f"the {side} limit {limit} has too many digits to be compared rounded", where=where)
    even = int(digits) % 2 == 0
    return effective, even == inclusive
