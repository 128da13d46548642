"""Whether an expression has a value everywhere in a box, and not only at the points of a grid.

The box is cut into cells; the bounds of every step are computed for all cells at once by interval arithmetic.
Where the bounds of a cell reach what an operation cannot take, the model may have a pole or a gap there.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import NoReturn

import numpy as np
from numpy.typing import NDArray

from budgets.errors import ModelError
from budgets.expressions import Step

MOST_CELLS = 4096

Array = NDArray[np.float64]
Bounds = tuple[Array, Array]


def refuse_gaps(
    steps: Sequence[Step], ranges: Mapping[str, tuple[float, float]], given: Mapping[str, float]
) -> None:
    """Refuse an expression that may have no value, or no derivative, somewhere in a box.

    Parameters
    ----------
    steps : sequence of Step
    ranges : mapping of str to tuple of float
        Of the names that vary.
    given : mapping of str to float
        The others.

    Raises
    ------
    ModelError
        With the path ``("validated_box",)``: a division by zero, a root or logarithm of what is not above
        zero, or a pole of a tangent, or bounds that cannot exclude one.

    Notes
    -----
    Bounds of an interval hold for all of its points, so nothing is overlooked; cells that are too coarse may
    make a sound expression look unsound, but never the other way round. Source: interval arithmetic (Moore
    1966, from memory); rounding in the last digit is not bounded.
    """
    cells = _cells(ranges)
    bounds: list[Bounds] = []
    with np.errstate(all="ignore"):
        for step in steps:
            if step.operation == "number":
                bounds.append((np.asarray(step.number), np.asarray(step.number)))
            elif step.operation == "name":
                fixed = np.asarray(given.get(step.name, math.nan))
                bounds.append(cells.get(step.name, (fixed, fixed)))
            else:
                operands = [bounds[k] for k in step.operands]
                forbidden = _forbidden(step.operation, operands)
                if np.any(forbidden):
                    _refuse(step.operation, forbidden, cells)
                bounds.append(_computed(step.operation, operands))


def _cells(ranges: Mapping[str, tuple[float, float]]) -> dict[str, Bounds]:
    """Cut every side into equally many parts and return the bounds of all cells, by name."""
    parts = int(MOST_CELLS ** (1 / len(ranges)) + 1e-9)
    edges = [np.linspace(low, high, parts + 1) for low, high in ranges.values()]
    lower = np.meshgrid(*(edge[:-1] for edge in edges), indexing="ij")
    upper = np.meshgrid(*(edge[1:] for edge in edges), indexing="ij")
    return {name: (low.ravel(), high.ravel()) for name, low, high in zip(ranges, lower, upper, strict=True)}


def _refuse(operation: str, forbidden: NDArray[np.bool_], cells: Mapping[str, Bounds]) -> NoReturn:
    place = int(np.argmax(forbidden))
    where = ", ".join(
        f"{name} = {low[place]:.6g} to {high[place]:.6g}" for name, (low, high) in cells.items()
    )
    raise ModelError(
        f"{operation} may have no value within the validated ranges, at {where}: the model has a pole or a "
        "gap there, or cannot be shown to have none",
        where=("validated_box",),
    )


def _holds(bounds: Bounds, value: float) -> NDArray[np.bool_]:
    return (bounds[0] <= value) & (bounds[1] >= value)


def _whole_number(bounds: Bounds) -> int | None:
    """Return an exponent that is one whole number for all cells, else None."""
    low, high = bounds
    one = low.size == 1 and bool(low == high) and float(low.item()).is_integer()
    return int(low.item()) if one else None


def _forbidden(operation: str, operands: Sequence[Bounds]) -> NDArray[np.bool_]:
    first, last = operands[0], operands[-1]
    if operation == "/":
        return _holds(last, 0.0)
    if operation in ("sqrt", "ln", "lg"):
        return np.asarray(first[0] <= 0)
    if operation == "tan":
        return _reaches(first, math.pi / 2, math.pi)
    if operation == "**":
        exponent = _whole_number(last)
        if exponent is None:
            return np.asarray(first[0] <= 0)
        return _holds(first, 0.0) if exponent < 0 else np.asarray(False)
    return np.asarray(False)


def _reaches(bounds: Bounds, start: float, period: float) -> NDArray[np.bool_]:
    """Say in which cells one of ``start + k period`` lies."""
    return np.asarray(np.floor((bounds[1] - start) / period) >= np.ceil((bounds[0] - start) / period))


def _around(*candidates: Array) -> Bounds:
    return np.minimum.reduce(np.broadcast_arrays(*candidates)), np.maximum.reduce(
        np.broadcast_arrays(*candidates)
    )


def _computed(operation: str, operands: Sequence[Bounds]) -> Bounds:
    (a, b), (c, d) = operands[0], operands[-1]
    match operation:
        case "+":
            return a + c, b + d
        case "-":
            return a - d, b - c
        case "*":
            return _around(a * c, a * d, b * c, b * d)
        case "/":
            return _around(a / c, a / d, b / c, b / d)
        case "**":
            return _power(operands[0], operands[1])
        case "negative":
            return -b, -a
        case "abs":
            low, high = _around(np.abs(a), np.abs(b))
            return np.where(_holds((a, b), 0.0), 0.0, low), high
        case "min":
            return np.minimum(a, c), np.minimum(b, d)
        case "max":
            return np.maximum(a, c), np.maximum(b, d)
        case "sin":
            return _sine(a, b)
        case "cos":
            return _sine(a + math.pi / 2, b + math.pi / 2)
    # What is left rises with its argument.
    rising = {"sqrt": np.sqrt, "exp": np.exp, "ln": np.log, "lg": np.log10, "tan": np.tan}[operation]
    return np.asarray(rising(a)), np.asarray(rising(b))


def _power(base: Bounds, exponent: Bounds) -> Bounds:
    whole = _whole_number(exponent)
    candidates = [np.power(x, y) for x in base for y in exponent]
    low, high = _around(*candidates)
    if whole is not None and whole > 0 and whole % 2 == 0:
        low = np.where(_holds(base, 0.0), 0.0, low)
    return low, high


def _sine(a: Array, b: Array) -> Bounds:
    low, high = _around(np.sin(a), np.sin(b))
    low = np.where(_reaches((a, b), -math.pi / 2, 2 * math.pi), -1.0, low)
    return low, np.where(_reaches((a, b), math.pi / 2, 2 * math.pi), 1.0, high)
