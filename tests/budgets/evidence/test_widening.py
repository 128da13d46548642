"""Evidence extended beyond its time: every variance times the square of the factor, and nothing else."""

from __future__ import annotations

import math

import numpy as np
import pytest

from budgets.components import Component
from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Estimate, Interval, MeanSquare, Term
from budgets.evidence.mean_square_matrices import MatrixTerm, covariance_of
from budgets.evidence.vectors import scatter_matrix
from budgets.evidence.widening import widened

PREDICTION = MeanSquare("val/standard_error_of_prediction", 0.09, 59)
REPEATABILITY = MeanSquare("rep/repeatability", 0.0144, 20)


def remainder(**changes: object) -> Estimate:
    terms = (Term(1.0, PREDICTION), Term(-0.5, REPEATABILITY))
    members = {"interval": Interval(0.2, 0.4, 0.95, "modified large-sample"), "value": None, **changes}
    return Estimate("remainder", terms, may_feed=("lot",), usable=True, **members)  # type: ignore[arg-type]


def test_the_standard_uncertainty_is_multiplied_and_the_degrees_of_freedom_stay():
    wide = widened(remainder(), 1.5)
    # By hand: 0.09 - 0.0144/2 = 0.0828, times 2.25.
    assert wide.variance == pytest.approx(0.0828 * 2.25, rel=1e-14)
    assert wide.degrees_of_freedom == pytest.approx(remainder().degrees_of_freedom, rel=1e-14)
    assert (wide.interval.lower, wide.interval.upper) == pytest.approx((0.3, 0.6))
    assert wide.interval.method == "modified large-sample"


def test_what_is_shared_is_still_seen_as_shared():
    """The repeatability that was taken out and that of a reading are one mean square, extended or not."""
    lot = Component.from_estimate("remainder", "moisture", "lot", widened(remainder(), 2.0), "A")
    assert {term.mean_square for term in lot.terms} == {PREDICTION, REPEATABILITY}


def test_a_value_stays_where_it_was():
    bias = remainder(value=0.05, interval=Interval(0.01, 0.09, 0.95, "t"))
    wide = widened(bias, 2.0)
    assert wide.value == 0.05
    assert (wide.interval.lower, wide.interval.upper) == pytest.approx((-0.03, 0.13))
    assert widened(remainder(interval=None), 2.0).interval is None


def test_relative_and_joint_terms_are_widened_too():
    relative = Estimate("s", (), None, None, ("reading",), True, relative_terms=(Term(1.0, REPEATABILITY),))
    (term,) = widened(relative, 3.0).relative_terms
    assert term.coefficient == pytest.approx(9.0)
    matrix = scatter_matrix("cov/scans", ("moisture", "fat"), np.array([[4.0, 1.0], [1.0, 2.0]]), 10)
    joint = Estimate("c", (), None, None, ("reading",), True, matrix_terms=(MatrixTerm(0.5, matrix),))
    before, after = covariance_of(joint.matrix_terms), covariance_of(widened(joint, 3.0).matrix_terms)
    assert after == pytest.approx(9 * before)


@pytest.mark.parametrize("factor", [1.0, 0.5, 0.0, -2.0, math.inf, math.nan])
def test_only_a_factor_above_one_widens(factor):
    with pytest.raises(EvidenceError, match="above 1") as caught:
        widened(remainder(), factor)
    assert caught.value.where == ("widening_factor",)
