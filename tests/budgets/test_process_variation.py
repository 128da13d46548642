import math

import numpy as np
import pytest

from budgets.errors import EvidenceError, LimitsError
from budgets.process_variation import ProcessVariation, steered_process, unsteered_process


def test_the_random_error_is_taken_out_of_the_readings_once():
    process = unsteered_process(2.9, 0.13, 0.05**2, drift=0.04, within_lot=0.03)
    assert process.lot_to_lot == pytest.approx(math.sqrt(0.13**2 - 0.05**2 - 0.04**2))
    assert process.unsteered_standard_deviation == pytest.approx(0.12)
    shown = process.distribution(np.array([[0.05**2]]), 0.02)
    assert shown.covariance[1, 1] == pytest.approx(0.13**2)
    assert process.true_standard_deviation(0.05**2) == pytest.approx(0.12)


def test_readings_that_vary_less_than_their_error_say_steering():
    with pytest.raises(EvidenceError, match="steered by this analyzer"):
        unsteered_process(2.9, 0.05, 0.1**2)
    with pytest.raises(EvidenceError, match="do not vary"):
        unsteered_process(2.9, 0.0, 0.1**2)


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
