"""Values and first derivatives of an expression, step by step.

A single set of estimates is computed with 40 decimal digits and rounded once: a derivative that is the small
difference of large terms keeps all digits of a double. Arrays are the matter of `budgets.expression_arrays`.
Derivatives come from a backward sweep over the steps, with a rule for every operation.
"""

from __future__ import annotations

import decimal
from collections.abc import Callable, Mapping, Sequence
from decimal import Decimal
from typing import Any, NoReturn

from budgets.errors import ModelError
from budgets.expressions import Step

DIGITS = 40
CONTEXT = decimal.Context(
    prec=DIGITS,
    Emin=-100_000,
    Emax=100_000,
    traps=[decimal.InvalidOperation, decimal.DivisionByZero, decimal.Overflow],
)
_ZERO, _ONE, _TWO, _HALF = Decimal(0), Decimal(1), Decimal(2), Decimal("0.5")
_LN10 = CONTEXT.ln(Decimal(10))
# 100 digits: enough for arguments up to 1e50 with the digits that are kept.
_PI = Decimal(
    "3.141592653589793238462643383279502884197169399375105820974944592307816406286208998628034825342117068"
)
_WIDE = decimal.Context(prec=98)
_LARGEST_ANGLE = Decimal("1e15")


def sine_and_cosine(angle: Decimal) -> tuple[Decimal, Decimal]:
    """Return sine and cosine to the digits of this module.

    Parameters
    ----------
    angle : Decimal
        In radians, up to 1e15 in size.

    Returns
    -------
    tuple of Decimal

    Raises
    ------
    ModelError
        If the angle is larger.
    """
    if angle.copy_abs() > _LARGEST_ANGLE:
        raise ModelError(f"an angle of {float(angle):.3g} rad has no meaningful sine", where=("estimates",))
    # Reduce to at most pi/4 in size, then the power series.
    quarter_turns = int(_WIDE.divide(angle, _PI / 2).to_integral_value(context=_WIDE))
    rest = _WIDE.subtract(angle, _WIDE.multiply(Decimal(quarter_turns), _WIDE.divide(_PI, _TWO)))
    square = _WIDE.multiply(rest, rest)
    sine = term = rest
    cosine = other = _ONE
    with decimal.localcontext(CONTEXT) as context:
        context.prec = DIGITS + 10
        for k in range(1, 24):
            other *= -square / ((2 * k - 1) * (2 * k))
            cosine += other
            term *= -square / ((2 * k) * (2 * k + 1))
            sine += term
    minus_sine, minus_cosine = sine.copy_negate(), cosine.copy_negate()
    turned = ((sine, cosine), (cosine, minus_sine), (minus_sine, minus_cosine), (minus_cosine, sine))
    return turned[quarter_turns % 4]


def _tangent(angle: Decimal) -> Decimal:
    sine, cosine = sine_and_cosine(angle)
    return CONTEXT.divide(sine, cosine)


_EXACT: dict[str, Callable[..., Decimal]] = {
    "+": CONTEXT.add,
    "-": CONTEXT.subtract,
    "*": CONTEXT.multiply,
    "/": CONTEXT.divide,
    "**": CONTEXT.power,
    # The operators of Decimal would round to the digits of the thread's own context.
    "negative": Decimal.copy_negate,
    "sqrt": CONTEXT.sqrt,
    "exp": CONTEXT.exp,
    "ln": CONTEXT.ln,
    "lg": CONTEXT.log10,
    "sin": lambda a: sine_and_cosine(a)[0],
    "cos": lambda a: sine_and_cosine(a)[1],
    "tan": _tangent,
    "abs": Decimal.copy_abs,
    "min": min,
    "max": max,
}


def exact_values(steps: Sequence[Step], estimates: Mapping[str, float]) -> list[Decimal]:
    """Return the value of every step at one set of estimates.

    Parameters
    ----------
    steps : sequence of Step
    estimates : mapping of str to float
        Every name that the steps use.

    Returns
    -------
    list of Decimal
        The last one is the value of the expression.

    Raises
    ------
    ModelError
        If an operation has no value there (a logarithm of a negative number, a division by zero).
    """
    values: list[Decimal] = []
    for step in steps:
        operation = step.operation
        if operation == "name":
            values.append(Decimal(estimates[step.name]))
        elif operation == "number":
            values.append(Decimal(step.number))
        else:
            operands = [values[k] for k in step.operands]
            try:
                value = _EXACT[operation](*operands)
            except (decimal.DecimalException, ValueError):
                refuse_value(operation, operands)
            if not value.is_finite():
                refuse_value(operation, operands)
            values.append(value)
    return values


def refuse_value(operation: str, operands: Sequence[Any]) -> NoReturn:
    """Refuse an operation that has no value at the estimates.

    Raises
    ------
    ModelError
        Always.
    """
    shown = " and ".join(f"{float(operand):.6g}" for operand in operands)
    raise ModelError(
        f"{operation} of {shown} has no value: the model fails at the estimates", where=("estimates",)
    )


def _refuse_kink(operation: str) -> NoReturn:
    raise ModelError(
        f"{operation} has no derivative exactly at the estimates: no uncertainty can be propagated there",
        where=("estimates",),
    )


def chosen_slopes(operation: str, a: Decimal, b: Decimal) -> tuple[Decimal, Decimal]:
    """Return the derivatives of a minimum or maximum: 1 by the one chosen, 0 by the other."""
    if a == b:
        _refuse_kink(operation)
    return (_ONE, _ZERO) if (a < b) == (operation == "min") else (_ZERO, _ONE)


def _power_slopes(a: Decimal, b: Decimal, value: Decimal, constant: bool) -> tuple[Decimal, Decimal]:
    if b in (_ZERO, _ONE):  # 0**0 is no number, but x and a constant have their slopes at 0
        by_base = b
    else:
        by_base = CONTEXT.multiply(b, CONTEXT.power(a, CONTEXT.subtract(b, _ONE)))
    if constant:
        return by_base, _ZERO
    if a <= 0:
        # Real powers of a base that is not positive exist for single exponents only.
        raise ModelError(
            f"** of {float(a):.6g} with an exponent that is uncertain has no derivative", where=("estimates",)
        )
    return by_base, CONTEXT.multiply(value, CONTEXT.ln(a))


def _exact_slopes(
    step: Step, operands: Sequence[Decimal], value: Decimal, constant: bool
) -> tuple[Decimal, ...]:
    """Return the derivatives of one step by its operands. ``constant``: its last operand holds no name."""
    operation, a = step.operation, operands[0]
    match operation:
        case "+":
            return _ONE, _ONE
        case "-":
            return _ONE, -_ONE
        case "*":
            return operands[1], a
        case "/":
            return CONTEXT.divide(_ONE, operands[1]), CONTEXT.divide(value, operands[1]).copy_negate()
        case "**":
            return _power_slopes(a, operands[1], value, constant)
        case "negative":
            return (-_ONE,)
        case "sqrt":
            return (CONTEXT.divide(_HALF, value),)
        case "exp":
            return (value,)
        case "ln":
            return (CONTEXT.divide(_ONE, a),)
        case "lg":
            return (CONTEXT.divide(_ONE, CONTEXT.multiply(a, _LN10)),)
        case "sin":
            return (sine_and_cosine(a)[1],)
        case "cos":
            return (sine_and_cosine(a)[0].copy_negate(),)
        case "tan":
            return (CONTEXT.add(_ONE, CONTEXT.multiply(value, value)),)
        case "abs":
            if a == 0:
                _refuse_kink("abs")
            return (_ONE if a > 0 else -_ONE,)
    return chosen_slopes(operation, a, operands[1])


def exact_slopes(steps: Sequence[Step], values: Sequence[Decimal]) -> dict[str, Decimal]:
    """Return the derivatives of the expression by its names, by one backward sweep.

    Parameters
    ----------
    steps : sequence of Step
    values : sequence of Decimal
        As `exact_values` gives them.

    Returns
    -------
    dict of str to Decimal

    Raises
    ------
    ModelError
        If the expression has no derivative there (a square root of zero, a tie of a minimum).
    """
    slopes = [_ZERO] * len(steps)
    slopes[-1] = _ONE
    found: dict[str, Decimal] = {}
    for index in range(len(steps) - 1, -1, -1):
        step, slope = steps[index], slopes[index]
        if step.operation == "name":
            found[step.name] = slope
        if not step.operands or slope == 0:
            continue
        operands = [values[k] for k in step.operands]
        constant = steps[step.operands[-1]].constant
        try:
            local = _exact_slopes(step, operands, values[index], constant)
            for k, part in zip(step.operands, local, strict=True):
                slopes[k] = CONTEXT.fma(slope, part, slopes[k])
        except decimal.DecimalException:
            _refuse_kink(step.operation)
    return found
