"""Correlations between components that are drawn anew at the same level."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from budgets.errors import BudgetsError, CorrelationError, raise_collected

# Rounded coefficients may leave an eigenvalue this far below zero; it is taken as zero.
SMALLEST_EIGENVALUE = -1e-9


@dataclass(frozen=True)
class Correlation:
    """A correlation coefficient between two components of a budget.

    Parameters
    ----------
    between : tuple of str, shape (2,)
        Codes of the components.
    level : str
        At which the errors of both are drawn anew together.
    coefficient : float
        From -1 to 1.

    Raises
    ------
    CorrelationError
        If the coefficient is out of range or both components are the same.
    """

    between: tuple[str, str]
    level: str
    coefficient: float

    def __post_init__(self) -> None:
        if not -1 <= self.coefficient <= 1:
            raise CorrelationError(
                f"a correlation coefficient lies between -1 and 1, not {self.coefficient}",
                where=("coefficient",),
            )
        if self.between[0] == self.between[1]:
            raise CorrelationError(f"{self.between[0]} is correlated with itself", where=("between",))


def check_correlation_matrix(matrix: ArrayLike) -> NDArray[np.float64]:
    """Check a correlation matrix and return it.

    Parameters
    ----------
    matrix : array_like, shape (n, n)

    Returns
    -------
    ndarray, shape (n, n)

    Raises
    ------
    CorrelationError
        If it is not square, finite, symmetric, of unit diagonal, within -1 to 1 and positive semi-definite;
        with the path of the element at fault, such as ``(1, 2)``.

    Notes
    -----
    Source: JCGM 100:2008, 5.2.2 and C.3.6 (from memory). An eigenvalue down to -1e-9, from rounded
    coefficients, counts as zero.
    """
    array = np.asarray(matrix, dtype=np.float64)
    if array.ndim != 2 or array.shape[0] != array.shape[1]:
        raise CorrelationError("a correlation matrix has as many rows as columns")
    if not _looks_right(array):
        raise_collected(_faults_of_elements(array))
    smallest = float(np.linalg.eigvalsh(array)[0]) if array.size else 1.0
    if smallest < SMALLEST_EIGENVALUE:
        raise CorrelationError(
            f"these correlations cannot hold together: the matrix is not positive semi-definite (smallest "
            f"eigenvalue is {smallest:.3g})"
        )
    return array


def _looks_right(array: NDArray[np.float64]) -> bool:
    return bool(
        (np.abs(array) <= 1).all() and (array.diagonal() == 1).all() and np.array_equal(array, array.T)
    )


def _faults_of_elements(array: NDArray[np.float64]) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    for i, j in np.ndindex(*array.shape):
        value = array[i, j]
        if i == j and value != 1:
            faults.append(
                CorrelationError(f"the diagonal of a correlation matrix is 1, not {value}", where=(i, j))
            )
        elif not abs(value) <= 1:
            faults.append(CorrelationError(f"{value} is no correlation coefficient", where=(i, j)))
        elif i < j and value != array[j, i]:
            faults.append(
                CorrelationError(f"the matrix is not symmetric: {value} and {array[j, i]}", where=(i, j))
            )
    return faults


def check_correlations(correlations: Sequence[Correlation], levels: Mapping[str, str]) -> None:
    """Check the correlations of a budget against its components.

    Parameters
    ----------
    correlations : sequence of Correlation
    levels : mapping of str to str
        Code of every component that may be correlated, and its level.

    Raises
    ------
    CorrelationError
        With all faults; their paths start with ``"correlations"`` and the number of the one at fault.

    Notes
    -----
    Errors drawn anew at different levels are independent of each other, so a correlation belongs to one level
    and is checked within it.
    """
    faults: list[BudgetsError] = []
    seen: set[frozenset[str]] = set()
    for index, item in enumerate(correlations):
        where = ("correlations", index)
        unknown = [code for code in item.between if code not in levels]
        faults += [
            CorrelationError(
                f"there is no component {code!r} of a single quantity to correlate", where=(*where, "between")
            )
            for code in unknown
        ]
        if not unknown and any(levels[code] != item.level for code in item.between):
            own = " and ".join(levels[code] for code in item.between)
            faults.append(
                CorrelationError(
                    f"{' and '.join(item.between)} are drawn anew at {own}; only errors of one level "
                    f"are correlated, and {item.level!r} was named",
                    where=(*where, "level"),
                )
            )
        if frozenset(item.between) in seen:
            faults.append(
                CorrelationError(f"{' and '.join(item.between)} are named twice", where=(*where, "between"))
            )
        seen.add(frozenset(item.between))
    raise_collected(faults)
    for level in dict.fromkeys(item.level for item in correlations):
        _check_level(level, [item for item in correlations if item.level == level])


def _check_level(level: str, correlations: Sequence[Correlation]) -> None:
    codes = list(dict.fromkeys(code for item in correlations for code in item.between))
    try:
        check_correlation_matrix(correlation_matrix(codes, correlations))
    except CorrelationError as error:
        raise CorrelationError(f"level {level}: {error.message}", where=("correlations",)) from error


def correlation_matrix(codes: Sequence[str], correlations: Sequence[Correlation]) -> NDArray[np.float64]:
    """Return the correlation matrix of components; what is not named is not correlated.

    Parameters
    ----------
    codes : sequence of str
    correlations : sequence of Correlation
        Those of other components are passed over.

    Returns
    -------
    ndarray, shape (n, n)
    """
    matrix = np.eye(len(codes))
    place = {code: index for index, code in enumerate(codes)}
    for item in correlations:
        if all(code in place for code in item.between):
            i, j = (place[code] for code in item.between)
            matrix[i, j] = matrix[j, i] = item.coefficient
    return matrix


def is_possible(matrix: NDArray[np.float64]) -> bool:
    """Say whether a covariance matrix is positive semi-definite, by the correlations it stands for.

    Parameters
    ----------
    matrix : ndarray, shape (n, n)
        Symmetric.

    Returns
    -------
    bool
        The scale of its elements does not matter.
    """
    variances = np.diag(matrix)
    if (variances < 0).any():
        return False
    deviations = np.sqrt(np.where(variances > 0, variances, 1.0))
    scaled = matrix / np.outer(deviations, deviations)
    if (np.abs(scaled[variances == 0]) > 0).any():
        return False
    return math.isfinite(float(scaled.sum())) and float(np.linalg.eigvalsh(scaled)[0]) >= SMALLEST_EIGENVALUE
