"""The pairs of an agreement study: means of the replicates of analyzer and reference, run and cluster."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from budgets.errors import BudgetsError, EvidenceError, NotSupportedError, raise_collected
from budgets.evidence.evaluation import MeanSquare
from budgets.evidence.study_tables import Study
from budgets.evidence.sums import grouped, mean, sum_of_squares


@dataclass(frozen=True)
class Pair:
    """One sample seen by the analyzer and by the reference method.

    Parameters
    ----------
    label : str
    readings, references : tuple of float
        Replicates of either side.
    group, run : str or None
        Day or lot that the pair belongs to; run of the reference method.
    """

    label: str
    readings: tuple[float, ...]
    references: tuple[float, ...]
    group: str | None
    run: str | None

    @property
    def difference(self) -> float:
        """Mean reading less mean reference value."""
        return mean(self.readings) - mean(self.references)


def validation_pairs(study: Study) -> tuple[Pair, ...]:
    """Return the pairs of a study in long form, several rows of one pair being replicates.

    Parameters
    ----------
    study : Study
        Columns pair, reading, reference and optionally group and run.

    Returns
    -------
    tuple of Pair

    Raises
    ------
    EvidenceError
        If a pair lacks a side or stands in two groups, or there are fewer than two pairs; all faults at once.
    NotSupportedError
        If the determinations of one pair come from several runs.
    """
    labels = study.labels["pair"]
    pairs: list[Pair] = []
    faults: list[BudgetsError] = []
    for label, rows in grouped(labels, range(len(labels))).items():
        indices = [int(row) for row in rows]
        sides = {
            side: tuple(value for i in indices if (value := study.numbers[side][i]) is not None)
            for side in ("reading", "reference")
        }
        where = ("rows", study.rows[indices[0]])
        faults += [
            EvidenceError(f"pair {label} has no {side} at all", where=where)
            for side, values in sides.items()
            if not values
        ]
        try:
            group, run = (_common(study, column, label, indices) for column in ("group", "run"))
        except BudgetsError as error:
            faults.append(error.under(*where))
            continue
        pairs.append(Pair(label, sides["reading"], sides["reference"], group, run))
    raise_collected(faults)
    if len(pairs) < 2:
        raise EvidenceError(
            "there is one pair only; a standard error of prediction needs at least two", where=("rows",)
        )
    return tuple(pairs)


def _common(study: Study, column: str, label: str, rows: Sequence[int]) -> str | None:
    if column not in study.labels:
        return None
    values = sorted({study.labels[column][row] for row in rows})
    if len(values) == 1:
        return values[0]
    text = f"pair {label} stands in several {column}s ({', '.join(values)})"
    if column == "run":
        raise NotSupportedError(f"{text}: reference determinations of one pair from several runs")
    raise EvidenceError(text)


def within_pairs(groups: Sequence[Sequence[float]], code: str) -> MeanSquare | None:
    """Return the pooled mean square of replicates within the pairs, None when there are none that scatter."""
    freedom = sum(len(values) - 1 for values in groups)
    if freedom == 0:
        return None
    square = math.fsum(sum_of_squares(values) for values in groups) / freedom
    return MeanSquare(code, square, freedom) if square > 0 else None
