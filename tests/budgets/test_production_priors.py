"""Production priors: shapes against mpmath and scipy, and what is no prior."""

import math

import numpy as np
import pytest
from mpmath import mp
from scipy import stats

from budgets.conformity import Tolerance
from budgets.errors import LimitsError
from budgets.global_risks import nonconforming_share
from budgets.measurement_errors import MeasurementErrors
from budgets.production_priors import ProductionPrior, Steering, standard_marks

VALUES = np.random.default_rng(4).gamma(4.0, 0.1, 60).tolist()


def tail(prior, limit, *, above):
    """Return the probability beyond a limit, as the risks have it."""
    tolerance = Tolerance(None, limit) if above else Tolerance(limit, None)
    return nonconforming_share(prior, MeasurementErrors.of(0.01), tolerance)


def integral(prior, power=0):
    """Return the integral of x^power times the density by scipy, piece by piece."""
    from scipy.integrate import quad

    def one(x):
        return float(prior.density(np.array([x]))[0]) * x**power

    return math.fsum(quad(one, a, b)[0] for a, b in zip(prior.marks[:-1], prior.marks[1:], strict=True))


@pytest.mark.parametrize(
    "prior",
    [
        ProductionPrior("normal", 3.0, 0.1),
        ProductionPrior("t", 3.0, 0.1, 4.5),
        ProductionPrior("t", 3.0, 0.1, 120.0),
        ProductionPrior.empirical(VALUES),
    ],
    ids=["normal", "t", "t of many", "empirical"],
)
def test_density_mean_and_standard_deviation_are_those_stated(prior):
    assert integral(prior) == pytest.approx(1, abs=1e-12)
    assert integral(prior, 1) == pytest.approx(prior.mean, rel=1e-9)
    around = integral(prior, 2) - prior.mean**2
    # The variance of t with few degrees of freedom lies far out: what the marks leave out is part of it.
    assert around == pytest.approx(
        prior.standard_deviation**2, rel=1e-6 if prior.distribution == "t" else 3e-2
    )


def test_the_normal_prior_is_the_normal_distribution_of_mpmath():
    prior = ProductionPrior("normal", 3.0, 0.1)
    for x in (2.2, 2.95, 3.4):
        assert prior.density(np.array([x]))[0] == pytest.approx(float(mp.npdf(x, 3, 0.1)), rel=1e-13)
        assert tail(prior, x, above=False) == pytest.approx(float(mp.ncdf(x, 3, 0.1)), rel=1e-12)


def test_the_t_prior_has_its_standard_deviation_not_its_scale():
    scale = 0.1 * math.sqrt(3 / 5)
    prior = ProductionPrior("t", 3.0, 0.1, 5.0)
    for x in (2.2, 2.95, 3.4):
        assert prior.density(np.array([x]))[0] == pytest.approx(stats.t.pdf(x, 5, 3, scale), rel=1e-12)
        assert tail(prior, x, above=True) == pytest.approx(stats.t.sf(x, 5, 3, scale), rel=1e-12)


def test_the_empirical_prior_is_near_the_distribution_that_it_was_drawn_from():
    values = stats.norm(3, 0.1).ppf((np.arange(2000) + 0.5) / 2000)
    prior, known = ProductionPrior.empirical(values), ProductionPrior("normal", 3.0, 0.1)
    for x in (2.8, 3.0, 3.1, 3.25):
        for above in (True, False):
            assert tail(prior, x, above=above) == pytest.approx(tail(known, x, above=above), rel=0.03)
    assert prior.mean == pytest.approx(3.0)
    equal_quartiles = ProductionPrior.empirical([1.0] * 40 + [2.0, 0.0])
    assert tail(equal_quartiles, 1.5, above=True) == pytest.approx(1 / 42, rel=0.2)


@pytest.mark.parametrize(
    ("members", "where", "words"),
    [
        ({"standard_deviation": 0.0}, "standard_deviation", "above 0"),
        ({"standard_deviation": -0.1}, "standard_deviation", "above 0"),
        ({"standard_deviation": math.inf}, "standard_deviation", "above 0"),
        ({"mean": math.nan}, "mean", "finite"),
        ({"distribution": "uniform"}, "distribution", "none of normal, t, empirical"),
        ({"anchor": "hope"}, "anchor", "none of true_values, readings"),
        ({"distribution": "t", "degrees_of_freedom": 2.0}, "degrees_of_freedom", "no standard deviation"),
        ({"distribution": "t"}, "degrees_of_freedom", "no standard deviation"),
        ({"degrees_of_freedom": 9.0}, "degrees_of_freedom", "belong to t"),
        ({"values": (1.0, 2.0)}, "values", "belong to empirical"),
        ({"distribution": "empirical", "values": (1.0, 2.0)}, "values", "2 lots do not show"),
        ({"steering": Steering(3.0, 0.1, 0.0), "anchor": "readings"}, "steering", "reference values"),
    ],
)
def test_what_is_no_prior_is_refused(members, where, words):
    with pytest.raises(LimitsError, match=words) as error:
        ProductionPrior(**{"distribution": "normal", "mean": 3.0, "standard_deviation": 0.1, **members})
    assert error.value.where == (where,)


def test_lots_that_do_not_differ_are_no_empirical_prior():
    for values in ([], [3.0], [3.0] * 40):
        with pytest.raises(LimitsError, match="above 0"):
            ProductionPrior.empirical(values)


@pytest.mark.parametrize("correlation", [-1.0, 1.0, math.nan])
def test_a_steered_process_whose_readings_follow_the_truth_to_the_letter_is_refused(correlation):
    with pytest.raises(LimitsError, match="not between -1 and 1"):
        Steering(3.0, 0.1, correlation)


@pytest.mark.parametrize("nu", [1.0, 2.5, 7.0, 40.0, math.inf])
def test_marks_reach_as_far_as_anything_counts(nu):
    marks = standard_marks(nu)
    assert (np.diff(marks) > 0).all()
    np.testing.assert_allclose(marks, -marks[::-1])
    assert stats.t.sf(marks[-1], nu) < 1e-22 if nu < math.inf else marks[-1] == 12
