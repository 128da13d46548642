"""Values and first derivatives of an expression for arrays of estimates, in double precision."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from typing import Any, NoReturn

import numpy as np
from numpy.typing import NDArray

from budgets.errors import ModelError
from budgets.expression_values import refuse_value
from budgets.expressions import Step

Array = NDArray[np.float64]


def array_values(steps: Sequence[Step], estimates: Mapping[str, Array]) -> list[Array]:
    """Return the value of every step at many sets of estimates.

    Parameters
    ----------
    steps : sequence of Step
    estimates : mapping of str to ndarray
        Arrays that broadcast against each other.

    Returns
    -------
    list of ndarray

    Raises
    ------
    ModelError
        If an operation has no finite value somewhere.
    """
    values: list[Array] = []
    with np.errstate(all="ignore"):
        for step in steps:
            if step.operation == "name":
                values.append(estimates[step.name])
            elif step.operation == "number":
                values.append(np.asarray(step.number))
            else:
                value = _ARRAYS[step.operation](*(values[k] for k in step.operands))
                if not np.isfinite(value).all():
                    _refuse_first(step, [values[k] for k in step.operands], value)
                values.append(value)
    return values


def _refuse_first(step: Step, operands: Sequence[Array], value: Array) -> NoReturn:
    place = int(np.argmax(~np.isfinite(value)))
    refuse_value(step.operation, [np.broadcast_to(a, value.shape).ravel()[place] for a in operands])


_ARRAYS: dict[str, Callable[..., Any]] = {
    "+": np.add,
    "-": np.subtract,
    "*": np.multiply,
    "/": np.divide,
    "**": np.power,
    "negative": np.negative,
    "sqrt": np.sqrt,
    "exp": np.exp,
    "ln": np.log,
    "lg": np.log10,
    "sin": np.sin,
    "cos": np.cos,
    "tan": np.tan,
    "abs": np.abs,
    "min": np.minimum,
    "max": np.maximum,
}


def _array_slopes(step: Step, operands: Sequence[Array], value: Array, constant: bool) -> tuple[Any, ...]:
    operation, a = step.operation, operands[0]
    match operation:
        case "+":
            return 1.0, 1.0
        case "-":
            return 1.0, -1.0
        case "*":
            return operands[1], a
        case "/":
            return 1.0 / operands[1], -value / operands[1]
        case "**":
            exponent = operands[1]
            by_base = np.where(exponent == 0, 0.0, exponent * np.power(a, exponent - 1))
            return by_base, 0.0 if constant else value * np.log(a)
        case "negative":
            return (-1.0,)
        case "sqrt":
            return (0.5 / value,)
        case "exp":
            return (value,)
        case "ln":
            return (1.0 / a,)
        case "lg":
            return (1.0 / (a * math.log(10)),)
        case "sin":
            return (np.cos(a),)
        case "cos":
            return (-np.sin(a),)
        case "tan":
            return (1.0 + value * value,)
        case "abs":
            return (np.where(a == 0, np.nan, np.sign(a)),)
    first = np.where(a == operands[1], np.nan, (value == a).astype(float))
    return first, 1.0 - first


def array_slopes(steps: Sequence[Step], values: Sequence[Array]) -> dict[str, Array]:
    """Return the derivatives of the expression by its names at many sets of estimates.

    Parameters
    ----------
    steps : sequence of Step
    values : sequence of ndarray
        As `array_values` gives them.

    Returns
    -------
    dict of str to ndarray
        Arrays that broadcast against the value.

    Raises
    ------
    ModelError
        If there is no finite derivative somewhere.
    """
    slopes: list[Any] = [None] * len(steps)
    slopes[-1] = 1.0
    found: dict[str, Array] = {}
    with np.errstate(all="ignore"):
        for index in range(len(steps) - 1, -1, -1):
            step, slope = steps[index], slopes[index]
            if step.operation == "name":
                found[step.name] = np.asarray(slope)
            if not step.operands:
                continue
            constant = steps[step.operands[-1]].constant
            local = _array_slopes(step, [values[k] for k in step.operands], values[index], constant)
            for k, part in zip(step.operands, local, strict=True):
                slopes[k] = slope * part if slopes[k] is None else slopes[k] + slope * part
    for name, slope in found.items():
        if not np.isfinite(slope).all():
            raise ModelError(
                f"the model has no derivative by {name} at some of the estimates", where=("estimates",)
            )
    return found
