"""Options and results that both questions to a process stream share."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from budgets.errors import BudgetsError, EvidenceError
from budgets.evidence.evaluation import Estimate
from budgets.evidence.study_tables import Study


def whole_number(study: Study, name: str, least: int, most: int, default: int | None) -> int:
    """Return an option that is a whole number.

    Raises
    ------
    EvidenceError
        If it is none, or outside of its range.
    """
    value = study.options.get(name, default)
    if isinstance(value, bool) or not isinstance(value, int) or not least <= value <= most:
        raise EvidenceError(
            f"{name}: a whole number from {least} to {most} is expected", where=("options", name)
        )
    return value


def not_taken(study: Study, names: Sequence[str], why: str) -> list[BudgetsError]:
    """Return a fault for every option of the other question."""
    return [
        EvidenceError(f"{name} does not belong to {why}", where=("options", name))
        for name in names
        if name in study.options
    ]


def named_chi_square(estimate: Estimate) -> Estimate:
    """Name the method as what it is for a single mean square."""
    interval = estimate.interval
    return (
        estimate if interval is None else replace(estimate, interval=replace(interval, method="chi-square"))
    )
