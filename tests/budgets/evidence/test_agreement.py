import math

import numpy as np
import pytest
from scipy import stats

from budgets.declarations import Declaration, evaluate
from budgets.errors import EvidenceError, NotSupportedError
from budgets.evidence.evaluation import MeanSquare, SetAside, Term
from budgets.evidence.remainder import run_share
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study
from budgets.evidence.validation_pairs import Pair

INDEPENDENT = {"independent": True}


def evaluated(rows, columns=("pair", "reading", "reference"), options=INDEPENDENT, sources=()):
    data = StudyData(columns, tuple(rows))
    return evaluate_study("agreement", data, study="val", options=options, named_sources=sources)


def simulated(n=60, readings=2, references=2, seed=3, rest=0.06, s_r=0.03, s_ref=0.03, bias=0.05):
    generator = np.random.default_rng(seed)
    rows = []
    for i in range(n):
        truth = generator.uniform(2, 4.5)
        error = generator.normal(0, rest)
        for k in range(max(readings, references)):
            x = truth + bias + error + generator.normal(0, s_r) if k < readings else None
            y = truth + generator.normal(0, s_ref) if k < references else None
            rows.append((f"V{i}", x, y))
    return rows


def differences(rows):
    sides = {}
    for pair, x, y in rows:
        sides.setdefault(pair, ([], []))
        if x is not None:
            sides[pair][0].append(x)
        if y is not None:
            sides[pair][1].append(y)
    return np.array([np.mean(x) - np.mean(y) for x, y in sides.values()])


def codes(evaluation):
    return [warning.code for warning in evaluation.warnings]


def test_bias_and_standard_error_of_prediction():
    rows = simulated(readings=2, references=1)
    d = differences(rows)
    evaluation = evaluated(rows)
    bias, sep = evaluation.estimate("bias"), evaluation.estimate("standard_error_of_prediction")
    assert bias.value == pytest.approx(d.mean())
    assert sep.standard_uncertainty == pytest.approx(d.std(ddof=1))
    assert (sep.degrees_of_freedom, sep.may_feed) == (59, ("lot",))
    assert bias.standard_uncertainty == pytest.approx(stats.sem(d))
    reference = stats.ttest_1samp(d, 0)
    assert evaluation.diagnostics["bias_p_value"] == pytest.approx(reference.pvalue)
    interval = reference.confidence_interval(0.95)
    assert (bias.interval.lower, bias.interval.upper) == pytest.approx((interval.low, interval.high))
    rms = evaluation.diagnostics["root_mean_square_error_of_prediction"]
    assert rms == pytest.approx(math.sqrt((d**2).mean()))
    assert "bias-significant" in codes(evaluation)
    assert "no-group-column" in codes(evaluation)
    assert evaluation.used == len(rows)


def test_a_bias_that_is_not_significant_keeps_its_uncertainty():
    evaluation = evaluated(simulated(bias=0.0))
    assert "bias-not-significant" in codes(evaluation)
    assert evaluation.estimate("bias").usable


def test_the_remainder_takes_out_what_the_study_s_own_replicates_left():
    evaluation = evaluated(simulated(readings=3, references=2))
    remainder = evaluation.estimate("remainder")
    coefficients = {t.mean_square.code: t.coefficient for t in remainder.terms}
    assert coefficients == pytest.approx(
        {
            "val/standard_error_of_prediction": 1,
            "val/readings_within_pairs": -1 / 3,
            "val/references_within_pairs": -1 / 2,
        }
    )
    assert remainder.usable
    assert remainder.taken_out == ("repeatability",)
    assert "presentation" in remainder.contains
    assert remainder.interval.lower < 0.06 < remainder.interval.upper
    whole = evaluation.estimate("standard_error_of_prediction")
    assert whole.reading_weight == evaluation.diagnostics["mean_reciprocal_readings"]
    beyond = evaluation.estimate("repeatability_beyond_study")
    assert beyond.covered_weight == pytest.approx(1 / 3)
    assert "readings-averaged" in codes(evaluation)


def test_the_remainder_is_recovered_on_the_average():
    """Simulation: mean of the remainder's variance over studies against the variance put in."""
    found = [evaluated(simulated(seed=seed, n=40)).estimate("remainder").variance for seed in range(60)]
    assert np.mean(found) == pytest.approx(0.06**2, rel=0.1)


def test_named_sources_come_before_the_study_s_own(an_estimate):
    sources = [
        NamedSource("analyzer_repeatability", an_estimate("repeatability", 0.0008)),
        NamedSource("reference_repeatability", an_estimate("duplicates", 0.0009)),
        NamedSource("presentation", an_estimate("presentation", 0.0004)),
        NamedSource("subsampling", an_estimate("subsampling", 0.0001)),
    ]
    rows = simulated(readings=2, references=1)
    options = {"independent": True, "presentations_per_pair": 2}
    evaluation = evaluated(rows, options=options, sources=sources)
    remainder = evaluation.estimate("remainder")
    sep = evaluation.estimate("standard_error_of_prediction").variance
    taken = 0.0008 / 2 + 0.0009 + 0.0004 / 2 + 0.0001
    assert remainder.variance == pytest.approx(sep - taken)
    assert remainder.taken_out == ("repeatability", "presentation")
    assert remainder.contains == ("remainder",)
    # Rule 5: F with the degrees of freedom of the subtracted sum.
    nu = taken**2 / ((0.0004**2 + 0.0009**2 + 0.0002**2 + 0.0001**2) / 20)
    assert evaluation.diagnostics["subtracted_degrees_of_freedom"] == pytest.approx(nu)
    assert evaluation.diagnostics["f_critical_value"] == pytest.approx(stats.f.ppf(0.95, 59, nu))


def test_unequal_replicates_count_by_the_mean_of_their_reciprocals():
    rows = [(f"V{i}", 3 + i / 10 + 0.1 * (-1) ** i, 3 + i / 10) for i in range(8)]
    rows += [("V0", 3.12, None), ("V0", 3.13, None), ("V1", 3.02, 3.11)]
    diagnostics = evaluated(rows).diagnostics
    assert diagnostics["mean_reciprocal_readings"] == pytest.approx((1 / 3 + 1 / 2 + 6) / 8)
    assert diagnostics["mean_reciprocal_references"] == pytest.approx((1 / 2 + 7) / 8)


def test_a_remainder_that_is_not_significant_is_shown_but_not_usable(an_estimate):
    evaluation = evaluated(simulated(rest=1e-6, s_r=0.05, s_ref=0.05))
    remainder = evaluation.estimate("remainder")
    assert not remainder.usable
    assert remainder.interval.lower == 0.0
    assert evaluation.diagnostics["remainder_variance_lower"] < 0
    assert "remainder-not-significant" in codes(evaluation)
    assert evaluation.estimate("standard_error_of_prediction").usable


def test_without_both_repeatabilities_no_remainder_is_offered():
    evaluation = evaluated(simulated(readings=1, references=1))
    assert [e.name for e in evaluation.estimates] == ["bias", "standard_error_of_prediction"]
    warning = next(w for w in evaluation.warnings if w.code == "remainder-not-offered")
    assert "analyzer_repeatability and reference_repeatability" in warning.detail
    one = evaluated(simulated(readings=2, references=1))
    warning = next(w for w in one.warnings if w.code == "remainder-not-offered")
    assert "without reference_repeatability;" in warning.detail


def test_replicates_that_are_all_equal_know_no_repeatability():
    rows = [(f"V{i}", 3 + i / 10 + 0.1 * (-1) ** i, 3 + i / 10) for i in range(8)]
    assert "remainder" not in [e.name for e in evaluated([*rows, *rows]).estimates]


def test_a_reproducibility_limit_cannot_be_taken_out(an_estimate):
    stated = evaluate(Declaration("reproducibility_limit", 0.3), code="ring").estimate()
    both = evaluate(Declaration("reproducibility_limit", 0.3, repeatability_limit=0.1), code="ring")
    for estimate in (stated, both.estimate("between_laboratories")):
        with pytest.raises(EvidenceError, match="made from a reproducibility limit") as caught:
            evaluated(simulated(), sources=[NamedSource("reference_repeatability", estimate)])
        assert caught.value.where == ("named_sources", 0)
    evaluated(simulated(), sources=[NamedSource("reference_repeatability", both.estimate("repeatability"))])


def test_the_laboratory_s_bias_would_make_the_difference_negative():
    """Why the refusal: true analyzer 0.15, laboratory bias 0.20, within 0.10, by plain arithmetic."""
    sep = 0.15**2 + 0.10**2
    assert sep - (0.20**2 + 0.10**2) == pytest.approx(-0.0175, abs=1e-3)
    assert sep - 0.10**2 == pytest.approx(0.0225)


@pytest.mark.parametrize(
    ("source", "changes", "match"),
    [
        ("operator", {}, "no source that can be taken out"),
        ("presentation", {"usable": False}, "not usable"),
        ("presentation", {"terms": (Term(-1.0, MeanSquare("a", 1.0, 2)),)}, "not usable"),
        ("presentation", {"relative_terms": (Term(1.0, MeanSquare("b", 1.0, 2)),)}, "depends on the level"),
        ("reference_run", {}, "column run"),
        ("subsampling", {"contains": ("repeatability", "resolution")}, "holds repeatability, resolution too"),
        ("presentation", {"contains": ("presentation", "repeatability")}, "holds repeatability too"),
        ("analyzer_repeatability", {"contains": ("repeatability", "between_days")}, "holds between_days too"),
    ],
)
def test_sources_that_cannot_be_used(an_estimate, source, changes, match):
    with pytest.raises(EvidenceError, match=match):
        evaluated(simulated(), sources=[NamedSource(source, an_estimate(**changes))])


def test_a_source_named_twice_is_refused(an_estimate):
    twice = [NamedSource("presentation", an_estimate())] * 2
    with pytest.raises(EvidenceError, match="named twice"):
        evaluated(simulated(), sources=twice)


def test_the_root_mean_square_error_is_no_estimate():
    """It holds the bias: a component made of it beside a bias would count that twice."""
    evaluation = evaluated(simulated())
    with pytest.raises(EvidenceError, match="there is no estimate 'root_mean_square_error_of_prediction'"):
        evaluation.estimate("root_mean_square_error_of_prediction")


def test_a_pair_set_aside_leaves_the_standard_error_with_it_too():
    rows = simulated(readings=1, references=1)
    rows[7] = (rows[7][0], rows[7][1] + 1, rows[7][2])
    data = StudyData(("pair", "reading", "reference"), tuple(rows))
    aside = [SetAside(7, "cup not filled")]
    evaluation = evaluate_study("agreement", data, study="val", options=INDEPENDENT, set_aside=aside)
    kept = differences(rows[:7] + rows[8:])
    without = evaluation.estimate("standard_error_of_prediction").standard_uncertainty
    assert without == pytest.approx(kept.std(ddof=1))
    estimates = evaluation.diagnostics["with_set_aside"]["estimates"]
    (whole,) = [each for each in estimates if each["name"] == "standard_error_of_prediction"]
    assert whole["standard_uncertainty"] == pytest.approx(differences(rows).std(ddof=1))


def with_column(rows, name, label):
    return [(*row, label(int(row[0][1:]))) for row in rows], ("pair", "reading", "reference", name)


def test_a_bias_of_clustered_pairs_comes_from_the_mean_square_between_clusters():
    generator = np.random.default_rng(4)
    shifts = generator.normal(0, 0.1, 12)
    rows = [(f"V{i}", 3 + shifts[i // 5] + generator.normal(0, 0.03), 3.0) for i in range(60)]
    rows, columns = with_column(rows, "group", lambda i: f"day {i // 5}")
    evaluation = evaluated(rows, columns)
    means = np.array([row[1] for row in rows]).reshape(12, 5).mean(axis=1)
    bias = evaluation.estimate("bias")
    # Equal clusters: the mean square between them over n is the variance of the cluster means over k.
    assert bias.variance == pytest.approx(means.var(ddof=1) / 12)
    assert bias.degrees_of_freedom == pytest.approx(11)
    assert evaluation.diagnostics["bias_uncertainty_from"] == "group"
    assert "no-group-column" not in codes(evaluation)


def test_a_bias_of_runs_comes_from_the_mean_square_between_runs():
    """Runs of the reference method are clusters as days are, and of the two the worse counts."""
    generator = np.random.default_rng(14)
    shifts = generator.normal(0, 0.1, 12)
    rows = [
        (f"V{i}", 3 + shifts[i // 5] + generator.normal(0, 0.03), 3.0, f"run {i // 5}", f"d{i % 6}")
        for i in range(60)
    ]
    evaluation = evaluated(rows, ("pair", "reading", "reference", "run", "group"))
    means = np.array([row[1] for row in rows]).reshape(12, 5).mean(axis=1)
    assert evaluation.estimate("bias").variance == pytest.approx(means.var(ddof=1) / 12)
    assert evaluation.diagnostics["bias_uncertainty_from"] == "run"


def few_groups(seed, groups=2, day=0.5, pairs=20, scatter=1.0):
    generator = np.random.default_rng(seed)
    shifts = generator.normal(0, day, groups)
    rows = [(f"V{i}", 3 + shifts[i % groups] + generator.normal(0, scatter), 3.0) for i in range(pairs)]
    return with_column(rows, "group", lambda i: f"day {i % groups}")


@pytest.mark.parametrize("day", [0.0, 0.5])
def test_two_groups_know_the_bias_as_two_groups_know_it(day):
    """20 pairs of two days: by the pairs alone 88 % of intervals would hold a bias that differs by day."""
    found = [evaluated(*few_groups(seed, day=day)) for seed in range(400)]
    intervals = [evaluation.estimate("bias").interval for evaluation in found]
    held = np.mean([interval.lower <= 0 <= interval.upper for interval in intervals])
    # 95 %, or up to 99 % where the days do not differ; the standard error is 1.1 %.
    assert 0.92 <= held
    freedoms = {evaluation.estimate("bias").degrees_of_freedom for evaluation in found}
    assert all(freedom == pytest.approx(1) or freedom == 19 for freedom in freedoms)
    assert any("pairs_of_few_groups" in e.estimate("bias").terms[0].mean_square.code for e in found)
    for evaluation in found:
        sep = evaluation.estimate("standard_error_of_prediction").variance
        assert evaluation.estimate("bias").variance >= sep / 20 * (1 - 1e-12)
    assert "few-groups-of-pairs" in codes(found[0])
    assert "few-groups-of-pairs" not in codes(evaluated(*few_groups(1, groups=4)))


def test_groups_without_any_scatter_inside_are_not_alike():
    rows, columns = with_column(
        [(f"V{i}", 3.0 + (i % 2) * 0.1, 3.0) for i in range(6)], "group", lambda i: f"day {i % 2}"
    )
    bias = evaluated(rows, columns).estimate("bias")
    assert bias.degrees_of_freedom == pytest.approx(1)


def test_clusters_that_do_not_differ_leave_the_pairs():
    rows, columns = with_column(simulated(readings=1, references=1), "group", lambda i: f"d{i % 7}")
    evaluation = evaluated(rows, columns)
    sep = evaluation.estimate("standard_error_of_prediction").variance
    assert evaluation.estimate("bias").variance >= sep / 60 * (1 - 1e-12)
    each = evaluated(*with_column(simulated(), "group", str))
    assert each.diagnostics["bias_uncertainty_from"] == "pairs"
    one = evaluated(*with_column(simulated(), "group", lambda i: "monday"))
    assert "one-group" in codes(one)


def test_one_run_adds_its_whole_variance_to_the_bias(an_estimate):
    rows, columns = with_column(simulated(), "run", lambda i: "run 1")
    assert "one-run-unknown" in codes(evaluated(rows, columns))
    source = [NamedSource("reference_run", an_estimate("session", 0.0016))]
    evaluation = evaluated(rows, columns, sources=source)
    sep = evaluation.estimate("standard_error_of_prediction").variance
    assert evaluation.estimate("bias").variance == pytest.approx(sep / 60 + 0.0016)
    assert "one-run" in codes(evaluation)
    coefficients = {t.mean_square.code: t.coefficient for t in evaluation.estimate("remainder").terms}
    assert coefficients["elsewhere/session"] == 0


@pytest.mark.parametrize(
    ("label", "share"),
    [(lambda i: f"run {i}", 1.0), (lambda i: f"run {i % 2}", 30 / 59), (lambda i: f"run {i // 6}", 54 / 59)],
)
def test_the_standard_error_of_prediction_holds_a_part_of_the_run(an_estimate, label, share):
    # Two runs of 30: factor .51, simulated for the project's rules.
    rows, columns = with_column(simulated(), "run", label)
    source = [NamedSource("reference_run", an_estimate("session", 0.0016))]
    terms = evaluated(rows, columns, sources=source).estimate("remainder").terms
    coefficients = {t.mean_square.code: t.coefficient for t in terms}
    assert coefficients["elsewhere/session"] == pytest.approx(-share)


def test_a_simulation_finds_the_part_of_the_run_in_the_standard_error_of_prediction():
    """Two runs of 30 pairs that differ by the runs alone: .51 of their variance."""
    runs = np.random.default_rng(15).normal(0, 1, (4000, 2)).repeat(30, axis=1)
    pairs = [Pair(str(i), (0.0,), (0.0,), None, str(i // 30)) for i in range(60)]
    assert run_share(pairs) == pytest.approx(0.51, abs=0.005)
    # The standard error of the simulated mean is 1.2 %.
    assert runs.var(axis=1, ddof=1).mean() == pytest.approx(run_share(pairs), rel=0.05)


@pytest.mark.parametrize(
    ("options", "where"),
    [
        ({}, "independent"),
        ({"independent": 1}, "independent"),
        ({"independent": True, "presentations_per_pair": 0}, "presentations_per_pair"),
        ({"independent": True, "presentations_per_pair": True}, "presentations_per_pair"),
        ({"independent": True, "presentations_per_pair": 1.5}, "presentations_per_pair"),
        ({"independent": True, "tolerance_limits": 3.2}, "tolerance_limits"),
        ({"independent": True, "tolerance_limits": ["3.2"]}, "tolerance_limits"),
        ({"independent": True, "tolerance_limits": [math.nan]}, "tolerance_limits"),
    ],
)
def test_options_out_of_range_are_named(options, where):
    with pytest.raises(EvidenceError) as caught:
        evaluated(simulated(), options=options)
    assert caught.value.where == ("options", where)


def test_few_pairs_and_few_of_them_near_a_limit_are_told():
    options = {"independent": True, "tolerance_limits": [3.2, 9.0]}
    evaluation = evaluated(simulated(n=12), options=options)
    assert "few-pairs" in codes(evaluation)
    near = [w.detail for w in evaluation.warnings if w.code == "few-pairs-near-limit"]
    assert any("only 0 pairs" in text and "limit 9" in text for text in near)
    dense = [(f"V{i}", 3.0 + 0.1 * (-1) ** i, 3.0 + i / 1000) for i in range(40)]
    crowded = evaluated(dense, options={"independent": True, "tolerance_limits": [3.0]})
    assert "few-pairs-near-limit" not in codes(crowded)


def test_the_validated_range_is_the_bulk_of_the_reference_values():
    rows = [(f"V{i}", 2 + i / 50 + 0.01 * (-1) ** i, 2 + i / 50) for i in range(101)]
    diagnostics = evaluated(rows).diagnostics
    assert diagnostics["validated_range_lower"] == pytest.approx(2.1)
    assert diagnostics["validated_range_upper"] == pytest.approx(3.9)
    assert (diagnostics["reference_lowest"], diagnostics["reference_highest"]) == (2.0, 4.0)


def test_a_difference_that_stands_out_is_told():
    rows = simulated()
    rows[0] = (rows[0][0], rows[0][1] + 3, rows[0][2])
    assert "outlier" in codes(evaluated(rows))


def test_pairs_that_cannot_be_formed_are_named():
    with pytest.raises(EvidenceError, match="2 faults") as caught:
        evaluated([("V0", 3.1, None), ("V1", None, 3.0), ("V2", 3.0, 3.1)])
    assert [fault.where for fault in caught.value.each()] == [("rows", 0), ("rows", 1)]
    with pytest.raises(EvidenceError, match="one pair only"):
        evaluated([("V0", 3.1, 3.0), ("V0", 3.2, 3.1)])
    with pytest.raises(EvidenceError, match="all pairs differ by the same amount"):
        evaluated([("V0", 3.5, 3.0), ("V1", 4.5, 4.0)])
    with pytest.raises(EvidenceError, match="all pairs differ by the same amount"):
        evaluated([("V0", 3e-162, 0.0), ("V1", 0.0, 0.0)])
    # 0.1 each time, of which binary numbers make several.
    with pytest.raises(EvidenceError, match="all pairs differ by the same amount"):
        evaluated([(f"V{i}", 3 + i / 10, float(f"{3.1 + i / 10:.1f}")) for i in range(20)])


def test_a_pair_stands_in_one_group_and_one_run():
    rows = [("V0", 3.1, 3.0, "a"), ("V0", 3.2, 3.1, "b"), ("V1", 3.0, 3.1, "a")]
    with pytest.raises(EvidenceError, match="several groups \\(a, b\\)") as caught:
        evaluated(rows, ("pair", "reading", "reference", "group"))
    assert caught.value.where == ("rows", 0)
    with pytest.raises(NotSupportedError):
        evaluated(rows, ("pair", "reading", "reference", "run"))
