"""What an agreement study says beside its estimates: lines, calibration, limits, the side that deviates."""

import math

import numpy as np
import pytest
from scipy import stats

from budgets.errors import EvidenceError
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study

COLUMNS = ("pair", "reading", "reference")


def evaluated(rows, columns=COLUMNS, sources=(), **options):
    data = StudyData(columns, tuple(rows))
    options = {"independent": True, **options}
    return evaluate_study("agreement", data, study="val", options=options, named_sources=sources)


def plain(n=40, seed=1, slope=1.0, scatter=0.1, growing=0.0):
    generator = np.random.default_rng(seed)
    levels = np.linspace(1, 9, n)
    errors = generator.normal(0, 1, n) * np.hypot(scatter, growing * levels)
    return [(f"V{i}", slope * y + e, y) for i, (y, e) in enumerate(zip(levels, errors, strict=True))]


def codes(evaluation):
    return [warning.code for warning in evaluation.warnings]


def detail(evaluation, code):
    return next(warning.detail for warning in evaluation.warnings if warning.code == code)


def test_the_slope_is_tested_the_right_way_round():
    rows = plain(slope=1.1)
    found = evaluated(rows)
    reference = stats.linregress([r[1] for r in rows], [r[2] for r in rows])
    assert found.diagnostics["slope_test"]["slope"] == pytest.approx(reference.slope)
    assert found.diagnostics["slope_test"]["regressed"] == "reference on reading"
    assert "slope-significant" in codes(found)
    assert "slope-significant" not in codes(evaluated(plain()))


def test_readings_that_do_not_differ_have_no_slope():
    found = evaluated([(f"V{i}", 3.0, 3 + 0.1 * i) for i in range(6)])
    assert "no-slope" in codes(found)
    for name in ("slope_test", "line_with_known_ratio", "line_with_individual_uncertainties"):
        assert found.diagnostics[name] is None


def test_the_line_with_a_known_ratio_says_its_direction_and_where_the_ratio_is_from(an_estimate):
    rows = plain()
    given = evaluated(rows, error_variance_ratio=0.25).diagnostics["line_with_known_ratio"]
    assert (given["error_variance_ratio"], given["ratio_from"]) == (0.25, "option")
    assert given["direction"].startswith("variance of the reference's errors over")
    assert given["slope_lower"] < given["slope"] < given["slope_upper"]
    assert evaluated(rows).diagnostics["line_with_known_ratio"] is None
    sources = [NamedSource("reference_repeatability", an_estimate(variance=0.002))]
    found = evaluated(rows, sources=sources)
    square = found.estimate("standard_error_of_prediction").variance
    line = found.diagnostics["line_with_known_ratio"]
    assert line["error_variance_ratio"] == pytest.approx(0.002 / (square - 0.002))
    assert line["ratio_from"] == "study"
    # A reference that scatters more than all the differences leaves nothing for the analyzer.
    large = [NamedSource("reference_repeatability", an_estimate(variance=0.2))]
    assert evaluated(rows, sources=large).diagnostics["line_with_known_ratio"] is None


def test_runs_count_on_the_side_of_the_reference(an_estimate):
    rows = [(*row, f"run {i % 5}") for i, row in enumerate(plain())]
    sources = [
        NamedSource("reference_repeatability", an_estimate("a", 0.002)),
        NamedSource("reference_run", an_estimate("b", 0.001)),
    ]
    found = evaluated(rows, (*COLUMNS, "run"), sources)
    square = found.estimate("standard_error_of_prediction").variance
    line = found.diagnostics["line_with_known_ratio"]
    assert line["error_variance_ratio"] == pytest.approx(0.003 / (square - 0.003))


STATED = (*COLUMNS, "reading_standard_uncertainty", "reference_standard_uncertainty")


def test_uncertainties_stated_pair_by_pair_give_a_line_and_are_held_against_the_scatter():
    rows = [(*row, 0.08, 0.06) for row in plain()]
    line = evaluated(rows, STATED).diagnostics["line_with_individual_uncertainties"]
    assert line["slope"] == pytest.approx(1.0, abs=0.02)
    assert line["p_value"] == pytest.approx(stats.chi2.sf(line["chi_square"], 38))
    too_small = evaluated([(*row, 0.02, 0.02) for row in plain()], STATED)
    assert "individual-uncertainties-too-small" in codes(too_small)
    assert "individual-uncertainties-too-small" not in codes(evaluated(rows, STATED))
    # Stated once for a pair of several rows is enough.
    more = [*rows, ("V0", 1.0, 1.0, None, 0.06)]
    assert evaluated(more, STATED).diagnostics["line_with_individual_uncertainties"] is not None


@pytest.mark.parametrize("cells", [(0.08, None), (0.0, 0.06), (-0.1, 0.06)])
def test_uncertainties_that_cannot_be_are_named(cells):
    rows = [(*row, *(cells if i == 3 else (0.08, 0.06))) for i, row in enumerate(plain())]
    with pytest.raises(EvidenceError, match="pair V3 needs one re") as caught:
        evaluated(rows, STATED)
    assert caught.value.where == ("rows", 3)


def test_uncertainties_of_one_side_only_are_refused():
    with pytest.raises(EvidenceError, match="of use together only"):
        evaluated([(*row, 0.1) for row in plain()], STATED[:4])


def test_unequal_replicates_give_uncertainties_of_their_own():
    generator = np.random.default_rng(8)
    rows = [
        (f"V{i}", level + generator.normal(0, 0.1), level + generator.normal(0, 0.1) if k < 2 else None)
        for i, level in enumerate(np.linspace(1, 9, 30))
        for k in range(2 + i % 2)
    ]
    line = evaluated(rows).diagnostics["line_with_individual_uncertainties"]
    assert line["slope"] == pytest.approx(1.0, abs=0.03)
    # What is not repeatability is counted on the analyzer's side, so the scatter is explained on the whole.
    assert line["p_value"] > 1e-3
    equal = [row for i, row in enumerate(rows) if rows[i - 1][0] != row[0] or rows[i - 2][0] != row[0]]
    assert evaluated(equal).diagnostics["line_with_individual_uncertainties"] is None


def test_pairs_that_determine_no_line_have_none():
    rows = [("A", 0.0, 1.0, 1, 1), ("B", 1e-3, 2.0, 1, 1), ("C", 0.0, 3.0, 1, 1), ("D", -1e-3, 2.0, 1, 1)]
    assert evaluated(rows, STATED).diagnostics["line_with_individual_uncertainties"] is None


CALIBRATION = {"standard_error_of_calibration": 0.1, "calibration_samples": 120, "latent_variables": 7}


def test_the_standard_error_of_prediction_is_held_against_that_of_the_calibration():
    found = evaluated(plain(), **CALIBRATION)
    test = found.diagnostics["calibration_error"]
    # ISO 12099 (from memory): UECL = SEC sqrt(F_0.95(n_val - 1, n_cal - p - 1))
    limit = 0.1 * math.sqrt(stats.f.ppf(0.95, 39, 112))
    assert test["unexplained_error_confidence_limit"] == pytest.approx(limit)
    assert test["accepted"] and "above-unexplained-error-limit" not in codes(found)
    worse = evaluated(plain(scatter=0.2), **CALIBRATION)
    assert not worse.diagnostics["calibration_error"]["accepted"]
    assert "above-unexplained-error-limit" in codes(worse)
    assert evaluated(plain()).diagnostics["calibration_error"] is None


@pytest.mark.parametrize(
    ("changes", "where"),
    [
        ({"latent_variables": None}, "latent_variables"),
        ({"standard_error_of_calibration": 0}, "standard_error_of_calibration"),
        ({"standard_error_of_calibration": True}, "standard_error_of_calibration"),
        ({"calibration_samples": 0}, "calibration_samples"),
        ({"calibration_samples": 12.5}, "calibration_samples"),
        ({"calibration_samples": 8}, "calibration_samples"),
        ({"latent_variables": -1}, "latent_variables"),
        ({"error_variance_ratio": 0}, "error_variance_ratio"),
        ({"error_variance_ratio": "1"}, "error_variance_ratio"),
        ({"error_variance_ratio": 1e9}, "error_variance_ratio"),
    ],
)
def test_options_out_of_range_are_named(changes, where):
    with pytest.raises(EvidenceError) as caught:
        evaluated(plain(), **{**CALIBRATION, **changes})
    assert caught.value.where == ("options", where)


def test_differences_that_hide_one_another_are_named():
    rows = plain()
    rows[4] = ("V4", rows[4][1] + 2, rows[4][2])
    rows[9] = ("V9", rows[9][1] + 2.05, rows[9][2])
    found = evaluated(rows)
    assert {item["pair"] for item in found.diagnostics["extreme_differences"]} == {"V4", "V9"}
    rest = [x - y for label, x, y in rows if label not in ("V4", "V9")]
    without = found.diagnostics["standard_error_of_prediction_without_extremes"]
    assert without == pytest.approx(np.std(rest, ddof=1))
    assert "V4" in detail(found, "extreme-differences") and "V9" in detail(found, "extreme-differences")
    assert found.estimate("standard_error_of_prediction").degrees_of_freedom == 39
    clean = evaluated(plain()).diagnostics
    assert clean["extreme_differences"] == []
    assert clean["standard_error_of_prediction_without_extremes"] is None


def test_the_agreement_near_a_limit_is_that_of_the_pairs_there():
    generator = np.random.default_rng(6)
    rows = [(f"A{i}", 3 + generator.normal(0, 0.3), 3 + i / 500) for i in range(30)]
    rows += [(f"B{i}", y + generator.normal(0, 0.1), y) for i, y in enumerate(np.linspace(5, 8, 60))]
    found = evaluated(rows, tolerance_limits=[3, 6.0])
    near, other = found.diagnostics["near_limits"]
    local = [x - y for label, x, y in rows if label[0] == "A"]
    assert (near["pairs"], near["from"]) == (30, "pairs near the limit")
    assert near["standard_error_of_prediction"] == pytest.approx(np.std(local, ddof=1))
    assert near["bias"] == pytest.approx(np.mean(local))
    assert near["lower"] < 0.3 < near["upper"]
    assert near["larger_than_elsewhere"] and not other["larger_than_elsewhere"]
    assert "limit 3 the standard error" in detail(found, "worse-near-limit")
    everywhere = evaluated(rows[:30], tolerance_limits=[3.0]).diagnostics["near_limits"][0]
    assert not everywhere["larger_than_elsewhere"]


def test_where_few_pairs_are_near_a_limit_the_fit_over_the_level_stands_in():
    rows = plain(n=60, scatter=0.02, growing=0.05, seed=3)
    found = evaluated(rows, tolerance_limits=[8.0, 20.0])
    assert found.diagnostics["level_dependence"]["significant"]
    assert "differences-depend-on-level" in codes(found)
    at_limit, outside = found.diagnostics["near_limits"]
    assert at_limit["from"] == "fit over the level"
    assert at_limit["lower"] < math.hypot(0.02, 0.4) < at_limit["upper"]
    assert outside["from"] is None and outside["standard_error_of_prediction"] is None
    assert codes(found).count("few-pairs-near-limit") == 2


def replicated(readings, references, others=20):
    """One pair with the given replicates among others that agree within 0.05, with a bias of zero."""
    generator = np.random.default_rng(7)
    rows = [
        (f"V{i}", y + e, y + generator.normal(0, 0.01))
        for i, y in enumerate(np.linspace(2, 6, others))
        for e in generator.normal(0.03 * (-1) ** i, 0.01, 2)
    ]
    for k in range(max(len(readings), len(references))):
        sides = [side[k] if k < len(side) else None for side in (readings, references)]
        rows.append(("bad", *sides))
    return rows


@pytest.mark.parametrize(
    ("readings", "references", "states", "says"),
    [
        ([3.5, 3.51], [3.0, 3.01], ("agree", "agree"), "the difference persists"),
        ([3.5, 3.51], [2.5, 3.5], ("agree", "disagree"), "ask the reference again"),
        ([3.5], [2.5, 3.5], ("none", "disagree"), "ask the reference again"),
        ([3.2, 3.8], [3.0, 3.01], ("disagree", "agree"), "its readings disagree"),
        ([3.2, 3.8], [3.0], ("disagree", "none"), "its readings disagree"),
        ([3.2, 3.8], [2.5, 3.5], ("disagree", "disagree"), "both sides disagree"),
        ([3.5, 3.51], [3.0], ("agree", "none"), "no repeatability of the analyzer"),
        ([3.5], [3.0, 3.01], ("none", "agree"), "read the sample again"),
        ([3.5], [3.0], ("none", "none"), "neither side has replicates"),
    ],
)
def test_replicates_say_which_side_deviates(readings, references, states, says):
    found = evaluated(replicated(readings, references))
    (item,) = [item for item in found.diagnostics["deviating_pairs"] if item["pair"] == "bad"]
    assert (item["readings"], item["references"]) == states
    assert says in item["saying"]
    told = [w.detail for w in found.warnings if w.code == "pair-deviates" and "pair bad" in w.detail]
    assert len(told) == (states != ("none", "none"))
    assert all(says in text for text in told)


def test_without_replicates_nothing_says_which_side_it_is():
    rows = plain()
    rows[4] = ("V4", rows[4][1] + 2, rows[4][2])
    found = evaluated(rows)
    assert found.diagnostics["deviating_pairs"] == []
    assert "pair-deviates" not in codes(found)


def test_a_pair_with_the_only_replicates_is_held_against_nothing():
    rows = [*plain(), ("bad", 3.0, 5.0), ("bad", 3.4, None)]
    (item,) = [i for i in evaluated(rows).diagnostics["deviating_pairs"] if i["pair"] == "bad"]
    assert (item["readings"], item["references"]) == ("agree", "none")


def test_the_order_of_the_rows_and_a_shift_of_both_sides_change_nothing():
    rows = plain(slope=1.05)
    one = evaluated(rows, tolerance_limits=[5.0]).diagnostics
    moved = [(label, x + 100, y + 100) for label, x, y in reversed(rows)]
    two = evaluated(moved, tolerance_limits=[105.0]).diagnostics
    assert two["slope_test"]["slope"] == pytest.approx(one["slope_test"]["slope"], rel=1e-9)
    assert two["slope_test"]["p_value"] == pytest.approx(one["slope_test"]["p_value"], rel=1e-6)
    assert two["near_limits"][0]["pairs"] == one["near_limits"][0]["pairs"]
