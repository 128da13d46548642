"""The rules of a budget and a requirement, for every number of readings that the procedure allows."""

from __future__ import annotations

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.measurement_models import MeasurementModel, Quantity
from service.documents import Characteristic, Specification
from service.schemas import load
from service.workflows.rules import compile_pair
from tests.service.api.house import example


def test_numbers_of_readings_that_leave_too_much_curvature_are_left_out() -> None:
    """Of x^2 at x = 1 the mean is shifted by u/2 of its own uncertainty: with u = 0.12, 6 %; halved, 3 %."""
    square = MeanSquare("repeatability", 0.12**2, 30)
    budget = Budget(
        components=(Component("repeatability", "x", "reading", (Term(1.0, square),), "A"),),
        procedure=Procedure(Count(1, 1, 1), Count(1, 4, 4)),
        coverage_probability=0.95,
        bias=None,
        bias_treatment="corrected",
        validated_range=(0.5, 5.0),
        model=MeasurementModel("x**2", (Quantity("x"),)),
        validated_box={"x": (1.0, 2.0)},
    )
    requirement = load(Specification, example(Specification)).requires[0]
    characteristic = load(Characteristic, example(Characteristic))
    rules = compile_pair(budget, requirement, characteristic, label="here")
    assert sorted(rules) == ["2", "3", "4"]
