"""Valid things of the demo scenario, changed by each test in what it is about."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.evidence.evaluation import Estimate, MeanSquare, Term


@pytest.fixture
def a_component() -> Callable[..., Component]:
    def make(
        code: str = "repeatability",
        standard_uncertainty: float = 0.04,
        degrees_of_freedom: float = math.inf,
        **changes: Any,
    ) -> Component:
        square = MeanSquare(f"{code}/square", standard_uncertainty**2, degrees_of_freedom)
        members: dict[str, Any] = {
            "code": code,
            "quantity": "moisture",
            "level": "reading",
            "terms": (Term(1.0, square),),
            "evaluation_type": "A",
        }
        return Component(**{**members, **changes})

    return make


@pytest.fixture
def a_budget(a_component: Callable[..., Component]) -> Callable[..., Budget]:
    def make(**changes: Any) -> Budget:
        members: dict[str, Any] = {
            "components": (
                a_component("repeatability", 0.04, 30, level="reading"),
                a_component("remainder", 0.05, 40, level="lot"),
                a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
            ),
            "procedure": Procedure(Count(1, 1, 3), Count(1, 2, 4)),
            "coverage_probability": 0.95,
            "bias": 0.03,
            "bias_treatment": "corrected",
            "validated_range": (1.5, 5.5),
        }
        return Budget(**{**members, **changes})

    return make


@pytest.fixture
def an_estimate() -> Callable[..., Estimate]:
    def make(
        name: str = "repeatability", variance: float = 0.0009, nu: float = 20, **changes: Any
    ) -> Estimate:
        members: dict[str, Any] = {
            "name": name,
            "terms": (Term(1.0, MeanSquare(f"elsewhere/{name}", variance, nu)),),
            "value": None,
            "interval": None,
            "may_feed": ("reading",),
            "usable": True,
        }
        return Estimate(**{**members, **changes})

    return make
