"""Differences of scans from reference values, several quantities at once."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np

from budgets.correlations import is_possible
from budgets.errors import BudgetsError, EvidenceError, raise_collected
from budgets.evidence.bias import FEW_CLUSTERS, alike
from budgets.evidence.evaluation import Estimate, Evaluation, EvaluationWarning
from budgets.evidence.mean_square_matrices import MatrixTerm, MeanSquareMatrix, covariance_of
from budgets.evidence.study_tables import Study
from budgets.evidence.sums import grouped, is_rounding
from budgets.evidence.validation_pairs import BULK
from budgets.evidence.vector_remainder import remainder
from budgets.evidence.vectors import (
    Array,
    centred,
    joint_estimate,
    matrix_figures,
    scatter_matrix,
    warnings_of_freedom,
)

REFERENCE = "_reference"
_INDEPENDENT = EvaluationWarning(
    "pairs-taken-as-independent",
    "pairs count as independent without a column 'group'; if they come in clusters (days, lots), the biases "
    "are less well known than bias_covariance says",
)
_WHOLE = (
    "repeatability",
    "presentation",
    "resolution",
    "reference_repeatability",
    "subsampling",
    "remainder",
)


def differences(study: Study, quantities: tuple[str, ...]) -> Evaluation:
    """Return the covariance of differences from reference values.

    Parameters
    ----------
    study : Study
    quantities : tuple of str

    Returns
    -------
    Evaluation

    Raises
    ------
    EvidenceError
        If the data do not serve; see `budgets.evidence.covariance`.
    """
    if study.options.get("independent") is not True:
        raise EvidenceError(
            "pairs must be independent of the calibration (independent: true)",
            where=("options", "independent"),
        )
    missing = [name for name in quantities if f"{name}{REFERENCE}" not in study.numbers]
    alone = [
        name
        for name in study.numbers
        if name.endswith(REFERENCE) and name.removesuffix(REFERENCE) not in quantities
    ]
    if missing or alone:
        raise EvidenceError(
            f"a quantity and its reference values go together: {', '.join(missing + alone)} stands alone",
            where=("columns",),
        )
    values, readings, references, levels = _pair_means(study, quantities)
    n = len(values)
    scatter = centred(values)
    matrix = scatter_matrix(f"{study.code}/prediction_covariance", quantities, scatter.T @ scatter, n - 1)
    _check_scatter(study, matrix)
    whole = joint_estimate(
        "prediction_covariance",
        [MatrixTerm(1.0, matrix)],
        "lot",
        contains=_WHOLE,
        reading_weight=float(readings.mean()),
    )
    clustered = _between_groups(study, quantities, values, matrix)
    # JCGM 100, 5.2.3, eq. (17): the covariance of means
    bias = joint_estimate("bias_covariance", clustered or [MatrixTerm(1 / n, matrix)], "calibration")
    left, figures = remainder(study, matrix, float(readings.mean()), references)
    return Evaluation(
        design="covariance",
        estimates=(whole, bias, *left),
        used=len(study.labels["pair"]),
        diagnostics={
            "pairs": n,
            "validated_range_lower": _percentile(levels, BULK[0]),
            "validated_range_upper": _percentile(levels, BULK[1]),
            "reference_lowest": {name: min(found) for name, found in levels.items()},
            "reference_highest": {name: max(found) for name, found in levels.items()},
            "biases": (values[0] + (values - values[0]).mean(axis=0)).tolist(),
            **matrix_figures("prediction", matrix),
            **figures,
        },
        warnings=(
            *warnings_of_freedom(n - 1, len(quantities)),
            *(() if "group" in study.labels else (_INDEPENDENT,)),
            *_warnings_of_remainder(left),
        ),
    )


def _check_scatter(study: Study, matrix: MeanSquareMatrix) -> None:
    """Refuse a quantity whose differences are all the same, but for what binary numbers make of them.

    Raises
    ------
    EvidenceError
        With the names of all of them.
    """
    squares = zip(matrix.quantities, np.diag(matrix.value), strict=True)
    still = [
        name
        for name, square in squares
        if is_rounding(float(square), (*study.full(name), *study.full(f"{name}{REFERENCE}")))
    ]
    if still:
        raise EvidenceError(f"the values of {', '.join(still)} do not scatter", where=("rows",))


def _percentile(levels: Mapping[str, Sequence[float]], percent: float) -> dict[str, float]:
    return {name: float(np.percentile(found, percent)) for name, found in levels.items()}


def _between_groups(
    study: Study, quantities: tuple[str, ...], values: Array, matrix: MeanSquareMatrix
) -> list[MatrixTerm]:
    """Return the covariance of the mean difference by groups of pairs; nothing where it is not the larger.

    With n_g pairs of n in k groups and n0 = (n - sum n_g^2/n)/(k - 1) the mean difference has the covariance
    ``a MB + (1/n - a) MW``, a = sum n_g^2 / (n^2 n0): for equal groups MB/n. As in the design agreement,
    groups count only where some quantity is less well known with them; and of two or three groups that are
    not alike in every quantity the mean difference is known no better than with their degrees of freedom.
    """
    labels = _groups_of_pairs(study)
    n, members = len(values), list(grouped(labels, range(len(labels))).values())
    if not 1 < len(members) < n:
        return []
    scatter = centred(values)
    rows = [scatter[[int(row) for row in group]] for group in members]
    means = np.array([group.mean(axis=0) for group in rows])
    sizes = np.array([len(group) for group in rows], dtype=float)
    n0 = (n - (sizes**2).sum() / n) / (len(rows) - 1)
    share = (sizes**2).sum() / (n * n * n0)
    between = (means * sizes[:, None]).T @ means
    code = f"{study.code}/between_groups_covariance"
    terms = [MatrixTerm(share, scatter_matrix(code, quantities, between, len(rows) - 1))]
    within = scatter.T @ scatter - between
    if abs(1 / n - share) > 1e-12 / n:
        code = f"{study.code}/within_groups_covariance"
        terms.append(MatrixTerm(1 / n - share, scatter_matrix(code, quantities, within, n - len(rows))))
    found = covariance_of(terms)
    larger = (np.diag(found) > np.diag(np.asarray(matrix.value)) / n).any()
    if larger and is_possible(found):
        return terms
    freedoms = len(rows) - 1, n - len(rows)
    if len(rows) >= FEW_CLUSTERS or _all_alike(between, within, *freedoms):
        return []
    code = f"{study.code}/pairs_of_few_groups_covariance"
    return [MatrixTerm(1 / n, MeanSquareMatrix(code, quantities, matrix.value, freedoms[0]))]


def _all_alike(between: Array, within: Array, first: int, second: int) -> bool:
    """Say of every quantity that groups differ in it less than chance alone mostly makes them."""
    squares = zip(np.diag(between) / first, np.diag(within) / second, strict=True)
    return all(other > 0 and alike(float(one / other), first, second) for one, other in squares)


def _groups_of_pairs(study: Study) -> list[str]:
    """Return the group of every pair, in the order of the pairs; none without the column.

    Raises
    ------
    EvidenceError
        If one pair lies in two groups.
    """
    if "group" not in study.labels:
        return []
    groups: dict[str, str] = {}
    for place, (pair, group) in enumerate(zip(study.labels["pair"], study.labels["group"], strict=True)):
        if groups.setdefault(pair, group) != group:
            where = ("rows", study.rows[place])
            raise EvidenceError(f"pair {pair} lies in two groups", where=where)
    return list(groups.values())


def _pair_means(
    study: Study, quantities: tuple[str, ...]
) -> tuple[Array, Array, dict[str, float], dict[str, list[float]]]:
    """Return differences of means and 1/readings by pair; mean 1/references and references by quantity."""
    labels = study.labels["pair"]
    faults: list[BudgetsError] = []
    differences: list[list[float]] = []
    readings: list[float] = []
    reciprocals: dict[str, list[float]] = {name: [] for name in quantities}
    levels: dict[str, list[float]] = {name: [] for name in quantities}
    for label, rows in grouped(labels, range(len(labels))).items():
        where = ("rows", study.rows[int(rows[0])])
        row: list[float] = []
        counts: set[int] = set()
        for name in quantities:
            own = _given(study, name, rows)
            reference = _given(study, f"{name}{REFERENCE}", rows)
            if not own or not reference:
                faults.append(EvidenceError(f"pair {label} has no {name} on one side", where=where))
                continue
            counts.add(len(own))
            reciprocals[name].append(1 / len(reference))
            levels[name].append(math.fsum(reference) / len(reference))
            row.append(math.fsum(own) / len(own) - levels[name][-1])
        if len(counts) > 1:
            faults.append(EvidenceError(f"pair {label}: a scan gives every quantity", where=where))
        differences.append(row)
        readings.append(1 / max(counts, default=1))
    raise_collected(faults)
    means = {name: math.fsum(values) / len(values) for name, values in reciprocals.items()}
    return np.array(differences), np.array(readings), means, levels


def _given(study: Study, column: str, rows: Sequence[float]) -> list[float]:
    return [value for row in rows if (value := study.numbers[column][int(row)]) is not None]


def _warnings_of_remainder(left: Sequence[Estimate]) -> tuple[EvaluationWarning, ...]:
    if not left:
        detail = (
            "no remainder is offered without the repeatability of the analyzer and every reference method: "
            "the covariance of prediction is used whole, and more readings do not make it smaller"
        )
        return (EvaluationWarning("remainder-not-offered", detail),)
    if left[0].usable:
        return ()
    detail = (
        "the remainder is no covariance that is significantly above zero in every quantity: it is shown but "
        "cannot be used; the covariance of prediction is used whole"
    )
    return (EvaluationWarning("remainder-not-significant", detail),)
