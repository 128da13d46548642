"""A register and requests that are valid by default; a test changes the one thing that it is about."""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import UTC, date, datetime
from typing import Any

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.evidence.evaluation import MeanSquare, Term
from service.documents import (
    Analyzer,
    Bounds,
    BudgetDocument,
    Calibration,
    Characteristic,
    DecisionRequest,
    FlagLimit,
    InfluenceBounds,
    Line,
    Model,
    PlannedCount,
    PlannedProcedure,
    Product,
    Quantity,
    Reading,
    Requirement,
    RuleOfDecision,
    Specification,
    ToleranceLimit,
)
from service.workflows.calendar import DEFAULT_PLANT
from service.workflows.register import BudgetInForce, Register, SpecificationInForce

NOW = "2026-03-02T05:12:43.120934Z"
BIAS = -0.05
STANDARD_UNCERTAINTY = 0.1


def a_component(code: str, quantity: str, level: str, standard_uncertainty: float) -> Component:
    square = MeanSquare(f"test/{code}", standard_uncertainty**2, math.inf)
    return Component(code, quantity, level, (Term(1.0, square),), "A")


def a_budget(**changes: Any) -> Budget:
    """U = 0.1 in all for one sample read twice: 0.06 from the mean of two readings, 0.08 from the bias."""
    members: dict[str, Any] = {
        "components": (
            a_component("repeatability", "moisture", "reading", 0.06 * math.sqrt(2)),
            a_component("bias", "bias", "calibration", 0.08),
        ),
        "procedure": Procedure(samples=Count(1, 1, 2), readings_per_sample=Count(2, 2, 4)),
        "coverage_probability": 0.95,
        "bias": BIAS,
        "bias_treatment": "corrected",
        "validated_range": (2.0, 4.6),
    }
    return Budget(**(members | changes))


def a_budget_in_force(*, budget: Budget | None = None, **changes: Any) -> BudgetInForce:
    used = budget or a_budget()
    document = BudgetDocument(
        code="wmp-moisture-nir",
        product="whole-milk-powder",
        characteristic="moisture",
        unit="%",
        calibrations={"nir-1": "wmp-7"},
        validated_range=Bounds(*used.validated_range),
        coverage_probability=used.coverage_probability,
        bias_treatment=used.bias_treatment,
        model=Model("moisture - bias", {"moisture": Quantity("%", "reading")}),
        procedure=PlannedProcedure(PlannedCount(1, 1, 2), PlannedCount(2, 2, 4)),
        components=(),
        reason="test",
    )
    members: dict[str, Any] = {
        "version": 4,
        "document": document,
        "budget": used,
        "digest": "sha256:00",
        "lapses_at": None,
    }
    return BudgetInForce(**(members | changes))


def a_requirement(**changes: Any) -> Requirement:
    members: dict[str, Any] = {
        "characteristic": "moisture",
        "lower_tolerance_limit": None,
        "upper_tolerance_limit": ToleranceLimit(3.2, "%"),
        "decision_rule": RuleOfDecision("guarded_by_specific_risk", largest_risk=0.05),
    }
    return Requirement(**(members | changes))


def a_specification(code: str = "customer-b", *requires: Requirement) -> SpecificationInForce:
    document = Specification(
        code=code,
        product="whole-milk-powder",
        kind="customer",
        requires=requires or (a_requirement(),),
        reason="test",
        not_judged=("microbiology",),
    )
    return SpecificationInForce(version=3, document=document)


def a_register(**changes: Any) -> Register:
    calibration = Calibration(
        code="wmp-7",
        analyzer="nir-1",
        product="whole-milk-powder",
        starts_on=date(2026, 1, 10),
        flags={"distance-from-calibration-set": FlagLimit(3.0, required=True)},
        influences={"sample_temperature": InfluenceBounds("degC", 15, 30)},
    )
    specification = a_specification()
    members: dict[str, Any] = {
        "revision": 1,
        "plant": DEFAULT_PLANT,
        "products": {
            "whole-milk-powder": Product("whole-milk-powder", "Whole-milk powder", ("customer-b",)),
            "skim-milk-powder": Product("skim-milk-powder", "Skim-milk powder"),
        },
        "characteristics": {
            ("whole-milk-powder", code): Characteristic(
                code, "whole-milk-powder", "%", ("%", "g/kg"), "as is", Bounds(0, 100), 2
            )
            for code in ("moisture", "fat")
        },
        "lines": {"tower-1": Line("tower-1", "Tower 1", ("nir-1", "nir-2"))},
        "analyzers": {
            "nir-1": Analyzer("nir-1", "analyzer", ("moisture", "fat")),
            "nir-2": Analyzer("nir-2", "analyzer", ("moisture",)),
            "nir-9": Analyzer("nir-9", "analyzer", ("moisture",)),
        },
        "calibrations": {
            "wmp-7": calibration,
            "wmp-8": replace(calibration, code="wmp-8"),
            "wmp-2-1": replace(calibration, code="wmp-2-1", analyzer="nir-2"),
        },
        "specification_products": {"customer-b": "whole-milk-powder", "other": "skim-milk-powder"},
        "specifications": {"customer-b": specification},
        "budgets": {("whole-milk-powder", "moisture", "nir-1"): a_budget_in_force()},
        "rules": {},
    }
    return Register(**(members | changes))


def a_reading(moisture: float, second: int = 4, **changes: Any) -> Reading:
    members: dict[str, Any] = {
        "sample": "1",
        "analyzer": "nir-1",
        "calibration": "wmp-7",
        "taken_at": datetime(2026, 3, 2, 5, 12, second, tzinfo=UTC),
        "values": {"moisture": moisture},
        "flags": {"distance-from-calibration-set": 1.8},
        "influences": {"sample_temperature": 24.5},
    }
    return Reading(**(members | changes))


def a_request(*readings: Reading, **changes: Any) -> DecisionRequest:
    members: dict[str, Any] = {
        "lot": "W26-04711",
        "product": "whole-milk-powder",
        "line": "tower-1",
        "units": {"moisture": "%"},
        "readings": readings or (a_reading(2.90, 1), a_reading(2.92, 2)),
    }
    return DecisionRequest(**(members | changes))
