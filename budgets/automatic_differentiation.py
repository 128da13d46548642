"""The expression computed on numbers of the package `uncertainties`: a second way to its derivatives."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from operator import add, mul, neg, pow, sub, truediv
from typing import Any

import uncertainties
from uncertainties import umath

from budgets.expression_values import refuse_value
from budgets.expressions import Step


def _smaller(a: Any, b: Any) -> Any:
    return a if uncertainties.nominal_value(a) <= uncertainties.nominal_value(b) else b


def _size(a: Any) -> Any:
    return a if uncertainties.nominal_value(a) >= 0 else -a


def _larger(a: Any, b: Any) -> Any:
    return b if _smaller(a, b) is a else a


_OPERATIONS: dict[str, Callable[..., Any]] = {
    "+": add,
    "-": sub,
    "*": mul,
    "/": truediv,
    "**": pow,
    "negative": neg,
    "sqrt": umath.sqrt,
    "exp": umath.exp,
    "ln": umath.log,
    "lg": umath.log10,
    "sin": umath.sin,
    "cos": umath.cos,
    "tan": umath.tan,
    "abs": _size,
    "min": _smaller,
    "max": _larger,
}


def uncertain_value(steps: Sequence[Step], inputs: Mapping[str, Any]) -> Any:
    """Return the value of an expression for uncertain numbers.

    Parameters
    ----------
    steps : sequence of Step
    inputs : mapping of str to UFloat or float
        Every name that the steps use.

    Returns
    -------
    UFloat or float

    Raises
    ------
    ModelError
        If an operation has no value there.
    """
    values: list[Any] = []
    for step in steps:
        if step.operation == "name":
            values.append(inputs[step.name])
        elif step.operation == "number":
            values.append(step.number)
        else:
            operands = [values[k] for k in step.operands]
            try:
                value = _OPERATIONS[step.operation](*operands)
            except (ArithmeticError, ValueError):
                refuse_value(step.operation, [uncertainties.nominal_value(a) for a in operands])
            if isinstance(value, complex):  # a root of a negative number
                refuse_value(step.operation, [uncertainties.nominal_value(a) for a in operands])
            values.append(value)
    return values[-1]
