"""What the errors of several characteristics have in common that were read in the same scans.

Two channels of one scan share the noise of its spectrum, and a characteristic that is computed from a
channel shares the error of that channel whole. How the errors of two quantities go together at a level is
what an approved budget says that holds both; where none does, it is not known, and nothing is assumed.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from budgets.budget import Budget
from budgets.budget_models import BIAS
from budgets.correlations import SMALLEST_EIGENVALUE
from budgets.errors import CorrelationError
from budgets.levels import LEVELS
from budgets.linear_propagation import CompiledPropagation
from budgets.propagation import Counts, compiled, estimates_for
from budgets.reading_patterns import ReadingPattern


@dataclass(frozen=True)
class NamedBudget:
    """A budget whose quantities are called by names that several budgets share.

    Parameters
    ----------
    budget : Budget
    names : mapping of str to str
        Quantity of the budget (the characteristic and ``bias``, or those of its model) to what it is: equal
        names mean the same quantity, read in the same scans or resting on the same evidence.

    Raises
    ------
    CorrelationError
        If a quantity has no name, or two have the same.
    """

    budget: Budget
    names: Mapping[str, str]

    def __post_init__(self) -> None:
        own = {name for item in self.budget.components for name in item.inputs}
        missing = sorted(own - self.names.keys())
        if missing or len({self.names[name] for name in own}) < len(own):
            raise CorrelationError(
                f"every quantity of a budget needs a name of its own; {', '.join(missing) or 'two'} "
                "have none",
                where=("names",),
            )


@dataclass(frozen=True)
class _Source:
    """The law of propagation of a budget for what was done, with the common names of its quantities."""

    law: CompiledPropagation
    names: tuple[str, ...]

    @classmethod
    def of(cls, named: NamedBudget, done: Counts | ReadingPattern) -> _Source:
        law = compiled(named.budget, done)
        if named.budget.model is not None:
            return cls(law, tuple(named.names[name] for name in law.model.names))
        # The mean reading, and where there is one the error of the bias.
        own = (named.budget.characteristic, BIAS)[: len(law.model.names)]
        return cls(law, tuple(named.names[name] for name in own))

    def at_levels(
        self, levels: Mapping[str, str], estimates: Mapping[str, float]
    ) -> dict[str, NDArray[np.float64]]:
        """Return the covariance of the quantities for each level on which they have errors."""
        full = self.law.model.estimates(estimates)
        found = {}
        for level in LEVELS:
            lines = tuple(line for line in self.law.lines if levels[line.code] == level)
            if lines:
                part = CompiledPropagation(self.law.model, lines, self.law.correlations)
                found[level] = part.input_covariance(full)
        return found


@dataclass(frozen=True)
class SharedErrors:
    """The errors of several characteristics of the same scans, ready for any estimates.

    Parameters
    ----------
    budgets : tuple of NamedBudget
        One for each characteristic.
    done : Counts or ReadingPattern
        The same readings for all of them.
    """

    budgets: tuple[NamedBudget, ...]
    done: Counts | ReadingPattern

    @cached_property
    def _sources(self) -> tuple[_Source, ...]:
        return tuple(_Source.of(named, self.done) for named in self.budgets)

    @cached_property
    def _fixed(self) -> NDArray[np.float64] | None:
        """The covariance of all quantities, where no part of it is proportional to a value."""
        if any(line.relative_terms for source in self._sources for line in source.law.lines):
            return None
        return self._covariance([dict.fromkeys(source.law.model.read, 1.0) for source in self._sources])

    def correlations(self, means: Sequence[Mapping[str, float]]) -> NDArray[np.float64]:
        """Return the correlation matrix of the errors of the estimates.

        Parameters
        ----------
        means : sequence of mapping of str to float, shape (n,)
            For each characteristic what its budget reads: a mean for every quantity; without a model the
            estimate of the characteristic.

        Returns
        -------
        ndarray, shape (n, n)

        Raises
        ------
        CorrelationError
            If no budget says how the errors of two quantities go together at a level where both have some,
            or what several budgets say cannot hold together.
        ModelError, ComponentError
            If a model has no derivative there, or there is no variance.

        Notes
        -----
        ``V = sum over the levels of C_l W_l``, C_l the covariance between the quantities at that level, then
        ``c' V c`` for each two characteristics. A quantity that stands in two budgets has one error. Source:
        JCGM 102:2011, 6.2.1.3, and JCGM 100:2008, F.1.2.3, eq. (F.2) (from memory).
        """
        places = [
            estimates_for(named.budget, given) for named, given in zip(self.budgets, means, strict=True)
        ]
        covariance = self._fixed if self._fixed is not None else self._covariance(places)
        slopes = np.zeros((len(places), len(covariance)))
        start = 0
        for row, (source, given) in enumerate(zip(self._sources, places, strict=True)):
            found = source.law.model.sensitivity_coefficients(given)
            end = start + len(source.names)
            slopes[row, start:end] = [found[name] for name in source.law.model.names]
            start = end
        return _normalised(slopes @ covariance @ slopes.T)

    def _covariance(self, places: Sequence[Mapping[str, float]]) -> NDArray[np.float64]:
        blocks = [
            source.at_levels({item.code: item.level for item in named.budget.components}, given)
            for source, named, given in zip(self._sources, self.budgets, places, strict=True)
        ]
        names = [source.names for source in self._sources]
        ends = np.cumsum([0, *map(len, names)])
        whole = np.zeros((ends[-1], ends[-1]))
        for level in LEVELS:
            for i, one in enumerate(blocks):
                for j, other in enumerate(blocks):
                    if level in one and level in other:
                        rows, columns = slice(ends[i], ends[i + 1]), slice(ends[j], ends[j + 1])
                        whole[rows, columns] += (
                            one[level] if i == j else self._between(level, blocks, names, i, j)
                        )
        return whole

    def _between(
        self,
        level: str,
        blocks: Sequence[Mapping[str, NDArray[np.float64]]],
        names: Sequence[tuple[str, ...]],
        i: int,
        j: int,
    ) -> NDArray[np.float64]:
        """Return the covariance at a level between the quantities of two budgets."""
        one, other = (np.sqrt(np.diag(blocks[place][level])) for place in (i, j))
        found = np.zeros((len(one), len(other)))
        for row, first in enumerate(names[i]):
            for column, second in enumerate(names[j]):
                size = one[row] * other[column]
                if size > 0:
                    found[row, column] = size * _correlation(level, first, second, blocks, names)
        return found


def _correlation(
    level: str,
    first: str,
    second: str,
    blocks: Sequence[Mapping[str, NDArray[np.float64]]],
    names: Sequence[tuple[str, ...]],
) -> float:
    if first == second:
        return 1.0
    said = []
    for known, block in zip(names, blocks, strict=True):
        if level in block and first in known and second in known:
            i, j = known.index(first), known.index(second)
            size = math.sqrt(block[level][i, i] * block[level][j, j])
            if size > 0:
                said.append(float(block[level][i, j]) / size)
    if not said:
        raise CorrelationError(
            f"no budget says how the errors of {first} and {second} go together at the level {level!r}",
            where=(level, first, second),
        )
    # What budgets say differently is settled by the one that gives the joint risk the least relief.
    return min(said, key=abs)


def _normalised(covariance: NDArray[np.float64]) -> NDArray[np.float64]:
    deviations = np.sqrt(np.diag(covariance))
    if not (deviations > 0).all():
        raise CorrelationError("an estimate has no variance, so nothing is correlated with it")
    matrix = covariance / np.outer(deviations, deviations)
    np.fill_diagonal(matrix, 1.0)
    matrix = np.clip((matrix + matrix.T) / 2, -1.0, 1.0)
    if float(np.linalg.eigvalsh(matrix)[0]) < SMALLEST_EIGENVALUE:
        raise CorrelationError("what the budgets say of their errors cannot hold together")
    return np.asarray(matrix)
