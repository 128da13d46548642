"""Nested and crossed factors, against exact arithmetic, statsmodels, and simulation."""

import json
import math
from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from budgets.errors import EvidenceError, NotSupportedError
from budgets.evidence.study_data import StudyData, evaluate_study


def evaluated(rows, factors=("day", "presentation"), **options):
    data = StudyData((*factors, "reading"), tuple(map(tuple, rows)))
    return evaluate_study("nested_precision", data, study="prec", options=options)


def simulated(generator, sizes, deviations, *, level=3.0):
    """Rows of nested groups: sizes[k] groups in each group outside, deviations outermost first."""
    rows = [((), level)]
    for size, deviation in zip(sizes, deviations, strict=True):
        rows = [
            ((*path, k), value + deviation * generator.standard_normal())
            for path, value in rows
            for k in range(size)
        ]
    return [(*path[:-1], value) for path, value in rows]


def unbalanced(seed=5):
    generator = np.random.default_rng(seed)
    rows = []
    for day in range(5):
        a = generator.normal(0, 0.1)
        for presentation in range(1 + day % 3):
            b = generator.normal(0, 0.05)
            rows += [
                (day, presentation, 3 + a + b + generator.normal(0, 0.03)) for _ in range(1 + presentation)
            ]
    return rows


def line(evaluation, source):
    (found,) = [x for x in evaluation.diagnostics["analysis_of_variance"] if x["source"] == source]
    return found


# --- against references ---------------------------------------------------------------------------------


def test_one_factor_is_the_one_way_analysis_of_variance():
    rows = [(day, reading) for day, _, reading in unbalanced()]
    evaluation = evaluated(rows, ("day",))
    groups = {}
    for day, reading in rows:
        groups.setdefault(day, []).append(reading)
    reference = stats.f_oneway(*groups.values())
    found = line(evaluation, "between_days")
    assert found["f_statistic"] == pytest.approx(reference.statistic)
    assert found["p_value"] == pytest.approx(reference.pvalue)
    n, sizes = len(rows), [len(own) for own in groups.values()]
    # Searle, Casella and McCulloch (1992), 3.6: the one-way random model, unequal sizes (from memory)
    expected = (n - sum(size**2 for size in sizes) / n) / (len(sizes) - 1)
    assert found["expected_mean_square"]["between_days"] == pytest.approx(expected)


def test_balanced_nested_groups_agree_with_statsmodels():
    """Restricted maximum likelihood by statsmodels 0.15.0, MixedLM, of the same 48 readings.

    Equal for balanced data with positive components.
    """
    evaluation = evaluated(simulated(np.random.default_rng(11), (8, 3, 2), (0.1, 0.06, 0.03)))
    between, presentations, within = REML_OF_48
    assert evaluation.estimate("between_days").variance == pytest.approx(between, rel=1e-7)
    assert evaluation.estimate("between_presentations").variance == pytest.approx(presentations, rel=1e-7)
    assert evaluation.estimate("repeatability").variance == pytest.approx(within, rel=1e-7)


REML_OF_48 = (0.006956111735, 0.002856924701, 0.000666674823)


def test_sums_of_squares_of_unbalanced_groups_are_exact():
    """Against rational arithmetic over the definition of sequential sums of squares."""
    rows = [(d, p, Fraction(str(round(y, 3)))) for d, p, y in unbalanced()]
    evaluation = evaluated([(d, p, float(y)) for d, p, y in rows])

    def fitted(depth):
        groups = {}
        for row in rows:
            groups.setdefault(row[:depth], []).append(row[2])
        return sum(sum(own) ** 2 / len(own) for own in groups.values())

    total = sum(y * y for *_, y in rows)
    for source, expected in (
        ("between_days", fitted(1) - fitted(0)),
        ("between_presentations", fitted(2) - fitted(1)),
        ("repeatability", total - fitted(2)),
    ):
        assert line(evaluation, source)["sum_of_squares"] == pytest.approx(float(expected), rel=1e-13)


def matrices(rows, factors):
    """Projections and component matrices of a nested design, built from dense matrices."""
    designs = []
    for depth in range(len(factors) + 1):
        keys = [row[:depth] for row in rows]
        names = list(dict.fromkeys(keys))
        designs.append(np.array([[float(key == name) for name in names] for key in keys]))
    designs.append(np.eye(len(rows)))
    projections = [z @ np.linalg.pinv(z) for z in designs]
    return [b - a for a, b in pairwise(projections)], [z @ z.T for z in designs[1:]]


@pytest.mark.parametrize("arrangement", ["nested", "crossed"])
def test_expectations_and_effective_degrees_of_freedom_are_traces(arrangement):
    """E(y'Py) = tr PV and Var(y'Py) = 2 tr (PV)^2 over dense matrices."""
    factors = ("day", "presentation")
    if arrangement == "nested":
        rows = unbalanced()
        sources = ["between_days", "between_presentations", "repeatability"]
        increments, covariances = matrices(rows, factors)
    else:
        generator = np.random.default_rng(2)
        cells = [(a, b) for a in range(4) for b in range(3) for _ in range((a + 2 * b) % 3 + 1)]
        rows = [(a, b, generator.normal() + 0.5 * a + b) for a, b in cells if (a, b) != (1, 1)]
        sources = ["between_days", "between_presentations", "interaction", "repeatability"]
        keys = [[row[0] for row in rows], [row[1] for row in rows], [row[:2] for row in rows]]
        z = [np.array([[float(k == n) for n in dict.fromkeys(key)] for k in key]) for key in keys]
        ones, eye = np.ones((len(rows), 1)), np.eye(len(rows))
        fits = [ones, z[0], np.hstack([z[0], z[1]]), z[2], eye]
        projections = [f @ np.linalg.pinv(f) for f in fits]
        increments = [b - a for a, b in pairwise(projections)]
        covariances = [*(x @ x.T for x in z), eye]
    evaluation = evaluated(rows, factors, arrangement=arrangement)
    counted = [max(0.0, c["variance"]) for c in evaluation.diagnostics["components"]]
    whole = sum(c * v for c, v in zip(counted, covariances, strict=True))
    y = np.array([row[-1] for row in rows])
    for source, p in zip(sources, increments, strict=True):
        found = line(evaluation, source)
        freedom = found["degrees_of_freedom"]
        assert freedom == round(np.trace(p))
        assert found["sum_of_squares"] == pytest.approx(y @ p @ y)
        expected = {
            name: np.trace(p @ v) / freedom
            for name, v in zip(sources, covariances, strict=True)
            if abs(np.trace(p @ v)) > 1e-9
        }
        assert found["expected_mean_square"] == pytest.approx(expected)
        effective = np.trace(p @ whole) ** 2 / np.trace(p @ whole @ p @ whole)
        assert found["effective_degrees_of_freedom"] == pytest.approx(effective)
    assert [w.code for w in evaluation.warnings].count("unbalanced") == 1


def test_balanced_crossed_factors_are_the_two_way_analysis_of_variance():
    """ISO 5725-3 (from memory): closed sums over a balanced table, F over the interaction."""
    a, b, n = 4, 3, 2
    y = np.random.default_rng(8).normal(size=(a, b, n)) * 0.1
    y += np.arange(a)[:, None, None] + 0.5 * np.arange(b)[None, :, None]
    rows = [(i, j, y[i, j, k]) for i in range(a) for j in range(b) for k in range(n)]
    evaluation = evaluated(rows, ("operator", "instrument"), arrangement="crossed")
    rows_mean, columns_mean, cells, centre = y.mean((1, 2)), y.mean((0, 2)), y.mean(2), y.mean()
    squares = {
        "between_operators": b * n * ((rows_mean - centre) ** 2).sum() / (a - 1),
        "between_instruments": a * n * ((columns_mean - centre) ** 2).sum() / (b - 1),
        "interaction": n
        * ((cells - rows_mean[:, None] - columns_mean[None, :] + centre) ** 2).sum()
        / ((a - 1) * (b - 1)),
        "repeatability": ((y - cells[:, :, None]) ** 2).sum() / (a * b * (n - 1)),
    }
    for source, expected in squares.items():
        assert line(evaluation, source)["mean_square"] == pytest.approx(expected)
    f = squares["between_operators"] / squares["interaction"]
    found = line(evaluation, "between_operators")
    assert found["f_statistic"] == pytest.approx(f)
    assert found["p_value"] == pytest.approx(stats.f.sf(f, a - 1, (a - 1) * (b - 1)))
    component = (squares["between_operators"] - squares["interaction"]) / (b * n)
    assert evaluation.estimate("between_operators").variance == pytest.approx(component)
    assert evaluation.diagnostics["balanced"]
    assert evaluation.estimate("interaction").may_feed[0] == "instrument"


def test_intermediate_precision_of_balanced_days():
    """s_I^2 = MS_B / n + (1 - 1/n) MS_W, whose terms give its degrees of freedom."""
    evaluation = evaluated(simulated(np.random.default_rng(4), (6, 4), (0.1, 0.03)), ("day",))
    between, within = (line(evaluation, s)["mean_square"] for s in ("between_days", "repeatability"))
    estimate = evaluation.estimate("intermediate_precision")
    assert [term.coefficient for term in estimate.terms] == pytest.approx([0.25, 0.75])
    assert estimate.variance == pytest.approx(between / 4 + 0.75 * within)
    nu = estimate.variance**2 / ((between / 4) ** 2 / 5 + (0.75 * within) ** 2 / 18)
    assert estimate.degrees_of_freedom == pytest.approx(nu)
    assert estimate.may_feed[0] == "session"


# --- what is made of it ---------------------------------------------------------------------------------


def test_a_negative_component_is_told_and_counts_as_zero():
    rows = [(day, 3 + 0.01 * day + d) for day in range(4) for d in (-0.03, 0.03, 0.0)]
    evaluation = evaluated(rows, ("day",))
    days = evaluation.estimate("between_days")
    assert days.variance < 0
    assert not days.usable
    assert days.interval.lower == 0 < days.interval.upper
    (component, _) = evaluation.diagnostics["components"]
    assert component["set_to_zero"]
    assert component["standard_deviation"] == 0
    assert component["variance_lower"] < component["variance"] < 0 < component["variance_upper"]
    (warning,) = [w for w in evaluation.warnings if w.code == "negative-component"]
    assert "by chance" in warning.detail
    repeatability = evaluation.estimate("repeatability")
    assert evaluation.estimate("intermediate_precision").terms == repeatability.terms


def test_groups_that_differ_less_than_chance_makes_them_are_told():
    rows = [(day, 3 + d) for day in range(4) for d in (-0.03, 0.03, 0.001 * day)]
    (warning,) = [w for w in evaluated(rows, ("day",)).warnings if w.code == "negative-component"]
    assert "find out how the data came about" in warning.detail


def test_the_scatter_between_samples_is_no_part_of_the_intermediate_precision():
    generator = np.random.default_rng(3)
    rows = simulated(generator, (3, 5, 2), (2.0, 0.05, 0.02))
    evaluation = evaluated(rows, ("sample", "day"))
    assert evaluation.estimate("between_samples").standard_uncertainty > 0.5
    assert evaluation.estimate("intermediate_precision").standard_uncertainty < 0.1
    single = [("check", *row[1:]) for row in rows if row[0] == 0]
    codes = [e.name for e in evaluated(single, ("sample", "day")).estimates]
    assert codes == ["repeatability", "between_days", "intermediate_precision"]


def test_laboratories_give_the_reproducibility():
    rows = simulated(np.random.default_rng(6), (8, 3), (0.1, 0.02))
    evaluation = evaluated(rows, ("laboratory",))
    whole = evaluation.estimate("reproducibility")
    assert whole.may_feed[0] == "reference"
    assert set(whole.contains) == {"repeatability", "resolution", "between_laboratories"}
    # An analyzer's error must not be found by taking this out (mathematics, rule 1).
    assert "between_laboratories" in evaluation.estimate("between_laboratories").contains


def test_an_outlying_mean_is_told_unless_the_samples_differ():
    """ISO 5725-2:1994, 7.3.4: Grubbs' test of laboratory means (from memory); here against scipy's t."""
    means = [3.0, 3.01, 2.99, 3.02, 2.98, 3.0, 3.5]
    rows = [(lab, m + d) for lab, m in enumerate(means) for d in (-0.01, 0.01)]
    (found,) = evaluated(rows, ("laboratory",)).diagnostics["findings"]
    assert (found["group"], found["grade"]) == ("means of each laboratory", "outlier")
    n, t = len(means), stats.t.isf(0.01 / (2 * len(means)), len(means) - 2)
    assert found["critical_value"] == pytest.approx((n - 1) / math.sqrt(n) * math.sqrt(t**2 / (n - 2 + t**2)))
    assert found["statistic"] == pytest.approx((3.5 - np.mean(means)) / np.std(means, ddof=1))
    rows = [(lab, day, y + 0.001 * day) for lab, y in rows for day in (0, 1)]
    assert not evaluated(rows, ("sample", "day")).diagnostics["findings"]


def test_three_factors_within_samples():
    rows = simulated(np.random.default_rng(9), (2, 3, 2, 2, 2), (1.0, 0.1, 0.1, 0.1, 0.05))
    evaluation = evaluated(rows, ("sample", "day", "operator", "presentation"))
    assert [e.name for e in evaluation.estimates] == [
        "repeatability",
        "between_samples",
        "between_days",
        "between_operators",
        "between_presentations",
        "intermediate_precision",
    ]
    with pytest.raises(EvidenceError, match="5 factors; at most 3"):
        rows = [(*row[:4], k, row[4]) for row in rows for k in range(2)]
        evaluated(rows, ("laboratory", "day", "operator", "run", "presentation"))


def test_crossed_factors_without_replicates_leave_a_residual():
    rows = [(a, b, a + 2 * b + 0.1 * ((a * b) % 3)) for a in range(4) for b in range(3)]
    evaluation = evaluated(rows, ("day", "operator"), arrangement="crossed")
    residual = evaluation.estimate("residual")
    assert "interaction" in residual.contains
    assert residual.degrees_of_freedom == 6
    assert "interaction-not-separated" in [w.code for w in evaluation.warnings]
    assert "few-groups" in [w.code for w in evaluation.warnings]


def test_a_test_without_a_denominator_is_left_out():
    """Strongly unbalanced, the denominator of the test of days comes out negative."""
    rows = [(0, k, 3 + 0.002 * k + s) for k in range(2) for s in (-0.1, 0.1)]
    rows += [(1, k, 3.0 + 0.001 * k + s) for k in range(3) for s in (0.0, 0.01)]
    rows += [(2, 0, 3.0)] * 40
    evaluation = evaluated(rows)
    found = line(evaluation, "between_days")
    assert found["f_statistic"] is found["p_value"] is None
    assert "component-not-significant" in [w.code for w in evaluation.warnings]


# --- what is refused ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("rows", "factors", "options", "match"),
    [
        ([(0, 3.0), (1, 3.0)], ("day",), {}, "all readings are equal"),
        ([(0, 3.0), (0, 3.1)], ("day",), {}, "only one group"),
        ([(0, 0, 3.0), (0, 0, 3.1), (1, 0, 3.0), (1, 0, 3.2)], ("day", "run"), {}, "one within each group"),
        ([(0, 3.0), (1, 3.1)], ("day",), {}, "nothing was repeated"),
        ([(0, 3.0), (0, 3.0), (1, 3.1), (1, 3.1)], ("day",), {}, "of every group are equal"),
        ([(0, 3.0), (0, 3.1)], ("sample",), {}, "no factor is there"),
        ([(3.0,), (3.1,)], (), {}, "no factor is there"),
        ([(0, 3.0), (1, 3.1)], ("day",), {"arrangement": "crossed"}, "two crossed factors are expected"),
        ([(0, 3.0), (1, 3.1)], ("day",), {"arrangement": "star"}, "nested or crossed, not 'star'"),
        (
            [(a, a, 3.0 + a + k) for a in range(3) for k in range(2)],
            ("day", "operator"),
            {"arrangement": "crossed"},
            "between_operators cannot be told from the rest",
        ),
        (
            [(a, b, 3.0 + a + b * b) for a in range(3) for b in range(3)],
            ("day", "operator"),
            {"arrangement": "crossed"},
            "of every group are equal",
        ),
    ],
)
def test_data_that_cannot_tell(rows, factors, options, match):
    with pytest.raises(EvidenceError, match=match):
        evaluated(rows, factors, **options)


def test_very_many_crossed_combinations_are_refused():
    rows = [(a, b, float(a + b * b % 7)) for a in range(51) for b in range(10)]
    with pytest.raises(NotSupportedError, match="510 combinations"):
        evaluated(rows, ("day", "operator"), arrangement="crossed")


# --- laws ------------------------------------------------------------------------------------------------

readings = st.lists(st.integers(-999, 999), min_size=14, max_size=14)


def studied(values, shift=0.0, scale=1.0):
    shape = [(row[0], row[1]) for row in unbalanced()]
    return [(*path, shift + scale * value) for path, value in zip(shape, values, strict=True)]


def same(one, other, factor=1.0):
    for a, b in zip(one.estimates, other.estimates, strict=True):
        assert a.name == b.name
        size = max(abs(e.variance) for e in one.estimates)
        assert b.variance == pytest.approx(factor * a.variance, rel=1e-6, abs=1e-9 * factor * size)


@settings(max_examples=25, deadline=None)
@given(readings, st.integers(-10_000, 10_000), st.sampled_from([0.001, 0.5, 1000.0]))
def test_shift_and_scale(values, shift, scale):
    try:
        before = evaluated(studied(values))
    except EvidenceError:
        return
    same(before, evaluated(studied(values, shift=shift)))
    same(before, evaluated(studied(values, scale=scale)), scale**2)


@settings(max_examples=25, deadline=None)
@given(readings, st.randoms(use_true_random=False))
def test_the_order_of_the_rows_does_not_matter(values, random):
    rows = studied(values)
    try:
        before = evaluated(rows)
    except EvidenceError:
        return
    random.shuffle(rows)
    same(before, evaluated(rows))


awkward = st.one_of(
    st.sampled_from([0.0, 1.0, 1e-300, 5e-324, -9.99e14, 1e14 + 0.25]),
    st.floats(-1e14, 1e14, allow_nan=False),
    st.floats(-1e-140, 1e-140),
)


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.tuples(st.integers(0, 2), st.integers(0, 2), awkward), min_size=1, max_size=14),
    st.sampled_from(["nested", "crossed"]),
)
def test_any_numbers_give_finite_figures_or_an_error_of_the_tree(rows, arrangement):
    try:
        evaluation = evaluated(rows, arrangement=arrangement)
    except EvidenceError:
        return
    json.dumps(evaluation.to_document(), allow_nan=False)


def test_scales_far_apart():
    """The smallest mean square has no weight, and divides nothing by zero."""
    tiny = [(0, k, j * 1e-150) for k in range(2) for j in range(2)]
    evaluation = evaluated([*tiny, (1, 0, 0.0), (1, 1, 1e14), (1, 1, 1e14), (2, 0, -1e14)])
    assert line(evaluation, "between_days")["effective_degrees_of_freedom"] > 0


# --- coverage --------------------------------------------------------------------------------------------


@pytest.mark.slow
@pytest.mark.parametrize(
    ("deviations", "truths"),
    [
        ((0.10, 0.05, 0.03), {"between_days": 0.10, "between_presentations": 0.05}),
        ((0.02, 0.02, 0.03), {"between_days": 0.02, "between_presentations": 0.02}),
    ],
)
def test_intervals_cover_the_truth(deviations, truths):
    """2,000 studies of 8 days, 3 presentations and 2 readings; the method is conservative where exact fails.

    Small components are among them: between days 0.02 next to a repeatability of 0.03.
    """
    truths = {
        **truths,
        "repeatability": deviations[-1],
        "intermediate_precision": math.hypot(*deviations),
    }
    shares = coverage((8, 3, 2), deviations, truths)
    assert all(0.93 <= share <= 0.975 for share in shares.values()), shares


def coverage(sizes, deviations, truths, studies=2000):
    generator = np.random.default_rng(20261201)
    held = dict.fromkeys(truths, 0)
    for _ in range(studies):
        evaluation = evaluated(simulated(generator, sizes, deviations))
        for name, truth in truths.items():
            interval = evaluation.estimate(name).interval
            held[name] += interval.lower <= truth <= interval.upper
    return {name: count / studies for name, count in held.items()}
