import math

import numpy as np
import pytest

from budgets.errors import EvidenceError, LimitsError
from budgets.prior_estimates import prior_of_readings
from budgets.process_variation import ProcessVariation, process_of_prior, steered_process
from budgets.propagation import Counts


def test_the_variation_of_readings_is_taken_over_with_its_drift_told_apart(a_budget):
    readings = [2.8, 2.9, 3.1, 2.7, 3.0, 2.95, 2.85]
    estimate = prior_of_readings(readings, a_budget(), Counts((2,)), steered=False)
    process = process_of_prior(estimate, 0.03, drift=0.04, within_lot=0.02)
    assert process.mean == pytest.approx(np.mean(readings) + 0.03)
    random = 0.05**2 + 0.04**2 / 2
    assert process.unsteered_standard_deviation == pytest.approx(math.sqrt(np.var(readings, ddof=1) - random))
    assert (process.drift, process.within_lot) == (0.04, 0.02)
    shown = process.distribution(np.array([[random]]), 0.02)
    assert shown.covariance[1, 1] == pytest.approx(np.var(readings, ddof=1))
    assert process.true_standard_deviation(random) == pytest.approx(process.unsteered_standard_deviation)
    assert process_of_prior(estimate, 0.03, drift=9.0).lot_to_lot == 0


def test_a_steered_process_is_that_of_rule_36():
    # mathematics.md, rule 36: readings vary by .050, truth by .112, correlation of truth and error -.89
    # (simulated there); an error of 0.1 belongs to it.
    process = steered_process(3.0, 0.112, 0.050, 0.1**2)
    lots = process.distribution(np.array([[0.1**2]]), 0.0)
    assert math.sqrt(lots.covariance[0, 0]) == pytest.approx(0.112)
    assert math.sqrt(lots.covariance[1, 1]) == pytest.approx(0.050)
    with_error = lots.covariance[0, 1] - lots.covariance[0, 0]
    assert with_error / (0.112 * 0.1) == pytest.approx(-0.89, abs=0.01)


def test_without_steering_both_ways_agree():
    steered = steered_process(3.0, 0.1, math.hypot(0.1, 0.06), 0.06**2)
    assert steered.steering == pytest.approx(0, abs=1e-12)
    assert steered.lot_to_lot == pytest.approx(0.1)


@pytest.mark.parametrize(
    ("figures", "words"),
    [((0.05, 0.5, 0.01), "cannot be true together"), ((0.1, 0.1, 0.0), "all above 0")],
)
def test_figures_that_contradict_each_other_are_refused(figures, words):
    with pytest.raises(EvidenceError, match=words):
        steered_process(3.0, *figures)


def test_all_faults_of_a_stated_variation_are_named():
    with pytest.raises(LimitsError) as raised:
        ProcessVariation(math.nan, -0.1, drift=math.inf, within_lot=-1.0)
    assert {fault.where for fault in raised.value.each()} == {
        ("mean",),
        ("lot_to_lot",),
        ("drift",),
        ("within_lot",),
    }


def test_no_variation_is_refused_with_what_to_do():
    with pytest.raises(LimitsError, match="design production"):
        ProcessVariation(2.9, 0.0).distribution(np.array([[0.01]]), 0.0)
