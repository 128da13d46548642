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

# A covariance of the quantities for each level at which they have errors; with the names of the quantities.
Blocks = Mapping[str, NDArray[np.float64]]
Said = tuple[tuple[str, ...], Blocks]


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
    levels: Mapping[str, str]
    slopes: tuple[float, ...] | None = None

    @classmethod
    def of(cls, named: NamedBudget, done: Counts | ReadingPattern) -> _Source:
        law = compiled(named.budget, done)
        levels = {item.code: item.level for item in named.budget.components}
        if named.budget.model is not None:
            return cls(law, tuple(named.names[name] for name in law.model.names), levels)
        # The mean reading, and where there is one the error of the bias.
        own = (named.budget.characteristic, BIAS)[: len(law.model.names)]
        # reading - bias, whatever the readings are
        return cls(law, tuple(named.names[name] for name in own), levels, (1.0, -1.0)[: len(own)])

    @property
    def depends_on_value(self) -> bool:
        return any(line.relative_terms for line in self.law.lines)

    def slopes_at(self, estimates: Mapping[str, float]) -> tuple[float, ...]:
        """Return the sensitivity coefficients in the order of the names."""
        if self.slopes is not None:
            return self.slopes
        found = self.law.model.sensitivity_coefficients(estimates)
        return tuple(found[name] for name in self.law.model.names)

    def at_levels(self, estimates: Mapping[str, float]) -> Blocks:
        """Return the covariance of the quantities for each level on which they have errors."""
        full = self.law.model.estimates(estimates)
        found = {}
        for level in LEVELS:
            lines = tuple(line for line in self.law.lines if self.levels[line.code] == level)
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
    others : tuple of NamedBudget
        Further budgets that say how errors of such scans go together. One with parts that are proportional
        to a value is passed over: there is no value to take them at.
    """

    budgets: tuple[NamedBudget, ...]
    done: Counts | ReadingPattern
    others: tuple[NamedBudget, ...] = ()

    @cached_property
    def _sources(self) -> tuple[_Source, ...]:
        return tuple(_Source.of(named, self.done) for named in self.budgets)

    @cached_property
    def _fixed(self) -> NDArray[np.float64] | CorrelationError | None:
        """The covariance of all quantities, where no part of it is proportional to a value.

        Or what is not known, which is the same every time as well.
        """
        if any(source.depends_on_value for source in self._sources):
            return None
        try:
            return self._covariance([dict.fromkeys(source.law.model.read, 1.0) for source in self._sources])
        except CorrelationError as error:
            return error

    @cached_property
    def _further(self) -> tuple[Said, ...]:
        """What the other budgets say: the names of their quantities, and a covariance for each level."""
        sources = [_Source.of(named, self.done) for named in self.others]
        return tuple(
            (source.names, source.at_levels(dict.fromkeys(source.law.model.read, 1.0)))
            for source in sources
            if not source.depends_on_value
        )

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
        covariance = self._fixed
        if isinstance(covariance, CorrelationError):
            raise CorrelationError(covariance.message, where=covariance.where)
        if covariance is None:
            covariance = self._covariance(places)
        slopes = np.zeros((len(places), len(covariance)))
        start = 0
        for row, (source, given) in enumerate(zip(self._sources, places, strict=True)):
            end = start + len(source.names)
            slopes[row, start:end] = source.slopes_at(given)
            start = end
        return _normalised(slopes @ covariance @ slopes.T)

    def _covariance(self, places: Sequence[Mapping[str, float]]) -> NDArray[np.float64]:
        said = [
            (source.names, source.at_levels(given))
            for source, given in zip(self._sources, places, strict=True)
        ]
        ends = np.cumsum([0, *(len(names) for names, _ in said)])
        whole = np.zeros((ends[-1], ends[-1]))
        for level in LEVELS:
            for i, one in enumerate(said):
                for j, other in enumerate(said):
                    if level in one[1] and level in other[1]:
                        rows, columns = slice(ends[i], ends[i + 1]), slice(ends[j], ends[j + 1])
                        whole[rows, columns] += (
                            one[1][level] if i == j else _between(level, one, other, (*said, *self._further))
                        )
        return whole


def _between(level: str, one: Said, other: Said, said: Sequence[Said]) -> NDArray[np.float64]:
    """Return the covariance at a level between the quantities of two budgets."""
    deviations = [np.sqrt(np.diag(block[level])) for _, block in (one, other)]
    found = np.outer(*deviations)
    for row, first in enumerate(one[0]):
        for column, second in enumerate(other[0]):
            if found[row, column] > 0 and first != second:
                found[row, column] *= _correlation(level, first, second, said)
    return found


def _correlation(level: str, first: str, second: str, said: Sequence[Said]) -> float:
    coefficients = []
    for known, block in said:
        if level in block and first in known and second in known:
            i, j = known.index(first), known.index(second)
            size = math.sqrt(block[level][i, i] * block[level][j, j])
            if size > 0:
                coefficients.append(float(block[level][i, j]) / size)
    if not coefficients:
        raise CorrelationError(
            f"no budget says how the errors of {first} and {second} go together at the level {level!r}",
            where=(level, first, second),
        )
    # What budgets say differently is settled by the one that gives the joint risk the least relief.
    return min(coefficients, key=abs)


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
