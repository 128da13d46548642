"""Vectors of quantities: the matrix of their scatter, and the estimates made of it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Estimate, EvaluationWarning
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix

Array = NDArray[np.float64]


def scatter_matrix(code: str, quantities: tuple[str, ...], products: Array, freedom: int) -> MeanSquareMatrix:
    """Return products of deviations over their degrees of freedom.

    Raises
    ------
    EvidenceError
        If nothing was measured twice or a quantity does not scatter.
    """
    if freedom < 1:
        raise EvidenceError("nothing was measured twice: no covariance can be evaluated", where=("rows",))
    if not (np.diag(products) > 0).all():
        still = ", ".join(name for name, p in zip(quantities, np.diag(products), strict=True) if p == 0)
        raise EvidenceError(f"the values of {still} do not scatter", where=("rows",))
    # Symmetric to the last bit, which a sum of products need not be.
    square = (products + products.T) / (2 * freedom)
    return MeanSquareMatrix(code, quantities, tuple(tuple(map(float, row)) for row in square), freedom)


def centred(values: Array) -> Array:
    """Return the deviations from the means of the columns."""
    shifted = values - values[0]  # a large common offset costs no digits
    return np.asarray(shifted - shifted.mean(axis=0))


def joint_estimate(name: str, terms: Sequence[MatrixTerm], level: str, **members: Any) -> Estimate:
    """Return an estimate of several quantities jointly."""
    return Estimate(
        **{"name": name, "terms": (), "value": None, "interval": None, "may_feed": (level,), "usable": True}
        | {"matrix_terms": tuple(terms)}
        | members
    )


def matrix_figures(name: str, matrix: MeanSquareMatrix) -> dict[str, Any]:
    """Return standard deviations and correlations for the diagnostics."""
    array = np.asarray(matrix.value)
    deviations = np.sqrt(np.diag(array))
    return {
        "quantities": list(matrix.quantities),
        f"{name}_degrees_of_freedom": matrix.degrees_of_freedom,
        f"{name}_standard_deviations": deviations.tolist(),
        f"{name}_correlations": (array / np.outer(deviations, deviations)).tolist(),
    }


def warnings_of_freedom(freedom: int, number: int) -> tuple[EvaluationWarning, ...]:
    """Return the warning that correlations from few vectors are not well known."""
    if freedom >= 5 * number:
        return ()
    detail = (
        f"{freedom} degrees of freedom for {number} quantities: the correlations are not well known; about "
        f"{5 * number} would do"
    )
    return (EvaluationWarning("few-vectors", detail),)
