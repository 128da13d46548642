"""Clause 8: when the law of propagation may be used, and how it is said."""

import math

import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.errors import LimitsError
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts, combined, coverage_factor
from budgets.propagation_validation import numerical_tolerance, validate

ANY = Procedure(Count(1, 1, 3), Count(1, 1, 4))


@pytest.mark.parametrize(
    ("u", "digits", "delta"),
    [
        (0.00035, 2, 0.000005),  # JCGM 101:2008, 7.9.2, examples (from memory)
        (0.0004, 1, 0.00005),
        (2.0, 1, 0.5),
        (0.9996, 2, 0.05),  # written 1.0
        (123.0, 2, 5.0),
    ],
)
def test_numerical_tolerances(u, digits, delta):
    assert numerical_tolerance(u, significant_digits=digits) == pytest.approx(delta, rel=1e-12)


def test_numerical_tolerances_of_nothing():
    for u, digits in ((0.0, 2), (math.inf, 2), (1.0, 0)):
        with pytest.raises(LimitsError):
            numerical_tolerance(u, significant_digits=digits)


def test_the_law_is_validated_where_it_is_right(a_budget):
    found = validate(a_budget(), Counts((2,)), estimates={"moisture": 3.1}, seed=1)
    assert found.agrees
    assert found.run.trials == 2**17
    assert found.shape.agrees and found.shape.shape is None
    assert found.interval == pytest.approx(
        (3.1 - found.expanded_uncertainty, 3.1 + found.expanded_uncertainty)
    )
    assert found.sentence.endswith("the law of propagation is validated here.")
    assert "131072 Monte Carlo trials give a 95 % coverage interval from 2.97" in found.sentence


def test_a_large_rectangular_part_is_found(a_component, a_budget):
    """JCGM 101, 9.2.4 (from memory): one dominant rectangular quantity; the law is too wide."""
    parts = (a_component("d", 0.5, distribution="rectangular"), a_component("r", 0.05))
    found = validate(a_budget(components=parts, bias=None), Counts((1,)), seed=1)
    assert not found.agrees
    assert found.run.symmetric[1] < found.expanded_uncertainty
    assert found.sentence.endswith("the law of propagation is not validated here.")
    wide = validate(a_budget(components=parts, bias=None), Counts((1,)), seed=1, tolerance=2.0)
    assert wide.agrees and "within the tolerance of 2" in wide.sentence


def test_a_model_that_curves(a_component):
    """JCGM 101, 9.4.2.2 (from memory): a sum of squares at its lowest point."""
    model = MeasurementModel("x1**2 + x2**2", (Quantity("x1"), Quantity("x2")))
    parts = tuple(a_component(name, 0.005, quantity=name) for name in ("x1", "x2"))
    budget = Budget(parts, ANY, 0.95, None, "corrected", (0.0, 1.0), model)
    near = validate(budget, Counts((1,)), estimates={"x1": 0.01, "x2": 0.0}, seed=1)
    far = validate(budget, Counts((1,)), estimates={"x1": 0.5, "x2": 0.0}, seed=1)
    assert (near.agrees, far.agrees) == (False, True)


def test_close_to_the_tolerance_more_trials_decide(a_component, a_budget):
    parts = (a_component("a", 0.1, 14.0), a_component("b", 0.1, 14.0))
    budget = a_budget(components=parts, bias=None)
    found = validate(budget, Counts((1,)), seed=1)
    close = max(found.difference_low, found.difference_high)
    again = validate(budget, Counts((1,)), seed=1, tolerance=close * 1.05)
    assert again.run.trials > 2**18 and again.run.holds_tolerance and again.agrees
    # Where these are not allowed, what the trials leave open is no agreement.
    unsure = validate(budget, Counts((1,)), seed=1, tolerance=close * 1.05, most_trials=2**18)
    assert not unsure.agrees
    few = validate(budget, Counts((1,)), seed=1, trials=10_000)
    assert few.run.scatter is None and not few.agrees


def test_further_quantiles_and_progress(a_budget):
    told = []
    found = validate(
        a_budget(), Counts((1,)), seed=1, probabilities=(0.001, 0.999), progress=lambda *now: told.append(now)
    )
    assert len(found.run.quantiles) == 2 and told[-1][0] == told[-1][1] >= found.run.trials


def test_a_coverage_that_no_run_can_show(a_budget):
    found = validate(a_budget(coverage_probability=0.9999), Counts((2,)), seed=1)
    assert found.run.coverage_probability == 0.999 and found.agrees
    nu = combined(a_budget(), Counts((2,))).effective_degrees_of_freedom
    factor = found.expanded_uncertainty / found.standard_uncertainty
    assert factor == pytest.approx(coverage_factor(0.999, nu), rel=1e-12)
