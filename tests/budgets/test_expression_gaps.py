"""Poles and gaps between the points of a grid; bounds against values at random points."""

import numpy as np
import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.derived_release import DerivedReleaseRule
from budgets.errors import ModelError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.expression_gaps import _computed, refuse_gaps
from budgets.expressions import parse
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts

BOX = {"x": (2.2, 4.5), "y": (-1.0, 1.5)}


@pytest.mark.parametrize(
    "expression",
    [
        "1 / (x - 2.7) + y",
        "1 / (x*x - 9) + y",
        "x / (y - g)",
        "ln(x - 2.3) + y",
        "lg(y) + x",
        "sqrt(x - 4.4) + y",
        "tan(x/2) + y",
        "y**-2 + x",
        "y**0.5 + x",
        "(x - 3)**y",
        "1 / cos(x - 2) + y",
        "1 / max(y, min(y, x) - 1) + x",
    ],
)
def test_a_pole_or_a_gap_in_the_box_is_found(expression):
    with pytest.raises(ModelError, match="may have no value") as caught:
        refuse_gaps(parse(expression, ("x", "y", "g")).steps, BOX, {"g": 0.3})
    assert caught.value.where == ("validated_box",)


@pytest.mark.parametrize(
    "expression",
    [
        "1 / (x - 2.1) + y",
        "1 / (x - x/2) + y",
        "1 / (y*y + 0.1) + x",
        "1 / (y**2 + 0.1) + x",
        "ln(x) * lg(x) + y",
        "sqrt(abs(y) + 0.1) - x",
        "tan(y) + x",
        "x**-1.5 + y**3",
        "x**y",
        "1 / (sin(x/2) + 0.1) + y",
        "1 / cos(x - 3.3) + exp(-y)",
        "1 / min(x, y + 4) - max(y, 2)",
        "1 / (y - g)",
    ],
)
def test_a_sound_expression_passes(expression):
    refuse_gaps(parse(expression, ("x", "y", "g")).steps, BOX, {"g": 1.6})


@pytest.mark.parametrize(
    "operation", ["+", "-", "*", "/", "**", "min", "max", "sin", "cos", "abs", "negative"]
)
def test_bounds_hold_every_value_inside(operation):
    """Against values at random points of random intervals, computed by numpy."""
    draw = np.random.default_rng(7)
    single = operation in ("sin", "cos", "abs", "negative")
    low = draw.uniform(0.1 if operation in ("/", "**") else -6, 3, (2, 300))
    high = low + draw.uniform(0, 4, (2, 300))
    inside = low + (high - low) * draw.uniform(0, 1, (200, 2, 300))
    functions = {"+": np.add, "-": np.subtract, "*": np.multiply, "/": np.divide, "**": np.power}
    functions |= {"min": np.minimum, "max": np.maximum, "sin": np.sin, "cos": np.cos}
    functions |= {"abs": np.abs, "negative": np.negative}
    found = functions[operation](*(inside[:, k] for k in range(1 if single else 2)))
    lower, upper = _computed(operation, [(low[k], high[k]) for k in range(1 if single else 2)])
    assert (found >= lower - 1e-12).all()
    assert (found <= upper + 1e-12).all()
    # Not by being far too wide: the bounds are reached in most cells.
    assert np.median((upper - lower) / np.ptp(found, axis=0)) < 1.6


@pytest.mark.parametrize("pole", [2.25, 2.7, 2.9, 4.4])
def test_no_rule_is_made_over_a_pole(pole):
    """At 2.2, 3.35 and 4.5, the points of the grid, all is well."""
    square = MeanSquare("a", 0.0005**2, 20)
    budget = Budget(
        components=(Component("a", "x", "lot", (Term(1.0, square),), "A"),),
        procedure=Procedure(Count(1, 1, 1), Count(1, 1, 1)),
        coverage_probability=0.95,
        bias=None,
        bias_treatment="corrected",
        validated_range=(-100.0, 100.0),
        model=MeasurementModel(f"1 / (x - {pole})", (Quantity("x"),)),
        validated_box={"x": (2.2, 4.5)},
    )
    rule = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
    with pytest.raises(ModelError, match="may have no value"):
        DerivedReleaseRule.compile(budget, Counts((1,)), Tolerance(None, 50.0), rule)


def test_a_model_of_given_quantities_alone_has_no_box():
    MeasurementModel("1 / x", (Quantity("x", source="given", estimate=2.0),)).refuse_gaps({})
