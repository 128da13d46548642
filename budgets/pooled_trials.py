"""Order statistics of any number of trials in bounded memory.

Trials are drawn in blocks, each from a seed of its own, so that a block can be drawn again. As many as one
buffer holds are simply kept. Of more, the first pass only counts them in narrow cells; the second draws them
again and keeps what lies in the few cells where a wanted rank falls. What comes out is the same as if all had
been sorted.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.errors import ModelError
from budgets.trials import Trials

Array = NDArray[np.float64]
Progress = Callable[[int, int], None]

CAPACITY = 2**20
"""Number of trials that are kept in memory, 8 MiB."""
BLOCK = 2**14
_CELLS = 2**14
_TAIL = 1e-4
# A cell with more trials is divided before any of them are kept.
_CROWDED = CAPACITY // 4
_INDIVISIBLE = 1e-300
_MOST_TOTALS = 64


@dataclass(frozen=True)
class _Grid:
    """Cells of equal width; what lies below or above all of them counts to the first or to the last."""

    low: float
    width: float
    cells: int = _CELLS

    def places(self, values: Array) -> NDArray[np.intp]:
        # Monotone in the values and the same in every pass: that is all that is needed.
        scaled = (values - self.low) * (1 / self.width)
        np.clip(scaled, 0, self.cells - 1, out=scaled)
        return scaled.astype(np.intp)

    @property
    def edges(self) -> Array:
        """Upper edges of the cells."""
        return np.asarray(self.low + self.width * np.arange(1.0, self.cells + 1), dtype=np.float64)


class PooledTrials:
    """The trials of one run.

    Parameters
    ----------
    trials : Trials
    seed : int
        The same seed and number of trials give the same results.
    progress : callable or None
        Told how many trials were drawn, of how many that will be, after every block; what it raises ends the
        run.
    """

    def __init__(self, trials: Trials, seed: int, progress: Progress | None = None) -> None:
        self._trials, self._seed, self._progress = trials, seed, progress
        self._kept = np.empty(CAPACITY)
        self._filled = self._drawn = self._to_draw = 0
        # Moments about a value in the middle of the trials: nothing is lost to a large mean.
        self._centre, self._sums, self._squares = 0.0, [0.0], [0.0]

    def plan(self, trials: int) -> None:
        """Say how many trials there will be, as progress is counted by."""
        self._to_draw = trials if trials <= CAPACITY else 2 * trials

    def _block(self, index: int, size: int) -> Array:
        seed = np.random.SeedSequence(self._seed, spawn_key=(index,))
        # Always a whole block, so that more trials begin with those of fewer.
        values = self._trials.draw(np.random.Generator(np.random.PCG64(seed)), BLOCK)
        self._drawn += size
        if self._progress is not None:
            self._progress(min(self._drawn, self._to_draw), self._to_draw)
        return np.asarray(values[:size], dtype=np.float64)

    def _blocks(self, start: int, stop: int) -> Iterator[Array]:
        for first in range(start, stop, BLOCK):
            yield self._block(first // BLOCK, min(BLOCK, stop - first))

    def _add_moments(self, values: Array) -> None:
        if not np.isfinite(values).all():
            raise ModelError(
                "a Monte Carlo trial gave a value too large to be computed", where=("estimates",)
            )
        if self._drawn <= BLOCK:
            self._centre = float(np.median(values))
        away = values - self._centre
        for totals, part in ((self._sums, away.sum()), (self._squares, np.square(away).sum())):
            totals.append(float(part))
            if len(totals) > _MOST_TOTALS:
                totals[:] = [math.fsum(totals)]

    def first(self, number: int) -> Array:
        """Return the first trials, drawing those that are missing.

        Parameters
        ----------
        number : int
            Up to ``CAPACITY``. A later number is larger, and an earlier one whole blocks.

        Returns
        -------
        ndarray, shape (number,)
            A view: to be left as it is.
        """
        for values in self._blocks(self._filled, number):
            self._add_moments(values)
            self._kept[self._filled : self._filled + values.size] = values
            self._filled += values.size
        return self._kept[:number]

    def moments(self, number: int) -> tuple[float, float]:
        """Return mean and standard deviation of the trials drawn.

        Parameters
        ----------
        number : int

        Returns
        -------
        tuple of float
        """
        mean = math.fsum(self._sums) / number
        square = math.fsum(self._squares) - number * mean * mean
        return self._centre + mean, math.sqrt(max(0.0, square) / (number - 1))

    def ordered(self, number: int, ranks: Sequence[int], covered: int) -> tuple[Array, tuple[float, float]]:
        """Return order statistics of all trials, and the shortest interval that covers so many of them.

        Parameters
        ----------
        number : int
            Of trials; the last call, since it puts the kept ones into another order.
        ranks : sequence of int
            From 1 to ``number``.
        covered : int
            Difference of the ranks of the two ends of the shortest interval.

        Returns
        -------
        tuple
            Values at the ranks, and the ends of the interval.

        Notes
        -----
        Source: JCGM 101:2008, 7.7.2 and 7.7.4 (from memory). Beyond the capacity of the buffer the shortest
        interval is sought among the edges of 16,384 cells, far below its own scatter.
        """
        if number <= CAPACITY:
            return _sorted_in_memory(self.first(number), ranks, covered)
        return self._by_passes(number, ranks, covered)

    def _by_passes(
        self, number: int, ranks: Sequence[int], covered: int
    ) -> tuple[Array, tuple[float, float]]:
        kept = self.first(CAPACITY)
        tail = int(_TAIL * CAPACITY)
        kept.partition((tail, CAPACITY - tail))
        low, high = float(kept[tail]), float(kept[CAPACITY - tail])
        # All equal, or nearly: any width will do.
        width = max((high - low) / (_CELLS - 2), np.finfo(np.float64).eps * max(abs(low), 1e-300))
        grid = _Grid(low - width, width)
        counts = np.zeros(_CELLS, dtype=np.intp)
        for values in kept.reshape(-1, BLOCK):
            counts += np.bincount(grid.places(values), minlength=_CELLS)
        for values in self._blocks(CAPACITY, number):
            self._add_moments(values)
            counts += np.bincount(grid.places(values), minlength=_CELLS)
        shortest = _shortest_of_cells(counts, grid, covered)
        wanted = (*ranks, shortest, shortest + covered)
        found = self._values_at(number, grid, counts, wanted)
        return found[:-2], (float(found[-2]), float(found[-1]))

    def _values_at(self, number: int, grid: _Grid, counts: NDArray[np.intp], ranks: Sequence[int]) -> Array:
        """Draw again, keep the cells in which the ranks fall, and read off the values there."""
        before = np.concatenate([[0], np.cumsum(counts)])
        places = np.searchsorted(before, np.asarray(ranks), side="left") - 1
        found = np.empty(len(ranks))
        crowded = {int(place) for place in places if counts[place] > _CROWDED}
        few = np.zeros(grid.cells, dtype=bool)
        few[[place for place in places if int(place) not in crowded]] = True
        kept, offset = self._gathered(number, grid, few, counts)
        for index, (rank, place) in enumerate(zip(ranks, places, strict=True)):
            within = rank - int(before[place])
            if int(place) in crowded:
                found[index] = self._crowded(number, grid, int(place), within)
            else:
                found[index] = kept[offset[place] + within - 1]
        return found

    def _gathered(
        self, number: int, grid: _Grid, wanted: NDArray[np.bool_], counts: NDArray[np.intp]
    ) -> tuple[Array, NDArray[np.intp]]:
        """Return the trials in the wanted cells, sorted, and where those of each cell begin."""
        sizes = np.where(wanted, counts, 0)
        kept, filled = np.empty(int(sizes.sum())), 0
        for values in self._blocks(0, number):
            inside = values[wanted[grid.places(values)]]
            kept[filled : filled + inside.size] = inside
            filled += inside.size
        kept.sort()
        return kept, np.cumsum(sizes) - sizes

    def _crowded(self, number: int, grid: _Grid, place: int, rank: int) -> float:
        """Divide a cell that holds too many trials to be kept: equal values, or nearly."""
        while True:
            low, high = math.inf, -math.inf
            for values in self._blocks(0, number):
                inside = values[grid.places(values) == place]
                if inside.size:
                    low, high = min(low, float(inside.min())), max(high, float(inside.max()))
            width = (high - low) / (_CELLS - 3)
            if width <= _INDIVISIBLE:
                return low
            # The first and the last cell are for what lies outside.
            finer = _Grid(low - width, width)
            counts = np.zeros(_CELLS, dtype=np.intp)
            for values in self._blocks(0, number):
                inside = values[(values >= low) & (values <= high)]
                counts += np.bincount(finer.places(inside), minlength=_CELLS)
            before = np.concatenate([[0], np.cumsum(counts)])
            grid, place = finer, int(np.searchsorted(before, rank, side="left")) - 1
            rank -= int(before[place])


def _sorted_in_memory(values: Array, ranks: Sequence[int], covered: int) -> tuple[Array, tuple[float, float]]:
    number = values.size
    beyond = number - covered  # ranks of lower ends: 1 to beyond
    if 2 * beyond < number:
        # Only the two tails in which the ends of intervals lie need to be sorted.
        values.partition(np.unique([*(rank - 1 for rank in ranks), beyond - 1, covered]))
        values[:beyond].sort()
        values[covered:].sort()
    else:
        values.sort()
    # JCGM 101, 7.7.4: the r* for which y_(r* + q) - y_(r*) is smallest
    first = int(np.argmin(values[covered:] - values[:beyond]))
    at_ranks = values[np.asarray(ranks, dtype=np.intp) - 1]
    return at_ranks, (float(values[first]), float(values[first + covered]))


def _shortest_of_cells(counts: NDArray[np.intp], grid: _Grid, covered: int) -> int:
    """Return the rank of the lower end of the shortest interval between edges of cells."""
    below, edges = np.cumsum(counts), grid.edges
    total = int(below[-1])
    starts = np.flatnonzero((below > 0) & (below + covered <= total))
    wanted = below[starts] + covered
    ends = np.searchsorted(below, wanted, side="left")
    # An end in the last cell, which has no upper edge, is none.
    inside = (ends > 0) & (ends < grid.cells - 1)
    if not inside.any():
        return max(1, (total - covered) // 2)
    starts, wanted, ends = starts[inside], wanted[inside], ends[inside]
    # The upper end is interpolated: rounded to whole cells, widths that differ would look alike.
    beyond = edges[ends] - grid.width * (below[ends] - wanted) / counts[ends]
    return int(below[starts[np.argmin(beyond - edges[starts])]])
