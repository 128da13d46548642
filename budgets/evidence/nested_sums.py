"""Analysis of variance of nested groups, balanced or not: sums of squares and their expectations."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from budgets.errors import EvidenceError
from budgets.evidence.sums import grouped, mean, sum_of_squares
from budgets.evidence.variance_components import Line, check_residual, with_effective_freedom

Path = tuple[str, ...]


@dataclass(frozen=True)
class _Layer:
    """The groups of one factor: how many values each holds, and its mean."""

    sizes: dict[Path, int]
    means: dict[Path, float]

    def inside(self, depth: int) -> dict[Path, list[Path]]:
        """Return the groups by the group of another depth that they lie in."""
        found: dict[Path, list[Path]] = {}
        for group in self.sizes:
            found.setdefault(group[:depth], []).append(group)
        return found


def nested_lines(
    factors: Sequence[str], labels: Sequence[Path], values: Sequence[float]
) -> tuple[tuple[Line, ...], bool]:
    """Return the analysis of variance of nested groups.

    Parameters
    ----------
    factors : sequence of str
        Names of the sources, outermost first; the residual is added.
    labels : sequence of tuple of str, shape (n,)
        One label per factor; equal labels in different outer groups are different groups.
    values : sequence of float, shape (n,), unit of the characteristic
        Best without a common offset.

    Returns
    -------
    tuple of (tuple of Line, bool)
        The lines, and whether the data are balanced.

    Raises
    ------
    EvidenceError
        If a factor does not vary within the one outside it, nothing was repeated within the innermost, or
        nothing scatters there.

    Notes
    -----
    Sequential (type I) sums of squares; with n_g values in a group of the line's factor, n_h in the group
    outside it and n_c in a group of an inner factor, the coefficient of the inner component in the expected
    mean square is ``sum (sum n_c^2 (1/n_g - 1/n_h)) / df``. Source: Gates and Shiue, Biometrics 18 (1962);
    Searle, Casella and McCulloch, Variance Components (1992), 5.3 (from memory).
    """
    layers = [_layer(depth, labels, values) for depth in range(len(factors) + 1)]
    count = len(values)
    lines = [
        Line(name, *_between(layers, depth), effective_degrees_of_freedom=0.0)
        for depth, name in enumerate(factors, start=1)
    ]
    within = math.fsum(sum_of_squares(own) for own in grouped(labels, values).values())
    freedom = count - len(layers[-1].sizes)
    lines.append(Line("repeatability", within, freedom, (0.0,) * len(factors) + (1.0,), freedom))
    _check(lines)
    check_residual(lines)
    balanced = all(len(set(layer.sizes.values())) == 1 for layer in layers)
    if balanced:
        exact = (
            Line(x.source, x.sum_of_squares, x.degrees_of_freedom, x.expectation, x.degrees_of_freedom)
            for x in lines
        )
        return tuple(exact), True

    def spreads(components: Sequence[float]) -> list[float]:
        return [_spread(layers, depth, components) for depth in range(1, len(layers))]

    return with_effective_freedom(lines, spreads), False


def _layer(depth: int, labels: Sequence[Path], values: Sequence[float]) -> _Layer:
    groups = grouped([label[:depth] for label in labels], values)
    return _Layer(
        {group: len(own) for group, own in groups.items()},
        {group: mean(own) for group, own in groups.items()},
    )


def _check(lines: Sequence[Line]) -> None:
    *factors, residual = lines
    for line in factors:
        if line.degrees_of_freedom == 0:
            raise EvidenceError(
                f"{line.source} cannot be evaluated: there is only one group of it, or one within each group "
                "of the factor outside it",
                where=("rows",),
            )
    if residual.degrees_of_freedom == 0:
        raise EvidenceError(
            "nothing was repeated within the innermost factor; leave its column out, and its effect becomes "
            "a part of the repeatability",
            where=("rows",),
        )


def _between(layers: Sequence[_Layer], depth: int) -> tuple[float, int, tuple[float, ...]]:
    """Return sum of squares, degrees of freedom and expectation of the line of one factor."""
    layer, outside = layers[depth], layers[depth - 1]
    squares = math.fsum(
        size * (layer.means[group] - outside.means[group[:-1]]) ** 2 for group, size in layer.sizes.items()
    )
    freedom = len(layer.sizes) - len(outside.sizes)
    expectation = [0.0] * (depth - 1)
    for inner in layers[depth:]:
        total = math.fsum(
            size**2 * (1 / layer.sizes[group[:depth]] - 1 / outside.sizes[group[: depth - 1]])
            for group, size in inner.sizes.items()
        )
        expectation.append(total / freedom if freedom else 0.0)
    return squares, freedom, (*expectation, 1.0)


def _spread(layers: Sequence[_Layer], depth: int, components: Sequence[float]) -> float:
    """Return tr (P V)^2 of the line of one factor; outer components do not enter it."""
    sizes, outside = layers[depth].sizes, layers[depth - 1].sizes
    # Variance of the sum over each group
    sums = {group: components[-1] * size for group, size in sizes.items()}
    for inner, component in zip(layers[depth:], components[depth - 1 : -1], strict=True):
        for group, size in inner.sizes.items():
            sums[group[:depth]] += component * size**2
    total = []
    for parent, groups in layers[depth].inside(depth - 1).items():
        n = outside[parent]
        total.append(math.fsum((sums[g] / sizes[g]) ** 2 for g in groups))
        total.append(-2 / n * math.fsum(sums[g] ** 2 / sizes[g] for g in groups))
        total.append((math.fsum(sums[g] for g in groups) / n) ** 2)
    return math.fsum(total)
