"""The pairs of an agreement study: means of the replicates of analyzer and reference, run and cluster."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from budgets.errors import BudgetsError, EvidenceError, NotSupportedError, raise_collected
from budgets.evidence.evaluation import MeanSquare
from budgets.evidence.study_tables import Study
from budgets.evidence.sums import grouped, mean, sum_of_squares

# Percentiles between which most reference values lie: at their extremes single pairs vouch for the range.
BULK = (5, 95)
UNCERTAINTIES = ("reading_standard_uncertainty", "reference_standard_uncertainty")


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
    reading_standard_uncertainty, reference_standard_uncertainty : float or None
        Of the means of either side, where the study states them pair by pair.
    """

    label: str
    readings: tuple[float, ...]
    references: tuple[float, ...]
    group: str | None
    run: str | None
    reading_standard_uncertainty: float | None = None
    reference_standard_uncertainty: float | None = None

    @property
    def reading(self) -> float:
        """Mean reading."""
        return mean(self.readings)

    @property
    def reference(self) -> float:
        """Mean reference value."""
        return mean(self.references)

    @property
    def difference(self) -> float:
        """Mean reading less mean reference value."""
        return self.reading - self.reference


def values_of(pairs: Sequence[Pair]) -> list[float]:
    """Return all readings and reference values."""
    return [value for pair in pairs for value in (*pair.readings, *pair.references)]


def validation_pairs(study: Study) -> tuple[Pair, ...]:
    """Return the pairs of a study in long form, several rows of one pair being replicates.

    Parameters
    ----------
    study : Study
        Columns pair, reading, reference and optionally group, run and the standard uncertainties of either
        side.

    Returns
    -------
    tuple of Pair

    Raises
    ------
    EvidenceError
        If a pair lacks a side, stands in two groups or has an impossible uncertainty, or there are fewer than
        two pairs; all faults at once.
    NotSupportedError
        If the determinations of one pair come from several runs.
    """
    if len([column for column in UNCERTAINTIES if column in study.numbers]) == 1:
        raise EvidenceError(
            f"{' and '.join(UNCERTAINTIES)} are of use together only; one of them is missing",
            where=("columns",),
        )
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
            stated = [_stated(study, column, label, indices) for column in UNCERTAINTIES]
        except BudgetsError as error:
            faults.append(error.under(*where))
            continue
        pairs.append(Pair(label, sides["reading"], sides["reference"], group, run, *stated))
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


def _stated(study: Study, column: str, label: str, rows: Sequence[int]) -> float | None:
    """Return the standard uncertainty that the study states for one side of a pair, if it does.

    Raises
    ------
    EvidenceError
        If the rows of the pair state several, or none above zero.
    """
    if column not in study.numbers:
        return None
    values = {value for row in rows if (value := study.numbers[column][row]) is not None}
    if len(values) != 1 or not min(values) > 0:
        raise EvidenceError(f"pair {label} needs one {column} above zero, of the mean of its values")
    return values.pop()


def within_pairs(groups: Sequence[Sequence[float]], code: str) -> MeanSquare | None:
    """Return the pooled mean square of replicates within the pairs, None when there are none that scatter."""
    freedom = sum(len(values) - 1 for values in groups)
    if freedom == 0:
        return None
    square = math.fsum(sum_of_squares(values) for values in groups) / freedom
    return MeanSquare(code, square, freedom) if square > 0 else None
