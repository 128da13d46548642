"""A monotone table of Student's distribution function, for judging arrays at memory speed.

The distribution function costs fourteen times as much for t as for the normal distribution. The table holds
cubic Hermite pieces with exact values and slopes. Its cells are found without any search: the cells of
``x = 1 + |z|`` are equally wide within a power of two, so the leading bits of the floating-point number x are
the number of the cell, and the remaining bits the place inside it.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaln, stdtr

from budgets.error_distributions import StudentT

_MANTISSA_BITS = 52
_CELL_BITS = 8  # 256 cells per power of two: the first ones are 1/256 wide
_SHIFT = _MANTISSA_BITS - _CELL_BITS
_OFFSET = 1023 << _CELL_BITS  # cell number of x = 1
_PLACE_MASK = (1 << _SHIFT) - 1
_NEGLIGIBLE = 1e-12
_LARGEST_POWER = 1000
_SMALLEST, _TINY = 1e-40, 1e-300


class DistributionTable:
    """Student's distribution function with an absolute error below 1e-10.

    Parameters
    ----------
    degrees_of_freedom : float
        Finite.

    Notes
    -----
    The error of a cubic Hermite piece is at most ``h^4/384 max |f''''|``.
    """

    def __init__(self, degrees_of_freedom: float) -> None:
        powers = np.arange(1, _LARGEST_POWER)
        tail = stdtr(degrees_of_freedom, 1 - np.exp2(powers))
        # Enough powers of two for the rest of the tail to be negligible.
        self._cells = (1 + int(np.count_nonzero(tail > _NEGLIGIBLE))) << _CELL_BITS
        edges = ((np.arange(self._cells + 1) + _OFFSET) << _SHIFT).view(np.float64)
        value = stdtr(degrees_of_freedom, 1 - edges)
        slope = -student_density(edges - 1, degrees_of_freedom) * np.diff(edges, append=edges[-1])
        slope_at_end = -student_density(edges[1:] - 1, degrees_of_freedom) * np.diff(edges)
        rise = np.diff(value)
        # Coefficients in the place t of [0, 1) inside a cell: f0 + f1 t + f2 t^2 + f3 t^3.
        self._coefficients = (
            value[:-1],
            slope[:-1],
            3 * rise - 2 * slope[:-1] - slope_at_end,
            slope[:-1] + slope_at_end - 2 * rise,
        )

    def fill(self, z: NDArray[np.float64]) -> None:
        """Replace every z by the distribution function at z.

        Parameters
        ----------
        z : ndarray of float64, shape (n,)
            Overwritten.
        """
        bits = (np.abs(z) + 1.0).view(np.int64)
        cell = bits >> _SHIFT
        cell -= _OFFSET
        np.minimum(cell, self._cells - 1, out=cell)
        bits &= _PLACE_MASK
        place = bits * (1.0 / (1 << _SHIFT))
        first, second, third, fourth = self._coefficients
        tail = fourth[cell]
        for coefficient in (third, second, first):
            tail *= place
            tail += coefficient[cell]
        # The upper half by symmetry.
        positive = z > 0
        np.subtract(1.0, tail, out=tail, where=positive)
        z[...] = tail


class TailTable:
    """The upper tail of Student's t with a relative error below 5e-10, for sums over many nodes.

    Parameters
    ----------
    degrees_of_freedom : float
        Finite.

    Notes
    -----
    Cubic Hermite pieces of the logarithm of the tail, in the cells of `DistributionTable`: the logarithm
    bends less the further out it is, so wider cells do there.
    """

    def __init__(self, degrees_of_freedom: float) -> None:
        error = StudentT(degrees_of_freedom)
        powers = np.arange(1, _LARGEST_POWER)
        beyond = np.count_nonzero(error.upper_tail(np.exp2(powers) - 1) > _SMALLEST)
        self._cells = (1 + int(beyond)) << _CELL_BITS
        edges = ((np.arange(self._cells + 1) + _OFFSET) << _SHIFT).view(np.float64)
        tail = np.maximum(error.upper_tail(edges - 1), _TINY)
        value = np.log(tail)
        slopes = -student_density(edges - 1, degrees_of_freedom) / tail
        width, rise = np.diff(edges), np.diff(value)
        start, end = slopes[:-1] * width, slopes[1:] * width
        self._coefficients = (value[:-1], start, 3 * rise - 2 * start - end, start + end - 2 * rise)

    def upper_tail(self, z: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the probability above z.

        Parameters
        ----------
        z : ndarray of float64, any shape
            Not below 0.

        Returns
        -------
        ndarray, shape of z
            Of what is below 1e-40, some number not above it.
        """
        bits = (z + 1.0).view(np.int64)
        # Clipped to the last cell where they are taken.
        cell = bits >> _SHIFT
        cell -= _OFFSET
        bits &= _PLACE_MASK
        place = bits * (1.0 / (1 << _SHIFT))
        first, second, third, fourth = self._coefficients
        logarithm: NDArray[np.float64] = fourth.take(cell, mode="clip")
        for coefficient in (third, second, first):
            logarithm *= place
            logarithm += coefficient.take(cell, mode="clip")
        np.exp(logarithm, out=logarithm)
        return logarithm


@lru_cache(maxsize=16)
def tail_table(degrees_of_freedom: float) -> TailTable:
    """Return the table for some degrees of freedom, made once.

    Parameters
    ----------
    degrees_of_freedom : float

    Returns
    -------
    TailTable
    """
    return TailTable(degrees_of_freedom)


def student_density(z: NDArray[np.float64], nu: float) -> NDArray[np.float64]:
    """Return the density of Student's t.

    Parameters
    ----------
    z : ndarray, any shape
        In units of the scale.
    nu : float
        Finite degrees of freedom.

    Returns
    -------
    ndarray, shape of z

    Notes
    -----
    The beta function is taken by its logarithm, for any degrees of freedom.
    Source: JCGM 101:2008, 6.4.9.2 (from memory).
    """
    constant = -betaln(nu / 2, 0.5) - 0.5 * math.log(nu)
    return np.exp(constant - (nu + 1) / 2 * np.log1p(z * (z / nu)))
