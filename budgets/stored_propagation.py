"""A compiled law of propagation as plain numbers, for the record."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from budgets.correlations import Correlation
from budgets.evidence.evaluation_terms import term_document, term_of
from budgets.evidence.mean_square_matrices import matrix_term, matrix_term_document
from budgets.linear_propagation import CompiledPropagation, Line
from budgets.measurement_models import MeasurementModel, Quantity


def propagation_document(law: CompiledPropagation) -> dict[str, Any]:
    """Return a law of propagation as JSON-able members.

    Parameters
    ----------
    law : CompiledPropagation

    Returns
    -------
    dict
    """
    return {
        "expression": law.model.expression,
        "unit": law.model.unit,
        "quantities": [asdict(quantity) for quantity in law.model.quantities],
        "lines": [
            {
                "code": line.code,
                "inputs": list(line.inputs),
                "weight": line.weight,
                "terms": [term_document(term) for term in line.terms],
                "relative_terms": [term_document(term) for term in line.relative_terms],
                "relative_to": line.relative_to,
                "matrix_terms": [matrix_term_document(term) for term in line.matrix_terms],
            }
            for line in law.lines
        ],
        "correlations": [
            {"between": list(item.between), "level": item.level, "coefficient": item.coefficient}
            for item in law.correlations
        ],
    }


def propagation_from_document(document: Mapping[str, Any]) -> CompiledPropagation:
    """Return the law that `propagation_document` wrote, to the last bit.

    Parameters
    ----------
    document : mapping

    Returns
    -------
    CompiledPropagation
    """
    quantities = tuple(Quantity(**quantity) for quantity in document["quantities"])
    return CompiledPropagation(
        model=MeasurementModel(document["expression"], quantities, document["unit"]),
        lines=tuple(
            Line(
                code=line["code"],
                inputs=tuple(line["inputs"]),
                weight=line["weight"],
                terms=tuple(term_of(term) for term in line["terms"]),
                relative_terms=tuple(term_of(term) for term in line["relative_terms"]),
                relative_to=line["relative_to"],
                matrix_terms=tuple(matrix_term(term) for term in line["matrix_terms"]),
            )
            for line in document["lines"]
        ),
        correlations=tuple(
            Correlation((item["between"][0], item["between"][1]), item["level"], item["coefficient"])
            for item in document["correlations"]
        ),
    )
