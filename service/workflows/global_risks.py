"""What a rule lets pass, and holds back, over a whole production; and what another guard band would."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass, replace
from typing import Any, Final

import numpy as np

from budgets.conformity import Tolerance
from budgets.errors import EvidenceError
from budgets.global_guard_bands import global_guard_band
from budgets.global_risks import GlobalRisks, global_risks, risks_of_acceptance
from budgets.known_productions import prior_document
from budgets.measurement_errors import MeasurementErrors, measurement_errors
from budgets.prior_estimates import prior_of_readings
from budgets.propagation import Counts
from budgets.release import ReleaseRule
from budgets.units import conversion
from service.access import require
from service.documents import Actor, Characteristic, GlobalRisksRequest, RecordedPrior, Requirement
from service.errors import Conflict, Fault, NotSupported
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import FaultCollector
from service.workflows.production_priors import ResolvedPrior, resolve_prior
from service.workflows.recorded_lots import recorded_lots
from service.workflows.register import BudgetInForce, Register, SpecificationInForce
from service.workflows.rules import planned_counts
from service.workflows.services import Services
from service.workflows.set_point_questions import budget_of

Answer = dict[str, Any]

CAUTION: Final = (
    "These figures speak of a production that varies as the prior says and of the named characteristic only. "
    "They replace no verdict on a lot; local regulations and the plant's authorised person decide."
)
_POINTS: Final = 41
_RECORD: Final = "#/prior/record"
# A guard band of more standard uncertainties than that lets next to nothing nonconforming pass.
_WIDEST: Final = 4.0
_SMALLEST_SHOWN: Final = 1e-4


@dataclass(frozen=True)
class Subject:
    """What a question is about, with the versions in force."""

    characteristic: Characteristic
    budget: BudgetInForce
    specification: SpecificationInForce
    counts: Counts
    rule: ReleaseRule
    prior: ResolvedPrior
    errors: MeasurementErrors

    @property
    def tolerance(self) -> Tolerance:
        """The effective tolerance."""
        return self.rule.tolerance


def ask(services: Services, actor: Actor, request: GlobalRisksRequest) -> Answer:
    """Give the global risks of a rule in force and of a curve of guard bands; nothing is recorded.

    Raises
    ------
    InvalidRequest
        Something that is named is not there, no prior can be made of it, or a risk is out of reach.
    Conflict
        Nothing is in force, or the evidence has lapsed.
    Unavailable
        Other long computations are under way.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        subject = _subject(services, unit_of_work, request)
    prior, errors, tolerance = subject.prior.prior, subject.errors, subject.tolerance
    collector = FaultCollector()
    factor = collector.attempt("#/unit", conversion, request.unit, subject.characteristic.unit)
    collector.finish("The question cannot be answered.")
    assert factor is not None
    bands = _bands(subject, request, factor.factor)
    run = services.helper.run
    lower, upper = subject.rule.lower_acceptance_limit, subject.rule.upper_acceptance_limit
    curve = collector.attempt("#", run, global_risks, prior, errors, tolerance, bands)
    now = collector.attempt("#", run, risks_of_acceptance, prior, errors, tolerance, lower, upper)
    wanted = None
    if request.largest_risk is not None:
        found = collector.attempt("#", run, global_guard_band, prior, errors, tolerance, request.largest_risk)
        wanted = None if found is None else {"largest_risk": request.largest_risk, **asdict(found)}
    collector.finish("The question cannot be answered.")
    assert curve is not None and now is not None
    today = _points(now)[0]
    return {
        **_rests_on(subject, request),
        "nonconforming_share": now.nonconforming_share,
        "in_force": today,
        "guard_band": wanted,
        "curve": _points(curve),
        "statement": _statement(now.nonconforming_share, today, wanted, subject.characteristic.unit),
        "caution": CAUTION,
    }


# --- what is asked about -------------------------------------------------------------------------------


def _subject(services: Services, unit_of_work: UnitOfWork, request: GlobalRisksRequest) -> Subject:
    register = services.registers.current(unit_of_work)
    characteristic = _characteristic(register, request)
    budget = budget_of(unit_of_work, register, request)
    specification, requirement = _requirement(register, request)
    counts = planned_counts(budget.budget.procedure)
    if request.procedure is not None:
        counts = Counts((request.procedure.readings_per_sample,) * request.procedure.samples)
    collector = FaultCollector()
    rule = collector.attempt("#/procedure", register.rule, specification, requirement, budget, counts)
    # Whatever it is, it is wrong with how the lot is to be read.
    collector.faults = [replace(fault, pointer="#/procedure") for fault in collector.faults]
    prior = collector.attempt("#", _prior, services, unit_of_work, request, characteristic, budget)
    collector.finish("The question cannot be answered.")
    assert isinstance(rule, ReleaseRule) and prior is not None
    if rule.distribution is not None:
        fault = Fault("was not validated by Monte Carlo", pointer="#/analyzer", supported=False)
        text = (
            f"Not supported yet: global risks where the law of propagation of {budget.document.code} fails."
        )
        raise NotSupported(text, faults=(fault,))
    errors = collector.attempt("#", measurement_errors, budget.budget, counts, rule.tolerance)
    collector.finish("The question cannot be answered.")
    assert errors is not None
    return Subject(characteristic, budget, specification, counts, rule, prior, errors)


def _characteristic(register: Register, request: GlobalRisksRequest) -> Characteristic:
    collector = FaultCollector()
    found = register.characteristics.get((request.product, request.characteristic))
    if found is None:
        expected = f"a characteristic of the product {request.product!r}"
        collector.add("#/characteristic", f"got {request.characteristic!r}", expected)
    elif request.unit not in found.accepted_units:
        collector.add("#/unit", f"got {request.unit!r}", f"one of {', '.join(found.accepted_units)}")
    collector.finish("The question cannot be answered.")
    assert found is not None
    if found.derived_from is not None:
        fault = Fault("is computed from several readings", pointer="#/characteristic", supported=False)
        raise NotSupported(f"Not supported yet: global risks of {found.code}.", faults=(fault,))
    return found


def _requirement(register: Register, request: GlobalRisksRequest) -> tuple[SpecificationInForce, Requirement]:
    specification = register.specifications.get(request.specification)
    if specification is None or specification.document.product != request.product:
        text = f"No version of {request.specification!r} for this product is in force."
        raise Conflict("nothing-in-force", text)
    for requirement in specification.document.requires:
        if requirement.characteristic == request.characteristic:
            if requirement.judged != "lot_mean":
                fault = Fault(f"judges {requirement.judged}", pointer="#/specification", supported=False)
                raise NotSupported("Not supported yet: global risks of single items.", faults=(fault,))
            return specification, requirement
    text = f"{request.specification!r} does not require {request.characteristic}."
    raise Conflict("nothing-in-force", text)


def _prior(
    services: Services,
    unit_of_work: UnitOfWork,
    request: GlobalRisksRequest,
    characteristic: Characteristic,
    budget: BudgetInForce,
) -> ResolvedPrior:
    asked = request.prior
    if asked.record is None:
        return resolve_prior(
            unit_of_work, asked, characteristic, budget.document, budget.budget, pointer="#/prior"
        )
    collector = FaultCollector()
    found = collector.attempt(_RECORD, _recorded, services, unit_of_work, request, asked.record, budget)
    # What is wrong with the readings of the record is no member of the request.
    steering = f"{_RECORD}/steered_by_this_analyzer"
    collector.faults = [
        fault if fault.pointer == steering else replace(fault, pointer=_RECORD) for fault in collector.faults
    ]
    collector.finish("The question cannot be answered.")
    assert found is not None
    return found


def _recorded(
    services: Services,
    unit_of_work: UnitOfWork,
    request: GlobalRisksRequest,
    asked: RecordedPrior,
    budget: BudgetInForce,
) -> ResolvedPrior:
    """Make the prior of the first looks in the record, those that were done alike. Raises EvidenceError."""
    lots = recorded_lots(
        unit_of_work,
        services.remembered,
        services.registers.current(unit_of_work),
        budget,
        request.analyzer,
        first_day=asked.first_day,
        last_day=asked.last_day,
    )
    if not lots.first_looks:
        raise EvidenceError("the record holds no lot that could serve", where=("record",))
    counts = lots.usual_counts
    estimates = [lot.reading - budget.budget.correction for lot in lots.first_looks if lot.counts == counts]
    estimate = prior_of_readings(
        estimates,
        budget.budget,
        counts,
        steered=asked.steered_by_this_analyzer,
        distribution=request.prior.distribution,
    )
    left_out = dict(lots.left_out)
    if len(estimates) < len(lots.first_looks):
        left_out["read-otherwise"] = len(lots.first_looks) - len(estimates)
    return ResolvedPrior(estimate.prior, estimate, left_out, lots.all_read)


# --- what is answered ----------------------------------------------------------------------------------


def _bands(subject: Subject, request: GlobalRisksRequest, factor: float) -> list[float]:
    """Give the guard bands that are asked for, or those that matter: from none to all that fit."""
    if request.guard_bands is not None:
        return [band * factor for band in request.guard_bands]
    tolerance = subject.tolerance
    room = math.inf
    if tolerance.lower is not None and tolerance.upper is not None:
        # One that the bias moves inward leaves less room.
        room = (tolerance.upper - tolerance.lower - abs(subject.errors.bias)) / 2
    widest = min(room, _WIDEST * subject.rule.combined_standard_uncertainty)
    return [float(band) for band in np.linspace(0.0, max(widest, 0.0), _POINTS)]


def _rests_on(subject: Subject, request: GlobalRisksRequest) -> Answer:
    budget, specification, rule = subject.budget, subject.specification, subject.rule
    errors = subject.errors
    limits = [
        limit for limit in (rule.lower_tolerance_limit, rule.upper_tolerance_limit) if limit is not None
    ]
    return {
        "product": request.product,
        "characteristic": request.characteristic,
        "analyzer": request.analyzer,
        "unit": subject.characteristic.unit,
        "budget": {"code": budget.document.code, "version": budget.version, "digest": budget.digest},
        "specification": {"code": specification.document.code, "version": specification.version},
        "procedure": {
            "samples": len(subject.counts.readings_per_sample),
            "readings_per_sample": subject.counts.readings_per_sample[0],
        },
        "lower_tolerance_limit": rule.lower_tolerance_limit,
        "upper_tolerance_limit": rule.upper_tolerance_limit,
        "random_standard_uncertainty": max(errors.random.at(limit) for limit in limits),
        "common_standard_uncertainty": max(errors.common.at(limit) for limit in limits),
        "effective_degrees_of_freedom": _finite(errors.degrees_of_freedom),
        "uncorrected_bias": errors.bias,
        "prior": {**prior_document(subject.prior.prior), "estimated_from": _estimated(subject.prior)},
    }


def _estimated(prior: ResolvedPrior) -> Answer | None:
    estimate = prior.estimate
    if estimate is None:
        return None
    return {
        "lots": estimate.lots,
        "observed_standard_deviation": estimate.observed_standard_deviation,
        "removed_standard_deviation": estimate.removed_standard_deviation,
        "interval": {"lower": estimate.interval_lower, "upper": estimate.interval_upper},
        "degrees_of_freedom": _finite(estimate.degrees_of_freedom),
        "warnings": [asdict(warning) for warning in estimate.warnings],
        "left_out": dict(prior.left_out),
        "whole_record_read": prior.all_read,
    }


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


_FIGURES: Final = (
    "guard_band",
    "lower_acceptance_limit",
    "upper_acceptance_limit",
    "release_rate",
    "global_consumers_risk",
    "global_consumers_risk_quantile",
    "conditional_global_consumers_risk",
    "global_producers_risk",
    "global_producers_risk_quantile",
    "conditional_global_producers_risk",
)


def _points(risks: GlobalRisks) -> list[Answer]:
    """Write a curve point by point; a share of nothing is null."""
    columns = {name: getattr(risks, name) for name in _FIGURES}
    return [
        {name: None if column is None else _finite(float(column[index])) for name, column in columns.items()}
        for index in range(risks.guard_band.size)
    ]


def _statement(share: float, now: Answer, wanted: Answer | None, unit: str) -> str:
    parts = [
        f"{_percent(share)} of all lots do not conform. By the rule in force {_percent(now['release_rate'])} "
        f"are released; {_percent(now['global_consumers_risk'])} of all lots do not conform and are released "
        f"(in nineteen of twenty plants {_at_most(now['global_consumers_risk_quantile'])}), and "
        f"{_percent(now['global_producers_risk'])} conform and are not."
    ]
    if wanted is not None:
        parts.append(
            f"A guard band of {wanted['guard_band']:.4g} {unit} holds {_percent(wanted['largest_risk'])} and "
            f"releases {_percent(wanted['release_rate'])}."
        )
    return " ".join(parts)


def _at_most(share: float) -> str:
    return _percent(share) if share < _SMALLEST_SHOWN else f"at most {_percent(share)}"


def _percent(share: float) -> str:
    # Nothing below 0.01 % is shown; the figures keep their digits.
    return "less than 0.01 %" if share < _SMALLEST_SHOWN else f"{100 * share:.3g} %"
