"""One lot's conformance probability with a prior: closed forms, mpmath, and when it is left out."""

import math

import numpy as np
import pytest
from mpmath import mp
from scipy import stats

from budgets.conformity import Tolerance
from budgets.errors import ModelError
from budgets.measurement_errors import MeasurementErrors
from budgets.posterior_conformity import posterior_conformity
from budgets.production_priors import ProductionPrior, Steering

UPPER, BOTH = Tolerance(None, 3.2), Tolerance(2.7, 3.2)


@pytest.mark.parametrize("estimate", [2.95, 3.15, 3.24])
def test_two_normal_distributions_give_their_weighted_mean(estimate):
    """JCGM 106:2012, 7.2 with a normal prior (from memory): weights are inverse variances."""
    found = posterior_conformity(
        ProductionPrior("normal", 3.0, 0.08), MeasurementErrors.of(0.04, 0.03), UPPER, estimate
    )
    weight, other = 1 / 0.05**2, 1 / 0.08**2
    mean = (weight * estimate + other * 3.0) / (weight + other)
    posterior = stats.norm(mean, math.sqrt(1 / (weight + other)))
    assert found.used
    assert found.conformance_probability == pytest.approx(posterior.cdf(3.2), rel=1e-12)
    assert found.specific_consumers_risk == pytest.approx(posterior.sf(3.2), rel=1e-12)
    assert found.conflict == pytest.approx(abs(estimate - 3.0) / math.hypot(0.05, 0.08))


@pytest.mark.parametrize("tolerance", [UPPER, BOTH, Tolerance(2.9, None)])
def test_t_agrees_with_mpmath(tolerance):
    prior, errors = ProductionPrior("normal", 3.0, 0.08), MeasurementErrors.of(0.05, 0.0, 6.0)
    found = posterior_conformity(prior, errors, tolerance, 3.12)
    with mp.workdps(20):
        nu, u = mp.mpf(6), mp.mpf(0.05)

        def joint(x):
            z = (mp.mpf(3.12) - x) / u
            return mp.npdf(x, 3, mp.mpf(0.08)) * (1 + z * z / nu) ** (-(nu + 1) / 2)

        edges = [mp.mpf(k) / 100 for k in range(200, 420, 10)]
        whole = mp.quad(joint, edges)
        low, high = tolerance.lower or 2.0, tolerance.upper or 4.1
        inner = sorted({mp.mpf(low), mp.mpf(high), *(e for e in edges if low < e < high)})
        inside = mp.quad(joint, inner)
    assert found.conformance_probability == pytest.approx(float(inside / whole), rel=1e-10)
    assert found.specific_consumers_risk == pytest.approx(float(1 - inside / whole), rel=1e-8)


def test_an_empirical_prior_of_normal_values_is_near_the_normal_one():
    values = stats.norm(3.0, 0.08).ppf((np.arange(3000) + 0.5) / 3000)
    errors = MeasurementErrors.of(0.04, 0.03)
    smooth = posterior_conformity(ProductionPrior.empirical(values), errors, UPPER, 3.15)
    normal = posterior_conformity(ProductionPrior("normal", 3.0, 0.08), errors, UPPER, 3.15)
    assert smooth.conformance_probability == pytest.approx(normal.conformance_probability, rel=5e-3)


def test_a_prior_known_from_readings_leaves_the_common_error_in():
    """Lots and readings tell nothing of what all readings share: it widens what is known of the lot."""
    prior = ProductionPrior("normal", 3.0, 0.08, anchor="readings")
    found = posterior_conformity(prior, MeasurementErrors.of(0.04, 0.03), UPPER, 3.15)
    weight, other = 1 / 0.04**2, 1 / 0.08**2
    mean = (weight * 3.15 + other * 3.0) / (weight + other)
    known = stats.norm(mean, math.hypot(math.sqrt(1 / (weight + other)), 0.03))
    assert found.conformance_probability == pytest.approx(known.cdf(3.2), rel=1e-12)


def test_of_a_steered_process_the_estimate_says_what_was_observed_of_both():
    prior = ProductionPrior("normal", 3.0, 0.1, steering=Steering(3.02, 0.05, -0.4))
    found = posterior_conformity(prior, MeasurementErrors.of(0.04), BOTH, 3.1)
    mean = 3.0 - 0.4 * 0.1 * (3.1 - 3.02) / 0.05
    known = stats.norm(mean, 0.1 * math.sqrt(1 - 0.16))
    assert found.conformance_probability == pytest.approx(known.cdf(3.2) - known.cdf(2.7), rel=1e-12)


@pytest.mark.parametrize("nu", [math.inf, 6.0])
def test_a_reading_that_contradicts_the_prior_switches_it_off(nu):
    prior, errors = ProductionPrior("normal", 3.0, 0.03), MeasurementErrors.of(0.04, 0.0, nu)
    edge = 3.0 + 3 * 0.05
    assert posterior_conformity(prior, errors, UPPER, edge - 1e-9).used
    beyond = posterior_conformity(prior, errors, UPPER, edge + 1e-9)
    assert not beyond.used
    assert beyond.conformance_probability is None and beyond.specific_consumers_risk is None
    assert beyond.conflict == pytest.approx(3.0)


def test_a_reading_that_is_no_number_is_refused():
    with pytest.raises(ModelError, match="finite"):
        posterior_conformity(ProductionPrior("normal", 3.0, 0.1), MeasurementErrors.of(0.1), UPPER, math.nan)
