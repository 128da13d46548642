"""Critical differences of replicates, against published factors and the studentised range of scipy."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import stdtrit
from scipy.stats import studentized_range

from budgets.correlations import Correlation
from budgets.errors import LimitsError, ModelError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.replicates import (
    ReplicateLaw,
    ReplicateSpread,
    critical_range_factor,
    false_hold_rate,
    replicate_check,
    studentised_range_probability,
)
from tests.budgets.scans import MEANS, NOISE, a_scan_budget, joint_line

READING = ("reading",)


# The range of normal values at 95 % (Pearson and Hartley, from memory); ISO 5725-6:1994, 4.1.4, table 1,
# prints one decimal of it, and is among the published cases.
RANGE_AT_95 = {2: 2.77, 3: 3.31, 4: 3.63, 5: 3.86, 6: 4.03, 7: 4.17, 8: 4.29}
# Rule 42 of the project's mathematics, simulated there; at 15 degrees of freedom as in tables of the
# studentised range (Pearson and Hartley, from memory).
AT_99 = {2: 3.64, 3: 4.12, 4: 4.40}
AT_95_WITH_15 = {2: 3.01, 3: 3.67, 4: 4.08}
AT_99_WITH_15 = {2: 4.17, 3: 4.84, 4: 5.25}


@pytest.mark.parametrize(
    ("table", "level", "nu"),
    [
        (RANGE_AT_95, 0.95, math.inf),
        (AT_99, 0.99, math.inf),
        (AT_95_WITH_15, 0.95, 15.0),
        (AT_99_WITH_15, 0.99, 15.0),
    ],
)
def test_factors_that_are_printed(table, level, nu):
    for number, printed in table.items():
        assert abs(critical_range_factor(number, level, nu) - printed) <= 0.005


@pytest.mark.parametrize("nu", [1.0, 3.7, 15.0, 120.0, math.inf])
@pytest.mark.parametrize("number", [2, 3, 5, 12, 60])
def test_the_distribution_is_that_of_scipy(number, nu):
    for ratio in (0.8, 2.0, 4.5, 9.0):
        # scipy promises about ten digits for these.
        expected = studentized_range.cdf(ratio, number, nu)
        assert studentised_range_probability(ratio, number, nu) == pytest.approx(expected, abs=2e-9)


@settings(max_examples=30, deadline=None)
@given(nu=st.floats(0.6, 1e6), level=st.floats(0.5, 0.9999))
def test_two_replicates_differ_by_root_two_times_t(nu, level):
    """Exact: the difference of two values over their estimated deviation is sqrt(2) t."""
    expected = math.sqrt(2) * float(stdtrit(nu, (1 + level) / 2))
    assert critical_range_factor(2, level, nu) == pytest.approx(expected, rel=1e-9)


def test_many_readings_of_a_sample_have_a_factor():
    """Against a simulation: of 1,000 values the range is steep and large."""
    generator = np.random.default_rng(11)
    ranges = np.ptp(generator.normal(size=(20_000, 200)), axis=1)
    share = np.mean(ranges <= critical_range_factor(200, 0.9))
    assert abs(share - 0.9) < 4 * math.sqrt(0.9 * 0.1 / 20_000)
    assert studentised_range_probability(7.3, 1000) == pytest.approx(
        studentized_range.cdf(7.3, 1000, math.inf), abs=1e-8
    )


def test_no_range_is_below_zero():
    assert studentised_range_probability(0.0, 3, 10) == 0.0
    assert studentised_range_probability(-1.0, 3) == 0.0


def test_good_lots_are_held_as_often_as_is_said():
    """20,000 good lots of two samples, the deviation estimated anew each time with 12 degrees of freedom."""
    generator = np.random.default_rng(7)
    lots, nu, level = 20_000, 12, 0.95
    factor = critical_range_factor(3, level, float(nu))
    estimated = np.sqrt(generator.chisquare(nu, lots) / nu)
    ranges = np.ptp(generator.normal(size=(lots, 2, 3)), axis=2)
    single = np.mean(ranges[:, 0] > factor * estimated)
    assert abs(single - 0.05) < 4 * math.sqrt(0.05 * 0.95 / lots)
    either = np.mean((ranges > factor * estimated[:, None]).any(axis=1))
    # They share the deviation, so that both fail together sometimes.
    assert single < either < false_hold_rate(level, 2) + 4 * math.sqrt(0.1 * 0.9 / lots)


def test_a_check_says_all_that_it_rests_on():
    check = replicate_check([3.10, 3.30, 3.16], ReplicateSpread(0.05, math.inf), 0.99)
    assert check.number == 3
    assert check.range == pytest.approx(0.20)
    assert check.critical_difference == pytest.approx(4.1203 * 0.05, rel=1e-4)
    assert check.agrees
    assert not replicate_check([3.10, 3.31], ReplicateSpread(0.05, math.inf), 0.99).agrees


def test_replicates_exactly_at_the_critical_difference_agree():
    spread = ReplicateSpread(0.1, 20.0)
    far = replicate_check([0.0, 0.0], spread, 0.95).critical_difference
    assert replicate_check([0.0, far], spread, 0.95).agrees
    assert not replicate_check([0.0, math.nextafter(far, 1)], spread, 0.95).agrees


@pytest.mark.parametrize(
    ("number", "level", "nu", "message"),
    [
        (1, 0.95, 10.0, "replicates are 2 to"),
        (2000, 0.95, 10.0, "replicates are 2 to"),
        (2, 0.4, 10.0, "between 0.5 and"),
        (2, 1.0, 10.0, "between 0.5 and"),
        (2, math.nan, 10.0, "between 0.5 and"),
        (2, 0.95, 0.0, "above 0"),
        (2, 0.95, math.nan, "above 0"),
    ],
)
def test_what_has_no_factor_is_refused(number, level, nu, message):
    with pytest.raises(LimitsError, match=message):
        critical_range_factor(number, level, nu)


# --- the spread by a budget ----------------------------------------------------------------------------


def test_one_reading_among_its_replicates_is_a_whole_draw(a_budget, a_component):
    """What the mean shares with another component does not make the readings lie closer together."""
    components = (
        a_component(
            "whole", 0.2, 30, level="lot", contains=("repeatability", "remainder"), reading_weight=0.5
        ),
        a_component("beyond", 0.06, 12, contains=("repeatability",), covered_weight=0.5),
        a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
    )
    found = ReplicateLaw.compile(a_budget(components=components), "moisture", READING).at({"moisture": 3.0})
    assert found is not None
    assert (found.standard_deviation, found.degrees_of_freedom) == pytest.approx((0.06, 12))


def test_levels_drawn_anew_between_the_readings_are_added(a_budget, a_component):
    components = (
        a_component("repeatability", 0.04, 30),
        a_component("packing", 0.03, 10, level="presentation"),
        a_component("remainder", 0.05, 40, level="lot"),
        a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
    )
    budget = a_budget(components=components)
    law = ReplicateLaw.compile(budget, "moisture", ("reading", "presentation"))
    assert not law.depends_on_value
    found = law.at({"moisture": 3.0})
    assert found is not None
    assert found.standard_deviation == pytest.approx(0.05)
    # Satterthwaite by hand: 0.0025^2 / (0.0016^2/30 + 0.0009^2/10)
    assert found.degrees_of_freedom == pytest.approx(0.0025**2 / (0.0016**2 / 30 + 0.0009**2 / 10))


def test_a_proportional_part_grows_with_the_value(a_budget, a_component):
    relative = (Term(1.0, MeanSquare("relative", 0.02**2, 25)),)
    components = (
        a_component("repeatability", 0.04, 30, relative_terms=relative),
        a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
    )
    law = ReplicateLaw.compile(a_budget(components=components), "moisture", READING)
    assert law.depends_on_value
    for value in (1.0, 5.0):
        found = law.at({"moisture": value})
        assert found is not None
        assert found.standard_deviation == pytest.approx(math.hypot(0.04, 0.02 * value))


def test_correlated_parts_of_one_quantity_add_up_with_their_correlation(a_budget, a_component):
    components = (
        a_component("noise", 0.03, 30),
        a_component("drift", 0.04, 30),
        a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
    )
    budget = a_budget(components=components, correlations=(Correlation(("noise", "drift"), "reading", 0.5),))
    found = ReplicateLaw.compile(budget, "moisture", READING).at({"moisture": 3.0})
    assert found is not None
    assert found.standard_deviation == pytest.approx(math.sqrt(0.0009 + 0.0016 + 0.0012))


def test_a_channel_of_a_scan_has_its_part_of_the_covariance():
    budget = a_scan_budget()
    for place, name in enumerate(budget.model.read):
        found = ReplicateLaw.compile(budget, name, READING).at(MEANS)
        assert found is not None
        assert found.standard_deviation == pytest.approx(math.sqrt(NOISE[place][place]))
        assert found.degrees_of_freedom == 36


def test_without_a_component_between_readings_nothing_can_be_checked(a_budget, a_component):
    components = (
        a_component("remainder", 0.05, 40, level="lot"),
        a_component("bias", 0.02, 59, level="calibration", quantity="bias"),
    )
    law = ReplicateLaw.compile(a_budget(components=components), "moisture", READING)
    assert law.at({"moisture": 3.0}) is None
    assert not law.depends_on_value


def test_a_channel_without_noise_in_a_scan_cannot_be_checked():
    silent = ((0.04, 0.0, 0.0), (0.0, 0.0, 0.0), (0.0, 0.0, 0.03))
    budget = a_scan_budget(reading=silent)
    assert ReplicateLaw.compile(budget, "moisture", READING).at(MEANS) is None
    partial = a_scan_budget(
        more=(joint_line("noise-of-two", "reading", ((0.1, 0), (0, 0.1)), ("protein", "fat")),)
    )
    found = ReplicateLaw.compile(partial, "moisture", READING).at(MEANS)
    assert found is not None
    assert found.standard_deviation == pytest.approx(math.sqrt(NOISE[1][1]))


def test_what_is_not_read_has_no_replicates(a_budget):
    for budget, name in ((a_budget(), "bias"), (a_scan_budget(), "bias")):
        with pytest.raises(ModelError, match="no quantity that is read"):
            ReplicateLaw.compile(budget, name, READING)
