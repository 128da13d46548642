"""What is left of a covariance of differences without the known errors of references and repetition."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from budgets.correlations import is_possible
from budgets.errors import BudgetsError, EvidenceError, NotSupportedError, raise_collected
from budgets.evidence.evaluation import Estimate, MeanSquare, Term
from budgets.evidence.evaluation_terms import effective_degrees_of_freedom, variance
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix, covariance_of
from budgets.evidence.remainder import held_beside
from budgets.evidence.study_tables import NamedSource, Study
from budgets.evidence.sums import CONFIDENCE, f_quantile
from budgets.evidence.vectors import joint_estimate

_SUBTRACTED = ("analyzer_repeatability", "reference_repeatability", "presentation", "subsampling")
_BETWEEN_LABORATORIES = ("between_laboratories", "reproducibility")
_NEEDED = ("analyzer_repeatability", "reference_repeatability")


def remainder(
    study: Study, matrix: MeanSquareMatrix, reading_weight: float, references: Mapping[str, float]
) -> tuple[tuple[Estimate, ...], dict[str, Any]]:
    """Return the remainder, when the sources that it needs are named for every quantity, and its figures.

    Parameters
    ----------
    study : Study
        With its named sources.
    matrix : MeanSquareMatrix
        Of the differences.
    reading_weight : float
        Mean of 1/(readings of a pair).
    references : mapping of str to float
        Quantity to the mean of 1/(reference determinations of a pair).

    Returns
    -------
    tuple
        No estimate or one, and members for the diagnostics.

    Raises
    ------
    EvidenceError, NotSupportedError
        If a named source cannot be taken out.
    """
    named = _checked_sources(study.named_sources, matrix.quantities)
    if any((source, name) not in named for source in _NEEDED for name in matrix.quantities):
        return (), {}
    weights: dict[str, Mapping[str, float]] = {
        "analyzer_repeatability": dict.fromkeys(matrix.quantities, reading_weight),
        "reference_repeatability": references,
    }
    taken: dict[str, list[Term]] = {name: [] for name in matrix.quantities}
    terms = [MatrixTerm(1.0, matrix)]
    for (source, name), item in named.items():
        weight = weights.get(source, {}).get(name, 1.0)
        i = matrix.quantities.index(name)
        own = _diagonal(item.estimate, name)
        taken[name] += [Term(weight * term.coefficient, term.mean_square) for term in own]
        if not item.estimate.matrix_terms:
            terms += [_single(term, -weight, matrix.quantities, i) for term in own]
        elif name == matrix.quantities[0]:
            # A covariance is named for all its quantities and taken out once.
            terms += [
                MatrixTerm(-weight * term.coefficient, _ordered(term.mean_square, matrix.quantities))
                for term in item.estimate.matrix_terms
            ]
    ratios = {
        name: (matrix.value[i][i] / variance(taken[name]), _critical(matrix.degrees_of_freedom, taken[name]))
        for i, name in enumerate(matrix.quantities)
    }
    possible = is_possible(covariance_of(terms))
    usable = possible and all(ratio >= critical for ratio, critical in ratios.values())
    presentation = any(source == "presentation" for source, _ in named)
    estimate = joint_estimate(
        "remainder_covariance",
        terms,
        "lot",
        usable=usable,
        contains=("remainder",) if presentation else ("remainder", "presentation"),
        taken_out=("repeatability", "presentation") if presentation else ("repeatability",),
    )
    return (estimate,), {
        "remainder_matrix": covariance_of(terms).tolist(),
        "remainder_positive_semi_definite": possible,
        "remainder_f_statistics": {name: ratio for name, (ratio, _) in ratios.items()},
        "remainder_f_critical_values": {name: critical for name, (_, critical) in ratios.items()},
    }


def _critical(freedom: float, taken: Sequence[Term]) -> float:
    return f_quantile(1 - CONFIDENCE, freedom, effective_degrees_of_freedom(taken))


def _checked_sources(
    named: Sequence[NamedSource], quantities: tuple[str, ...]
) -> dict[tuple[str, str], NamedSource]:
    found: dict[tuple[str, str], NamedSource] = {}
    faults: list[BudgetsError] = []
    for index, item in enumerate(named):
        where = ("named_sources", index)
        joint = item.estimate.matrix_terms
        names = joint[0].mean_square.quantities if joint else (item.quantity,)
        if item.source not in _SUBTRACTED:
            text = f"{item.source} in a covariance; {', '.join(_SUBTRACTED)} can be taken out"
            faults.append(NotSupportedError(text, where=where))
        elif set(names) != set(quantities) if joint else item.quantity not in quantities:
            faults.append(
                EvidenceError(
                    f"{item.source} names the quantity it belongs to: {', '.join(quantities)}", where=where
                )
            )
        elif (
            not item.estimate.usable
            or not (joint or item.estimate.variance > 0)
            or any(mark in (item.estimate.name, *item.estimate.contains) for mark in _BETWEEN_LABORATORIES)
            or held_beside(item)
        ):
            faults.append(
                EvidenceError(
                    f"{item.source}: the estimate {item.estimate.name!r} cannot be taken out (made from a "
                    "reproducibility limit, holding more than its source, or not usable)",
                    where=where,
                )
            )
        else:
            twice = [name for name in names if (item.source, name) in found]
            faults += [
                EvidenceError(f"{item.source} of {name} is named twice", where=where) for name in twice
            ]
            found.update({(item.source, name): item for name in names})
    raise_collected(faults)
    return found


def _diagonal(estimate: Estimate, name: str) -> list[Term]:
    if not estimate.matrix_terms:
        return list(estimate.terms)
    found = []
    for term in estimate.matrix_terms:
        square = term.mean_square
        i = square.quantities.index(name)
        found.append(
            Term(term.coefficient, MeanSquare(square.code, square.value[i][i], square.degrees_of_freedom))
        )
    return found


def _single(term: Term, factor: float, quantities: tuple[str, ...], place: int) -> MatrixTerm:
    """Return a variance of one quantity as a matrix; errors of different references are independent."""
    value = np.zeros((len(quantities),) * 2)
    value[place, place] = term.mean_square.value
    square = term.mean_square
    rows = tuple(tuple(map(float, row)) for row in value)
    return MatrixTerm(
        factor * term.coefficient, MeanSquareMatrix(square.code, quantities, rows, square.degrees_of_freedom)
    )


def _ordered(matrix: MeanSquareMatrix, quantities: tuple[str, ...]) -> MeanSquareMatrix:
    places = [matrix.quantities.index(name) for name in quantities]
    rows = tuple(tuple(matrix.value[i][j] for j in places) for i in places)
    return MeanSquareMatrix(matrix.code, quantities, rows, matrix.degrees_of_freedom)
