"""How the lots of a production vary: from the record, from a production study, or as stated."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Final

from budgets.budget import Budget
from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Evaluation, variance
from budgets.evidence.study_data import evaluate_study
from budgets.evidence.study_tables import StudyData
from budgets.lot_procedures import LotProcedure
from budgets.measurement_errors import RANDOM_LEVELS, error_terms, exceeds_counted
from budgets.prior_estimates import PriorEstimate, prior_of_readings, prior_of_study
from budgets.process_variation import ProcessVariation, process_of_prior, steered_process
from budgets.propagation import Counts
from budgets.units import Conversion
from service.documents import StatedVariation, Study
from service.ledger import format_instant
from service.schemas import load
from service.store.unit_of_work import UnitOfWork
from service.workflows.calendar import lapse_instant
from service.workflows.recorded_lots import RecordedLots, Remembered, recorded_lots
from service.workflows.register import BudgetInForce, Register

Answer = dict[str, Any]


@dataclass(frozen=True)
class Variation:
    """The variation of a process, and what is to be said of where it came from."""

    process: ProcessVariation
    facts: Mapping[str, Any] = field(default_factory=dict)
    lapses_at: str | None = None


_INSIDE_A_LOT: Final = ("reading", "presentation", "increment", "sample")

NO_FACTS: Final[Answer] = {
    "lots": None,
    "interval": None,
    "left_out": {},
    "recorded_release_rate": None,
    "warnings": [],
}


def variation_of(
    unit_of_work: UnitOfWork,
    remembered: Remembered,
    register: Register,
    budget: BudgetInForce,
    analyzer: str,
    stated: StatedVariation,
    convert: Conversion,
) -> Variation:
    """Find out how the lots vary; ``convert`` turns stated figures into the unit of the characteristic.

    Raises
    ------
    EvidenceError
        Too few lots, lots that vary less than their measurement, figures that contradict each other, or no
        such study of this characteristic, analyzer and calibration.
    """
    if stated.source == "stated":
        return Variation(_stated(budget, stated, convert), NO_FACTS)
    if stated.source == "study":
        return _of_study(unit_of_work, register, budget, analyzer, stated, convert.factor)
    lots = recorded_lots(
        unit_of_work,
        remembered,
        register,
        budget,
        analyzer,
        first_day=stated.first_day,
        last_day=stated.last_day,
    )
    return _of_record(budget.budget, lots, stated, convert.factor)


def planned(budget: Budget) -> LotProcedure:
    """Give what the procedure of a budget plans."""
    return LotProcedure(budget.procedure.samples.plan, budget.procedure.readings_per_sample.plan)


def _random_variance(budget: Budget, counts: Counts, levels: tuple[str, ...] = RANDOM_LEVELS) -> float:
    # Where the uncertainty depends on the value, at the middle of what was validated.
    centre = sum(budget.validated_range) / 2
    return variance(error_terms(budget, counts, levels, centre))


def _stated(budget: BudgetInForce, stated: StatedVariation, convert: Conversion) -> ProcessVariation:
    factor = convert.factor

    def scaled(value: float | None) -> float | None:
        return None if value is None else value * factor

    assert stated.mean is not None  # by the schema
    mean, drift, within = convert(stated.mean), (stated.drift or 0.0) * factor, scaled(stated.within_lot)
    if not stated.steered_by_this_analyzer:
        assert stated.lot_to_lot is not None  # by the schema
        return ProcessVariation(mean, stated.lot_to_lot * factor, drift, within)
    assert stated.true_standard_deviation is not None and stated.reading_standard_deviation is not None
    procedure = planned(budget.budget)
    return steered_process(
        mean,
        stated.true_standard_deviation * factor,
        stated.reading_standard_deviation * factor,
        _random_variance(budget.budget, Counts((procedure.readings_per_sample,) * procedure.samples)),
        drift=drift,
        within_lot=within,
    )


# --- a study -------------------------------------------------------------------------------------------


def _of_study(
    unit_of_work: UnitOfWork,
    register: Register,
    budget: BudgetInForce,
    analyzer: str,
    stated: StatedVariation,
    factor: float,
) -> Variation:
    assert stated.study is not None  # by the schema
    found = unit_of_work.studies.get(stated.study)
    document = budget.document
    study = None if found is None else load(Study, found.document)
    calibration = document.calibrations[analyzer]
    wanted = ("production", document.product, document.characteristic, document.unit, calibration)
    if (
        found is None
        or study is None
        or wanted
        != (
            study.design,
            study.product,
            study.characteristic,
            study.unit,
            study.calibrations.get(analyzer),
        )
    ):
        raise EvidenceError(
            f"{stated.study!r} is no study of the design production, of {document.characteristic} in "
            f"{document.unit} on {analyzer} with the calibration {calibration}",
            where=("study",),
        )
    lapses_at = _lapse(unit_of_work, register, study)
    evaluation = Evaluation.from_document(found.evaluation)
    parts = _components(evaluation)
    drift, within = _deviation(parts.get("periods")), parts.get("within_lot")
    within_lot = None if within is None else _deviation(within)
    sampling = _sampling_warnings(evaluation, budget.budget)
    steered = any(warning.code == "steered" for warning in evaluation.warnings)
    if steered != (stated.true_standard_deviation is not None):
        said, use = ("is", "needed") if steered else ("is not", "of no use")
        raise EvidenceError(
            f"the study says that the process {said} steered by these readings: the variation of reference "
            f"values of lots is {use}",
            where=("true_standard_deviation",),
        )
    if not steered:
        prior = prior_of_study(evaluation, budget.budget)
        process = process_of_prior(prior, budget.budget.correction, drift=drift, within_lot=within_lot)
        facts = _facts(prior, evaluation)
        return Variation(process, {**facts, "warnings": [*facts["warnings"], *sampling]}, lapses_at)
    assert stated.true_standard_deviation is not None
    # First readings of lots hold what every level inside of the lot adds to a single one.
    process = steered_process(
        float(evaluation.diagnostics["mean_of_lots"]),
        stated.true_standard_deviation * factor,
        float(evaluation.diagnostics["standard_deviation_of_first_readings"]),
        _random_variance(budget.budget, Counts((1,))),
        within_lot=within_lot,
    )
    facts = {**NO_FACTS, "lots": int(evaluation.diagnostics["lots"]), "warnings": sampling}
    return Variation(process, facts, lapses_at)


def _lapse(unit_of_work: UnitOfWork, register: Register, study: Study) -> str | None:
    """Say when a study lapses. Raises EvidenceError where it has."""
    if study.serves_until is None:
        return None
    lapses_at = format_instant(lapse_instant(study.serves_until, register.plant))
    if unit_of_work.now("plant") >= lapses_at:
        raise EvidenceError(
            f"the study {study.code!r} served until {lapses_at}: the process may vary otherwise by now; "
            "renew it, or take the variation from the record",
            where=("study",),
        )
    return lapses_at


def _sampling_warnings(evaluation: Evaluation, budget: Budget) -> list[Answer]:
    """Warn where lots vary more within themselves than the budget counts for a single reading."""
    parts = {part["name"]: part for part in evaluation.diagnostics["components"]}
    within = parts.get("within_lot")
    if within is None:
        return []
    inside = ("presentation", "increment", "sample") if "repeatability" in parts else _INSIDE_A_LOT
    counted = error_terms(budget, Counts((1,)), inside, sum(budget.validated_range) / 2)
    seen, known = float(within["variance"]), variance(counted)
    if not exceeds_counted(seen, within["degrees_of_freedom"], counted):
        return []
    detail = (
        f"within a lot single readings vary by {math.sqrt(seen):.3g}; the budget counts "
        f"{math.sqrt(known):.3g} for that: its component of sampling is too small, and so is the guard band"
    )
    return [{"code": "within-lot-not-counted", "detail": detail}]


def _components(evaluation: Evaluation) -> dict[str, float]:
    return {part["name"]: float(part["variance"]) for part in evaluation.diagnostics["components"]}


def _deviation(component: float | None) -> float:
    return math.sqrt(max(0.0, component or 0.0))


def _facts(prior: PriorEstimate, evaluation: Evaluation) -> Answer:
    order = [w for w in evaluation.warnings if w.code in ("drift", "dependent")]
    return {
        **NO_FACTS,
        "lots": prior.lots,
        "interval": {"lower": prior.interval_lower, "upper": prior.interval_upper},
        "warnings": [{"code": w.code, "detail": w.detail} for w in (*prior.warnings, *order)],
    }


# --- the record ----------------------------------------------------------------------------------------


def _of_record(budget: Budget, lots: RecordedLots, stated: StatedVariation, factor: float) -> Variation:
    if not lots.first_looks:
        raise EvidenceError(
            "the record holds no lot that was read with this calibration and judged; state the variation, or "
            "take it from a study of the design production",
            where=("from",),
        )
    counts = lots.usual_counts
    alike = [lot for lot in lots.first_looks if lot.counts == counts]
    readings = [lot.reading for lot in alike]
    facts: Answer = {
        **NO_FACTS,
        "lots": len(alike),
        "left_out": {
            name: number
            for name, number in {
                **lots.left_out,
                "read-otherwise": len(lots.first_looks) - len(alike),
            }.items()
            if number
        },
        "recorded_release_rate": len(lots.released) / max(1, len(lots.first_looks)),
    }
    evaluation = evaluate_study(
        "production",
        StudyData(
            ("period", "lot", "reading"),
            tuple((str(lot.day), f"{number} {lot.lot}", lot.reading) for number, lot in enumerate(alike)),
        ),
        study="record",
        options={"steered_by_this_analyzer": stated.steered_by_this_analyzer},
    )
    drift = _deviation(_components(evaluation).get("periods"))
    if stated.steered_by_this_analyzer:
        assert stated.true_standard_deviation is not None  # by the schema
        process = steered_process(
            float(evaluation.diagnostics["mean_of_lots"]),
            stated.true_standard_deviation * factor,
            float(evaluation.diagnostics["standard_deviation_of_first_readings"]),
            _random_variance(budget, counts),
        )
        return Variation(process, facts)
    estimates = [reading - budget.correction for reading in readings]
    prior = prior_of_readings(estimates, budget, counts, steered=False)
    process = process_of_prior(prior, budget.correction, drift=drift)
    of_prior = _facts(prior, evaluation)
    return Variation(process, {**facts, "interval": of_prior["interval"], "warnings": of_prior["warnings"]})
