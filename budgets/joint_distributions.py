"""Distributions of several input quantities together: multivariate normal and t; and what draws them."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budgets.correlations import is_possible
from budgets.input_distributions import check

Array = NDArray[np.float64]


@dataclass(frozen=True)
class JointNormal:
    """Several quantities together: a multivariate normal distribution, or t with finite degrees of freedom.

    Parameters
    ----------
    quantities : tuple of str, shape (n,)
    estimates : tuple of float, shape (n,)
    covariance : tuple of tuple of float, shape (n, n)
        Of the estimates; of t the squared scale, as the standard uncertainty of `Normal`.
    degrees_of_freedom : float
        Common to all of them.

    Raises
    ------
    ComponentError
        If the numbers do not fit each other, or the matrix is no covariance.

    Notes
    -----
    Source: JCGM 101:2008, 6.4.8; JCGM 102:2011, 5.3.2 for t (from memory).
    """

    quantities: tuple[str, ...]
    estimates: tuple[float, ...]
    covariance: tuple[tuple[float, ...], ...]
    degrees_of_freedom: float = math.inf

    def __post_init__(self) -> None:
        matrix, number = self._matrix, len(self.quantities)
        fits = len(set(self.quantities)) == len(self.estimates) == number and matrix.shape == (number, number)
        check(fits, "each quantity has one estimate, one row and one column", "covariance")
        possible = np.isfinite(matrix).all() and np.array_equal(matrix, matrix.T) and is_possible(matrix)
        check(
            bool(possible), "the covariance matrix is not symmetric and positive semi-definite", "covariance"
        )
        check(all(map(math.isfinite, self.estimates)), "every estimate must be finite", "estimates")
        check(self.degrees_of_freedom > 0, "the degrees of freedom must be above zero", "degrees_of_freedom")

    @property
    def _matrix(self) -> Array:
        return np.asarray(self.covariance, dtype=np.float64)

    def draw(self, generator: np.random.Generator, size: int) -> Array:
        """Draw vectors.

        Parameters
        ----------
        generator : numpy.random.Generator
        size : int

        Returns
        -------
        ndarray, shape (n, size)
        """
        errors = root_of(self._matrix) @ generator.standard_normal((len(self.quantities), size))
        if math.isfinite(self.degrees_of_freedom):
            # One common factor for all of them, or their tails would not be those of the joint t.
            errors *= np.sqrt(chi_square_ratios(self.degrees_of_freedom, size, generator))
        return np.asarray(self.estimates)[:, None] + errors


def root_of(covariance: Array) -> Array:
    """Return a matrix whose product with its transpose is a covariance matrix.

    Parameters
    ----------
    covariance : ndarray, shape (n, n)
        Positive semi-definite; also singular.

    Returns
    -------
    ndarray, shape (n, n)
    """
    values, vectors = np.linalg.eigh(covariance)
    # Rounding may leave an eigenvalue just below zero.
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)))


def chi_square_ratios(degrees_of_freedom: float, size: int, generator: np.random.Generator) -> Array:
    """Return draws of nu over a chi-square with nu degrees of freedom.

    Parameters
    ----------
    degrees_of_freedom : float
        Finite.
    size : int
    generator : numpy.random.Generator

    Returns
    -------
    ndarray, shape (size,)
        What a variance known from nu degrees of freedom may be, over its estimate.

    Notes
    -----
    A normal draw times the root of it is Student's t. Source: JCGM 101:2008, 6.4.9.4 (from memory).
    """
    half = degrees_of_freedom / 2
    gammas = generator.standard_gamma(half, size)
    # Far below one degree of freedom a draw may underflow to zero.
    np.maximum(gammas, np.finfo(np.float64).tiny, out=gammas)
    return np.divide(half, gammas, out=gammas)
