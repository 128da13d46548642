"""Arithmetic expressions over named quantities, read from text against a whitelist. Nothing is ever run.

The text becomes a list of steps, each an operation on earlier steps; equal subexpressions are one step. The
list is what everything else works on: values, derivatives, dimensions.
"""

from __future__ import annotations

import ast
import keyword
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

from budgets.errors import ModelError, Path

LONGEST_TEXT = 2000
GREATEST_DEPTH = 100
MOST_STEPS = 400

# Names of ISO 80000-2 for the functions of one argument; min and max take two or more.
FUNCTIONS: tuple[str, ...] = ("sqrt", "exp", "ln", "lg", "sin", "cos", "tan", "abs")
CHOICES: tuple[str, ...] = ("min", "max")
_OPERATORS: dict[type[ast.operator], str] = {
    ast.Add: "+",
    ast.Sub: "-",
    ast.Mult: "*",
    ast.Div: "/",
    ast.Pow: "**",
}
_ALLOWED = (
    f"names (in quotes where they hold a hyphen), numbers, + - * / **, and {', '.join(FUNCTIONS + CHOICES)}"
)
_WHERE: Path = ("expression",)
# No letter may follow a number: 0x10, 1j, 1_000 and 1if are nothing that a form should hold.
_TOKENS = re.compile(
    r"(?:'[\w-]+'|\d+\.?\d*(?:[eE][+-]?\d+)?(?![\w.])|\.\d+(?:[eE][+-]?\d+)?(?![\w.])|[A-Za-z_]\w*|[-+*/(),.\s])*",
    re.ASCII,
)
_NAME = re.compile(r"\w[\w-]{0,62}", re.ASCII)


@dataclass(frozen=True)
class Step:
    """One operation: ``number``, ``name``, an operator, ``negative`` or a function.

    Parameters
    ----------
    operation : str
    operands : tuple of int
        Numbers of earlier steps.
    number : float
        Of a ``number``.
    name : str
        Of a ``name``.
    constant : bool
        Whether no name stands below it.
    """

    operation: str
    operands: tuple[int, ...] = ()
    number: float = 0.0
    name: str = ""
    constant: bool = False


@dataclass(frozen=True)
class Expression:
    """A checked expression: its text, its steps in order of computation, the names it uses."""

    text: str
    steps: tuple[Step, ...]
    names: tuple[str, ...]


class _Reader:
    """Walks a syntax tree once, refusing whatever is not arithmetic."""

    def __init__(self, known: Sequence[str]) -> None:
        self.known = known
        self.steps: dict[Step, int] = {}

    def add(self, operation: str, *operands: int) -> int:
        made = list(self.steps)
        return self.step(Step(operation, operands, constant=all(made[k].constant for k in operands)))

    def step(self, step: Step) -> int:
        if step not in self.steps and len(self.steps) >= MOST_STEPS:
            raise ModelError(f"the expression has more than {MOST_STEPS} operations", where=_WHERE)
        return self.steps.setdefault(step, len(self.steps))

    def read(self, node: ast.expr, depth: int) -> int:
        if depth > GREATEST_DEPTH:
            raise ModelError(f"the expression is nested deeper than {GREATEST_DEPTH} levels", where=_WHERE)
        if isinstance(node, ast.Constant) and isinstance(node.value, str):
            return self._name(node.value)
        if isinstance(node, ast.Constant):
            return self.step(Step("number", number=_number(node), constant=True))
        if isinstance(node, ast.Name):
            return self._name(node.id)
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, (ast.UAdd, ast.USub)):
            operand = self.read(node.operand, depth + 1)
            return operand if isinstance(node.op, ast.UAdd) else self.add("negative", operand)
        if isinstance(node, ast.BinOp) and type(node.op) in _OPERATORS:
            left, right = self.read(node.left, depth + 1), self.read(node.right, depth + 1)
            return self.add(_OPERATORS[type(node.op)], left, right)
        if isinstance(node, ast.Call):
            return self._call(node, depth)
        raise ModelError(f"{_shown(node)} is not arithmetic; an expression may hold {_ALLOWED}", where=_WHERE)

    def _name(self, name: str) -> int:
        if name not in self.known:
            raise ModelError(
                f"the expression names {name[:40]!r}, which is no quantity of the model; "
                f"there are {', '.join(self.known)}",
                where=_WHERE,
            )
        return self.step(Step("name", name=name))

    def _call(self, node: ast.Call, depth: int) -> int:
        name = node.func.id if isinstance(node.func, ast.Name) else None
        if name not in FUNCTIONS + CHOICES or node.keywords:
            raise ModelError(
                f"{_shown(node)} is not arithmetic; the functions are {', '.join(FUNCTIONS + CHOICES)}",
                where=_WHERE,
            )
        assert name is not None  # it is one of the functions
        if name in FUNCTIONS and len(node.args) != 1:
            raise ModelError(f"{name} takes one argument, not {len(node.args)}", where=_WHERE)
        if name in CHOICES and len(node.args) < 2:
            raise ModelError(f"{name} takes two or more arguments, not {len(node.args)}", where=_WHERE)
        operands = [self.read(argument, depth + 1) for argument in node.args]
        if name in FUNCTIONS:
            return self.add(name, operands[0])
        chosen = operands[0]
        for operand in operands[1:]:
            chosen = self.add(name, chosen, operand)
        return chosen


def _number(node: ast.Constant) -> float:
    value = node.value
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise ModelError(f"{_shown(node)} is not arithmetic; an expression may hold {_ALLOWED}", where=_WHERE)
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise ModelError("a number in the expression is too large", where=_WHERE)
    return number


def _shown(node: ast.expr) -> str:
    return {
        ast.Attribute: "an attribute (a name with a dot)",
        ast.Call: "this call",
        ast.BinOp: "//",
    }.get(type(node), f"a part of the kind {type(node).__name__}")


def is_name(text: str) -> bool:
    """Say whether a text can name a quantity in an expression; one with a hyphen stands there in quotes.

    Examples
    --------
    >>> is_name("moisture"), is_name("solids-not-fat"), is_name("exp"), is_name("solids not fat")
    (True, True, False, False)
    """
    return bool(_NAME.fullmatch(text)) and text not in FUNCTIONS + CHOICES and not keyword.iskeyword(text)


def parse(text: str, known: Sequence[str]) -> Expression:
    """Read an expression.

    Parameters
    ----------
    text : str
        Names, numbers, ``+ - * / **`` and the functions of `FUNCTIONS` and `CHOICES`; at most
        2,000 characters, 100 levels of nesting and 400 operations. Single quotes around a name that holds
        a hyphen tell it from a difference.
    known : sequence of str
        Names of the quantities of the model.

    Returns
    -------
    Expression

    Raises
    ------
    ModelError
        If the text is not such an expression or names an unknown quantity.

    Examples
    --------
    >>> parse("protein / (1 - moisture/100)", ("protein", "moisture")).names
    ('protein', 'moisture')
    >>> parse("protein / ('total-solids'/100)", ("protein", "total-solids")).names
    ('protein', 'total-solids')
    """
    if not text.strip():
        raise ModelError("the expression is empty", where=_WHERE)
    if len(text) > LONGEST_TEXT:
        raise ModelError(f"the expression is longer than {LONGEST_TEXT} characters", where=_WHERE)
    if not _TOKENS.fullmatch(text):
        raise ModelError(f"the expression holds something else than {_ALLOWED}", where=_WHERE)
    try:
        tree = ast.parse(text.strip(), mode="eval")
    except (SyntaxError, ValueError, RecursionError, MemoryError) as error:
        reason = error.msg if isinstance(error, SyntaxError) else "it is nested too deeply or unreadable"
        raise ModelError(f"the expression cannot be read: {reason}", where=_WHERE) from error
    reader = _Reader(known)
    reader.read(tree.body, 0)
    # The whole contains every part, so it is the step made last.
    steps = tuple(reader.steps)
    names = tuple(dict.fromkeys(step.name for step in steps if step.operation == "name"))
    if not names:
        raise ModelError("the expression names no quantity", where=_WHERE)
    return Expression(text.strip(), steps, names)
