import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from budgets.errors import EvidenceError
from budgets.evidence.control_tests import control_chart
from budgets.evidence.study_data import StudyData, evaluate_study

COLUMNS = ("session", "result")


def evaluated(rows, columns=COLUMNS, **options):
    return evaluate_study("check_samples", StudyData(columns, tuple(rows)), study="qc", **options)


def rows_of(values):
    """One result a session, or a row of results."""
    return [(f"d{i:03}", float(x)) for i, row in enumerate(values) for x in np.atleast_1d(row)]


def simulated(seed, sessions=30, replicates=2, between=0.05, within=0.03):
    generator = np.random.default_rng(seed)
    days = generator.normal(3, between, (sessions, 1))
    return days + generator.normal(0, within, (sessions, replicates))


def codes(evaluation):
    return [warning.code for warning in evaluation.warnings]


def test_replicated_sessions_give_the_intermediate_precision():
    table = simulated(1)
    evaluation = evaluated(rows_of(table))
    within = table.var(axis=1, ddof=1).mean()
    ms_between = 2 * table.mean(axis=1).var(ddof=1)
    whole, between, repeatability = evaluation.estimates
    # s_I^2 = MS_B/n + (1 - 1/n) MS_W
    assert whole.variance == pytest.approx(ms_between / 2 + within / 2)
    assert between.variance == pytest.approx((ms_between - within) / 2)
    assert repeatability.variance == pytest.approx(within)
    assert [term.mean_square.degrees_of_freedom for term in whole.terms] == [29, 30]
    assert (whole.may_feed[0], between.may_feed[0]) == ("session", "session")
    assert repeatability.terms[0].mean_square == whole.terms[1].mean_square
    assert evaluation.used == 60


def test_single_results_give_their_own_standard_deviation():
    values = simulated(2, replicates=1).ravel()
    (estimate,) = evaluated(rows_of(values)).estimates
    s = values.std(ddof=1)
    assert estimate.standard_uncertainty == pytest.approx(s)
    assert estimate.interval.lower == pytest.approx(s * math.sqrt(29 / stats.chi2.isf(0.025, 29)))
    assert estimate.interval.upper == pytest.approx(s * math.sqrt(29 / stats.chi2.ppf(0.025, 29)))


def test_the_bias_is_tested_by_the_t_test_of_the_sessions():
    table = simulated(3)
    rows = [(*row, 2.97) for row in rows_of(table)]
    evaluation = evaluated(rows, (*COLUMNS, "assigned_value"))
    bias = evaluation.estimate("bias")
    test = stats.ttest_1samp(table.mean(axis=1), 2.97)
    assert bias.value == pytest.approx(table.mean() - 2.97)
    assert evaluation.diagnostics["bias_p_value"] == pytest.approx(test.pvalue)
    interval = test.confidence_interval(0.95)
    assert (bias.interval.lower, bias.interval.upper) == pytest.approx(
        (interval.low - 2.97, interval.high - 2.97)
    )
    assert "bias-significant" in codes(evaluation)
    assert "that of the assigned value" in next(w for w in evaluation.warnings if "bias" in w.code).detail
    rows = [(*row, float(table.mean())) for row in rows_of(table)]
    assert "bias-not-significant" in codes(evaluated(rows, (*COLUMNS, "assigned_value")))


def test_the_tests_of_the_chart_are_those_of_the_library():
    values = simulated(4, replicates=1).ravel()
    chart = control_chart(values.tolist())
    line = stats.linregress(np.arange(30), values)
    assert chart.slope == pytest.approx(line.slope)
    assert chart.slope_p_value == pytest.approx(line.pvalue)
    ratio = (np.diff(values) ** 2).sum() / ((values - values.mean()) ** 2).sum()
    assert chart.successive_difference_ratio == pytest.approx(ratio)
    # d2 of two values is 2/sqrt(pi)
    reach = 3 * np.abs(np.diff(values)).mean() * math.sqrt(math.pi) / 2
    assert chart.upper_control_limit == pytest.approx(values.mean() + reach)
    assert chart.lower_control_limit == pytest.approx(values.mean() - reach)


def test_independent_results_are_seldom_called_dependent_and_dependent_ones_are():
    generator = np.random.default_rng(8)
    independent = sum(control_chart(generator.normal(size=25)).is_dependent for _ in range(2000)) / 2000
    assert independent == pytest.approx(0.01, abs=0.008)
    walks = generator.normal(size=(200, 40)).cumsum(axis=1)
    assert sum(control_chart(walk).is_dependent for walk in walks) > 190


def test_a_series_in_control_is_told_to_be():
    values = simulated(12, replicates=1).ravel()
    evaluation = evaluated(rows_of(values))
    assert evaluation.diagnostics["in_control"] is True
    assert codes(evaluation) == ["few-degrees-of-freedom"]
    assert len(evaluation.diagnostics["chart"]) == 30


def test_a_drift_a_jump_and_a_value_out_of_limits_are_told():
    values = simulated(5, replicates=1).ravel()
    drifting = evaluated(rows_of(values + np.arange(30) * 0.02))
    assert {"trend", "dependent", "run"} <= set(codes(drifting))
    assert drifting.diagnostics["in_control"] is False
    values[12] += 0.6
    evaluation = evaluated(rows_of(values))
    assert {"beyond-control-limits", "jump"} <= set(codes(evaluation))
    assert evaluation.diagnostics["beyond_limits"] == ["d012"]
    assert evaluation.diagnostics["jumps"] == ["d012", "d013"]
    exact = evaluated(rows_of([3.0, 3.1, 3.2, 3.3, 3.4, 3.5]))
    assert exact.diagnostics["slope_p_value"] == 0
    assert "few-sessions" in codes(exact)


def test_sessions_that_do_not_differ_more_than_replicates_are_told():
    seeds = range(400)
    found = [evaluated(rows_of(simulated(seed, 8, 2, between=0.0))) for seed in seeds]
    negative = next(e for e in found if e.estimates[1].variance < 0)
    assert "component-negative" in codes(negative)
    assert not negative.estimate("between_sessions").usable
    assert negative.estimate("intermediate_precision").usable
    positive = next(e for e in found if e.estimates[1].variance > 0)
    assert "sessions-not-significant" in codes(positive)


def test_replicates_that_all_agree_leave_the_sessions():
    rows = rows_of([[x, x] for x in (3.0, 3.1, 3.2, 3.0, 3.1, 3.3)])
    evaluation = evaluated(rows)
    assert "replicates-equal" in codes(evaluation)
    assert [estimate.name for estimate in evaluation.estimates] == ["intermediate_precision"]


@pytest.mark.slow
@pytest.mark.parametrize("between", [0.05, 0.01])
def test_the_intervals_hold_the_truth(between):
    held = np.zeros(2)
    truth = math.hypot(between, 0.03), between
    for seed in range(2000):
        estimates = evaluated(rows_of(simulated(seed, 10, 2, between))).estimates
        held += [e.interval.lower <= t <= e.interval.upper for e, t in zip(estimates[:2], truth, strict=True)]
    assert np.all((held >= 0.93 * 2000) & (held <= 0.985 * 2000))


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 500), st.floats(-1e6, 1e6), st.floats(1e-3, 1e3))
def test_shift_and_scale_do_not_matter(seed, shift, scale):
    table = simulated(seed, 8)
    one = evaluated(rows_of(table)).estimates
    other = evaluated(rows_of((table + shift) * scale)).estimates
    for before, after in zip(one, other, strict=True):
        atol = max(abs(t.coefficient * t.mean_square.value) for t in before.terms) * 1e-9 * (1 + abs(shift))
        assert after.variance / scale**2 == pytest.approx(before.variance, abs=atol)


@pytest.mark.parametrize(
    ("rows", "columns", "match"),
    [
        (rows_of([3.0, 3.1, 3.2, 3.3]), COLUMNS, "4 sessions"),
        (rows_of([3.0] * 6), COLUMNS, "do not differ"),
        # Their squares are no numbers any more.
        (rows_of([k * 1e-200 for k in range(6)]), COLUMNS, "do not differ"),
        ([(f"{i}", 3 + i / 10, f"s{i % 2}") for i in range(6)], (*COLUMNS, "sample"), "several samples"),
        (
            [(f"{i}", 3 + i / 10, 3.0 + i % 2) for i in range(6)],
            (*COLUMNS, "assigned_value"),
            "assigned value changes",
        ),
    ],
)
def test_what_is_no_control_series_is_refused(rows, columns, match):
    with pytest.raises(EvidenceError, match=match):
        evaluated(rows, columns)
