"""A study evaluated: checked against the record, then computed in the helper process with what was found."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from typing import Any, Final
from zoneinfo import ZoneInfo

from budgets.evidence.evaluation import Evaluation, SetAside
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.units import conversion
from service.documents import Plant, Study
from service.errors import Fault
from service.store.unit_of_work import UnitOfWork
from service.workflows import plant
from service.workflows.calendar import serving_end
from service.workflows.evidence import LONGEST_SERVICE, FaultCollector
from service.workflows.named_sources import ResolvedSource, resolve_source
from service.workflows.reference_methods import check_stated_methods, methods_of_study
from service.workflows.services import Services

_PLACE: Final = re.compile(r"#/rows/([0-9]+)(/[0-9]+)?")
_NOT_SUPPORTED: Final = "not supported yet: "
_SHA256: Final = re.compile(r"[0-9A-Fa-f]{64}")


@dataclass(frozen=True)
class Task:
    """What the record says beside a study, so that it can be evaluated without the database."""

    plant: Plant
    sources: tuple[ResolvedSource, ...]
    readings_decimals: int | None
    reference_methods: Mapping[str, str]


def task_of(unit_of_work: UnitOfWork, study: Study, *, again: bool = False) -> Task:
    """Gather what a study is evaluated with; ``again`` for one that stands in the record already.

    Raises
    ------
    InvalidRequest
        It refers to what does not exist, or takes out what was found on something else.
    """
    plant_document = plant.in_force(unit_of_work)
    collector = FaultCollector()
    _check_references(unit_of_work, study, collector)
    _check_dates(study, plant_document, collector)
    _check_source(study, collector)
    if not again:
        check_stated_methods(unit_of_work, study, collector)
    sources = [
        collector.attempt(f"#/named_sources/{index}/evidence", resolve_source, unit_of_work, study, index)
        for index in range(len(study.named_sources))
    ]
    collector.finish("The study refers to what does not exist or does not fit.")
    return Task(
        plant_document,
        tuple(source for source in sources if source is not None),
        _readings_decimals(unit_of_work, study),
        methods_of_study(unit_of_work, study),
    )


def evaluate(services: Services, study: Study, task: Task) -> tuple[Study, Evaluation]:
    """Evaluate in the helper process, outside of any transaction; gives the study complete.

    Raises
    ------
    InvalidRequest
        The data cannot be evaluated.
    """
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
        replace(study, serves_until=serves_until, reference_methods=methods),
        replace(evaluation, set_aside=counted_from_1, diagnostics={**evaluation.diagnostics, **taken}),
    )


def _options(study: Study) -> dict[str, Any]:
    own = {} if study.independent is None else {"independent": study.independent}
    return {**study.options, **own}


def _in_document(fault: Fault) -> Fault:
    """Point to the member of the document; one option of a design is a member of its own there."""
    pointer = (fault.pointer or "#").replace("#/options/independent", "#/independent", 1)
    detail = fault.detail
    # The computation counts rows from 0, and so do pointers; people count them from 1.
    if found := _PLACE.fullmatch(pointer):
        prefix = _NOT_SUPPORTED if detail.startswith(_NOT_SUPPORTED) else ""
        place = f"row {int(found[1]) + 1}" + (", column " if found[2] else ": ")
        detail = prefix + place + detail.removeprefix(prefix)
    return replace(fault, pointer=pointer, detail=detail)


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
