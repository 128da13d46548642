import math

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from budgets.errors import EvidenceError
from budgets.study_plans import (
    bias_plan,
    power_of_bias_test,
    precision_plan,
    relative_standard_uncertainty,
)

# JCGM 100:2008, Table E.1 (from memory): n observations to the relative standard deviation in per cent.
TABLE_E_1 = {2: 76, 3: 52, 4: 42, 5: 36, 10: 24, 20: 16, 30: 13, 50: 10}


@pytest.mark.parametrize(("number", "per_cent"), TABLE_E_1.items())
def test_the_uncertainty_of_a_standard_deviation_is_that_of_the_guide(number, per_cent):
    assert 100 * relative_standard_uncertainty(number - 1) == pytest.approx(per_cent, abs=0.5)


@pytest.mark.parametrize("nu", [1, 2, 17, 100, 101, 100_000])
def test_the_uncertainty_of_a_standard_deviation_keeps_its_digits(nu):
    with mpmath.workdps(40):
        c4 = mpmath.sqrt(mpmath.mpf(2) / nu) * mpmath.gamma(mpmath.mpf(nu + 1) / 2)
        c4 /= mpmath.gamma(mpmath.mpf(nu) / 2)
        expected = float(mpmath.sqrt(1 - c4**2) / c4)
    assert relative_standard_uncertainty(nu) == pytest.approx(expected, rel=1e-10)


def far_end(nu, probability):
    return math.sqrt(nu / stats.chi2.ppf((1 - probability) / 2, nu)) - 1


@settings(max_examples=30, deadline=None)
@given(st.floats(0.02, 5), st.sampled_from([0.9, 0.95, 0.99]), st.integers(2, 6))
def test_the_plan_is_the_smallest_that_is_good_enough(wanted, probability, each):
    plan = precision_plan(wanted, coverage_probability=probability, values_per_sample=each)
    assert far_end(plan.degrees_of_freedom, probability) <= wanted * (1 + 1e-9)
    assert plan.degrees_of_freedom == plan.samples * (each - 1)
    assert plan.values == plan.samples * each
    if plan.samples > 1:
        assert far_end((plan.samples - 1) * (each - 1), probability) > wanted
    assert plan.interval_upper == pytest.approx(far_end(plan.degrees_of_freedom, probability))


def test_samples_that_are_settled_ask_for_more_values_of_each():
    assert precision_plan(0.25, samples=1).statement.endswith("from 1 sample with 49 readings each")
    plan = precision_plan(0.25, samples=4)
    assert (plan.samples, plan.values_per_sample, plan.degrees_of_freedom) == (4, 13, 48)
    assert plan.statement.endswith("(48 degrees of freedom) from 4 samples with 13 readings each")
    assert "determinations" in precision_plan(0.25, design="duplicates", samples=4).statement


def test_pairs_lose_one_degree_of_freedom_to_the_bias():
    plan = precision_plan(0.25, design="agreement")
    assert (plan.samples, plan.values, plan.degrees_of_freedom) == (49, 49, 48)
    assert plan.statement.endswith("from 49 pairs")


def test_the_power_is_that_of_the_noncentral_t_distribution():
    for nu, shift in ((1, 0.5), (4, 3.0), (33, 2.9), (500, 1.0), (20, 12.0)):
        t = stats.t.isf(0.025, nu)
        expected = stats.nct.sf(t, nu, shift) + stats.nct.cdf(-t, nu, shift)
        assert power_of_bias_test(shift, 1, nu) == pytest.approx(expected, rel=1e-9)
        assert power_of_bias_test(-shift, 1, nu) == power_of_bias_test(shift, 1, nu)
    assert power_of_bias_test(0, 1, 9) == 0.05


@pytest.mark.parametrize(("nu", "shift"), [(1, 40.0), (3, 100.0), (2, 0.01), (60, 5.0)])
def test_the_power_is_that_of_the_integral(nu, shift):
    """Of Phi over the chi distribution of s: where the noncentral t of a library fails."""
    t = mpmath.mpf(float(stats.t.isf(0.025, nu)))

    def missed(s):
        density = 2 * (mpmath.mpf(nu) / 2) ** (mpmath.mpf(nu) / 2) / mpmath.gamma(mpmath.mpf(nu) / 2)
        density *= s ** (nu - 1) * mpmath.exp(-nu * s * s / 2)
        return density * (mpmath.ncdf(t * s - shift) - mpmath.ncdf(-t * s - shift))

    expected = 1 - float(mpmath.quad(missed, sorted([0, 0.5, 1, 1.5, 2, 3, shift / t, 8 + 2 * shift / t])))
    assert power_of_bias_test(shift, 1, nu) == pytest.approx(expected, rel=1e-8)


def test_the_planned_pairs_find_the_bias_as_often_as_was_promised():
    plan = bias_plan(0.04, 0.1, power=0.8)
    differences = np.random.default_rng(41).normal(0.04, 0.1, (20_000, plan.pairs))
    found = (stats.ttest_1samp(differences, 0, axis=1).pvalue < 0.05).mean()
    # Four standard deviations of the simulated share.
    assert found == pytest.approx(plan.power, abs=4 * math.sqrt(0.16 / 20_000))
    assert plan.power >= 0.8 > power_of_bias_test(0.04, 0.1 / math.sqrt(plan.pairs - 1), plan.pairs - 2)


def test_groups_count_as_one_where_they_differ():
    plan = bias_plan(-0.06, 0.1, power=0.8, standard_deviation_between_groups=0.05, pairs_per_group=4)
    generator = np.random.default_rng(42)
    days = generator.normal(0.06, 0.05, (10_000, plan.groups))
    means = days + generator.normal(0, 0.1, (10_000, plan.groups, 4)).mean(axis=2)
    found = (stats.ttest_1samp(means, 0, axis=1).pvalue < 0.05).mean()
    assert found == pytest.approx(plan.power, abs=4 * math.sqrt(0.16 / 10_000))
    assert plan.pairs == 4 * plan.groups
    assert means.mean(axis=1).std() == pytest.approx(plan.standard_uncertainty, rel=0.03)
    assert f"({plan.groups} groups of 4)" in plan.statement


def test_a_huge_bias_needs_two_pairs_only_when_it_is_huge():
    assert bias_plan(1e3, 1.0).pairs == 2
    assert bias_plan(1e300, 1e-300).power == 1
    assert bias_plan(1.0, 1.0).pairs == 13


@pytest.mark.parametrize(
    ("where", "match", "arguments"),
    [
        ("design", "cannot be planned", {"design": "fleet"}),
        ("criterion", "none of", {"criterion": "guess"}),
        ("relative_uncertainty", "above 0", {"relative_uncertainty": 0.0}),
        ("relative_uncertainty", "above 0", {"relative_uncertainty": math.nan}),
        ("relative_uncertainty", "more than 100000", {"relative_uncertainty": 1e-4}),
        ("coverage_probability", "0.5 to 0.999", {"coverage_probability": 1.0}),
        ("samples", "nothing to plan", {"samples": 3, "values_per_sample": 3}),
        ("samples", "what is planned", {"design": "agreement", "samples": 3}),
        ("samples", "whole number", {"samples": 0}),
        ("samples", "two samples", {"design": "duplicates", "samples": 1}),
        ("values_per_sample", "single values", {"design": "agreement", "values_per_sample": 2}),
        ("values_per_sample", "from 2 up", {"values_per_sample": True}),
    ],
)
def test_what_cannot_be_planned_is_refused(where, match, arguments):
    with pytest.raises(EvidenceError, match=match) as caught:
        precision_plan(**{"relative_uncertainty": 0.25, **arguments})
    assert caught.value.where == (where,)


@pytest.mark.parametrize(
    ("where", "match", "arguments"),
    [
        ("bias", "other than 0", {"bias": 0}),
        ("bias", "more than 100000", {"bias": 1e-6}),
        ("standard_deviation", "above 0", {"standard_deviation": math.inf}),
        ("significance", "at most 0.5", {"significance": 0.6}),
        ("power", "above the significance", {"power": 0.05}),
        ("standard_deviation_between_groups", "from 0 up", {"standard_deviation_between_groups": -1}),
        ("pairs_per_group", "whole number", {"pairs_per_group": 0}),
    ],
)
def test_a_bias_that_cannot_be_planned_for_is_refused(where, match, arguments):
    with pytest.raises(EvidenceError, match=match) as caught:
        bias_plan(**{"bias": 0.1, "standard_deviation": 0.1, **arguments})
    assert caught.value.where == (where,)
