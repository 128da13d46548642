"""When a rule would accept nothing: what would open the acceptance interval."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NoReturn, TypeVar

from budgets.conformity import Tolerance, measurement_capability_index
from budgets.errors import EmptyAcceptanceError

Found = TypeVar("Found")

_SMALLEST_FACTOR = 1e-6
_STEPS = 20  # the factor is known to one part in a million then


def nothing_left(reason: str, remedy: str = "") -> NoReturn:
    """Refuse inside of `opened`.

    Parameters
    ----------
    reason : str
        Why no estimate can be accepted.
    remedy : str
        What would help where no smaller uncertainty does.

    Raises
    ------
    EmptyAcceptanceError
        Always.
    """
    raise EmptyAcceptanceError(reason, capability_index=None, remedy=remedy)


def opened(attempt: Callable[[float], Found], tolerance: Tolerance, standard_uncertainty: float) -> Found:
    """Return what an attempt gives, or refuse and say how small the uncertainty would have to be.

    Parameters
    ----------
    attempt : callable
        Takes a factor for all of the uncertainty; calls `nothing_left` where nothing is accepted.
    tolerance : Tolerance
    standard_uncertainty : float, unit of the characteristic

    Returns
    -------
    object
        ``attempt(1.0)``.

    Raises
    ------
    EmptyAcceptanceError
        With the reason, the capability index, and the largest uncertainty that would leave something.
    """
    try:
        return attempt(1.0)
    except EmptyAcceptanceError as error:
        largest = _largest_factor(attempt)
        remedy = error.remedy
        if largest is not None:
            u = _rounded_down(largest * standard_uncertainty)
            remedy = f"{remedy} The standard uncertainty would have to be at most {u:.4g}.".lstrip()
        index = measurement_capability_index(tolerance, standard_uncertainty)
        about = "" if index is None else f" (capability index {index:.3g})"
        raise EmptyAcceptanceError(
            f"no estimate can be accepted with a standard uncertainty of {standard_uncertainty:.4g}: "
            f"{error.message}; this measurement{about} cannot prove this specification. {remedy}",
            capability_index=index,
            remedy=remedy,
            where=error.where,
        ) from None


def _largest_factor(attempt: Callable[[float], object]) -> float | None:
    """Return the largest factor below 1 with which something is left; None where none helps."""

    def opens(factor: float) -> bool:
        try:
            attempt(factor)
        except EmptyAcceptanceError:
            return False
        return True

    low, high = _SMALLEST_FACTOR, 1.0
    if not opens(low):
        return None
    for _ in range(_STEPS):
        middle = math.sqrt(low * high) if high > 4 * low else (low + high) / 2
        low, high = (middle, high) if opens(middle) else (low, middle)
    return low


def _rounded_down(value: float) -> float:
    """Return a number above zero rounded down to four significant digits."""
    unit = 10.0 ** (math.floor(math.log10(value)) - 3)
    return math.floor(value / unit) * unit
