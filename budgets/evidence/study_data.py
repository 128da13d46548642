"""The one door to the study designs: data in, evaluation out."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from budgets.errors import BudgetsError, EvidenceError, raise_collected
from budgets.evidence import (
    agreement,
    check_samples,
    covariance,
    duplicates,
    fleet,
    nested_precision,
    process_stream,
    production,
    repeatability,
    sampling,
)
from budgets.evidence.evaluation import Evaluation, SetAside
from budgets.evidence.study_tables import Cell, Layout, NamedSource, Study, StudyData, read_columns

__all__ = [
    "DESIGNS",
    "MOST_ROWS",
    "VECTOR_DESIGNS",
    "Cell",
    "NamedSource",
    "StudyData",
    "StudyDesign",
    "evaluate_study",
]


@dataclass(frozen=True)
class StudyDesign:
    """A design: the columns and rows it takes, what else it takes, and how it is evaluated."""

    name: str
    layout: Layout
    evaluate: Callable[[Study], Evaluation]
    options: tuple[str, ...] = ()
    takes_sources: bool = False
    most_rows: int = 5_000


DESIGNS: dict[str, StudyDesign] = {
    design.name: design
    for design in (
        StudyDesign("repeatability", repeatability.LAYOUT, repeatability.evaluate),
        StudyDesign("duplicates", duplicates.LAYOUT, duplicates.evaluate),
        StudyDesign(
            "nested_precision",
            nested_precision.LAYOUT,
            nested_precision.evaluate,
            options=nested_precision.OPTIONS,
            # Certified data sets for such studies have up to 18,009 values.
            most_rows=20_000,
        ),
        StudyDesign("sampling", sampling.LAYOUT, sampling.evaluate),
        StudyDesign(
            "agreement", agreement.LAYOUT, agreement.evaluate, options=agreement.OPTIONS, takes_sources=True
        ),
        StudyDesign("check_samples", check_samples.LAYOUT, check_samples.evaluate),
        StudyDesign("fleet", fleet.LAYOUT, fleet.evaluate),
        StudyDesign(
            "process_stream",
            process_stream.LAYOUT,
            process_stream.evaluate,
            options=process_stream.OPTIONS,
            takes_sources=True,
            most_rows=process_stream.MOST_READINGS,
        ),
        StudyDesign("production", production.LAYOUT, production.evaluate, options=production.OPTIONS),
    )
}
# Designs whose table holds several characteristics at once.
VECTOR_DESIGNS: dict[str, StudyDesign] = {
    "covariance": StudyDesign(
        "covariance", covariance.LAYOUT, covariance.evaluate, options=covariance.OPTIONS, takes_sources=True
    )
}
# No design takes more rows.
MOST_ROWS = max(design.most_rows for design in (*DESIGNS.values(), *VECTOR_DESIGNS.values()))


def evaluate_study(
    design: str,
    data: StudyData,
    *,
    study: str,
    set_aside: Sequence[SetAside] = (),
    options: Mapping[str, Any] | None = None,
    named_sources: Sequence[NamedSource] = (),
    readings_decimals: int | None = None,
) -> Evaluation:
    """Evaluate a study by its design.

    Parameters
    ----------
    design : str
        One of ``DESIGNS`` or ``VECTOR_DESIGNS``.
    data : StudyData
    study : str
        Code of the study, the prefix of the codes of its mean squares.
    set_aside : sequence of SetAside
        Rows to leave out, each with a reason. The evaluation with them stands in the diagnostics under
        ``with_set_aside``.
    options : mapping or None
        What the design takes; anything else is refused.
    named_sources : sequence of NamedSource
        Sources known from elsewhere, for ``agreement``.
    readings_decimals : int or None
        Decimals of the readings, for the warning about their resolution.

    Returns
    -------
    Evaluation

    Raises
    ------
    EvidenceError
        With all faults found in ``faults``, their paths such as ``("rows", 3, 1)`` or ``("columns", 0)``.
    NotSupportedError
        For a kind of cell that this version does not evaluate.
    """
    known = {**DESIGNS, **VECTOR_DESIGNS}
    if design not in known:
        raise EvidenceError(f"{design!r} is no study design; there are {', '.join(known)}", where=("design",))
    chosen = known[design]
    given = dict(options or {})
    raise_collected(
        [*_faults_of_requests(chosen, given, named_sources), *_faults_of_rows(chosen, set_aside, data)]
    )

    def evaluated(rows: Sequence[int]) -> Evaluation:
        labels, numbers = read_columns(data, chosen.layout, rows)
        return chosen.evaluate(
            Study(study, labels, numbers, tuple(rows), given, tuple(named_sources), readings_decimals)
        )

    left_out = {item.row for item in set_aside}
    evaluation = evaluated([row for row in range(len(data.rows)) if row not in left_out])
    if not set_aside:
        return evaluation
    try:
        with_them: dict[str, Any] = evaluated(range(len(data.rows))).to_document()
    except BudgetsError as error:
        # The rows may have been set aside exactly because they cannot be read.
        with_them = {"error": error.message}
    return replace(
        evaluation,
        set_aside=tuple(set_aside),
        diagnostics={**evaluation.diagnostics, "with_set_aside": with_them},
    )


def _faults_of_requests(
    design: StudyDesign, options: Mapping[str, Any], named_sources: Sequence[NamedSource]
) -> list[BudgetsError]:
    taken = f"it takes {', '.join(design.options)}" if design.options else "it takes none"
    faults: list[BudgetsError] = [
        EvidenceError(f"{name!r} is no option of the design {design.name}; {taken}", where=("options", name))
        for name in options
        if name not in design.options
    ]
    if named_sources and not design.takes_sources:
        faults.append(
            EvidenceError(
                f"the design {design.name} takes nothing out, so it takes no named sources",
                where=("named_sources",),
            )
        )
    return faults


def _faults_of_rows(
    design: StudyDesign, set_aside: Sequence[SetAside], data: StudyData
) -> list[BudgetsError]:
    faults: list[BudgetsError] = []
    if len(data.rows) > design.most_rows:
        text = f"{len(data.rows)} rows; the design {design.name} takes at most {design.most_rows}"
        faults.append(EvidenceError(text, where=("rows",)))
    seen: set[int] = set()
    for index, item in enumerate(set_aside):
        where = ("set_aside", index)
        if not 0 <= item.row < len(data.rows):
            faults.append(
                EvidenceError(f"there is no row {item.row}; rows are counted from 0", where=(*where, "row"))
            )
        if item.row in seen:
            faults.append(EvidenceError(f"row {item.row} is set aside twice", where=(*where, "row")))
        if not item.reason.strip():
            faults.append(EvidenceError("a row is set aside with a reason", where=(*where, "reason")))
        seen.add(item.row)
    return faults
