"""From what a request asks about a production to all that the computation needs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from budgets.lot_procedures import Demand, LotProcedure
from budgets.money import Money
from budgets.planned_measurements import PlannedMeasurement, planned_measurement
from budgets.set_point_figures import Production
from budgets.set_point_search import Wanted
from budgets.units import Conversion, conversion
from service.documents import Characteristic, GlobalRisksRequest, Requirement, SetPointRequest, StatedMoney
from service.errors import Conflict, Fault, NotSupported
from service.schemas.set_points import VARIATIONS
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import FaultCollector
from service.workflows.process_variations import Variation, planned, variation_of
from service.workflows.register import BudgetInForce, Register, SpecificationInForce
from service.workflows.rules import decision_rule, planned_counts, tolerance
from service.workflows.services import Services

Answer = dict[str, Any]


@dataclass(frozen=True)
class Question:
    """A production in the terms of the computation, with the versions that it rests on."""

    request: SetPointRequest
    characteristic: Characteristic
    budget: BudgetInForce
    specifications: tuple[SpecificationInForce, ...]
    demands: tuple[Demand, ...]
    procedure: LotProcedure
    variation: Variation
    wanted: Wanted
    money: Money | None
    convert: Conversion

    @property
    def measurement(self) -> PlannedMeasurement:
        """How lots are measured and judged. Raises the errors of budgets."""
        return planned_measurement(self.budget.budget, self.procedure, self.demands)

    @property
    def valid_until(self) -> str | None:
        """When the first of the evidence behind the answer lapses; None: it does not."""
        lapses = [each for each in (self.budget.lapses_at, self.variation.lapses_at) if each is not None]
        return min(lapses, default=None)

    def production(self) -> Production:
        """The production as it is. Raises the errors of budgets."""
        return Production(self.variation.process, self.measurement, self.money, self.request.towards)


def question_of(
    services: Services, unit_of_work: UnitOfWork, request: SetPointRequest, pointer: str = "#"
) -> Question:
    """Find what a request is about.

    Raises
    ------
    InvalidRequest
        Something that it names is not there, or its figures cannot be used; with all faults.
    Conflict
        Nothing is in force for it, or the evidence behind the budget has lapsed.
    """
    register = services.registers.current(unit_of_work)
    characteristic = _characteristic(register, request, pointer)
    budget = budget_of(unit_of_work, register, request)
    requirements = _requirements(register, request, pointer)
    collector = FaultCollector()
    convert = collector.attempt(f"{pointer}/unit", conversion, request.unit, characteristic.unit)
    wanted = collector.attempt(
        f"{pointer}/wanted", Wanted, request.wanted.release_rate, request.wanted.largest_risk
    )
    procedure = collector.attempt(f"{pointer}/procedure", _procedure, request, budget, requirements)
    money = variation = None
    if convert is not None:
        if request.money is not None:
            money = collector.attempt(f"{pointer}/money", _money, request.money, convert)
        variation = collector.attempt(
            f"{pointer}/process_variation",
            variation_of,
            unit_of_work,
            services.remembered,
            register,
            budget,
            request.analyzer,
            request.process_variation,
            convert,
        )
        base = f"{pointer}/process_variation"
        collector.faults = [_at_a_member(fault, base, request) for fault in collector.faults]
    demands = [
        collector.attempt(f"{pointer}/specifications", _demand, register, budget, *both, characteristic)
        for both in requirements
    ]
    collector.finish("The question cannot be answered.")
    assert convert is not None and wanted is not None and procedure is not None and variation is not None
    return Question(
        request,
        characteristic,
        budget,
        tuple(specification for specification, _ in requirements),
        tuple(demand for demand in demands if demand is not None),
        procedure,
        variation,
        wanted,
        money,
        convert,
    )


def _at_a_member(fault: Fault, base: str, request: SetPointRequest) -> Fault:
    """Let a fault of what record or study show point at the member that named them."""
    source = request.process_variation.source
    name = (fault.pointer or "").removeprefix(f"{base}/")
    if source == "stated" or name == fault.pointer or name in (*sum(VARIATIONS[source], ()), "from"):
        return fault
    member = "study" if source == "study" else "from"
    if name == "reading_standard_deviation":
        member = "true_standard_deviation"
    return replace(fault, pointer=f"{base}/{member}")


def _characteristic(register: Register, request: SetPointRequest, pointer: str) -> Characteristic:
    found = register.characteristics.get((request.product, request.characteristic))
    collector = FaultCollector()
    if found is None:
        collector.add(
            f"{pointer}/characteristic",
            f"got {request.characteristic!r}",
            f"a characteristic of the product {request.product!r}",
        )
    elif request.unit not in found.accepted_units:
        collector.add(f"{pointer}/unit", f"got {request.unit!r}", f"one of {', '.join(found.accepted_units)}")
    collector.finish("The question cannot be answered.")
    assert found is not None
    if found.derived_from is not None:
        where = f"{pointer}/characteristic"
        fault = Fault("is computed from several readings", pointer=where, supported=False)
        raise NotSupported(
            f"Not supported yet: a set point of {found.code}, which has no acceptance limit to run towards.",
            faults=(fault,),
        )
    return found


def budget_of(
    unit_of_work: UnitOfWork, register: Register, request: SetPointRequest | GlobalRisksRequest
) -> BudgetInForce:
    """Give the budget in force for the readings that a question is about. Raises Conflict."""
    budget = register.budgets.get((request.product, request.characteristic, request.analyzer))
    if budget is None:
        raise Conflict(
            "nothing-in-force",
            f"No budget for {request.characteristic} on {request.analyzer} is in force.",
        )
    if budget.lapses_at is not None and unit_of_work.now("plant") >= budget.lapses_at:
        raise Conflict(
            "evidence-lapsed",
            f"The evidence behind {budget.document.code} served until {budget.lapses_at}: the answer would "
            "rest on it. Renew the study that lapsed.",
        )
    return budget


def _requirements(
    register: Register, request: SetPointRequest, pointer: str
) -> list[tuple[SpecificationInForce, Requirement]]:
    codes = request.specifications
    if codes is None:
        codes = register.products[request.product].default_specifications
    found = []
    collector = FaultCollector()
    for index, code in enumerate(codes):
        specification = register.specifications.get(code)
        if specification is None or specification.document.product != request.product:
            collector.add(
                f"{pointer}/specifications/{index}" if request.specifications else f"{pointer}/product",
                f"no version of {code!r} for this product is in force",
                "specifications in force",
            )
            continue
        found += [
            (specification, requirement)
            for requirement in specification.document.requires
            if requirement.characteristic == request.characteristic
        ]
    collector.finish("The question cannot be answered.")
    if not found:
        raise Conflict("nothing-in-force", f"No specification in force requires {request.characteristic}.")
    return found


def _procedure(
    request: SetPointRequest,
    budget: BudgetInForce,
    requirements: list[tuple[SpecificationInForce, Requirement]],
) -> LotProcedure:
    # A lot is read again as often as the rules that hold it allow.
    looks = max(requirement.decision_rule.rounds for _, requirement in requirements)
    own = planned(budget.budget)
    stated = request.procedure
    if stated is None:
        return LotProcedure(own.samples, own.readings_per_sample, looks=looks)
    return LotProcedure(stated.samples, stated.readings_per_sample, stated.increments_per_sample, looks=looks)


def _money(stated: StatedMoney, convert: Conversion) -> Money:
    return Money(
        lot_size=stated.lot_size,
        lots_per_year=stated.lots_per_year,
        # Per unit of the characteristic, which may be another one than the request's.
        value_of_one_unit=stated.value_of_one_unit / convert.factor,
        cost_of_hold=stated.cost_of_hold,
        cost_of_retest=stated.cost_of_retest,
        cost_of_nonconforming=stated.cost_of_nonconforming,
        cost_of_not_released=stated.cost_of_not_released,
    )


def _demand(
    register: Register,
    budget: BudgetInForce,
    specification: SpecificationInForce,
    requirement: Requirement,
    characteristic: Characteristic,
) -> Demand:
    document = specification.document
    if requirement.judged != "lot_mean":
        fault = Fault(f"{document.code} judges {requirement.judged}", supported=False)
        raise NotSupported("Not supported yet: a set point where single items are judged.", faults=(fault,))
    if requirement.decision_rule.largest_lot_risk is not None:
        fault = Fault(f"{document.code} caps the risk of the lot as a whole", supported=False)
        raise NotSupported("Not supported yet: a set point under a cap on the lot's risk.", faults=(fault,))
    if requirement.decision_rule.kind == "guarded_by_global_risk":
        fault = Fault(f"{document.code} is guarded by global risk", supported=False)
        raise NotSupported(
            "Not supported yet: a set point by a rule whose guard band follows from the set point.",
            faults=(fault,),
        )
    domain = characteristic.natural_domain
    rule = register.rule(specification, requirement, budget, planned_counts(budget.budget.procedure))
    return Demand(
        document.code,
        tolerance(requirement, characteristic),
        decision_rule(requirement.decision_rule),
        legal=document.kind == "legal",
        domain=(domain.lower, domain.upper),
        truncated=requirement.within_domain,
        # What approval found to hold instead of Student's t holds here too.
        distribution=getattr(rule, "distribution", None),
    )


def references(question: Question) -> Mapping[str, Any]:
    """Name the versions that an answer rests on."""
    budget = question.budget
    return {
        "budget": {"code": budget.document.code, "version": budget.version, "digest": budget.digest},
        "specifications": [
            {
                "code": specification.document.code,
                "version": specification.version,
                "legal": specification.document.kind == "legal",
            }
            for specification in question.specifications
        ],
        "calibration": budget.document.calibrations[question.request.analyzer],
        "valid_until": question.valid_until,
    }
