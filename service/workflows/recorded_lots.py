"""What the record says of a production: the first reading of every lot, and what became of it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import date
from typing import Any, Final
from zoneinfo import ZoneInfo

from budgets.propagation import Counts
from service.documents import BudgetDocument
from service.ledger import read_instant
from service.schemas import load
from service.store.rows import StoredDecision
from service.store.unit_of_work import UnitOfWork
from service.workflows.register import BudgetInForce, Register
from service.workflows.stored_budgets import budget_from_evaluation

MOST_DECISIONS: Final = 5000
_PAGE: Final = 500


@dataclass(frozen=True)
class RecordedLot:
    """A lot by its first look: the mean of its readings, what was done, and the day of the readings."""

    lot: str
    day: date
    reading: float
    counts: Counts


@dataclass(frozen=True)
class ReleasedLot:
    """A lot that was released: the true value by its last estimate, less a bias that was left in it."""

    lot: str
    day: date
    true_value: float


@dataclass(frozen=True)
class RecordedLots:
    """Lots of the record, oldest first; ``left_out`` counts those that cannot serve, by reason.

    ``all_read`` is false when the record holds more decisions than are read.
    """

    first_looks: tuple[RecordedLot, ...]
    released: tuple[ReleasedLot, ...]
    left_out: Mapping[str, int]
    all_read: bool

    @property
    def usual_counts(self) -> Counts:
        """What was done most often at a first look."""
        return Counter(lot.counts for lot in self.first_looks).most_common(1)[0][0]


def recorded_lots(
    unit_of_work: UnitOfWork,
    register: Register,
    budget: BudgetInForce,
    analyzer: str,
    *,
    first_day: date | None = None,
    last_day: date | None = None,
) -> RecordedLots:
    """Read the lots that were judged with the calibration of a budget in force, by the day of their readings.

    Held and rejected lots are among them; a reading that was not trusted is not.
    """
    scan = _Scan(unit_of_work, register, budget, analyzer)
    read = 0
    for stored in _decisions(unit_of_work, budget.document.product):
        read += 1
        day = scan.day_of(stored)
        if (first_day is None or day >= first_day) and (last_day is None or day <= last_day):
            scan.take(stored, day)
    return RecordedLots(
        tuple(reversed(scan.first_looks)),
        tuple(reversed(scan.released)),
        dict(scan.left_out),
        read < MOST_DECISIONS,
    )


def _decisions(unit_of_work: UnitOfWork, product: str) -> Iterator[StoredDecision]:
    """Give the newest decisions on a product, newest first."""
    before: tuple[str, str, int] | None = None
    for _ in range(MOST_DECISIONS // _PAGE):
        page = unit_of_work.decisions.list(product=product, limit=_PAGE, before=before)
        yield from page
        if len(page) < _PAGE:
            return
        before = (page[-1].recorded_at, page[-1].chain, page[-1].sequence)


class _Scan:
    """Goes through decisions, newest first."""

    def __init__(
        self, unit_of_work: UnitOfWork, register: Register, budget: BudgetInForce, analyzer: str
    ) -> None:
        self._unit_of_work = unit_of_work
        self._zone = ZoneInfo(register.plant.time_zone)
        self._document, self._analyzer = budget.document, analyzer
        self._corrections: dict[tuple[str, int], float | None] = {}
        self._decided: set[str] = set()
        self.first_looks: list[RecordedLot] = []
        self.released: list[ReleasedLot] = []
        self.left_out: Counter[str] = Counter()

    def day_of(self, stored: StoredDecision) -> date:
        """Give the plant's day on which a lot was read."""
        taken_at = stored.entry.content["request"]["readings"][0]["taken_at"]
        return read_instant(taken_at).astimezone(self._zone).date()

    def take(self, stored: StoredDecision, day: date) -> None:
        """Take one decision up."""
        newest = stored.lot not in self._decided
        self._decided.add(stored.lot)
        verdict = self._verdict(stored.entry.content["verdicts"])
        if verdict is None:
            self.left_out["not-judged"] += stored.round == 1
            return
        correction = self._correction(verdict["budget"])
        if correction is None:
            self.left_out["another-calibration"] += stored.round == 1
            return
        if newest and stored.outcome == "release":
            true_value = verdict["estimate"] - verdict["uncorrected_bias"]
            self.released.append(ReleasedLot(stored.lot, day, true_value))
        if stored.round > 1:
            return
        if verdict["conformance_probability"] is None:
            self.left_out["not-trusted"] += 1
            return
        samples, readings = verdict["samples"], verdict["readings"]
        counts = Counts((max(1, readings // samples),) * samples)
        self.first_looks.append(RecordedLot(stored.lot, day, verdict["estimate"] + correction, counts))

    def _verdict(self, verdicts: list[dict[str, Any]]) -> dict[str, Any] | None:
        for verdict in verdicts:
            if verdict["characteristic"] == self._document.characteristic and verdict["estimate"] is not None:
                return None if verdict["budget"] is None else verdict
        return None

    def _correction(self, reference: dict[str, Any]) -> float | None:
        """Give what a budget takes off the readings; None where it is for another calibration."""
        key = (reference["code"], reference["version"])
        if key not in self._corrections:
            stored = self._unit_of_work.versions.get("budget", *key)
            assert stored is not None and stored.evaluation is not None  # a decision rested on it
            document = load(BudgetDocument, stored.document)
            same = document.calibrations.get(self._analyzer) == self._document.calibrations[self._analyzer]
            budget = budget_from_evaluation(document, stored.evaluation)
            self._corrections[key] = budget.correction if same else None
        return self._corrections[key]
