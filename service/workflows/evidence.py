"""From what a document names as evidence to the estimate behind it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from datetime import UTC, date, datetime, timedelta
from typing import Any, Final, ParamSpec, TypeVar

from budgets.declarations import Declaration
from budgets.declarations import evaluate as evaluate_declaration
from budgets.errors import BudgetsError, NotSupportedError
from budgets.evidence.evaluation import Estimate, Evaluation
from budgets.evidence.widening import widened
from budgets.units import conversion
from service.documents import DeclaredEvidence, StatedEvidence, Study, StudyEvidence
from service.errors import Fault, InvalidRequest, NotSupported
from service.schemas import load
from service.store.unit_of_work import UnitOfWork

LONGEST_SERVICE: Final = 3650
"""Days that evidence may serve at most, whoever says how long: as much as a plant may say for a design."""
_EASTERNMOST: Final = timedelta(hours=14)

_T = TypeVar("_T")
_P = ParamSpec("_P")


@dataclass(frozen=True)
class Behind:
    """An estimate, how it was evaluated (GUM 2.3), and the study that it came from, if any.

    ``serves_until`` is the last day on which the evidence serves, None without an end. ``laboratory`` says
    which entry of a laboratory it was taken from, ``extension`` how the study serves beyond its time.
    """

    estimate: Estimate
    evaluation_type: str
    study: Study | None = None
    diagnostics: Mapping[str, Any] = field(default_factory=dict)
    serves_until: date | None = None
    laboratory: Mapping[str, Any] | None = None
    extension: Mapping[str, Any] | None = None


class FaultCollector:
    """Gathers faults so that a caller learns all of them at once."""

    def __init__(self) -> None:
        self.faults: list[Fault] = []

    def attempt(
        self, pointer: str, step: Callable[_P, _T], /, *args: _P.args, **kwargs: _P.kwargs
    ) -> _T | None:
        """Run ``step``; what it finds wrong is kept, located below ``pointer``."""
        try:
            return step(*args, **kwargs)
        except InvalidRequest as error:
            supported = not isinstance(error, NotSupported)
            found = error.faults or (Fault(error.message, pointer=pointer),)
            self.faults.extend(replace(fault, supported=fault.supported and supported) for fault in found)
        except BudgetsError as error:
            self.faults.extend(budget_faults(error, pointer))
        return None

    def add(self, pointer: str, detail: str, expected: str | None = None) -> None:
        """Keep one fault."""
        self.faults.append(Fault(detail, expected=expected, pointer=pointer))

    def add_once(self, pointer: str, detail: str, expected: str | None = None) -> None:
        """Keep one fault unless something is known to be wrong at that place."""
        if all(fault.pointer != pointer for fault in self.faults):
            self.add(pointer, detail, expected)

    def finish(self, message: str) -> None:
        """End the collection. Raises InvalidRequest when anything was found.

        It is NotSupported when nothing was wrong but what this version cannot do yet.
        """
        if self.faults:
            kind = InvalidRequest if any(fault.supported for fault in self.faults) else NotSupported
            raise kind(message, faults=tuple(self.faults))


def budget_faults(error: BudgetsError, pointer: str) -> tuple[Fault, ...]:
    """Turn an error of the computation, which may hold several, into faults located below ``pointer``."""
    if error.faults:
        return tuple(fault for part in error.faults for fault in budget_faults(part, pointer))
    where = "".join(f"/{step}" for step in error.where)
    supported = not isinstance(error, NotSupportedError)
    return (Fault(error.message, pointer=f"{pointer}{where}", supported=supported),)


def resolve_stated(
    unit_of_work: UnitOfWork,
    evidence: StatedEvidence,
    *,
    code: str,
    unit: str | None,
    pointer: str,
    extended: bool = False,
) -> Behind:
    """Find the estimate behind a study or a declaration, expressed in ``unit``; None leaves its own.

    ``extended`` takes a study as an approver extended it: it serves longer, and its uncertainty is wider.
    What is taken out of a scatter is never widened, for that would leave less.

    Raises
    ------
    InvalidRequest
        There is no such study or estimate, or the declared figure does not say what it means.
    """
    if isinstance(evidence, StudyEvidence):
        behind = _from_study(unit_of_work, evidence, unit, pointer)
        extension = unit_of_work.extensions.document_of(evidence.study) if extended else None
        return behind if extension is None else _extended(behind, evidence.study, extension)
    return _from_declaration(evidence, code, unit, pointer)


def _from_study(unit_of_work: UnitOfWork, evidence: StudyEvidence, unit: str | None, pointer: str) -> Behind:
    stored = unit_of_work.studies.get(evidence.study)
    if stored is None:
        raise InvalidRequest(
            "Evidence is missing.",
            faults=(
                Fault(
                    f"there is no study {evidence.study!r}",
                    expected="the code of a recorded study",
                    pointer=f"{pointer}/study",
                ),
            ),
        )
    study = load(Study, stored.document)
    collector = FaultCollector()
    evaluation = Evaluation.from_document(stored.evaluation)
    estimate = collector.attempt(pointer, evaluation.estimate, evidence.estimate)
    collector.finish("Evidence is missing.")
    assert estimate is not None
    wanted = in_unit(estimate, study.unit, unit or study.unit, pointer)
    return Behind(wanted, "A", study, evaluation.diagnostics, study.serves_until)


def _extended(behind: Behind, study: str, extension: Mapping[str, Any]) -> Behind:
    return replace(
        behind,
        estimate=widened(behind.estimate, extension["widening_factor"]),
        serves_until=date.fromisoformat(extension["until"]),
        extension={"study": study, **extension},
    )


def _from_declaration(evidence: DeclaredEvidence, code: str, unit: str | None, pointer: str) -> Behind:
    collector = FaultCollector()
    _check_days(evidence, pointer, collector)
    members = evidence.declaration
    # A relative figure is a fraction and needs no unit.
    if members.get("unit") is None and members.get("meaning") != "relative":
        collector.add(
            f"{pointer}/declaration/unit", "is missing", f"the unit of the figure, such as {unit or '%'!r}"
        )
    if not members.get("document"):
        # Type B: whoever audits the budget goes back to the document (JCGM 100:2008, 4.3.1, from memory).
        collector.add(f"{pointer}/declaration/document", "is missing", "the document of the figure, by name")
    evaluation = collector.attempt(
        f"{pointer}/declaration",
        lambda: evaluate_declaration(Declaration(**members), code=code, unit=unit),
    )
    collector.finish("A declaration cannot be used.")
    assert evaluation is not None
    if evidence.estimate is None and len(evaluation.estimates) > 1:
        names = ", ".join(estimate.name for estimate in evaluation.estimates)
        collector.add(f"{pointer}/estimate", "the declaration gives several estimates", f"one of {names}")
        collector.finish("A declaration cannot be used.")
    name = evidence.estimate or evaluation.estimates[0].name
    estimate = collector.attempt(pointer, evaluation.estimate, name)
    collector.finish("A declaration cannot be used.")
    assert estimate is not None
    return Behind(estimate, "B", serves_until=evidence.serves_until)


def _check_days(evidence: DeclaredEvidence, pointer: str, collector: FaultCollector) -> None:
    stated_on, serves_until = evidence.stated_on, evidence.serves_until
    if stated_on is None:
        return
    # A day that has begun nowhere on Earth yet, whatever the time zone of the plant.
    today = (datetime.now(UTC) + _EASTERNMOST).date()
    if stated_on > today:
        collector.add(f"{pointer}/stated_on", f"got {stated_on}", f"a day not after {today}")
    if serves_until is not None and (serves_until - stated_on).days > LONGEST_SERVICE:
        expected = f"a day at most {LONGEST_SERVICE} days after stated_on: evidence grows old"
        collector.add(f"{pointer}/serves_until", f"got {serves_until}", expected)


def in_unit(estimate: Estimate, from_unit: str, to_unit: str, pointer: str) -> Estimate:
    """Express an estimate in another unit: errors are differences, so an offset of the unit cancels."""
    if from_unit == to_unit:
        return estimate
    if estimate.matrix_terms:
        raise NotSupported("Not supported yet: a covariance in another unit than the study's.")
    collector = FaultCollector()
    found = collector.attempt(pointer, conversion, from_unit, to_unit)
    collector.finish("A unit does not convert.")
    assert found is not None
    factor, interval = found.factor, estimate.interval
    return replace(
        estimate,
        value=None if estimate.value is None else estimate.value * factor,
        terms=tuple(replace(term, coefficient=term.coefficient * factor**2) for term in estimate.terms),
        interval=None
        if interval is None
        else replace(interval, lower=interval.lower * factor, upper=interval.upper * factor),
    )
