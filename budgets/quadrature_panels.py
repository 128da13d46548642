"""Nodes of Gauss-Legendre quadrature over intervals, for many centres at once."""

from __future__ import annotations

import math
from functools import cache
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Interval = tuple[float, float]


@cache
def _legendre(number: int) -> tuple[Array, Array]:
    """Return nodes and weights on 0 to 1."""
    nodes, weights = np.polynomial.legendre.leggauss(number)
    return (nodes + 1) / 2, weights / 2


def nodes_over(
    intervals: tuple[Interval, ...], centres: Array, reach: float, numbers: tuple[int, int]
) -> tuple[Array, Array]:
    """Return nodes and weights over intervals, cut off far from each centre.

    Parameters
    ----------
    intervals : tuple of tuple of float
        May be infinite.
    centres : ndarray, shape (n,)
    reach : float
        What lies further from a centre is left out.
    numbers : tuple of int
        Nodes of the first interval, and of every other one.

    Returns
    -------
    tuple of ndarray, shape (n, nodes)
        Nodes as deviations from the centre, and their weights; 0 where nothing is left of an interval.

    Notes
    -----
    Source: Gauss-Legendre quadrature, Abramowitz and Stegun 25.4.30 (from memory).
    """
    nodes, weights = [np.zeros((len(centres), 0))], [np.zeros((len(centres), 0))]
    for place, (low, high) in enumerate(intervals):
        unit_nodes, unit_weights = _legendre(numbers[0] if place == 0 else numbers[1])
        start = np.clip(low - centres, -reach, reach)
        length = np.clip(high - centres, -reach, reach) - start
        nodes.append(start[:, None] + length[:, None] * unit_nodes)
        weights.append(length[:, None] * unit_weights)
    return np.concatenate(nodes, axis=1), np.concatenate(weights, axis=1)


def panels(interval: Interval, edge: float) -> tuple[Interval, ...]:
    """Split an interval so that its finite ends have nodes of their own.

    Parameters
    ----------
    interval : tuple of float
    edge : float
        Width of such an end.

    Returns
    -------
    tuple of tuple of float
        The widest first; none for an empty interval.
    """
    low, high = interval
    if not low < high:
        return ()
    ends = {low, high}
    if math.isfinite(high):
        ends.add(max(high - edge, (max(low, high - 2 * edge) + high) / 2))
    if math.isfinite(low):
        ends.add(min(low + edge, (low + min(high, low + 2 * edge)) / 2))
    return tuple(sorted(pairwise(sorted(ends)), key=lambda pair: pair[0] - pair[1]))
