import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from budgets.components import Component
from budgets.errors import ComponentError, EvidenceError
from budgets.evidence.study_data import StudyData, evaluate_study

FREE = {"steered_by_this_analyzer": False}


def evaluated(rows, columns=("lot", "reading"), options=FREE):
    return evaluate_study("production", StudyData(columns, tuple(rows)), study="pr", options=options)


def simulated(seed, lots=20, readings=3, between=0.1, within=0.05):
    generator = np.random.default_rng(seed)
    return 3 + generator.normal(0, between, (lots, 1)) + generator.normal(0, within, (lots, readings))


def rows_of(table):
    return [(f"L{i:03}", float(x)) for i, row in enumerate(table) for x in row]


def codes(evaluation):
    return [warning.code for warning in evaluation.warnings]


def test_balanced_lots_give_the_one_way_analysis_of_variance():
    table = simulated(1)
    within, lots = evaluated(rows_of(table)).estimates
    ms_within = table.var(axis=1, ddof=1).mean()
    assert (within.name, lots.name) == ("within_lot", "lot_to_lot")
    assert within.variance == pytest.approx(ms_within)
    assert lots.variance == pytest.approx(table.mean(axis=1).var(ddof=1) - ms_within / 3)
    assert [term.mean_square.degrees_of_freedom for term in lots.terms] == [19, 40]
    figures = evaluated(rows_of(table)).diagnostics["components"][0]
    f, p = stats.f_oneway(*table)
    assert figures["f_statistic"] == pytest.approx(f)
    assert (f > figures["f_critical_value"]) == (p < 0.05)


def test_a_component_can_be_made_of_what_varies_within_a_lot_only():
    within, lots = evaluated(rows_of(simulated(1))).estimates
    assert Component.from_estimate("within", "moisture", None, within, "A").level == "sample"
    assert within.contains == ("sampling", "repeatability")
    with pytest.raises(ComponentError, match="describes the process"):
        Component.from_estimate("lots", "moisture", None, lots, "A")
    assert not lots.usable


def test_periods_lots_samples_and_readings_of_unequal_numbers_are_unbiased():
    generator = np.random.default_rng(2)
    shape = [(w, i, j) for w in range(6) for i in range(2 + w % 2) for j in range(1 + i % 2 + w % 3)]
    found = []
    for _ in range(400):
        weeks, lots = generator.normal(0, 0.3, 6), generator.normal(0, 0.2, (6, 3))
        rows = [
            (f"w{w}", f"L{w}.{i}", f"s{j}", 3 + weeks[w] + lots[w, i] + sample + generator.normal(0, 0.05))
            for w, i, j in shape
            for sample in [generator.normal(0, 0.1)]
            for _ in range(1 + j % 2)
        ]
        evaluation = evaluated(rows, ("period", "lot", "sample", "reading"))
        found.append([estimate.variance for estimate in evaluation.estimates])
    names = [estimate.name for estimate in evaluation.estimates]
    assert names == ["repeatability", "within_lot", "lot_to_lot", "period_to_period"]
    assert evaluation.estimate("within_lot").contains == ("sampling",)
    error = np.std(found, axis=0) / math.sqrt(len(found))
    assert np.all(np.abs(np.mean(found, axis=0) - [0.0025, 0.01, 0.04, 0.09]) < 4 * error)


def test_the_first_readings_stand_for_what_the_line_saw():
    table = simulated(3)
    diagnostics = evaluated(rows_of(table)).diagnostics
    assert diagnostics["standard_deviation_of_first_readings"] == pytest.approx(table[:, 0].std(ddof=1))
    assert diagnostics["standard_deviation_of_lot_means"] == pytest.approx(table.mean(axis=1).std(ddof=1))
    assert [mean for _, mean in diagnostics["lot_means"]] == pytest.approx(table.mean(axis=1))


def test_a_drift_is_told():
    table = simulated(4) + np.arange(20)[:, None] * 0.03
    evaluation = evaluated(rows_of(table))
    assert {"drift", "dependent"} <= set(codes(evaluation))
    line = stats.linregress(np.arange(20), table.mean(axis=1))
    assert evaluation.diagnostics["drift_per_lot"] == pytest.approx(line.slope)
    assert evaluation.diagnostics["drift_p_value"] == pytest.approx(line.pvalue)


def test_a_steered_process_offers_no_variation_from_lot_to_lot():
    """Corrected by its own analyzer the readings' variation is not that of the truth."""
    steered = evaluated(rows_of(simulated(5)), options={"steered_by_this_analyzer": True})
    assert [estimate.name for estimate in steered.estimates] == ["within_lot"]
    assert "steered" in codes(steered)
    assert "steering-unknown" in codes(evaluated(rows_of(simulated(5)), options={}))
    free = codes(evaluated(rows_of(simulated(5))))
    assert "steered" not in free and "steering-unknown" not in free


def test_lots_read_once_leave_their_inside_in_the_variation_between():
    table = simulated(6, readings=1)
    evaluation = evaluated(rows_of(table))
    (lots,) = evaluation.estimates
    assert lots.variance == pytest.approx(table.var(ddof=1))
    assert "lots-sampled-once" in codes(evaluation)


def test_negative_and_zero_components_are_told():
    for seed in itertools.count():
        evaluation = evaluated(rows_of(simulated(seed, 6, 2, between=0.0)))
        if evaluation.estimate("lot_to_lot").variance < 0:
            break
    assert "component-negative" in codes(evaluation)
    assert evaluation.estimate("lot_to_lot").interval.lower == 0
    rows = [(f"L{i}", "a", 3 + i**2 / 10) for i in range(6) for _ in range(2)]
    hidden = evaluated(rows, ("lot", "sample", "reading"))
    assert [estimate.name for estimate in hidden.estimates] == ["lot_to_lot"]


@pytest.mark.slow
@pytest.mark.parametrize("between", [0.1, 0.02])
def test_the_interval_from_lot_to_lot_holds_the_truth(between):
    held = 0
    for seed in range(2000):
        interval = evaluated(rows_of(simulated(seed, 8, 2, between))).estimate("lot_to_lot").interval
        held += interval.lower <= between <= interval.upper
    assert 0.93 <= held / 2000 <= 0.985


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 500), st.floats(-1e6, 1e6), st.floats(1e-3, 1e3))
def test_shift_and_scale_do_not_matter(seed, shift, scale):
    table = simulated(seed, 6, 2)
    one, other = evaluated(rows_of(table)).estimates, evaluated(rows_of((table + shift) * scale)).estimates
    for before, after in zip(one, other, strict=True):
        atol = max(abs(t.coefficient * t.mean_square.value) for t in before.terms) * 1e-8 * (1 + abs(shift))
        assert after.variance / scale**2 == pytest.approx(before.variance, abs=atol)


@pytest.mark.parametrize(
    ("rows", "columns", "options", "match"),
    [
        (rows_of(simulated(1, 4)), ("lot", "reading"), FREE, "4 lots"),
        ([(f"L{i}", 3.0) for i in range(6)], ("lot", "reading"), FREE, "do not differ"),
        ([(f"L{i}", i * 1e-200) for i in range(6)], ("lot", "reading"), FREE, "do not differ"),
        (rows_of(simulated(1)), ("lot", "reading"), {"steered_by_this_analyzer": "no"}, "true or false"),
        (
            [(f"L{i % 6}", f"w{i % 5}", 3 + i / 10) for i in range(12)],
            ("lot", "period", "reading"),
            FREE,
            "lot L0 is in the periods w0 and w1",
        ),
    ],
)
def test_what_is_no_production_is_refused(rows, columns, options, match):
    with pytest.raises(EvidenceError, match=match):
        evaluated(rows, columns, options)
