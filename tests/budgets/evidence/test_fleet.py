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

COLUMNS = ("sample", "instrument", "reading")


def rows_of(table):
    """``table[sample][instrument]`` is a list of readings."""
    return tuple(
        (f"P{i}", f"nir-{j}", float(value))
        for i, row in enumerate(table)
        for j, cell in enumerate(row)
        for value in cell
    )


def evaluated(rows, columns=COLUMNS, **options):
    return evaluate_study("fleet", StudyData(columns, tuple(rows)), study="fl", **options)


def a_table(seed, samples=8, instruments=5, readings=2, between=0.05, interaction=0.03, error=0.02):
    generator = np.random.default_rng(seed)
    levels = 3 + generator.normal(0, 0.5, (samples, 1, 1))
    of_instruments = generator.normal(0, between, (1, instruments, 1))
    of_cells = generator.normal(0, interaction, (samples, instruments, 1))
    return levels + of_instruments + of_cells + generator.normal(0, error, (samples, instruments, readings))


def codes(evaluation):
    return [warning.code for warning in evaluation.warnings]


def test_balanced_data_give_the_two_way_analysis_of_variance():
    """By the textbook sums of squares over the whole array (ISO 5725-3:1994, Annex B, from memory)."""
    table = a_table(1)
    a, b, n = table.shape
    grand, cells = table.mean(), table.mean(axis=2)
    ms_i = a * n * ((table.mean(axis=(0, 2)) - grand) ** 2).sum() / (b - 1)
    residual = cells - cells.mean(axis=1, keepdims=True) - cells.mean(axis=0, keepdims=True) + grand
    ms_si = n * (residual**2).sum() / ((a - 1) * (b - 1))
    ms_e = ((table - cells[:, :, None]) ** 2).sum() / (a * b * (n - 1))
    evaluation = evaluated(rows_of(table))
    between, by_sample, repeatability = evaluation.estimates
    assert between.variance == pytest.approx((ms_i - ms_si) / (a * n), rel=1e-10)
    assert by_sample.variance == pytest.approx((ms_si - ms_e) / n, rel=1e-10)
    assert repeatability.variance == pytest.approx(ms_e, rel=1e-10)
    assert [term.mean_square.degrees_of_freedom for term in between.terms] == [b - 1, (a - 1) * (b - 1)]
    assert (between.may_feed[0], by_sample.may_feed[0], repeatability.may_feed[0]) == (
        "instrument",
        "lot",
        "reading",
    )
    assert evaluation.diagnostics["f_p_value"] == pytest.approx(
        stats.f.sf(ms_i / ms_si, b - 1, (a - 1) * (b - 1))
    )
    deviations = evaluation.diagnostics["deviations_of_instruments"]
    assert list(deviations.values()) == pytest.approx(cells.mean(axis=0) - grand, rel=1e-9)
    assert "few-instruments" not in codes(evaluation)


def test_a_budget_refuses_the_interaction_beside_a_remainder(a_budget):
    by_sample = evaluated(rows_of(a_table(1))).estimate("sample_by_instrument")
    own = Component.from_estimate("by-sample", "moisture", None, by_sample, "A")
    budget = a_budget()
    with pytest.raises(ComponentError, match="both contain remainder"):
        a_budget(
            components=(
                *(c for c in budget.components if c.code != "remainder"),
                own,
                Component.from_estimate("remainder", "moisture", None, by_sample, "A"),
            )
        )


def test_unequal_numbers_are_unbiased_and_told():
    numbers = [1 + (i * j) % 3 for i in range(6) for j in range(4)]
    generator = np.random.default_rng(3)
    found = []
    for _ in range(300):
        table = a_table(generator.integers(2**32), 6, 4, 3, 0.08, 0.05, 0.04)
        rows = [
            row
            for (i, j), number in zip(itertools.product(range(6), range(4)), numbers, strict=True)
            for row in rows_of(table)[(i * 4 + j) * 3 : (i * 4 + j) * 3 + number]
        ]
        evaluation = evaluated(rows)
        found.append([estimate.variance for estimate in evaluation.estimates])
    assert "unequal-numbers" in codes(evaluation)
    standard_errors = np.std(found, axis=0) / math.sqrt(300)
    assert np.all(np.abs(np.mean(found, axis=0) - [0.08**2, 0.05**2, 0.04**2]) < 4 * standard_errors)


@pytest.mark.slow
@pytest.mark.parametrize(("between", "least"), [(0.05, 0.93), (0.005, 0.93)])
def test_the_interval_between_instruments_holds_the_truth(between, least):
    held = 0
    for seed in range(2000):
        evaluation = evaluated(rows_of(a_table(seed, 6, 4, 2, between)))
        interval = evaluation.estimates[0].interval
        held += interval.lower <= between <= interval.upper
    # Clipped at zero a small component is inside more often, never less.
    assert least <= held / 2000 <= 0.985


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 1000), st.floats(-1e6, 1e6), st.floats(1e-3, 1e3))
def test_shift_scale_and_order_do_not_matter(seed, shift, scale):
    table = a_table(seed, 4, 3)
    one = evaluated(rows_of(table)).estimates
    order = np.random.default_rng(seed).permutation(24)
    other = evaluated(rows_of((table + shift) * scale)[k] for k in order).estimates
    largest = max(abs(term.coefficient * term.mean_square.value) for e in one for term in e.terms)
    atol = largest * (1e-9 + 1e-9 * abs(shift))
    for before, after in zip(one, other, strict=True):
        assert after.variance / scale**2 == pytest.approx(before.variance, abs=atol)


def test_a_negative_component_is_shown_told_and_not_usable():
    table = a_table(5, 8, 3, 2, between=0.0, interaction=0.0, error=0.02)
    for seed in itertools.count():
        table = a_table(seed, 8, 3, 2, 0.0, 0.0)
        evaluation = evaluated(rows_of(table))
        if max(estimate.variance for estimate in evaluation.estimates[:2]) < 0:
            break
    assert not any(estimate.usable for estimate in evaluation.estimates[:2])
    assert codes(evaluation).count("component-negative") == 2
    assert evaluation.estimates[0].interval.lower == 0


def test_a_component_that_is_not_significant_stays():
    for seed in itertools.count():
        evaluation = evaluated(rows_of(a_table(seed, 4, 3, 2, between=0.01)))
        if evaluation.estimates[0].usable and evaluation.diagnostics["f_p_value"] > 0.05:
            break
    assert {"instruments-not-significant", "few-instruments"} <= set(codes(evaluation))


def test_single_readings_tell_nothing_of_repeatability():
    evaluation = evaluated(rows_of(a_table(1, readings=1)))
    assert [estimate.name for estimate in evaluation.estimates] == ["between_instruments"]
    assert "no-replicates" in codes(evaluation)


def test_copied_readings_are_told():
    table = a_table(2, instruments=3)
    table[:, 2] = table[:, 1]
    assert "identical-readings" in codes(evaluated(rows_of(table)))
    with pytest.raises(EvidenceError, match="copied readings"):
        evaluated(rows_of(table[:, 1:]))


@pytest.mark.parametrize(
    ("rows", "match"),
    [
        ([("P0", "nir-1", 3.0), ("P1", "nir-2", 3.0)], "all readings are equal"),
        ([("P0", "nir-1", 3.0), ("P0", "nir-2", 3.1)], "two samples"),
        ([("P0", "nir-1", 3.0), ("P1", "nir-1", 3.1)], "two instruments"),
        ([("P0", "nir-1", 3.0), ("P0", "nir-2", 3.1), ("P1", "nir-1", 3.1)], "P1 was not read on .*nir-2"),
    ],
)
def test_what_is_no_fleet_study_is_refused(rows, match):
    with pytest.raises(EvidenceError, match=match):
        evaluated(rows)


def test_the_same_replicate_twice_is_refused():
    rows = [(s, i, 1, 3.0 + k**2 / 10) for k, (s, i) in enumerate(itertools.product("ab", "xy"))]
    columns = ("sample", "instrument", "replicate", "reading")
    assert len(evaluated(rows, columns).estimates) == 1
    with pytest.raises(EvidenceError, match="replicate twice"):
        evaluated([*rows, rows[0]], columns)
