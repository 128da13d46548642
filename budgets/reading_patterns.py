"""What was done to a lot, reading by reading: how much averaging takes off the errors of each level.

`budgets.propagation.Counts` is the ordinary case (samples, each read so many times). A pattern says for every
reading which presentation, increment, sample, session and instrument it belongs to, so that retests,
composites, unbalanced numbers and several analyzers have their place.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

from budgets.errors import BudgetsError, ProcedureError, raise_collected
from budgets.levels import LEVELS

Label = str | tuple[str, ...]

MOST_READINGS = 2500
# From the inside out: a group of one lies within one group of the next.
_NESTED = ("presentation", "increment", "sample")
_WEIGHTS_SUM = 1e-9


@dataclass(frozen=True)
class ReadingPattern:
    """The readings of a lot with the groups they belong to.

    Parameters
    ----------
    groups : mapping of str to tuple
        Level to the label of every reading. A tuple of labels says that the reading is of a composite, made
        of equal parts of them. The level ``sample`` is needed; ``presentation`` and ``increment`` are those
        of the sample unless they are given; all readings share one session, instrument, lot, calibration and
        reference unless those are given.
    weights : tuple of float or None
        One per reading, adding up to 1; None takes the mean of the sample means.
    populations : mapping of str to int
        Level to the number of groups that the lot consists of: drawn without replacement, what was not left
        out is no error.

    Raises
    ------
    ProcedureError
        With all faults.
    """

    groups: Mapping[str, tuple[Label, ...]]
    weights: tuple[float, ...] | None = None
    populations: Mapping[str, int] = field(default_factory=dict)

    def __post_init__(self) -> None:
        number = len(self.groups.get("sample", ()))
        if not 1 <= number <= MOST_READINGS:
            raise ProcedureError(
                f"a pattern names the sample of each of 1 to {MOST_READINGS} readings",
                where=("groups", "sample"),
            )
        raise_collected([*self._faults_of_groups(number), *self._faults_of_weights(number)])
        raise_collected([*self._faults_of_nesting(), *self._faults_of_populations()])

    def _faults_of_groups(self, number: int) -> list[BudgetsError]:
        faults: list[BudgetsError] = []
        for level, labels in self.groups.items():
            where = ("groups", level)
            if level not in LEVELS[1:]:
                faults.append(ProcedureError(f"{level!r} is no level of groups of readings", where=where))
            if len(labels) != number:
                faults.append(
                    ProcedureError(f"{len(labels)} labels for {number} readings at {level}", where=where)
                )
            if any(len(set(_parts(label))) != len(_parts(label)) or not _parts(label) for label in labels):
                faults.append(
                    ProcedureError("a composite names at least one part, each of them once", where=where)
                )
            if level == "sample" and not all(isinstance(label, str) for label in labels):
                faults.append(ProcedureError("a reading belongs to one sample", where=where))
        return faults

    def _faults_of_weights(self, number: int) -> list[BudgetsError]:
        if self.weights is None:
            return []
        right = len(self.weights) == number and all(w >= 0 and math.isfinite(w) for w in self.weights)
        if right and abs(math.fsum(self.weights) - 1) <= _WEIGHTS_SUM:
            return []
        return [
            ProcedureError(
                "the weights are one per reading, none negative, and add up to 1", where=("weights",)
            )
        ]

    def _faults_of_nesting(self) -> list[BudgetsError]:
        faults: list[BudgetsError] = []
        given = [level for level in _NESTED if level in self.groups]
        for inner, outer in pairwise(given):
            within: dict[str, Label] = {}
            for own, other in zip(self.groups[inner], self.groups[outer], strict=True):
                for part in _parts(own):
                    if within.setdefault(part, other) != other:
                        faults.append(
                            ProcedureError(
                                f"{inner} {part!r} lies in {outer} {within[part]!r} and in {other!r}",
                                where=("groups", inner),
                            )
                        )
        return faults

    def _faults_of_populations(self) -> list[BudgetsError]:
        return [
            ProcedureError(
                f"{len(self._groups_at(level))} were drawn of a population of {size}",
                where=("populations", level),
            )
            if level in ("increment", "sample")
            else ProcedureError(
                "only increments and samples are drawn from a lot", where=("populations", level)
            )
            for level, size in self.populations.items()
            if level not in ("increment", "sample") or size < len(self._groups_at(level))
        ]

    def _groups_at(self, level: str) -> set[str]:
        return {part for label in self._labels(level) for part in _parts(label)}

    def _labels(self, level: str) -> Sequence[Label]:
        if level in self.groups:
            return self.groups[level]
        if level == "reading":
            return [str(index) for index in range(len(self.groups["sample"]))]
        if level in _NESTED:
            # The cautious default: the next outer grouping that is known.
            outer = _NESTED[_NESTED.index(level) + 1 :]
            return self.groups[next(name for name in outer if name in self.groups)]
        return [""] * len(self.groups["sample"])

    @property
    def readings_per_sample(self) -> tuple[int, ...]:
        """The number of readings of each sample, in order of first appearance."""
        samples = self.groups["sample"]
        return tuple(samples.count(label) for label in dict.fromkeys(samples))

    def reading_weights(self) -> tuple[float, ...]:
        """Return the weight of every reading in the estimate.

        Returns
        -------
        tuple of float, shape (readings,)
            Adding up to 1: those given, or those of the mean of the sample means.
        """
        if self.weights is not None:
            return self.weights
        return mean_weights(self.groups["sample"])

    def averaging_weights(self) -> dict[str, float]:
        """Return by how much the estimate reduces the variance of each level.

        Returns
        -------
        dict of str to float
            For every level ``sum over groups of (sum of weights in the group)^2``, less ``1/N`` where the
            groups were drawn without replacement from N.

        Notes
        -----
        Source: JCGM 100:2008, 5.1.2, eq. (10) (from memory), applied to errors shared by groups of readings;
        the part of a finite population is that of simple random sampling, own derivation for unequal weights.

        Examples
        --------
        >>> pattern = ReadingPattern({"sample": ("a", "a", "b")})
        >>> weights = pattern.averaging_weights()
        >>> weights["reading"], weights["sample"]
        (0.375, 0.5)
        """
        return self.shared_weights(self)

    def shared_weights(self, later: ReadingPattern) -> dict[str, float]:
        """Return what the estimate has in common with one that joins further readings with these.

        Parameters
        ----------
        later : ReadingPattern
            Its first readings are those of this pattern. A label means the same group in both.

        Returns
        -------
        dict of str to float
            For every level ``sum over groups of (weight of the group here) (weight of the group there)``,
            less ``1/N`` where the groups were drawn without replacement from N: the covariance of the two
            estimates by an error of variance 1.

        Notes
        -----
        Source: JCGM 100:2008, 5.1.2, eq. (10) and 5.2.2 (from memory), applied as in `averaging_weights`.

        Examples
        --------
        >>> first, both = ReadingPattern({"sample": ("a",)}), ReadingPattern({"sample": ("a", "b")})
        >>> first.shared_weights(both)["sample"]
        0.5
        """
        found: dict[str, float] = {}
        for level in LEVELS:
            ours, theirs = self.shares(level), later.shares(level)
            found[level] = math.fsum(share * theirs.get(group, 0.0) for group, share in ours.items())
            if level in self.populations:
                # Of n groups that weigh the same this is 1/n (1 - n/N).
                found[level] = max(0.0, found[level] - 1 / self.populations[level])
        return found

    def shares(self, level: str) -> dict[str, float]:
        """Return what every group of a level weighs in the estimate.

        Parameters
        ----------
        level : str

        Returns
        -------
        dict of str to float
            By the labels of the groups; adding up to 1.
        """
        shares: dict[str, float] = {}
        for label, weight in zip(self._labels(level), self.reading_weights(), strict=True):
            parts = _parts(label)
            for part in parts:
                shares[part] = shares.get(part, 0.0) + weight / len(parts)
        return shares


def _parts(label: Label) -> tuple[str, ...]:
    return (label,) if isinstance(label, str) else label


def mean_weights(samples: Sequence[Label]) -> tuple[float, ...]:
    """Return the weight of every reading in the mean of the sample means.

    Parameters
    ----------
    samples : sequence of str, shape (n,)
        The sample of every reading.

    Returns
    -------
    tuple of float, shape (n,)
        ``1/(samples * readings of the sample)``; adding up to 1.

    Examples
    --------
    >>> mean_weights(["a", "a", "b"])
    (0.25, 0.25, 0.5)
    """
    counts = Counter(samples)
    return tuple(1 / (len(counts) * counts[label]) for label in samples)


def least_squares_weights(covariance: Sequence[Sequence[float]]) -> tuple[float, ...]:
    """Return the weights that make the variance of a weighted mean smallest.

    Parameters
    ----------
    covariance : array_like, shape (n, n)
        Of the readings' errors; the common parts may be left out, for they move no weight.

    Returns
    -------
    tuple of float, shape (n,)
        ``V^-1 1 / (1' V^-1 1)``; adding up to 1.

    Raises
    ------
    ProcedureError
        If the matrix cannot be inverted, or a reading would get a weight below zero.

    Notes
    -----
    Source: generalised least squares (Aitken 1936, from memory).
    """
    import numpy as np

    matrix = np.asarray(covariance, dtype=np.float64)
    try:
        solved = np.linalg.solve(matrix, np.ones(len(matrix)))
    except np.linalg.LinAlgError as error:
        raise ProcedureError("the errors of these readings leave no least-squares weights") from error
    weights = solved / solved.sum()
    if not (weights >= 0).all():
        raise ProcedureError("least squares would give a reading a negative weight")
    return tuple(float(weight) for weight in weights)
