"""Targets x samples x analyses: classical and robust, against closed sums, quadrature and simulation."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp
from scipy import stats

from budgets.errors import EvidenceError
from budgets.evidence.robust_scales import algorithm_a, algorithm_s
from budgets.evidence.study_data import StudyData, evaluate_study


def evaluated(rows, columns=("target", "sample", "result")):
    return evaluate_study("sampling", StudyData(columns, tuple(map(tuple, rows))), study="sam")


def simulated(generator, deviations, sizes=(8, 2, 2), level=3.0):
    t, s, a = (d * generator.standard_normal(sizes[: k + 1]) for k, d in enumerate(deviations))
    return level + t[:, None, None] + s[:, :, None] + a


def rows_of(y):
    return [(i, j, float(v)) for i, of in enumerate(y) for j, own in enumerate(of) for v in own]


def test_classical_components_are_closed_sums():
    """The balanced nested analysis of variance: mean squares of the three layers (from memory)."""
    y = simulated(np.random.default_rng(1), (0.3, 0.2, 0.1), (9, 3, 2))
    evaluation = evaluated(rows_of(y))
    samples, targets = y.mean(2), y.mean((1, 2))
    within = y.var(axis=2, ddof=1).mean()
    between = 2 * samples.var(axis=1, ddof=1).mean()
    over = 6 * targets.var(ddof=1)
    assert evaluation.estimate("repeatability").variance == pytest.approx(within)
    assert evaluation.estimate("sampling").variance == pytest.approx((between - within) / 2)
    assert evaluation.estimate("between_targets").variance == pytest.approx((over - between) / 6)
    assert evaluation.estimate("measurement").variance == pytest.approx((between + within) / 2)
    table = evaluation.diagnostics["analysis_of_variance"]
    assert [line["degrees_of_freedom"] for line in table] == [8, 18, 27]
    assert table[1]["p_value"] == pytest.approx(stats.f.sf(between / within, 18, 27))
    levels = [
        evaluation.estimate(name).may_feed[0] for name in ("repeatability", "sampling", "between_targets")
    ]
    assert levels == ["reading", "sample", "lot"]
    assert not {"few-targets", "classical-and-robust-differ"} & {w.code for w in evaluation.warnings}


def test_a_relative_figure_needs_a_mean():
    y = simulated(np.random.default_rng(2), (0.3, 0.2, 0.1))
    figures = evaluated(rows_of(y)).diagnostics
    assert figures["relative_measurement_standard_deviation"] == pytest.approx(
        figures["measurement_standard_deviation"] / y.mean()
    )
    signs = np.array([[[1.0, 2.0], [-1.0, -2.0]], [[3.0, -3.0], [0.5, -0.5]]])
    assert evaluated(rows_of(signs)).diagnostics["relative_measurement_standard_deviation"] is None


def test_one_wild_sample_moves_the_robust_figures_little():
    y = simulated(np.random.default_rng(3), (0.3, 0.1, 0.05), (10, 2, 2))
    clean = evaluated(rows_of(y))
    y[4, 1] += 5.0
    wild = evaluated(rows_of(y))
    before, after = (e.estimate("robust_measurement").standard_uncertainty for e in (clean, wild))
    assert after < 1.5 * before
    assert wild.estimate("measurement").standard_uncertainty > 5 * after
    assert "classical-and-robust-differ" in [w.code for w in wild.warnings]
    assert ("Cochran", "4") in [(f["test"], f["group"]) for f in wild.diagnostics["findings"]]


def test_analyses_that_mostly_agree_leave_the_classical_evaluation_alone():
    y = np.array([[[1.0, 1.0], [2.0, 2.0]], [[3.0, 3.0], [4.0, 4.0]], [[5.0, 5.0], [6.0, 6.2]]])
    evaluation = evaluated(rows_of(y))
    assert [e.name for e in evaluation.estimates] == [
        "repeatability",
        "sampling",
        "between_targets",
        "measurement",
    ]
    assert {"robust-not-offered", "few-targets"} <= {w.code for w in evaluation.warnings}


@pytest.mark.parametrize(
    ("rows", "columns", "match"),
    [
        ([(0, 0, 1.0), (0, 1, 1.0)], ("target", "sample", "result"), "all results are equal"),
        ([(0, 0, 1.0), (0, 0, 1.1), (0, 1, 1.0)], ("target", "sample", "result"), "is balanced"),
        (
            [(t, s, 1.0 + t + s + a / 8) for t in (0, 1) for s in range(t + 2) for a in (0, 1)],
            ("target", "sample", "result"),
            "is balanced",
        ),
        (
            [(t, s, 1.0 + t + s) for t in (0, 1) for s in (0, 1)],
            ("target", "sample", "result"),
            "2 targets, 2 samples of each, 1 analyses",
        ),
        (
            [(0, s, 1.0 + s + a) for s in (0, 1) for a in (0, 1)],
            ("target", "sample", "result"),
            "1 targets, 2 samples",
        ),
        (
            [(t, 0, 1.0 + t + a) for t in (0, 1) for a in (0, 1)],
            ("target", "sample", "result"),
            "2 targets, 1 samples",
        ),
        (
            [(t, s, 1.0 + t + 2 * s) for t in (0, 1) for s in (0, 1) for _ in (0, 1)],
            ("target", "sample", "result"),
            "of every group are equal",
        ),
        (
            [(t, s, "a", 1.0 + t + s) for t in (0, 1) for s in (0, 1) for _ in (0, 1)],
            ("target", "sample", "analysis", "result"),
            "two results under the same analysis",
        ),
    ],
)
def test_data_that_are_not_the_design(rows, columns, match):
    with pytest.raises(EvidenceError, match=match):
        evaluated(rows, columns)


# --- robust scales ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("nu", "eta", "xi"),
    [(1, 1.645, 1.097), (2, 1.517, 1.054), (3, 1.444, 1.039), (4, 1.395, 1.032), (9, 1.277, 1.017)],
)
def test_the_factors_of_algorithm_s(nu, eta, xi):
    """ISO 5725-5:1998, Table 2 = ISO 13528, Annex C (from memory), three decimals.

    With deviations (1, 1, ..., 1, huge) the solution is s = xi sqrt((k + eta^2 s^2) / (k + 1)).
    """
    s = algorithm_s([1.0] * 9 + [1e6], nu).standard_deviation
    assert s == pytest.approx(xi * np.sqrt((9 + eta**2 * s**2) / 10), rel=1e-3)


def test_algorithm_s_solves_its_equation():
    w = np.abs(np.random.default_rng(4).standard_normal(40))
    w[:3] *= 20
    s = algorithm_s(list(w), 1).standard_deviation
    eta = stats.norm.ppf(0.95)
    clean = mp.quad(lambda z: min(z, eta) ** 2 * mp.npdf(z) * 2, [0, eta, mp.inf])
    assert np.mean(np.minimum(w, eta * s) ** 2) == pytest.approx(s**2 * float(clean), rel=1e-12)


def test_algorithm_s_with_too_many_zeros_is_zero():
    assert algorithm_s([0.0] * 8 + [1.0, 1.0], 1).standard_deviation == 0
    assert algorithm_s([0.0] * 5 + [1.0] * 5, 1).standard_deviation > 0


def test_algorithm_a_on_data_of_which_most_are_equal():
    centre, scale = algorithm_a([1.0] * 6 + [1.2, 0.7])
    assert centre == pytest.approx(1.0, abs=0.03)
    assert scale.standard_deviation < 0.2


def test_algorithm_a_satisfies_its_equations():
    """x* is the mean and s* 1.134 (as printed) times the standard deviation of the winsorised values."""
    x = np.append(np.random.default_rng(5).normal(3, 0.1, 30), [9.0, -4.0])
    centre, scale = algorithm_a(list(x))
    s = scale.standard_deviation
    winsorised = np.clip(x, centre - 1.5 * s, centre + 1.5 * s)
    assert centre == pytest.approx(winsorised.mean(), rel=1e-12)
    assert s == pytest.approx(1.134 * winsorised.std(ddof=1), rel=1e-3)


@pytest.mark.parametrize("nu", [1, 2, 5])
def test_degrees_of_freedom_of_algorithm_s(nu):
    """1 / (2 Var ln s) over 1,000 simulated sets of 200 standard deviations."""
    generator = np.random.default_rng(6)
    w = np.sqrt(generator.chisquare(nu, (1000, 200)) / nu)
    found = [algorithm_s(list(row), nu) for row in w]
    logs = np.log([f.standard_deviation for f in found])
    assert logs.mean() == pytest.approx(0, abs=0.005)
    assert found[0].degrees_of_freedom == pytest.approx(1 / (2 * logs.var()), rel=0.15)
    assert found[0].degrees_of_freedom < 200 * nu


def test_degrees_of_freedom_of_algorithm_a():
    generator = np.random.default_rng(7)
    found = [algorithm_a(list(row))[1] for row in generator.standard_normal((500, 150))]
    logs = np.log([f.standard_deviation for f in found])
    assert found[0].degrees_of_freedom == pytest.approx(1 / (2 * logs.var()), rel=0.2)


# --- laws -------------------------------------------------------------------------------------------------

results = st.lists(st.integers(-999, 999), min_size=16, max_size=16)


@settings(max_examples=25, deadline=None)
@given(
    results, st.integers(-10_000, 10_000), st.sampled_from([0.001, 0.5, 1000.0]), st.permutations(range(16))
)
def test_shift_scale_and_order(values, shift, scale, order):
    keys = [(k // 4, k // 2 % 2) for k in range(16)]
    try:
        before = evaluated([(*key, float(v)) for key, v in zip(keys, values, strict=True)])
    except EvidenceError:
        return
    after = evaluated([(*keys[k], shift + scale * values[k]) for k in order])
    assert [e.name for e in after.estimates] == [e.name for e in before.estimates]
    size = max(abs(e.variance) for e in before.estimates)
    for one, other in zip(before.estimates, after.estimates, strict=True):
        assert other.variance == pytest.approx(scale**2 * one.variance, rel=1e-6, abs=1e-7 * scale**2 * size)
