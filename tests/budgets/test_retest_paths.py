"""Shares of lots against independent integrals by SciPy: there the lot comes first and its looks follow."""

import math

import numpy as np
import pytest
from scipy.integrate import fixed_quad, quad
from scipy.stats import multivariate_normal, norm

from budgets.errors import LimitsError, NotSupportedError
from budgets.look_limits import LookLimits
from budgets.process_variation import ProcessVariation
from budgets.quadrature_panels import panels
from budgets.retest_paths import LotDistribution, path_outcomes

INFINITE = math.inf
COMMON = 0.05
CENTRE = 3.0
ONE_SIDED = (-INFINITE, 3.2)
TWO_SIDED = (2.75, 3.2)


def limits_of(looks, tolerance, lower_range=2.2):
    lower = -INFINITE if math.isinf(tolerance[0]) else tolerance[0] + 0.1
    return tuple(LookLimits(lower, 3.1 + 0.005 * look, *tolerance, lower_range, 4.5) for look in range(looks))


def covariance_of_errors(looks, lot=0.03, inner=0.04):
    variances = lot**2 + inner**2 / np.arange(1, looks + 1)
    later = np.maximum.outer(np.arange(looks), np.arange(looks))
    return variances[later]


def lots_of(looks, steering=0.0, common=COMMON):
    process = ProcessVariation(CENTRE, 0.1, steering=steering)
    return process.distribution(covariance_of_errors(looks), common)


@pytest.mark.parametrize("centre", [2.8, 3.0, 3.15])
def test_one_look_is_the_distribution_of_the_readings(centre):
    # mathematics.md, rule 49: P(release) = Phi((A_U - m)/s_obs).
    lots = lots_of(1)
    found = path_outcomes([centre], [centre], lots, limits_of(1, ONE_SIDED, -INFINITE), ONE_SIDED)
    spread = math.hypot(0.1, math.hypot(0.03, 0.04))
    assert found.release_rate[0] == pytest.approx(norm.cdf((3.1 - centre) / spread), abs=1e-12)
    assert found.rejected[0][0] == pytest.approx(norm.sf((3.2 - centre) / spread), abs=1e-14)
    assert found.further_looks[0] == 0


@pytest.mark.parametrize("tolerance", [ONE_SIDED, TWO_SIDED, (2.75, INFINITE)])
@pytest.mark.parametrize("common", [0.0, COMMON, 0.002])
def test_one_look_against_an_integral_over_the_lots(tolerance, common):
    (limit,) = limits_of(1, tolerance)
    found = path_outcomes([CENTRE], [CENTRE - 0.01], lots_of(1, common=common), (limit,), tolerance)
    error = math.hypot(0.03, 0.04)
    low, high = limit.released

    def released(lot):
        return norm.cdf((high - CENTRE - lot) / error) - norm.cdf((low - CENTRE - lot) / error)

    def nonconforming(lot):
        truth = CENTRE - 0.01 + lot
        if common == 0:
            return float(truth > tolerance[1] or truth < tolerance[0])
        return norm.sf((tolerance[1] - truth) / common) + norm.cdf((tolerance[0] - truth) / common)

    def mean(function):
        breaks = [end - CENTRE + 0.01 for end in tolerance if math.isfinite(end)]
        return quad(
            lambda lot: norm.pdf(lot, scale=0.1) * function(lot),
            -1.0,
            1.0,
            points=breaks,
            epsabs=1e-13,
            limit=500,
        )[0]

    assert found.release_rate[0] == pytest.approx(mean(released), abs=1e-10)
    assert found.deviation_of_released[0] == pytest.approx(mean(lambda x: x * released(x)), abs=1e-10)
    joint = mean(lambda x: released(x) * nonconforming(x))
    assert found.nonconforming_released[0] == pytest.approx(joint, abs=1e-10)
    assert found.conditional_global_consumers_risk[0] == pytest.approx(joint / mean(released), abs=1e-10)
    assert found.nonconforming[0] == pytest.approx(mean(nonconforming), abs=1e-9)


@pytest.mark.parametrize("tolerance", [ONE_SIDED, TWO_SIDED])
def test_two_looks_against_an_integral_over_lots_and_first_errors(tolerance):
    first, second = limits_of(2, tolerance)
    found = path_outcomes([CENTRE], [CENTRE], lots_of(2), (first, second), tolerance)
    errors = covariance_of_errors(2)
    on = errors[0, 1] / errors[0, 0]
    rest = math.sqrt(errors[1, 1] - on * errors[0, 1])
    sd = math.sqrt(errors[0, 0])

    def later(lot):
        """Held at the first look and released at the second one."""

        def density(shown):
            middle = CENTRE + lot + on * (shown - CENTRE - lot)
            low, high = second.released
            released = norm.cdf((high - middle) / rest) - norm.cdf((low - middle) / rest)
            return norm.pdf(shown, CENTRE + lot, sd) * released

        return sum(fixed_quad(density, *ends, n=80)[0] for ends in first.held)

    def mean(function):
        return quad(lambda lot: norm.pdf(lot, scale=0.1) * function(lot), -0.8, 0.8, epsabs=1e-12, limit=200)[
            0
        ]

    def bad(lot):
        truth = CENTRE + lot
        return norm.sf((tolerance[1] - truth) / COMMON) + norm.cdf((tolerance[0] - truth) / COMMON)

    one = path_outcomes([CENTRE], [CENTRE], lots_of(1), (first,), tolerance)
    assert found.released[1][0] == pytest.approx(mean(later), abs=1e-10)
    assert found.deviation_of_released[0] == pytest.approx(
        one.deviation_of_released[0] + mean(lambda lot: lot * later(lot)), abs=1e-10
    )
    assert found.nonconforming_released[0] == pytest.approx(
        one.nonconforming_released[0] + mean(lambda lot: bad(lot) * later(lot)), abs=1e-10
    )


@pytest.mark.parametrize("steering", [0.0, 0.8, 1.3])
def test_three_looks_against_the_multivariate_normal(steering):
    lots = lots_of(3, steering)
    limits = limits_of(3, ONE_SIDED, -INFINITE)
    found = path_outcomes([CENTRE], [CENTRE], lots, limits, ONE_SIDED)
    shown = multivariate_normal(np.full(3, CENTRE), lots.covariance[1:, 1:], allow_singular=True)
    released = shown.cdf([3.2, 3.2, 3.11], lower_limit=[3.1, 3.105, -9], rng=np.random.default_rng(1))
    assert found.released[2][0] == pytest.approx(released, abs=2e-6)


@pytest.mark.parametrize("steering", [0.0, 0.9])
@pytest.mark.parametrize("tolerance", [ONE_SIDED, TWO_SIDED])
@pytest.mark.parametrize("looks", [1, 2, 3])
def test_every_lot_is_released_held_or_rejected(looks, tolerance, steering):
    centres = np.linspace(2.3, 3.4, 9)
    found = path_outcomes(centres, centres, lots_of(looks, steering), limits_of(looks, tolerance), tolerance)
    whole = found.release_rate + sum(found.rejected) + sum(found.held_for_good) + found.held[-1]
    assert whole == pytest.approx(np.ones(9), abs=1e-10)
    assert (found.nonconforming_released <= found.nonconforming + 1e-12).all()


def test_many_set_points_are_each_alone():
    centres = np.linspace(2.7, 3.2, 5)
    many = path_outcomes(centres, centres, lots_of(2), limits_of(2, TWO_SIDED), TWO_SIDED)
    for place, centre in enumerate(centres):
        one = path_outcomes(centre, centre, lots_of(2), limits_of(2, TWO_SIDED), TWO_SIDED)
        assert one.release_rate[0] == pytest.approx(many.release_rate[place], rel=1e-13)


@pytest.mark.parametrize("ratio", [1e-3, 1e-2, 0.1, 1, 10])
def test_sharp_and_blunt_measurements_keep_the_digits(ratio):
    """The risk lies at the edge of acceptance, however narrow it is beside the process."""
    u = 0.1 * ratio
    lots = ProcessVariation(CENTRE, 0.1).distribution(np.array([[u * u]]), 0.0)
    limit = LookLimits(-INFINITE, 3.2 - 1.645 * u, -INFINITE, 3.2)
    found = path_outcomes([CENTRE], [CENTRE], lots, (limit,), ONE_SIDED)

    def joint(lot):
        return norm.pdf(lot, scale=0.1) * norm.cdf((limit.upper_acceptance_limit - CENTRE - lot) / u)

    beyond = quad(joint, 0.2, 0.2 + min(1.0, 12 * u), epsabs=0, epsrel=1e-12)[0]
    assert found.nonconforming_released[0] == pytest.approx(beyond, rel=1e-8)


def test_a_look_that_repeats_the_one_before_changes_nothing():
    repeated = np.full((2, 2), 0.05**2)
    lots = ProcessVariation(CENTRE, 0.1).distribution(repeated, COMMON)
    limits = limits_of(2, ONE_SIDED)
    found = path_outcomes([CENTRE], [CENTRE], lots, limits, ONE_SIDED)
    assert found.released[1][0] == 0
    assert found.held[1][0] == pytest.approx(found.held[0][0], rel=1e-9)


def test_four_looks_of_an_unsteered_process_are_done_and_of_a_steered_one_refused():
    limits = limits_of(4, ONE_SIDED)
    found = path_outcomes([CENTRE], [CENTRE], lots_of(4), limits, ONE_SIDED)
    three = path_outcomes([CENTRE], [CENTRE], lots_of(3), limits[:3], ONE_SIDED)
    assert found.release_rate[0] > three.release_rate[0]
    with pytest.raises(NotSupportedError, match="steered"):
        path_outcomes([CENTRE], [CENTRE], lots_of(4, 0.8), limits, ONE_SIDED)
    with pytest.raises(NotSupportedError, match="more than 4 looks"):
        path_outcomes([CENTRE], [CENTRE], lots_of(5), limits_of(5, ONE_SIDED), ONE_SIDED)


def test_nothing_that_varies_and_missing_limits_are_refused():
    with pytest.raises(LimitsError, match="nothing varies"):
        path_outcomes(
            [3.0], [3.0], LotDistribution(np.zeros((2, 2)), 0.1), limits_of(1, ONE_SIDED), ONE_SIDED
        )
    with pytest.raises(LimitsError, match="limits of 1 looks for 2 looks"):
        path_outcomes([3.0], [3.0], lots_of(2), limits_of(1, ONE_SIDED), ONE_SIDED)


def test_an_interval_that_is_open_on_both_sides_is_one_panel():
    assert panels((-INFINITE, INFINITE), 0.1) == ((-INFINITE, INFINITE),)


def test_an_empty_acceptance_interval_releases_nothing():
    limit = LookLimits(3.1, 3.0, 2.75, 3.2)
    found = path_outcomes([CENTRE], [CENTRE], lots_of(1), (limit,), TWO_SIDED)
    assert found.release_rate[0] == 0
    assert found.conditional_global_consumers_risk[0] == 1
