"""Analysis of variance of two crossed factors, balanced or not."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from budgets.errors import EvidenceError, NotSupportedError
from budgets.evidence.sums import grouped, mean, sum_of_squares
from budgets.evidence.variance_components import Line, check_residual, with_effective_freedom

Array = NDArray[np.float64]

INTERACTION = "interaction"
# Dense matrices over the cells are decomposed: so many take a second.
MOST_CELLS = 500


def crossed_lines(
    factors: tuple[str, str], labels: Sequence[tuple[str, ...]], values: Sequence[float]
) -> tuple[tuple[Line, ...], bool]:
    """Return the analysis of variance of two crossed factors with their interaction.

    Parameters
    ----------
    factors : tuple of str
        Names of the two sources, in the order in which they are fitted.
    labels : sequence of tuple of str, shape (n,)
        The level of each factor.
    values : sequence of float, shape (n,), unit of the characteristic
        Best without a common offset.

    Returns
    -------
    tuple of (tuple of Line, bool)
        Lines of the two factors, the interaction and the residual; without replicates the interaction is the
        residual. And whether the data are balanced.

    Raises
    ------
    EvidenceError
        If a factor has one level, or the levels were combined too seldom to tell the factors apart, or
        nothing is left to scatter.
    NotSupportedError
        For more than `MOST_CELLS` combinations.

    Notes
    -----
    Sequential (type I) sums of squares ``y'P_t y`` over cell means weighted with the root of their numbers;
    the coefficient of a component with the design matrix Z in the expected mean square is
    ``tr Z'P_t Z / df``. Source: Henderson's method 3, Biometrics 9 (1953); Searle, Casella and McCulloch,
    Variance Components (1992), 5.5 (from memory).
    """
    cells = grouped([(a, b) for a, b in labels], values)
    if len(cells) > MOST_CELLS:
        raise NotSupportedError(
            f"{len(cells)} combinations of two crossed factors, more than {MOST_CELLS}", where=("rows",)
        )
    roots = np.sqrt([len(own) for own in cells.values()])
    columns = [_columns([cell[k] for cell in cells], roots) for k in (0, 1)]
    y = roots * np.array([mean(own) for own in cells.values()])
    bases = _bases(roots, columns)
    for name, basis in zip((*factors, INTERACTION), bases, strict=True):
        if basis.shape[1] == 0:
            raise EvidenceError(
                f"{name} cannot be told from the rest: each factor needs at least two levels, combined with "
                "several of the other",
                where=("rows",),
            )
    within = math.fsum(sum_of_squares(own) for own in cells.values())
    replicates = len(values) - len(cells)
    designs = [*columns, np.diag(roots), np.eye(len(cells))]
    names = [*factors, INTERACTION, "repeatability"]
    if replicates == 0:
        # One value per cell: the interaction cannot be told from the repeatability.
        designs.pop(2)
        names = [*factors, "residual"]
    lines = [_line(name, basis, y, designs) for name, basis in zip(names, bases, strict=False)]
    if replicates:
        last = (0.0,) * 3 + (1.0,)
        lines.append(Line(names[-1], within, replicates, last, replicates))
    check_residual(lines)
    number = {len(own) for own in cells.values()}
    balanced = len(number) == 1 and len(cells) == columns[0].shape[1] * columns[1].shape[1]
    if balanced:
        return tuple(lines), True

    def spreads(components: Sequence[float]) -> list[float]:
        covariance = sum(c * z @ z.T for c, z in zip(components, designs, strict=True))
        return [float(np.sum((q.T @ covariance @ q) ** 2)) for q in bases[: len(lines) - 1]]

    return with_effective_freedom(lines, spreads), False


def _columns(levels: Sequence[str], roots: Array) -> Array:
    """Return the design matrix of one factor over the cells."""
    names = list(dict.fromkeys(levels))
    matrix = np.zeros((len(levels), len(names)))
    matrix[range(len(levels)), [names.index(level) for level in levels]] = roots
    return matrix


def _bases(roots: Array, columns: Sequence[Array]) -> list[Array]:
    """Return orthonormal bases of what each factor, and then the interaction, adds."""
    taken = (roots / np.linalg.norm(roots))[:, None]
    bases = []
    for matrix in (*columns, np.eye(len(roots))):
        rest = matrix / np.linalg.norm(matrix, axis=0)
        for _ in range(2):  # twice is enough to be orthogonal to the last bit
            rest = rest - taken @ (taken.T @ rest)
        left, sizes, _ = np.linalg.svd(rest, full_matrices=False)
        basis = left[:, sizes > 1e-9]
        bases.append(basis)
        taken = np.hstack([taken, basis])
    return bases


def _line(name: str, basis: Array, y: Array, designs: Sequence[Array]) -> Line:
    freedom = basis.shape[1]
    traces = [float(np.sum((basis.T @ z) ** 2)) / freedom for z in designs[:-1]]
    # What was fitted before is orthogonal: its trace is the rounding of a zero.
    expectation = (*(trace if trace > 1e-9 else 0.0 for trace in traces), 1.0)
    squares = float(np.sum((basis.T @ y) ** 2))
    # So is the square of what additive data leave.
    kept = squares if squares > 1e-24 * float(y @ y) else 0.0
    return Line(name, kept, freedom, expectation, freedom)
