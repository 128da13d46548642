import math

import numpy as np
import pytest
from scipy import stats

from budgets.components import Component
from budgets.errors import EvidenceError
from budgets.evidence.study_data import StudyData, evaluate_study


def evaluated(groups, **options):
    rows = tuple((label, value) for label, values in groups.items() for value in values)
    return evaluate_study("repeatability", StudyData(("sample", "reading"), rows), study="rep", **options)


def codes(evaluation):
    return [warning.code for warning in evaluation.warnings]


def test_the_pooled_variance_is_that_of_an_analysis_of_variance():
    generator = np.random.default_rng(2)
    groups = {f"P{i}": list(generator.normal(3, 0.03, 2 + i % 3)) for i in range(9)}
    estimate = evaluated(groups).estimate("repeatability")
    nu = sum(len(v) - 1 for v in groups.values())
    pooled = sum(np.var(v, ddof=1) * (len(v) - 1) for v in groups.values()) / nu
    assert estimate.variance == pytest.approx(pooled)
    assert estimate.degrees_of_freedom == nu
    assert estimate.interval.lower == pytest.approx(math.sqrt(pooled * nu / stats.chi2.isf(0.025, nu)))
    assert estimate.interval.upper == pytest.approx(math.sqrt(pooled * nu / stats.chi2.ppf(0.025, nu)))
    assert estimate.terms[0].mean_square.code == "rep/repeatability"
    assert estimate.may_feed[0] == "reading"


def test_few_replicates_are_put_into_plain_words():
    evaluation = evaluated({"P0": [3.10, 3.12, 3.08, 3.11, 3.09, 3.13, 3.1, 3.12]})
    warning = next(w for w in evaluation.warnings if w.code == "few-degrees-of-freedom")
    assert "8 replicates know the standard deviation to within -34 % / +104 %" in warning.detail
    assert "one-sample" in codes(evaluation)


def test_many_replicates_need_no_warning():
    generator = np.random.default_rng(3)
    groups = {f"P{i}": list(generator.normal(3, 0.03, 2)) for i in range(60)}
    evaluation = evaluated(groups, readings_decimals=4)
    assert codes(evaluation) == []
    assert evaluation.used == 120


def test_samples_read_once_say_nothing():
    evaluation = evaluated({"P0": [3.1, 3.2], "P1": [3.3, 3.5], "P2": [9.0]})
    assert evaluation.used == 4
    assert "samples-without-replicates" in codes(evaluation)


def test_a_coarse_display_is_told():
    groups = {"P0": [3.1, 3.1], "P1": [3.2, 3.2], "P2": [3.3, 3.31], "P3": [3.4, 3.4]}
    assert "resolution-larger" in codes(evaluated(groups, readings_decimals=1))
    assert "resolution-larger" not in codes(evaluated(groups, readings_decimals=3))


def test_outliers_are_told_and_kept():
    groups = {f"P{i}": [3.1, 3.12, 3.11 + i / 1000] for i in range(8)}
    evaluation = evaluated({**groups, "P8": [3.1, 3.9, 3.11]})
    assert evaluation.used == 27
    details = {w.code: w.detail for w in evaluation.warnings}
    assert "outlier in P8: the spread (Cochran" in details["outlier"]
    # Of three values none can lie far enough out for more than a straggler.
    assert "straggler in P8: 3.9 (Grubbs, one value" in details["straggler"]
    assert "nothing was left out" in details["outlier"]
    assert {f["group"] for f in evaluation.diagnostics["findings"]} == {"P8"}


@pytest.mark.parametrize(
    ("groups", "match"),
    [
        ({"P0": [3.1, 3.1], "P1": [3.1, 3.1]}, "all readings are equal"),
        ({"P0": [3.1], "P1": [3.2]}, "no sample has two replicates"),
        ({"P0": [3.1], "P1": [3.1]}, "no sample has two replicates"),
        ({"P0": [3.1, 3.1], "P1": [3.2, 3.2]}, "declare its resolution"),
    ],
)
def test_data_that_show_no_repeatability_are_refused(groups, match):
    with pytest.raises(EvidenceError, match=match) as caught:
        evaluated(groups)
    assert caught.value.where == ("rows",)


def levels_with_scatter(s0, s1, seed=5, readings=6):
    generator = np.random.default_rng(seed)
    return {f"P{x}": list(x + generator.normal(0, math.hypot(s0, s1 * x), readings)) for x in range(1, 11)}


def test_a_scatter_that_grows_with_the_level_gets_an_estimate_with_two_parts():
    evaluation = evaluated(levels_with_scatter(0.01, 0.03))
    over = evaluation.estimate("repeatability_over_level")
    fit = evaluation.diagnostics["level_dependence"]
    assert fit["significant"] and "level-dependent" in codes(evaluation)
    proportional = over.relative_terms[0]
    assert proportional.mean_square.value == pytest.approx(fit["proportional"] ** 2)
    assert proportional.mean_square.value**0.5 == pytest.approx(0.03, rel=0.25)
    assert 10 < proportional.mean_square.degrees_of_freedom < 50
    assert {t.mean_square.code for t in over.terms} <= {"rep/repeatability_constant"}
    component = Component.from_estimate("scatter", "moisture", None, over, "A")
    assert component.level == "reading"
    assert evaluation.estimate("repeatability").degrees_of_freedom == 50


def test_a_purely_proportional_scatter_has_no_constant_part():
    groups = {f"P{x}": [x - 0.001 * x**2, x + 0.001 * x**2, x] for x in range(1, 11)}
    over = evaluated(groups).estimate("repeatability_over_level")
    assert over.terms == () and over.usable


def test_a_constant_scatter_is_one_figure():
    evaluation = evaluated(levels_with_scatter(0.05, 0.0))
    assert [e.name for e in evaluation.estimates] == ["repeatability"]
    assert not evaluation.diagnostics["level_dependence"]["significant"]
    assert evaluated({"P0": [3.1, 3.2]}).diagnostics["level_dependence"] is None


def test_the_same_replicate_twice_is_one_reading_copied():
    rows = (("P1", 1, 3.1), ("P1", 2, 3.2), ("P1", 1, 3.1), ("P2", 1, 3.0), ("P1", 2.0, 3.3))
    data = StudyData(("sample", "replicate", "reading"), rows)
    with pytest.raises(EvidenceError, match="2 faults") as caught:
        evaluate_study("repeatability", data, study="rep")
    assert [fault.where for fault in caught.value.each()] == [("rows", 2), ("rows", 4)]
    assert "replicate 1 of sample P1 stands in row 1 already" in caught.value.each()[0].message
    fine = StudyData(("sample", "replicate", "reading"), (*rows[:2], *rows[3:4]))
    assert evaluate_study("repeatability", fine, study="rep").used == 2
