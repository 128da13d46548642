import math

import numpy as np
import pytest
from scipy import stats

from budgets.errors import EvidenceError
from budgets.evidence.study_data import StudyData, evaluate_study


def evaluated(rows, columns=("sample", "result")):
    return evaluate_study("duplicates", StudyData(columns, tuple(rows)), study="dup")


def pairs(differences, level=3.0):
    return [(f"P{i}", level + i + side * d / 2) for i, d in enumerate(differences) for side in (1, -1)]


def test_pairs_without_a_systematic_difference_use_every_degree_of_freedom():
    d = np.array([0.03, -0.02, 0.05, -0.04, 0.01, -0.03])
    evaluation = evaluated(pairs(d))
    estimate = evaluation.estimate()
    assert estimate.variance == pytest.approx((d**2).sum() / 12)
    assert estimate.degrees_of_freedom == 6
    p = stats.ttest_1samp(d, 0).pvalue
    assert evaluation.diagnostics["mean_difference_p_value"] == pytest.approx(p)


def test_a_systematic_difference_is_taken_out_and_told():
    d = np.array([0.03, 0.02, 0.05, 0.04, 0.03, 0.03])
    evaluation = evaluated(pairs(d))
    assert evaluation.estimate().variance == pytest.approx(np.var(d, ddof=1) / 2)
    assert evaluation.estimate().degrees_of_freedom == 5
    assert "determinations-differ" in [w.code for w in evaluation.warnings]
    assert evaluation.diagnostics["mean_difference_p_value"] == pytest.approx(stats.ttest_1samp(d, 0).pvalue)


def test_a_difference_that_is_not_seen_for_sure_is_taken_out_in_silence():
    """Between 5 % and a half: the degree of freedom is given, no cause is asked for."""
    d = np.array([0.03, -0.01, 0.05, -0.02, 0.03, -0.01])
    evaluation = evaluated(pairs(d))
    p = stats.ttest_1samp(d, 0).pvalue
    assert 0.05 < p < 0.5
    assert evaluation.estimate().variance == pytest.approx(np.var(d, ddof=1) / 2)
    assert evaluation.estimate().degrees_of_freedom == 5
    assert evaluation.diagnostics["mean_difference_p_value"] == pytest.approx(p)
    assert "determinations-differ" not in [w.code for w in evaluation.warnings]


@pytest.mark.parametrize("shift", [0.0, 1.0, 2.0])
def test_the_interval_holds_whatever_the_determinations_differ_by(shift):
    """Three pairs: with a test at 5 % alone it would be 72 to 94 % (standard error 0.6 %)."""
    differences = np.random.default_rng(9).normal(shift, math.sqrt(2), (1500, 3))
    intervals = [evaluated(pairs(d)).estimate().interval for d in differences]
    held = np.mean([interval.lower <= 1 <= interval.upper for interval in intervals])
    assert 0.93 <= held <= 0.97


def test_the_column_determination_orders_the_pairs():
    d = [0.03, 0.02, 0.05, 0.04, 0.03, 0.03]
    rows = [
        (f"P{i}", label, 3.0 + i + sign * x / 2)
        for i, x in enumerate(d)
        for label, sign in (("a", 1), ("b", -1))[:: (-1) ** i]
    ]
    evaluation = evaluated(rows, ("sample", "determination", "result"))
    assert evaluation.diagnostics["mean_difference"] == pytest.approx(np.mean(d))
    with pytest.raises(EvidenceError, match="two results under the same determination"):
        evaluated([*rows, ("P0", "a", 3.1)], ("sample", "determination", "result"))


def test_more_than_two_determinations_are_pooled():
    rows = [("P0", 3.0), ("P0", 3.1), ("P0", 3.2), ("P1", 4.0), ("P1", 4.1)]
    estimate = evaluated(rows).estimate()
    assert estimate.variance == pytest.approx((0.02 + 0.005) / 3)
    assert estimate.degrees_of_freedom == 3


@pytest.mark.parametrize(
    ("rows", "match"),
    [
        (pairs([0.1]), "1 samples have two determinations"),
        (pairs([0.0, 0.0, 0.0]), "agree exactly"),
        ([("P0", 1.0), ("P0", 1.5), ("P1", 3.0), ("P1", 3.5)], "agree exactly"),
        ([("P0", 3.0), ("P0", 3.1), ("P1", 3.1), ("P1", 3.2), ("P2", 4.0), ("P2", 4.1)], "agree exactly"),
        ([("P0", 1.0), ("P0", 1.0), ("P1", 1.0), ("P1", 1.0)], "all results are equal"),
    ],
)
def test_data_that_show_no_scatter_are_refused(rows, match):
    with pytest.raises(EvidenceError, match=match):
        evaluated(rows)
