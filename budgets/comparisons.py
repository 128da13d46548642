"""Two versions of a budget, line by line."""

from __future__ import annotations

from dataclasses import dataclass, replace

from budgets.explanations import Explanation, Limits
from budgets.linear_propagation import Line
from budgets.propagation import Contribution


@dataclass(frozen=True)
class ComponentChange:
    """One line of a comparison.

    Parameters
    ----------
    code : str
    before, after : Contribution or None
        None where the component is new or gone.
    acceptance_limits : Limits or None
        Of the old budget with this line alone changed; None without a decision rule, or where the line
        belongs to a quantity that the old model does not have.
    moves_lower_limit_by, moves_upper_limit_by : float or None
        From the acceptance limits of the old budget to those.
    """

    code: str
    before: Contribution | None
    after: Contribution | None
    acceptance_limits: Limits | None
    moves_lower_limit_by: float | None
    moves_upper_limit_by: float | None

    @property
    def changed(self) -> bool:
        """Whether anything of the line changed that counts in the result."""
        if self.before is None or self.after is None:
            return True
        one, other = self.before, self.after
        return (one.component, one.weight, one.sensitivity_coefficient) != (
            other.component,
            other.weight,
            other.sensitivity_coefficient,
        )


@dataclass(frozen=True)
class Comparison:
    """Two budgets and their lines: those of the old one in its order, new ones behind them."""

    before: Explanation
    after: Explanation
    changes: tuple[ComponentChange, ...]


def compare(before: Explanation, after: Explanation) -> Comparison:
    """Compare two explanations line by line.

    Parameters
    ----------
    before, after : Explanation
        Of two versions of a budget.

    Returns
    -------
    Comparison
        The effects of single lines need not add up to that of all of them.
    """
    old = {item.contribution.component.code: item.contribution for item in before.components}
    new = {item.contribution.component.code: item.contribution for item in after.components}
    lines = {line.code: line for line in after.basis.law.lines}
    changes = []
    for code in dict.fromkeys([*old, *new]):
        limits = _limits_with(before, code, lines.get(code))
        lower, upper = (_difference(before.acceptance_limits, limits, side) for side in ("lower", "upper"))
        changes.append(ComponentChange(code, old.get(code), new.get(code), limits, lower, upper))
    return Comparison(before, after, tuple(changes))


def _limits_with(before: Explanation, code: str, line: Line | None) -> Limits | None:
    """Return the acceptance limits of the old budget with one line as it is in the new one."""
    basis = before.basis
    if line is not None and not {*line.inputs, line.relative_to} <= set(basis.coefficients):
        return None
    kept = [own for own in basis.law.lines if own.code != code]
    law = replace(basis.law, lines=tuple(kept if line is None else [*kept, line]))
    return basis.alternative(law).acceptance_limits


def _difference(before: Limits | None, after: Limits | None, side: str) -> float | None:
    if before is None or after is None:
        return None
    first, second = getattr(before, side), getattr(after, side)
    return None if first is None or second is None else float(second - first)
