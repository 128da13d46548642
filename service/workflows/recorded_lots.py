"""What the record says of a production: the first reading of every lot, and what became of it."""

from __future__ import annotations

import threading
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import date, datetime
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


@dataclass(frozen=True)
class Said:
    """What a decision said of one characteristic; without a budget it was not judged."""

    taken_at: datetime
    budget: tuple[str, int] | None
    estimate: float = 0.0
    uncorrected_bias: float = 0.0
    trusted: bool = False
    counts: Counts | None = None


class Remembered:
    """Keeps what decisions said, by the hash of their entry, which never says anything else; for threads."""

    MOST: Final = 50_000

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._said: dict[tuple[str, str], Said] = {}

    def of(self, stored: StoredDecision, characteristic: str) -> Said:
        """Give what a decision said of a characteristic."""
        key = (stored.entry.hash, characteristic)
        said = self._said.get(key)
        if said is None:
            said = _said_by(stored.entry.content, characteristic)
            with self._lock:
                if len(self._said) >= self.MOST:
                    self._said.clear()
                self._said[key] = said
        return said


def _said_by(content: Mapping[str, Any], characteristic: str) -> Said:
    taken_at = read_instant(content["request"]["readings"][0]["taken_at"])
    for verdict in content["verdicts"]:
        if verdict["characteristic"] != characteristic or verdict["estimate"] is None:
            continue
        samples, reference = verdict["samples"], verdict["budget"]
        return Said(
            taken_at,
            (reference["code"], reference["version"]),
            verdict["estimate"],
            verdict["uncorrected_bias"] or 0.0,
            verdict["conformance_probability"] is not None,
            Counts((max(1, verdict["readings"] // samples),) * samples),
        )
    return Said(taken_at, None)


def recorded_lots(
    unit_of_work: UnitOfWork,
    remembered: Remembered,
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
    scan = _Scan(unit_of_work, budget, analyzer)
    zone = ZoneInfo(register.plant.time_zone)
    read = 0
    for stored in _decisions(unit_of_work, budget.document.product):
        read += 1
        said = remembered.of(stored, budget.document.characteristic)
        day = said.taken_at.astimezone(zone).date()
        if (first_day is None or day >= first_day) and (last_day is None or day <= last_day):
            scan.take(stored, said, day)
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

    def __init__(self, unit_of_work: UnitOfWork, budget: BudgetInForce, analyzer: str) -> None:
        self._unit_of_work = unit_of_work
        self._analyzer, self._calibration = analyzer, budget.document.calibrations[analyzer]
        # Most lots were judged on the version in force.
        own = budget.document.code, budget.version
        self._corrections: dict[tuple[str, int], float | None] = {own: budget.budget.correction}
        self._decided: set[str] = set()
        self.first_looks: list[RecordedLot] = []
        self.released: list[ReleasedLot] = []
        self.left_out: Counter[str] = Counter()

    def take(self, stored: StoredDecision, said: Said, day: date) -> None:
        """Take one decision up."""
        newest = stored.lot not in self._decided
        self._decided.add(stored.lot)
        first = stored.round == 1
        correction = None if said.budget is None else self._correction(said.budget)
        if said.budget is None or correction is None:
            self.left_out["not-judged" if said.budget is None else "another-calibration"] += first
            return
        if newest and stored.outcome == "release":
            self.released.append(ReleasedLot(stored.lot, day, said.estimate - said.uncorrected_bias))
        if first and not said.trusted:
            self.left_out["not-trusted"] += 1
        elif first and said.counts is not None:
            self.first_looks.append(RecordedLot(stored.lot, day, said.estimate + correction, said.counts))

    def _correction(self, reference: tuple[str, int]) -> float | None:
        """Give what a budget takes off the readings; None where it is for another calibration."""
        if reference not in self._corrections:
            stored = self._unit_of_work.versions.get("budget", *reference)
            assert stored is not None and stored.evaluation is not None  # a decision rested on it
            document = load(BudgetDocument, stored.document)
            same = document.calibrations.get(self._analyzer) == self._calibration
            budget = budget_from_evaluation(document, stored.evaluation)
            self._corrections[reference] = budget.correction if same else None
        return self._corrections[reference]
