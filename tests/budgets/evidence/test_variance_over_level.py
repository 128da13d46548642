"""The variance function, against a general minimiser (scipy) and against simulation."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize, stats

from budgets.errors import EvidenceError
from budgets.evidence.variance_over_level import CRITICAL_VALUE, variance_over_level

LEVELS = np.linspace(1.0, 8.0, 12)


def simulated(seed, s0=0.05, s1=0.03, levels=LEVELS, nu=4):
    generator = np.random.default_rng(seed)
    true = s0**2 + (s1 * levels) ** 2
    return levels, true * generator.chisquare(nu, len(levels)) / nu, np.full(len(levels), nu)


def deviance(parts, levels, variances, nu):
    v = parts[0] + parts[1] * levels**2
    return np.sum(nu * (np.log(v) + variances / v))


@pytest.mark.parametrize("seed", range(6))
def test_the_fit_is_the_minimum_that_a_general_minimiser_finds(seed):
    levels, variances, nu = simulated(seed)
    fit = variance_over_level(levels, variances, nu)
    reference = min(
        (
            optimize.minimize(
                deviance, start, args=(levels, variances, nu), bounds=[(1e-12, None)] * 2, method="L-BFGS-B",
                options={"ftol": 1e-15, "gtol": 1e-10},
            )
            for start in ((1e-3, 1e-4), (1e-4, 1e-3), (0.01, 1e-7))
        ),
        key=lambda found: found.fun,
    )  # fmt: skip
    ours = deviance((fit.constant**2, fit.proportional**2), levels, variances, nu)
    assert ours <= reference.fun + 1e-7
    pooled = np.average(variances, weights=nu)
    ratio = deviance((pooled, 0.0), levels, variances, nu) - ours
    assert fit.likelihood_ratio == pytest.approx(max(0.0, ratio), abs=1e-8)


def test_the_critical_value_is_the_published_one():
    # A parameter on its edge: 2.706, the 10 % point of chi-square with 1 degree of freedom (from memory).
    assert pytest.approx(2.706, abs=5e-4) == CRITICAL_VALUE
    assert pytest.approx(stats.chi2.isf(0.10, 1), rel=1e-12) == CRITICAL_VALUE


def test_sample_variances_that_follow_the_model_exactly_give_its_parts_back():
    variances = 0.05**2 + (0.03 * LEVELS) ** 2
    fit = variance_over_level(LEVELS, variances, [6] * 12)
    assert (fit.constant, fit.proportional) == pytest.approx((0.05, 0.03), rel=1e-5)
    assert fit.significant
    # Degrees of freedom at a level: fewer than all together.
    assert max(map(fit.degrees_of_freedom, LEVELS)) < 72


@pytest.mark.parametrize("seed", range(4))
def test_the_two_parts_as_mean_squares_never_claim_more_than_the_fit_knows(seed):
    fit = variance_over_level(*simulated(seed))
    (constant, nu0), (proportional, nu1) = fit.parts
    for level in LEVELS:
        spread = constant**2 / nu0 + (proportional * level**2) ** 2 / nu1
        assert fit.variance(level) ** 2 / spread <= fit.degrees_of_freedom(level)


def test_the_edges_constant_and_purely_proportional():
    flat = variance_over_level(LEVELS, np.full(12, 0.04), [3] * 12)
    assert (flat.constant, flat.proportional) == pytest.approx((0.2, 0.0), abs=1e-9)
    assert not flat.significant and flat.likelihood_ratio == 0
    falling = variance_over_level(LEVELS, 0.04 / LEVELS, [3] * 12)
    assert falling.proportional == 0.0
    steep = variance_over_level(LEVELS, 1e-4 * LEVELS**4, [3] * 12)
    assert steep.constant == 0.0 and steep.significant
    # A level of zero cannot have a variance of zero, unless nothing scatters there either.
    with_zero = variance_over_level([0.0, *LEVELS], [1e-6, *(0.03 * LEVELS) ** 2], [3] * 13)
    assert 0 < with_zero.constant < 0.01


def test_the_document_tells_three_levels_with_their_intervals():
    document = variance_over_level(*simulated(1)).to_document()
    assert [item["level"] for item in document["standard_deviations"]] == [1.0, LEVELS[6], 8.0]
    for item in document["standard_deviations"]:
        assert item["lower"] < item["standard_deviation"] < item["upper"]


@pytest.mark.parametrize(
    ("levels", "variances", "nu"),
    [
        (LEVELS[:4], np.full(4, 0.1), [9] * 4),
        (LEVELS[:6], np.full(6, 0.1), [1] * 6),
        (1000 + LEVELS, np.full(12, 0.1), [3] * 12),
        (LEVELS, np.zeros(12), [3] * 12),
        (LEVELS, np.full(12, 1e-180), [3] * 12),
    ],
)
def test_too_little_to_tell_is_refused(levels, variances, nu):
    with pytest.raises(EvidenceError, match="needs 5 levels with 10 degrees of freedom"):
        variance_over_level(list(levels), list(variances), nu)


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([1e-6, 1e-2, 1e3, 1e8]))
def test_the_unit_does_not_matter_nor_the_order(seed, factor):
    levels, variances, nu = simulated(seed)
    fit = variance_over_level(levels, variances, nu)
    order = np.random.default_rng(seed).permutation(len(levels))
    scaled = variance_over_level(levels[order] * factor, variances[order] * factor**2, nu)
    assert scaled.likelihood_ratio == pytest.approx(fit.likelihood_ratio, abs=1e-6)
    for level in (1.0, 5.0, 8.0):
        assert math.sqrt(scaled.variance(level * factor)) / factor == pytest.approx(
            math.sqrt(fit.variance(level)), rel=1e-5
        )


@pytest.mark.slow
def test_coverage_and_size_are_as_measured():
    """2,000 simulated studies of 12 levels with 5 readings each: intervals at the ends, the test's size."""
    held = {1.0: 0, 8.0: 0}
    for seed in range(2000):
        fit = variance_over_level(*simulated(seed))
        for item in fit.to_document()["standard_deviations"]:
            true = math.hypot(0.05, 0.03 * item["level"])
            if item["level"] in held:
                held[item["level"]] += item["lower"] <= true <= item["upper"]
    shares = {level: count / 2000 for level, count in held.items()}
    size = np.mean([variance_over_level(*simulated(s, s1=0.0)).significant for s in range(2000)])
    # Approximate, as measured: see the message for the figures.
    assert all(0.92 <= share <= 0.99 for share in shares.values()), shares
    assert 0.03 <= size <= 0.07, size
