"""Units of an expression: what may be added, and what a function may be taken of.

An expression computes with the numerical values of its quantities in their stated units. So the terms of a
sum must have one dimension and one unit; multiplying by a plain number may change the unit (``moisture/100``
turns a percentage into a fraction) but never the dimension.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from budgets.errors import UnitsError
from budgets.expressions import Step
from budgets.units import dimension

_TRANSCENDENTAL = ("exp", "ln", "lg", "sin", "cos", "tan")


@dataclass(frozen=True)
class _Dimension:
    """Exponents of base dimensions; the unit's scale, None where a plain number may have changed it."""

    exponents: Mapping[str, float]
    scale: float | None
    offset: bool = False

    @property
    def is_plain(self) -> bool:
        return not self.exponents and self.scale in (None, 1.0)


_NUMBER = _Dimension({}, None)


def check_dimensions(steps: Sequence[Step], units: Mapping[str, str], result: str) -> None:
    """Check the units of an expression.

    Parameters
    ----------
    steps : sequence of Step
    units : mapping of str to str
        Unit of every name.
    result : str
        Unit in which the value of the expression is given.

    Raises
    ------
    UnitsError
        If a unit is unknown, terms of a sum have different units, or the result has another one.
    """
    found: list[_Dimension] = []
    for step in steps:
        if step.operation == "number":
            found.append(_NUMBER)
        elif step.operation == "name":
            found.append(_of_unit(units[step.name]))
        else:
            exponent = _constant_value(steps, step.operands[-1])
            found.append(_of_step(step.operation, [found[k] for k in step.operands], exponent))
    if not _agree(found[-1], _of_unit(result)):
        raise UnitsError(
            f"the expression does not give {result}, the unit of its result", where=("expression",)
        )


def _of_unit(unit: str) -> _Dimension:
    known = dimension(unit)
    return _Dimension(dict(known.exponents), known.scale, known.has_offset)


def _constant_value(steps: Sequence[Step], index: int) -> float | None:
    step = steps[index]
    if step.operation == "number":
        return step.number
    if step.operation == "negative":
        value = _constant_value(steps, step.operands[0])
        return None if value is None else -value
    if step.operation == "/" and step.constant:
        values = [_constant_value(steps, k) for k in step.operands]
        return None if None in values or not values[1] else (values[0] or 0.0) / values[1]
    return None


def _of_step(operation: str, operands: Sequence[_Dimension], exponent: float | None) -> _Dimension:
    first, last = operands[0], operands[-1]
    if operation in ("negative", "abs"):
        return first
    if operation in ("+", "-", "min", "max"):
        return _of_sum(operation, first, last)
    if any(operand.offset for operand in operands):
        raise UnitsError(
            f"{operation}: a temperature with an offset can only be added or subtracted; take kelvin",
            where=("expression",),
        )
    if operation in ("*", "/"):
        sign = 1 if operation == "*" else -1
        scales = (first.scale, last.scale)
        scale = None if None in scales else (first.scale or 1.0) * (last.scale or 1.0) ** sign
        return _raised(first, 1.0, _raised(last, float(sign), _NUMBER), scale)
    if operation == "sqrt":
        return _raised(first, 0.5, _NUMBER, None if first.scale is None else math.sqrt(first.scale))
    if operation == "**":
        return _of_power(first, last, exponent)
    if not first.is_plain:
        raise UnitsError(
            f"{operation} is taken of a plain number; divide by the unit first", where=("expression",)
        )
    return _Dimension({}, 1.0)


def _of_sum(operation: str, first: _Dimension, last: _Dimension) -> _Dimension:
    if not _agree(first, last):
        raise UnitsError(
            f"{operation}: the two sides have different units; convert one of them, and give a number that "
            "has a unit as a quantity",
            where=("expression",),
        )
    if first.offset and last.offset and operation == "+":
        raise UnitsError("+: two temperatures with an offset cannot be added", where=("expression",))
    offset = (first.offset or last.offset) and not (operation == "-" and first.offset and last.offset)
    return _Dimension(first.exponents, first.scale if last.scale is None else last.scale, offset)


def _of_power(base: _Dimension, power: _Dimension, exponent: float | None) -> _Dimension:
    if not power.is_plain:
        raise UnitsError("**: the exponent must be a plain number", where=("expression",))
    if exponent is not None:
        return _raised(base, exponent, _NUMBER, None if base.scale is None else base.scale**exponent)
    if not base.is_plain:
        raise UnitsError("**: a quantity with a unit needs a number as exponent", where=("expression",))
    return _Dimension({}, None)


def _raised(base: _Dimension, power: float, times: _Dimension, scale: float | None = None) -> _Dimension:
    exponents = dict(times.exponents)
    for name, exponent in base.exponents.items():
        exponents[name] = exponents.get(name, 0.0) + power * exponent
    return _Dimension({name: value for name, value in exponents.items() if value}, scale)


def _agree(first: _Dimension, second: _Dimension) -> bool:
    if first.exponents != second.exponents:
        return False
    if first.scale is None or second.scale is None:
        return True
    return math.isclose(first.scale, second.scale, rel_tol=1e-12)
