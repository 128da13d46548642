"""Design ``covariance``: several quantities of one scan, whose errors go together.

Replicate scans of samples (column ``sample``) give the covariance of their repeatability. Pairs of scans and
reference values (column ``pair``) give the covariance of the differences, and what of it is left when the
known errors of the reference methods and of repetition are taken out. Any other column is a quantity; of a
pair each quantity has a second column of its reference values, ``<quantity>_reference``.
"""

from __future__ import annotations

import math

import numpy as np

from budgets.errors import EvidenceError, raise_collected
from budgets.evidence.evaluation import Estimate, Evaluation, MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm
from budgets.evidence.study_tables import Layout, Study
from budgets.evidence.sums import grouped, standard_deviation_interval
from budgets.evidence.vector_differences import REFERENCE, differences
from budgets.evidence.vectors import (
    centred,
    joint_estimate,
    matrix_figures,
    scatter_matrix,
    warnings_of_freedom,
)

LAYOUT = Layout(
    required=(),
    optional=("sample", "pair", "scan", "group"),
    numbers=(),
    nullable=(),
    others_are_numbers=True,
)
OPTIONS = ("independent",)


def evaluate(study: Study) -> Evaluation:
    """Return the covariance of replicate scans, or of differences from reference values.

    Parameters
    ----------
    study : Study
        Columns ``sample`` or ``pair``, optionally ``scan`` (a label), and the quantities. Differences need
        the option ``independent`` (true), as in the design ``agreement``.

    Returns
    -------
    Evaluation
        Of replicates: ``repeatability_covariance``, and ``repeatability_<quantity>`` of each. Of pairs:
        ``prediction_covariance`` (the whole), ``bias_covariance`` and, where the repeatabilities of analyzer
        and reference are named for every quantity, ``remainder_covariance``.

    Raises
    ------
    EvidenceError
        If the columns or the data do not serve, or a named source cannot be used.
    NotSupportedError
        For a source that is not taken out of covariances.

    Notes
    -----
    ``S = sum (x - mean x)(x - mean x)' / nu``, pooled over the samples, or over the pairs. Source: JCGM
    100:2008, 4.2.7 and 5.2.3, eq. (17) (from memory). A difference of matrices that is not positive
    semi-definite, or not significantly above zero in one of its quantities, is shown but not usable; nothing
    is moved to the nearest possible matrix.
    """
    columns = [name for name in ("sample", "pair") if name in study.labels]
    if len(columns) != 1:
        raise EvidenceError(
            "replicate scans have a column 'sample', pairs with reference values a column 'pair'",
            where=("columns",),
        )
    quantities = tuple(name for name in study.numbers if not name.endswith(REFERENCE))
    if len(quantities) < 2:
        raise EvidenceError("a covariance needs the columns of two quantities", where=("columns",))
    return _replicates(study, quantities) if columns == ["sample"] else differences(study, quantities)


def _replicates(study: Study, quantities: tuple[str, ...]) -> Evaluation:
    if study.named_sources or study.options:
        raise EvidenceError("of replicate scans nothing is taken out", where=("named_sources",))
    if any(name.endswith(REFERENCE) for name in study.numbers):
        raise EvidenceError("replicate scans have no reference values", where=("columns",))
    _check_cells(study, quantities)
    values = np.array([study.full(name) for name in quantities]).T
    labels = study.labels["sample"]
    products, freedom = np.zeros((len(quantities),) * 2), 0
    for rows in grouped(labels, range(len(labels))).values():
        scatter = centred(values[[int(row) for row in rows]])
        products += scatter.T @ scatter
        freedom += len(rows) - 1
    matrix = scatter_matrix(f"{study.code}/repeatability_covariance", quantities, products, freedom)
    contains = ("repeatability", "resolution")
    joint = joint_estimate(
        "repeatability_covariance", [MatrixTerm(1.0, matrix)], "reading", contains=contains
    )
    singles = tuple(
        Estimate(
            name=f"repeatability_{name}",
            terms=(Term(1.0, MeanSquare(f"{matrix.code}/{name}", matrix.value[i][i], freedom)),),
            value=None,
            interval=standard_deviation_interval(math.sqrt(matrix.value[i][i]), freedom),
            may_feed=("reading",),
            usable=True,
            contains=contains,
        )
        for i, name in enumerate(quantities)
    )
    return Evaluation(
        design="covariance",
        estimates=(joint, *singles),
        used=len(labels),
        diagnostics={"samples": len(set(labels)), **matrix_figures("repeatability", matrix)},
        warnings=warnings_of_freedom(freedom, len(quantities)),
    )


def _check_cells(study: Study, quantities: tuple[str, ...]) -> None:
    raise_collected(
        [
            EvidenceError(f"{name}: the cell is empty; a scan gives every quantity", where=("rows", row))
            for name in quantities
            for row, value in zip(study.rows, study.numbers[name], strict=True)
            if value is None
        ]
    )
