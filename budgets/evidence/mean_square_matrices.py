"""Mean squares of several quantities at once: what a study of vectors gives.

The errors of channels that come from one scan are correlated. A covariance matrix with its degrees of freedom
is to a vector what a mean square is to a number, and enters a budget in the same way: as a sum over
independent ones.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from budgets.errors import EvidenceError
from budgets.evidence.evaluation_terms import MeanSquare, Term


@dataclass(frozen=True)
class MeanSquareMatrix:
    """A matrix of mean squares and mean products.

    Parameters
    ----------
    code : str
        ``<study>/<name>``, unique in the plant.
    quantities : tuple of str, shape (n,)
    value : tuple of tuple of float, shape (n, n), units of the quantities
        Symmetric.
    degrees_of_freedom : float
    """

    code: str
    quantities: tuple[str, ...]
    value: tuple[tuple[float, ...], ...]
    degrees_of_freedom: float

    def __post_init__(self) -> None:
        number = len(self.quantities)
        array = np.asarray(self.value, dtype=np.float64)
        if array.shape != (number, number) or len(set(self.quantities)) != number:
            raise EvidenceError(f"the matrix {self.code} needs a row and a column for each of its quantities")
        if not np.isfinite(array).all() or not np.array_equal(array, array.T) or (np.diag(array) < 0).any():
            raise EvidenceError(
                f"the matrix {self.code} is not finite and symmetric with a diagonal from 0 up"
            )
        if not self.degrees_of_freedom > 0:
            raise EvidenceError(f"the matrix {self.code} has {self.degrees_of_freedom} degrees of freedom")


@dataclass(frozen=True)
class MatrixTerm:
    """One term of a covariance: a coefficient, which may be negative, times a matrix of mean squares."""

    coefficient: float
    mean_square: MeanSquareMatrix


def covariance_of(terms: Sequence[MatrixTerm]) -> NDArray[np.float64]:
    """Return the covariance matrix that a sum over matrices of mean squares stands for.

    Parameters
    ----------
    terms : sequence of MatrixTerm
        Of the same quantities.

    Returns
    -------
    ndarray, shape (n, n)
        Symmetric; of a difference not always positive semi-definite.

    Raises
    ------
    EvidenceError
        If the terms are of different quantities.
    """
    if len({term.mean_square.quantities for term in terms}) != 1:
        raise EvidenceError("the terms of a covariance matrix are of different quantities")
    total = sum(term.coefficient * np.asarray(term.mean_square.value) for term in terms)
    return np.asarray(total, dtype=np.float64)


def projected(term: MatrixTerm, coefficients: Sequence[float]) -> Term:
    """Return the variance that a linear combination of the quantities has, as a term over a mean square.

    Parameters
    ----------
    term : MatrixTerm
    coefficients : sequence of float, shape (n,)
        Sensitivity coefficients of the quantities.

    Returns
    -------
    Term
        ``c' S c`` with the degrees of freedom of S: quantities evaluated jointly make one term. It is the
        coefficient of a mean square of 1, so that the same matrix met with other coefficients counts as the
        same mean square; this is exact where they are proportional and cautious elsewhere.

    Raises
    ------
    EvidenceError
        If the variance is larger than a double can be.

    Notes
    -----
    Source: JCGM 100:2008, 5.2.2, eq. (13) and G.4.1 note on jointly evaluated inputs (from memory).
    """
    square = term.mean_square
    array = np.asarray(square.value)
    filled = np.flatnonzero(array)
    if len(filled) == 1:
        # One quantity alone: the same mean square may also stand in a component of that quantity.
        i = int(filled[0]) // len(coefficients)
        single = MeanSquare(square.code, float(array[i, i]), square.degrees_of_freedom)
        return Term(term.coefficient * coefficients[i] * coefficients[i], single)
    c = np.asarray(coefficients)
    with np.errstate(over="ignore", invalid="ignore"):
        value = float(c @ array @ c)
    if not math.isfinite(value):
        raise EvidenceError(f"the matrix {square.code} gives a variance that is too large to be computed")
    # A rounding error may leave a tiny negative number where the exact one is zero.
    value = max(0.0, value)
    return Term(term.coefficient * value, MeanSquare(square.code, 1.0, square.degrees_of_freedom))


def matrix_term_document(term: MatrixTerm) -> dict[str, Any]:
    """Return a term as JSON-able members; null stands for infinite degrees of freedom."""
    square = term.mean_square
    freedom = square.degrees_of_freedom
    return {
        "coefficient": term.coefficient,
        "mean_square": {
            "code": square.code,
            "quantities": list(square.quantities),
            "value": [list(row) for row in square.value],
            "degrees_of_freedom": freedom if math.isfinite(freedom) else None,
        },
    }


def matrix_term(document: Mapping[str, Any]) -> MatrixTerm:
    """Return the term that `matrix_term_document` wrote."""
    square = document["mean_square"]
    freedom = square["degrees_of_freedom"]
    return MatrixTerm(
        document["coefficient"],
        MeanSquareMatrix(
            square["code"],
            tuple(square["quantities"]),
            tuple(tuple(row) for row in square["value"]),
            math.inf if freedom is None else freedom,
        ),
    )
