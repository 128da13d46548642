"""The guard band that holds a global risk, and where there is none."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budgets.conformity import Tolerance
from budgets.errors import LimitsError
from budgets.global_guard_bands import LEAST_RELEASE_RATE, global_guard_band
from budgets.global_risks import global_risks
from budgets.level_dependence import LevelDependence
from budgets.measurement_errors import MeasurementErrors
from budgets.production_priors import ProductionPrior, Steering

BOTH, UPPER, LOWER = Tolerance(2.7, 3.2), Tolerance(None, 3.2), Tolerance(2.7, None)
PRIOR, ERRORS = ProductionPrior("normal", 3.0, 0.1), MeasurementErrors.of(0.04, 0.03)


@pytest.mark.parametrize("tolerance", [BOTH, UPPER, LOWER])
@pytest.mark.parametrize("nu", [math.inf, 9.0])
@pytest.mark.parametrize("risk", [1e-3, 1e-5, 1e-6])
def test_the_guard_band_holds_the_risk_and_a_smaller_one_does_not(tolerance, nu, risk):
    prior = ProductionPrior("normal", 2.95, 0.1)
    errors = MeasurementErrors.of(0.04, 0.03, nu)
    if risk > global_risks(prior, errors, tolerance, 0.0).global_consumers_risk[0]:
        pytest.skip("no guard band is needed")
    found = global_guard_band(prior, errors, tolerance, risk)
    assert found.guard_band > 0
    assert found.global_consumers_risk == pytest.approx(risk, rel=1e-9)
    around = np.array([0.999, 1.0, 1.001]) * found.guard_band
    curve = global_risks(prior, errors, tolerance, around)
    assert curve.global_consumers_risk[0] > risk > curve.global_consumers_risk[2]
    assert found.release_rate == pytest.approx(curve.release_rate[1], rel=1e-12)


def test_the_guard_band_is_never_below_zero():
    """Mathematics, rule 37: a process that holds the risk by itself gets no acceptance beyond tolerance."""
    calm = ProductionPrior("normal", 2.9, 0.05)
    found = global_guard_band(calm, ERRORS, UPPER, 0.01)
    assert found.guard_band == 0.0
    assert found.global_consumers_risk < 1e-6 and found.release_rate > 0.99


@settings(max_examples=15, deadline=None)
@given(st.floats(1e-6, 1e-3), st.floats(1.1, 10.0))
def test_a_smaller_risk_needs_a_wider_guard_band(risk, factor):
    wide = global_guard_band(PRIOR, ERRORS, UPPER, risk).guard_band
    assert wide >= global_guard_band(PRIOR, ERRORS, UPPER, min(0.4, risk * factor)).guard_band


def test_an_uncorrected_bias_has_its_own_place_beside_the_guard_band():
    left = MeasurementErrors(ERRORS.random, ERRORS.common, math.inf, bias=-0.05)
    with_bias = global_guard_band(PRIOR, left, UPPER, 1e-4)
    without = global_guard_band(PRIOR, ERRORS, UPPER, 1e-4)
    assert with_bias.guard_band == pytest.approx(without.guard_band, rel=1e-9)
    harmless = MeasurementErrors(ERRORS.random, ERRORS.common, math.inf, bias=0.05)
    assert global_guard_band(PRIOR, harmless, UPPER, 1e-4).guard_band < without.guard_band


def test_a_steered_process_is_held_too():
    prior = ProductionPrior("normal", 3.0, 0.1, steering=Steering(3.0, 0.08, 0.2))
    found = global_guard_band(prior, ERRORS, UPPER, 5e-3)
    curve = global_risks(prior, ERRORS, UPPER, found.guard_band)
    assert curve.global_consumers_risk[0] == pytest.approx(5e-3)


@pytest.mark.parametrize(
    ("prior", "tolerance", "risk"),
    [
        (ProductionPrior("normal", 3.6, 0.05), UPPER, 1e-3),
        (ProductionPrior("normal", 9.0, 0.05), UPPER, 1e-3),
        (ProductionPrior("normal", 2.95, 20.0), BOTH, 1e-6),
        # Readings of a process that is steered say nothing: whatever is accepted, the risk is the same.
        (ProductionPrior("normal", 3.0, 0.2, steering=Steering(3.0, 0.05, -0.3)), UPPER, 1e-3),
    ],
    ids=["outside", "far outside", "much too wide", "steered"],
)
def test_a_risk_out_of_reach_says_so(prior, tolerance, risk):
    with pytest.raises(LimitsError, match=r"out of reach.*of all lots do not conform") as error:
        global_guard_band(prior, ERRORS, tolerance, risk)
    assert error.value.where == ("largest_risk",)
    assert f"less than {100 * LEAST_RELEASE_RATE:g} % of the lots" in str(error.value)


@pytest.mark.parametrize("risk", [0.0, 0.5, -1.0, math.nan])
def test_a_risk_that_is_none_is_refused(risk):
    with pytest.raises(LimitsError, match=r"between 0 and 0\.5"):
        global_guard_band(PRIOR, ERRORS, UPPER, risk)


def test_a_bias_that_uses_up_the_tolerance_is_refused():
    left = MeasurementErrors(LevelDependence(0.04, 0.0), LevelDependence(0.0, 0.0), math.inf, bias=-0.6)
    with pytest.raises(LimitsError, match="uses up"):
        global_guard_band(PRIOR, left, BOTH, 1e-3)
