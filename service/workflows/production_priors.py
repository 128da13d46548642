"""From what a document says of a production to the prior that the computation takes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from datetime import date
from typing import Any

from budgets.budget import Budget
from budgets.evidence.evaluation import Evaluation
from budgets.prior_estimates import PriorEstimate, prior_of_study
from budgets.production_priors import ProductionPrior, Steering
from budgets.units import conversion, convert
from service.documents import BudgetDocument, Characteristic, DeclaredPrior, StatedPrior, Study
from service.ledger import format_instant
from service.schemas import load
from service.store.unit_of_work import UnitOfWork
from service.workflows import plant
from service.workflows.calendar import lapse_instant
from service.workflows.evidence import FaultCollector, in_unit


@dataclass(frozen=True)
class ResolvedPrior:
    """A prior, in the unit of the characteristic, and what it was estimated from, where it was.

    ``left_out`` counts lots of the record that could not serve, by reason; ``all_read`` is false when the
    record holds more than is read.
    """

    prior: ProductionPrior
    estimate: PriorEstimate | None = None
    left_out: Mapping[str, int] = field(default_factory=dict)
    all_read: bool = True


def resolve_prior(
    unit_of_work: UnitOfWork,
    stated: StatedPrior,
    characteristic: Characteristic,
    document: BudgetDocument,
    budget: Budget,
    *,
    pointer: str,
) -> ResolvedPrior:
    """Make the prior of a document for the readings of a budget.

    Raises
    ------
    InvalidRequest
        There is no such study, it is about something else, its evidence has lapsed, or no prior can be made
        of what is stated.
    """
    if stated.declaration is not None:
        return ResolvedPrior(_declared(stated, stated.declaration, characteristic, pointer))
    study, evaluation = _study(unit_of_work, stated, characteristic, pointer)
    collector = FaultCollector()
    for analyzer, calibration in document.calibrations.items():
        if study.calibrations.get(analyzer) != calibration:
            collector.add(
                f"{pointer}/study",
                f"{study.code} was not read on {analyzer} with the calibration {calibration!r}",
                "a study by the readings that are judged, or a declared prior",
            )
    collector.finish("The production prior belongs to other readings.")
    estimate = collector.attempt(
        pointer, prior_of_study, evaluation, budget, distribution=stated.distribution
    )
    # Whatever it is, it is wrong with the study.
    collector.faults = [replace(fault, pointer=f"{pointer}/study") for fault in collector.faults]
    collector.finish("The production prior cannot be used.")
    assert estimate is not None
    return ResolvedPrior(estimate.prior, estimate)


def _declared(
    stated: StatedPrior, declared: DeclaredPrior, characteristic: Characteristic, pointer: str
) -> ProductionPrior:
    collector = FaultCollector()
    prior = collector.attempt(f"{pointer}/declaration", declared_prior, stated, declared, characteristic)
    collector.finish("The production prior cannot be used.")
    assert prior is not None
    return prior


def declared_prior(
    stated: StatedPrior, declared: DeclaredPrior, characteristic: Characteristic
) -> ProductionPrior:
    """Make a prior of declared figures. Raises UnitsError or LimitsError."""
    factor = conversion(declared.unit, characteristic.unit).factor

    def value(figure: float) -> float:
        return convert(figure, declared.unit, characteristic.unit)

    if stated.distribution == "empirical":
        return ProductionPrior.empirical([value(x) for x in declared.values], anchor=declared.known_from)
    # Both are there: the schema saw to it.
    mean, deviation = declared.mean or 0.0, declared.standard_deviation or 0.0
    readings = declared.readings
    return ProductionPrior(
        stated.distribution,
        value(mean),
        deviation * factor,
        float("inf") if declared.degrees_of_freedom is None else declared.degrees_of_freedom,
        anchor=declared.known_from,
        steering=None
        if readings is None
        else Steering(value(readings.mean), readings.standard_deviation * factor, readings.correlation),
    )


def check_prior(
    unit_of_work: UnitOfWork, stated: StatedPrior, characteristic: Characteristic, pointer: str
) -> None:
    """Check what can be before a budget is known. Raises InvalidRequest."""
    if stated.declaration is not None:
        _declared(stated, stated.declaration, characteristic, pointer)
    else:
        _study(unit_of_work, stated, characteristic, pointer)


def prior_lapses_at(unit_of_work: UnitOfWork, stated: StatedPrior) -> str | None:
    """Say when the study behind a prior lapses; None: never, or it was declared."""
    stored = None if stated.study is None else unit_of_work.studies.get(stated.study)
    return None if stored is None else _lapse(unit_of_work, load(Study, stored.document).serves_until)


def _lapse(unit_of_work: UnitOfWork, serves_until: date | None) -> str | None:
    if serves_until is None:
        return None
    return format_instant(lapse_instant(serves_until, plant.in_force(unit_of_work)))


def _study(
    unit_of_work: UnitOfWork, stated: StatedPrior, characteristic: Characteristic, pointer: str
) -> tuple[Study, Evaluation]:
    """Find the study of a prior, its figures in the unit of the characteristic."""
    assert stated.study is not None  # the schema saw to it
    collector = FaultCollector()
    at = f"{pointer}/study"
    stored = unit_of_work.studies.get(stated.study)
    if stored is None:
        collector.add(at, f"there is no study {stated.study!r}", "the code of a recorded study")
        collector.finish("The production prior is missing.")
    assert stored is not None
    study = load(Study, stored.document)
    subject = (characteristic.product, characteristic.code)
    if (study.product, study.characteristic) != subject:
        collector.add(
            at, f"{study.code} is about {study.characteristic} of {study.product}", " of ".join(subject[::-1])
        )
    if study.design != "production":
        collector.add(at, f"{study.code} is of the design {study.design}", "a study of the design production")
    collector.finish("The production prior is about something else.")
    lapses_at = _lapse(unit_of_work, study.serves_until)
    if lapses_at is not None and lapses_at <= unit_of_work.now("plant"):
        collector.add(at, f"{study.code} served until {study.serves_until}", "a study that serves still")
    evaluation = collector.attempt(at, _in_unit, stored.evaluation, study.unit, characteristic.unit, at)
    collector.finish("The production prior cannot be used.")
    assert evaluation is not None
    return study, evaluation


def _in_unit(document: Mapping[str, Any], from_unit: str, to_unit: str, pointer: str) -> Evaluation:
    evaluation = Evaluation.from_document(document)
    if from_unit == to_unit:
        return evaluation
    mean = convert(evaluation.diagnostics["mean_of_lots"], from_unit, to_unit)
    return replace(
        evaluation,
        estimates=tuple(in_unit(item, from_unit, to_unit, pointer) for item in evaluation.estimates),
        diagnostics={**evaluation.diagnostics, "mean_of_lots": mean},
    )
