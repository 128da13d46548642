"""Truncated Taylor polynomials in two directions: second and third derivatives of an expression.

Every quantity is a polynomial in s and t up to the third degree; the steps of the expression are computed on
polynomials. No differences are formed. One pass gives all derivatives that two quantities share.
"""

from __future__ import annotations

import decimal
from collections.abc import Mapping, Sequence
from decimal import Decimal

from budgets.errors import ModelError
from budgets.expression_values import CONTEXT, chosen_slopes, exact_values, refuse_value, sine_and_cosine
from budgets.expressions import Step

DEGREE = 3
Polynomial = dict[tuple[int, int], Decimal]

_ZERO, _ONE = Decimal(0), Decimal(1)


def _added(a: Polynomial, b: Polynomial, sign: int = 1) -> Polynomial:
    result = dict(a)
    for power, coefficient in b.items():
        result[power] = result.get(power, _ZERO) + sign * coefficient
    return result


def _multiplied(a: Polynomial, b: Polynomial) -> Polynomial:
    result: Polynomial = {}
    for (i, j), first in a.items():
        for (k, m), second in b.items():
            if i + j + k + m <= DEGREE:
                result[i + k, j + m] = result.get((i + k, j + m), _ZERO) + first * second
    return result


def _composed(series: Sequence[Decimal], inner: Polynomial) -> Polynomial:
    """Return f(inner), f given by its Taylor coefficients at the constant part of ``inner``."""
    rest = {power: coefficient for power, coefficient in inner.items() if power != (0, 0)}
    result: Polynomial = {(0, 0): series[-1]}
    for coefficient in reversed(series[:-1]):
        result = _added(_multiplied(result, rest), {(0, 0): coefficient})
    return result


def _power_series(a: Decimal, exponent: Decimal) -> list[Decimal]:
    """Return the Taylor coefficients of x**exponent at a: binomial(exponent, k) a**(exponent - k)."""
    series, factor = [], _ONE
    for k in range(DEGREE + 1):
        series.append(_ZERO if factor == 0 else factor * _power(a, exponent - k))
        factor = factor * (exponent - k) / (k + 1)
    return series


def _power(a: Decimal, exponent: Decimal) -> Decimal:
    return _ONE if exponent == 0 else CONTEXT.power(a, exponent)


def _series(operation: str, a: Decimal) -> list[Decimal]:
    two, six = Decimal(2), Decimal(6)
    match operation:
        case "sqrt":
            return _power_series(a, Decimal("0.5"))
        case "exp":
            value = CONTEXT.exp(a)
            return [value, value, value / two, value / six]
        case "ln":
            return [CONTEXT.ln(a), 1 / a, -1 / (two * a**2), 1 / (3 * a**3)]
        case "lg":
            scale = CONTEXT.ln(Decimal(10))
            return [CONTEXT.log10(a), *(part / scale for part in _series("ln", a)[1:])]
        case "sin":
            sine, cosine = sine_and_cosine(a)
            return [sine, cosine, -sine / two, -cosine / six]
        case "cos":
            sine, cosine = sine_and_cosine(a)
            return [cosine, -sine, -cosine / two, sine / six]
        case "tan":
            sine, cosine = sine_and_cosine(a)
            value = sine / cosine
            slope = 1 + value**2
            return [value, slope, value * slope, slope * (1 + 3 * value**2) / 3]
    if a == 0:
        raise ModelError("abs has no derivative exactly at the estimates", where=("estimates",))
    return [abs(a), _ONE if a > 0 else -_ONE, _ZERO, _ZERO]


def _computed(step: Step, operands: Sequence[Polynomial], constant: bool) -> Polynomial:
    operation, a = step.operation, operands[0]
    match operation:
        case "+":
            return _added(a, operands[1])
        case "-":
            return _added(a, operands[1], -1)
        case "*":
            return _multiplied(a, operands[1])
        case "/":
            return _multiplied(a, _composed(_power_series(operands[1][0, 0], -_ONE), operands[1]))
        case "negative":
            return _added({}, a, -1)
        case "**" if constant:
            return _composed(_power_series(a[0, 0], operands[1][0, 0]), a)
        case "**":
            logarithm = _multiplied(operands[1], _composed(_series("ln", a[0, 0]), a))
            return _composed(_series("exp", logarithm[0, 0]), logarithm)
        case "min" | "max":
            first, _ = chosen_slopes(operation, a[0, 0], operands[1][0, 0])
            return a if first else operands[1]
    return _composed(_series(operation, a[0, 0]), a)


def taylor_polynomial(
    steps: Sequence[Step], estimates: Mapping[str, float], first: str, second: str | None
) -> Polynomial:
    """Return the Taylor polynomial of an expression along two of its names.

    Parameters
    ----------
    steps : sequence of Step
    estimates : mapping of str to float
    first, second : str or None
        The names moved by s and by t.

    Returns
    -------
    dict
        ``(i, j)`` to the coefficient of ``s^i t^j``, up to the third degree.

    Raises
    ------
    ModelError
        If the expression has no such derivatives at the estimates.
    """
    exact_values(steps, estimates)  # an operation without a value is told in its own words
    polynomials: list[Polynomial] = []
    with decimal.localcontext(CONTEXT):
        for step in steps:
            if step.operation == "number":
                polynomials.append({(0, 0): Decimal(step.number)})
            elif step.operation == "name":
                own: Polynomial = {(0, 0): Decimal(estimates[step.name])}
                if step.name in (first, second):
                    own[(1, 0) if step.name == first else (0, 1)] = _ONE
                polynomials.append(own)
            else:
                operands = [polynomials[k] for k in step.operands]
                constant = steps[step.operands[-1]].constant
                try:
                    computed = _computed(step, operands, constant)
                except decimal.DecimalException:
                    computed = {(0, 0): Decimal("inf")}
                if not all(coefficient.is_finite() for coefficient in computed.values()):
                    refuse_value(f"a derivative of {step.operation}", [p[0, 0] for p in operands])
                polynomials.append(computed)
    return polynomials[-1]
