"""Values below a reporting limit: against a general maximiser (scipy) and against simulation."""

import numpy as np
import pytest
from scipy import optimize, stats

from budgets.errors import ConvergenceError, EvidenceError, NotSupportedError
from budgets.evidence import censored_normal as module
from budgets.evidence.censored_normal import censored_normal
from budgets.evidence.study_data import NamedSource, StudyData, evaluate_study

COLUMNS = ("pair", "reading", "reference")


def simulated(n=40, seed=1, limit=0.5, bias=0.05, scatter=0.1):
    generator = np.random.default_rng(seed)
    y = generator.uniform(0.1, 3, n)
    x = y + generator.normal(bias, scatter, n)
    return [(f"V{i}", a, b if b >= limit else {"below": limit}) for i, (a, b) in enumerate(zip(x, y))]  # noqa: B905


def evaluated(rows, columns=COLUMNS, sources=(), **options):
    data, options = StudyData(columns, tuple(rows)), {"independent": True, **options}
    return evaluate_study("agreement", data, study="val", options=options, named_sources=sources)


def test_without_limits_mean_and_variance_are_the_plain_ones():
    values = np.random.default_rng(1).normal(3, 0.2, 25)
    fit = censored_normal(values, [], [])
    assert (fit.mean, fit.variance) == pytest.approx((values.mean(), values.var(ddof=1)))
    assert (fit.mean_variance, fit.degrees_of_freedom) == pytest.approx((1 / 25, 24))
    # Limits that everything is known to keep say nothing.
    far = censored_normal(values, [1e3] * 5, [-1e3] * 5)
    assert (far.mean, far.degrees_of_freedom) == pytest.approx((values.mean(), 24))


@pytest.mark.parametrize("seed", range(4))
def test_the_fit_is_the_maximum_of_the_likelihood(seed):
    generator = np.random.default_rng(seed)
    exact, below, above = generator.normal(0.3, 0.2, 20), generator.normal(0.4, 0.3, 8), [0.1, 0.5]

    def negative(parameters):
        m, s = parameters[0], np.exp(parameters[1])
        found = stats.norm.logpdf(exact, m, s).sum() + stats.norm.logcdf(below, m, s).sum()
        return -found - stats.norm.logsf(above, m, s).sum()

    reference = optimize.minimize(negative, (0.3, np.log(0.2)), method="Nelder-Mead", options={"xatol": 1e-8})
    fit = censored_normal(exact, below, above)
    ml = fit.variance * fit.degrees_of_freedom / (fit.degrees_of_freedom + 1)
    assert (fit.mean, np.sqrt(ml)) == pytest.approx((reference.x[0], np.exp(reference.x[1])), rel=1e-4)
    assert 15 < fit.degrees_of_freedom < 29
    moved = censored_normal(5 - 2 * exact, 5 - 2 * np.asarray(above), 5 - 2 * below)
    assert (moved.mean, moved.variance) == pytest.approx((5 - 2 * fit.mean, 4 * fit.variance))


def test_limits_far_from_the_values_are_reached_in_shorter_steps():
    fit = censored_normal([0.0, 0.1, -0.1, 0.05], [-9.0], [30.0, 40.0])
    assert fit.mean > 0.5 and np.isfinite(fit.variance)


def test_a_search_that_does_not_end_is_an_error(monkeypatch):
    monkeypatch.setattr(module, "_MOST_STEPS", 1)
    with pytest.raises(ConvergenceError):
        censored_normal([0.0, 1.0, 2.0], [0.5], [])


def test_bias_and_standard_error_come_from_all_that_is_known():
    rows = simulated()
    found = evaluated(rows)
    bias, sep = found.estimate("bias"), found.estimate("standard_error_of_prediction")
    exact = [x - y for _, x, y in rows if not isinstance(y, dict)]
    fit = censored_normal(exact, [], [x - y["below"] for _, x, y in rows if isinstance(y, dict)])
    assert (bias.value, sep.variance) == pytest.approx((fit.mean, fit.variance))
    assert bias.degrees_of_freedom == sep.degrees_of_freedom == fit.degrees_of_freedom
    assert bias.interval.lower < bias.value < bias.interval.upper
    assert found.diagnostics["differences_above"] == 40 - len(exact)
    assert found.diagnostics["reference_lowest"] >= 0.5
    assert "values-below-limit" in [w.code for w in found.warnings]
    assert found.used == 40


def test_a_value_below_its_limit_is_neither_zero_nor_half_of_it():
    """Over 60 studies with a third of the references below 1: what either substitution makes of the bias."""
    found, halves, zeros = [], [], []
    for seed in range(60):
        rows = simulated(n=60, seed=seed, limit=1.0)
        found.append(evaluated(rows).estimate("bias").value)
        for into, share in ((halves, 0.5), (zeros, 0.0)):
            into.append(np.mean([x - (share if isinstance(y, dict) else y) for _, x, y in rows]))
    # The standard error of the mean over the studies is 0.002.
    assert np.mean(found) == pytest.approx(0.05, abs=0.01)
    assert abs(np.mean(halves) - 0.05) > 0.01
    assert abs(np.mean(zeros) - 0.05) > 0.1


def test_a_reading_below_bounds_the_difference_from_above_and_two_say_nothing():
    rows = [*simulated(limit=0.0), ("R", {"below": 0.2}, 0.3), ("B", {"below": 0.2}, {"below": 0.2})]
    found = evaluated(rows)
    counts = [found.diagnostics[f"differences_{side}"] for side in ("known", "below", "above")]
    assert counts == [40, 1, 0]
    assert found.diagnostics["pairs_below_on_both_sides"] == 1
    assert "1 pairs below on both sides say nothing" in found.warnings[-1].detail


@pytest.mark.parametrize(
    ("rows", "columns", "changes", "where"),
    [
        ([(*row, "d1") for row in simulated()], (*COLUMNS, "group"), {}, ("columns",)),
        (simulated(), COLUMNS, {"tolerance_limits": [1.0]}, ("options", "tolerance_limits")),
        ([*simulated(), ("V0", 1.0, {"below": 0.5}), ("V0", 1.0, 0.6)], COLUMNS, {}, ("rows",)),
    ],
)
def test_what_limits_do_not_go_with_is_refused(rows, columns, changes, where):
    with pytest.raises(NotSupportedError) as caught:
        evaluated(rows, columns, **changes)
    assert caught.value.each()[0].where == where


def test_named_sources_and_limits_are_refused_together(an_estimate):
    with pytest.raises(NotSupportedError):
        evaluated(simulated(), sources=[NamedSource("presentation", an_estimate())])


def test_too_few_that_are_known_are_refused():
    with pytest.raises(EvidenceError, match="must be known"):
        evaluated(simulated(n=12, limit=2.5))
    with pytest.raises(EvidenceError, match="must be known"):
        evaluated(simulated(n=40, limit=2.2))
    rows = [(f"V{i}", 1.5 + i, 1.0 + i) for i in range(12)]
    with pytest.raises(EvidenceError, match="no scatter"):
        evaluated([*rows, ("B", 0.5, {"below": 1.0})])
    # The same difference each time, but for what binary numbers make of it.
    rows = [(f"V{i}", float(f"{1.6 + i / 10:.1f}"), float(f"{1.5 + i / 10:.1f}")) for i in range(12)]
    with pytest.raises(EvidenceError, match="no scatter"):
        evaluated([*rows, ("B", 0.5, {"below": 1.0})])


@pytest.mark.parametrize(
    "cell", [{"below": "0.1"}, {"below": 1e300}, {"below": float("nan")}, {"above": 1}, {"below": None}]
)
def test_a_limit_is_a_number(cell):
    with pytest.raises(EvidenceError):
        evaluated([*simulated(), ("X", 1.0, cell)])


@pytest.mark.slow
def test_coverage_with_a_quarter_of_the_values_below():
    """1,000 studies of 30 pairs: the bias and its interval (approximate), as measured."""
    held = 0
    for seed in range(1000):
        bias = evaluated(simulated(n=30, seed=seed, limit=0.8)).estimate("bias")
        held += bias.interval.lower <= 0.05 <= bias.interval.upper
    assert 0.925 <= held / 1000 <= 0.975, held
