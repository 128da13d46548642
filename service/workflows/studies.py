"""Studies: test data in, evaluation out; previewed without a trace or recorded for good."""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any, Final
from zoneinfo import ZoneInfo

from budgets.evidence.evaluation import Evaluation, SetAside
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.units import conversion
from service.access import require
from service.documents import Actor, Plant, Study
from service.errors import Conflict, Fault, NotFound
from service.ledger import Entry
from service.schemas import dump
from service.store.rows import StoredStudy
from service.store.unit_of_work import UnitOfWork
from service.workflows import plant
from service.workflows.calendar import serving_end
from service.workflows.evidence import LONGEST_SERVICE, FaultCollector
from service.workflows.named_sources import ResolvedSource, resolve_source
from service.workflows.paging import page_of, start_after
from service.workflows.recording import PLANT_CHAIN, Page, Request, entry_reference, record
from service.workflows.reference_methods import check_stated_methods, methods_of_study
from service.workflows.services import Services

_CELL: Final = re.compile(r"#/rows/([0-9]+)/[0-9]+")
_SHA256: Final = re.compile(r"[0-9A-Fa-f]{64}")


def preview(services: Services, actor: Actor, study: Study) -> dict[str, Any]:
    """Evaluate a study and store nothing. Raises InvalidRequest with all that is wrong with it."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        task = _task(unit_of_work, study)
    complete, evaluation = _evaluate(services, study, task)
    return {"recorded": False, "study": dump(complete), "evaluation": evaluation.to_document()}


def record_study(
    services: Services, actor: Actor, study: Study, request: Request
) -> tuple[dict[str, Any], bool]:
    """Evaluate a study and record both for good; gives the answer and whether it had been recorded earlier.

    Raises
    ------
    Conflict
        The code is taken; a study is never changed, a further one gets a code of its own.
    InvalidRequest
        The data cannot be evaluated.
    """
    require(actor, "record a study")
    # Evaluated here, so that the writer, which the production lines wait for, only writes it down.
    with services.database.reading() as unit_of_work:
        taken = unit_of_work.studies.get(study.code)
        task = None if taken else _task(unit_of_work, study)
    complete, evaluation = (study, None) if task is None else _evaluate(services, study, task)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        if evaluation is None or unit_of_work.studies.get(study.code) is not None:
            raise Conflict(
                "already-exists",
                f"There is a study {study.code!r}; studies never change, use a new code.",
                link=f"/v1/studies/{study.code}",
            )
        content = {"study": dump(complete), "evaluation": evaluation.to_document()}
        entry = unit_of_work.append(PLANT_CHAIN, "study-recorded", actor.principal, content)
        unit_of_work.studies.add(
            study.code,
            content["study"],
            content["evaluation"],
            entry,
            product=study.product,
            characteristic=study.characteristic,
            design=study.design,
        )
        return entry

    recorded = record(services, actor, request, {PLANT_CHAIN}, perform)
    answer = {"recorded": True, **recorded.entry.content, "entry": entry_reference(recorded.entry)}
    return answer, recorded.earlier


def get(services: Services, actor: Actor, code: str) -> dict[str, Any]:
    """Read a study with its data and evaluation. Raises NotFound."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        stored = unit_of_work.studies.get(code)
    if stored is None:
        raise NotFound(f"There is no study {code!r}.")
    return {"recorded": True, "study": stored.document, "evaluation": stored.evaluation}


def listing(
    services: Services,
    actor: Actor,
    *,
    product: str | None = None,
    limit: int = 50,
    cursor: str | None = None,
) -> Page:
    """List studies without their data, newest first."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        before = start_after(cursor, unit_of_work.studies.get, lambda last: (last.sequence, last.code))
        found = unit_of_work.studies.list(product=product, limit=limit + 1, before=before)
    return page_of(found, limit, _summary, lambda stored: stored.code)


def _summary(stored: StoredStudy) -> dict[str, Any]:
    shown = ("code", "design", "product", "characteristic", "unit", "done_on", "serves_until")
    return {member: stored.document[member] for member in shown}


# --- evaluation ----------------------------------------------------------------------------------------


@dataclasses.dataclass(frozen=True)
class _Task:
    """What the record says beside a study, so that it can be evaluated without the database."""

    plant: Plant
    sources: tuple[ResolvedSource, ...]
    readings_decimals: int | None
    reference_methods: Mapping[str, str]


def _task(unit_of_work: UnitOfWork, study: Study) -> _Task:
    plant_document = plant.in_force(unit_of_work)
    collector = FaultCollector()
    _check_references(unit_of_work, study, collector)
    _check_dates(study, plant_document, collector)
    _check_source(study, collector)
    check_stated_methods(unit_of_work, study, collector)
    sources = [
        collector.attempt(f"#/named_sources/{index}/evidence", resolve_source, unit_of_work, study, index)
        for index in range(len(study.named_sources))
    ]
    collector.finish("The study refers to what does not exist or does not fit.")
    return _Task(
        plant_document,
        tuple(source for source in sources if source is not None),
        _readings_decimals(unit_of_work, study),
        methods_of_study(unit_of_work, study),
    )


def _evaluate(services: Services, study: Study, task: _Task) -> tuple[Study, Evaluation]:
    """Evaluate in the helper process, outside of any transaction."""
    collector = FaultCollector()
    evaluation = collector.attempt(
        "#",
        services.helper.run,
        evaluate_study,
        study.design,
        StudyData(columns=study.columns, rows=study.rows),
        study=study.code,
        # Documents count rows from 1, as people do; the computation from 0.
        set_aside=tuple(SetAside(aside.row - 1, aside.reason) for aside in study.set_aside),
        options=_options(study),
        named_sources=tuple(source.source for source in task.sources),
        readings_decimals=task.readings_decimals,
    )
    collector.faults = [_in_document(fault) for fault in collector.faults]
    collector.finish("The study cannot be evaluated.")
    assert evaluation is not None
    serves_until = study.serves_until or serving_end(study.design, study.done_on, task.plant)
    methods = {**task.reference_methods, **study.reference_methods}
    # Which entry a component of a laboratory was taken from, so that the evaluation can be done once more.
    laboratories = [dict(source.laboratory) for source in task.sources if source.laboratory is not None]
    taken = {"laboratory_components": laboratories} if laboratories else {}
    counted_from_1 = tuple(SetAside(aside.row + 1, aside.reason) for aside in evaluation.set_aside)
    return (
        dataclasses.replace(study, serves_until=serves_until, reference_methods=methods),
        dataclasses.replace(
            evaluation, set_aside=counted_from_1, diagnostics={**evaluation.diagnostics, **taken}
        ),
    )


def _options(study: Study) -> dict[str, Any]:
    own = {} if study.independent is None else {"independent": study.independent}
    return {**study.options, **own}


def _in_document(fault: Fault) -> Fault:
    """Point to the member of the document; one option of a design is a member of its own there."""
    pointer = (fault.pointer or "#").replace("#/options/independent", "#/independent", 1)
    detail = fault.detail
    # The computation counts rows from 0, and so do pointers; people count them from 1.
    if found := _CELL.fullmatch(pointer):
        detail = f"row {int(found[1]) + 1}, column {detail}"
    return dataclasses.replace(fault, pointer=pointer, detail=detail)


def _readings_decimals(unit_of_work: UnitOfWork, study: Study) -> int | None:
    """Give the decimals that the analyzer shows, where one analyzer was studied and says so."""
    if len(study.calibrations) != 1:
        return None
    analyzer = unit_of_work.master.get("analyzer", next(iter(study.calibrations)))
    return None if analyzer is None else analyzer.document["decimals"].get(study.characteristic)


def _check_references(unit_of_work: UnitOfWork, study: Study, collector: FaultCollector) -> None:
    if unit_of_work.master.get("product", study.product) is None:
        collector.add("#/product", f"there is no product {study.product!r}", "the code of a product")
    else:
        _check_characteristics(unit_of_work, study, collector)
    for analyzer, calibration in study.calibrations.items():
        stored = unit_of_work.master.get("calibration", calibration)
        if stored is None or stored.document["analyzer"] != analyzer:
            collector.add(
                f"#/calibrations/{analyzer}",
                f"there is no calibration {calibration!r} of {analyzer!r}",
                "a calibration of that analyzer",
            )
    if study.laboratory is not None and unit_of_work.master.get("laboratory", study.laboratory) is None:
        collector.add(
            "#/laboratory", f"there is no laboratory {study.laboratory!r}", "the code of a laboratory"
        )


def _check_characteristics(unit_of_work: UnitOfWork, study: Study, collector: FaultCollector) -> None:
    named = {"#/characteristic": study.characteristic}
    named |= {f"#/characteristics/{index}": code for index, code in enumerate(study.characteristics)}
    for pointer, code in named.items():
        key = f"{study.product}/{code}"
        stored = unit_of_work.master.get("characteristic", key)
        if stored is None:
            collector.add(pointer, f"there is no characteristic {key!r}", "one of the product")
        else:
            collector.attempt("#/unit", conversion, study.unit, stored.document["unit"])
    if study.design != "covariance":
        if study.characteristics:
            collector.add(
                "#/characteristics", f"{study.design} is about one characteristic", "no such member"
            )
        return
    if study.characteristic not in study.characteristics:
        collector.add(
            "#/characteristics", f"{study.characteristic!r} is missing", "all that the study is about"
        )
    for index, column in enumerate(study.columns):
        base = column.removesuffix("_reference")
        if base not in (*study.characteristics, "sample", "pair", "scan", "group"):
            expected = ", ".join(study.characteristics)
            collector.add(f"#/columns/{index}", f"{column!r} is no characteristic of the study", expected)


def _check_dates(study: Study, plant_document: Plant, collector: FaultCollector) -> None:
    # A date is plant-local: nothing can be done on a day that has not begun anywhere in the plant.
    today = datetime.now(UTC).astimezone(ZoneInfo(plant_document.time_zone)).date()
    if study.done_on > today:
        collector.add("#/done_on", f"got {study.done_on.isoformat()}", f"a day not after {today.isoformat()}")
    if study.serves_until is not None and (study.serves_until - study.done_on).days > LONGEST_SERVICE:
        collector.add(
            "#/serves_until",
            f"got {study.serves_until.isoformat()}",
            f"a day at most {LONGEST_SERVICE} days after done_on: evidence grows old",
        )


def _check_source(study: Study, collector: FaultCollector) -> None:
    # Not in the schema, which has to read the studies that stand in the record.
    digest = None if study.source is None else study.source.sha256
    if digest is not None and _SHA256.fullmatch(digest) is None:
        collector.add(
            "#/source/sha256", f"got {digest!r}", "64 hexadecimal digits, as `sha256sum` prints them"
        )
