"""The table of a study: cells as they were given, checked and sorted into columns."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

from budgets.errors import BudgetsError, EvidenceError, NotSupportedError, raise_collected
from budgets.evidence.evaluation import Estimate

Cell = float | int | str | Mapping[str, float] | None

LARGEST_MAGNITUDE = 1e15


class BelowLimit(float):
    """A value known only to lie below this number, a reporting limit: never the number, nor half of it."""


@dataclass(frozen=True)
class StudyData:
    """Columns and rows exactly as they were read.

    Parameters
    ----------
    columns : tuple of str
    rows : tuple of tuple
        One cell per column: a number, text in a label column, or None.
    """

    columns: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]


@dataclass(frozen=True)
class Layout:
    """The columns that a design knows.

    Parameters
    ----------
    required, optional : tuple of str
    numbers : tuple of str
        Columns of numbers; the others are labels.
    nullable : tuple of str
        Columns of numbers in which a cell may be empty.
    censorable : tuple of str
        Columns of numbers in which a cell may say that the value lies below a reporting limit.
    others_are_numbers : bool
        Whether any other column is one of numbers, named by the user, in which a cell may be empty.
    """

    required: tuple[str, ...]
    optional: tuple[str, ...]
    numbers: tuple[str, ...]
    nullable: tuple[str, ...] = ()
    others_are_numbers: bool = False
    censorable: tuple[str, ...] = ()

    def is_number(self, column: str) -> bool:
        """Say whether a column holds numbers."""
        return column in self.numbers or (
            self.others_are_numbers and column not in self.required + self.optional
        )


@dataclass(frozen=True)
class NamedSource:
    """A source of error known from elsewhere, named to an agreement study.

    Parameters
    ----------
    source : str
        ``analyzer_repeatability``, ``presentation``, ``reference_repeatability``, ``reference_run`` or
        ``subsampling``.
    estimate : Estimate
        Variance of one draw.
    quantity : str
        In the design ``covariance``: the quantity whose error it is, unless the estimate is of all of them.
    """

    source: str
    estimate: Estimate
    quantity: str = ""


@dataclass(frozen=True)
class Study:
    """A table that passed its checks, and what else an evaluation may use.

    Parameters
    ----------
    code : str
        Prefix of the codes of its mean squares.
    labels : mapping of str to tuple of str
        Label columns.
    numbers : mapping of str to tuple of float or None
        Number columns.
    rows : tuple of int
        Number of each row in the data that were given, counted from 0.
    options : mapping
    named_sources : tuple of NamedSource
    decimals : int or None
        Decimals of the readings.
    """

    code: str
    labels: Mapping[str, tuple[str, ...]]
    numbers: Mapping[str, tuple[float | None, ...]]
    rows: tuple[int, ...]
    options: Mapping[str, Any] = field(default_factory=dict)
    named_sources: tuple[NamedSource, ...] = ()
    decimals: int | None = None

    def full(self, column: str) -> tuple[float, ...]:
        """Return a number column that has no empty cells."""
        return tuple(value for value in self.numbers[column] if value is not None)


def read_columns(
    data: StudyData, layout: Layout, rows: Iterable[int]
) -> tuple[dict[str, tuple[str, ...]], dict[str, tuple[float | None, ...]]]:
    """Return label and number columns of the given rows.

    Parameters
    ----------
    data : StudyData
    layout : Layout
    rows : iterable of int
        Rows to read, counted from 0.

    Returns
    -------
    tuple of dict
        Labels as text, numbers as float or None.

    Raises
    ------
    EvidenceError
        With all faults of columns, or else of cells, in ``faults``.
    """
    raise_collected(_faults_of_columns(data.columns, layout))
    chosen = list(rows)
    if not chosen:
        raise EvidenceError("the study has no data", where=("rows",))
    faults: list[BudgetsError] = []
    labels: dict[str, list[str]] = {name: [] for name in data.columns if not layout.is_number(name)}
    numbers: dict[str, list[float | None]] = {name: [] for name in data.columns if layout.is_number(name)}
    for i in chosen:
        row = data.rows[i]
        if len(row) != len(data.columns):
            faults.append(
                EvidenceError(f"it has {len(row)} cells, expected {len(data.columns)}", where=("rows", i))
            )
            continue
        for j, (name, cell) in enumerate(zip(data.columns, row, strict=True)):
            try:
                if name in numbers:
                    numbers[name].append(_number(cell, name, layout))
                else:
                    labels[name].append(_label(cell, name))
            except BudgetsError as error:
                faults.append(error.under("rows", i, j))
    raise_collected(faults)
    return (
        {name: tuple(cells) for name, cells in labels.items()},
        {name: tuple(cells) for name, cells in numbers.items()},
    )


def _faults_of_columns(columns: Sequence[str], layout: Layout) -> list[BudgetsError]:
    known = layout.required + layout.optional
    expected = f"{', '.join(layout.required)}; optional: {', '.join(layout.optional)}"
    faults: list[BudgetsError] = [
        EvidenceError(
            f"the column {name!r} is unknown to this design; it expects {expected}", where=("columns", i)
        )
        for i, name in enumerate(columns)
        if name not in known and not layout.is_number(name)
    ]
    faults += [
        EvidenceError(f"the column {name!r} occurs twice", where=("columns", i))
        for i, name in enumerate(columns)
        if name in columns[:i]
    ]
    faults += [
        EvidenceError(f"the column {name!r} is missing; this design expects {expected}", where=("columns",))
        for name in layout.required
        if name not in columns
    ]
    return faults


def _label(cell: object, name: str) -> str:
    if isinstance(cell, bool) or not isinstance(cell, (str, int, float)):
        raise EvidenceError(f"{name}: a label is missing; expected text or a number")
    # 1 and 1.0 are the same label: a spreadsheet writes either.
    text = f"{cell:g}" if isinstance(cell, float) and cell.is_integer() else str(cell).strip()
    if not text:
        raise EvidenceError(f"{name}: the label is empty; expected text or a number")
    return text


def _number(cell: object, name: str, layout: Layout) -> float | None:
    if cell is None:
        if name in layout.nullable or layout.others_are_numbers:
            return None
        raise EvidenceError(f"{name}: the cell is empty; expected a number")
    if isinstance(cell, Mapping) and name in layout.censorable:
        # Anything but a limit comes out as None, and is refused as an empty cell would be.
        limit = _number(cell.get("below"), name, replace(layout, nullable=()))
        return None if limit is None else BelowLimit(limit)
    if isinstance(cell, Mapping):
        raise NotSupportedError(f"{name}: values below a reporting limit")
    if isinstance(cell, bool) or not isinstance(cell, (int, float)):
        raise EvidenceError(f"{name}: got the text {str(cell)[:40]!r}; expected a number")
    # The comparison is exact for integers of any size, and false for a NaN.
    if not abs(cell) < LARGEST_MAGNITUDE:
        raise EvidenceError(f"{name}: expected a finite number below {LARGEST_MAGNITUDE:g} in size")
    return float(cell)
