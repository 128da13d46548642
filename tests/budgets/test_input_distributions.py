"""Every distribution of JCGM 101, Table 1, against scipy.stats or, where it has none, its own integral."""

import math

import numpy as np
import pytest
from scipy import integrate, stats

from budgets.errors import ComponentError
from budgets.input_distributions import (
    Bounded,
    Counted,
    CurvilinearTrapezoid,
    Exponential,
    Normal,
    Sampled,
)

MANY = 20_000


def curvilinear(a, b, d):
    """Its distribution function: the mean, over the uncertain half-width, of rectangular ones."""
    middle, half = (a + b) / 2, (b - a) / 2

    def at(x):
        def given(w):
            return min(1.0, max(0.0, (x - middle + w) / (2 * w)))

        return integrate.quad(given, half - d, half + d, points=[abs(x - middle)])[0] / (2 * d)

    return np.vectorize(at)


CASES = [
    (Bounded("rectangular", 1, 5), stats.uniform(1, 4)),
    (Bounded("triangular", 1, 5), stats.triang(0.5, 1, 4)),
    (Bounded("trapezoidal", 1, 5, 0.4), stats.trapezoid(0.3, 0.7, 1, 4)),
    (Bounded("arcsine", 1, 5), stats.arcsine(1, 4)),
    (Normal(3, 0.5), stats.norm(3, 0.5)),
    (Normal(3, 0.5, 4), stats.t(4, 3, 0.5)),
    (Exponential(2.5), stats.expon(scale=2.5)),
    (Counted(6), stats.gamma(7)),
]


@pytest.mark.parametrize(("own", "exact"), CASES, ids=lambda item: type(item).__name__)
def test_draws_agree_with_scipy(own, exact):
    drawn = own.draw(np.random.default_rng(11), MANY)
    assert drawn.shape == (MANY,)
    assert stats.kstest(drawn, exact.cdf).pvalue > 0.001
    assert own.estimate == pytest.approx(float(exact.mean()))
    assert own.degrees_of_freedom == (4 if own == Normal(3, 0.5, 4) else math.inf)


@pytest.mark.parametrize("own", [case[0] for case in CASES[:4]])
def test_standard_uncertainties_of_bounded_distributions(own):
    exact = next(exact for item, exact in CASES if item == own)
    assert own.standard_uncertainty == pytest.approx(float(exact.std()))


def test_limits_that_are_not_exactly_known():
    own = CurvilinearTrapezoid(-1.0, 3.0, 0.8)
    drawn = own.draw(np.random.default_rng(3), MANY)
    assert stats.kstest(drawn[:2000], curvilinear(-1.0, 3.0, 0.8)).pvalue > 0.001
    variance = integrate.quad(lambda w: (w**2 / 3) / 1.6, 1.2, 2.8)[0]
    assert own.standard_uncertainty == pytest.approx(math.sqrt(variance), rel=1e-12)
    assert own.estimate == 1.0
    assert np.abs(drawn - 1.0).max() < 2.8


def test_repeated_indications():
    values = (3.11, 3.15, 3.09, 3.2)
    own = Normal.of_indications(values)
    assert own.estimate == pytest.approx(np.mean(values))
    assert own.standard_uncertainty == pytest.approx(stats.sem(values))
    assert own.degrees_of_freedom == 3


def test_samples_from_data_are_drawn_alike():
    own = Sampled((1.0, 2.0, 2.0, 7.0))
    drawn = own.draw(np.random.default_rng(5), MANY)
    values, counts = np.unique(drawn, return_counts=True)
    assert values.tolist() == [1.0, 2.0, 7.0]
    assert stats.chisquare(counts, MANY * np.array([0.25, 0.5, 0.25])).pvalue > 0.001
    assert own.estimate == 3.0


@pytest.mark.parametrize(
    ("make", "where"),
    [
        (lambda: Bounded("normal", 0, 1), "distribution"),
        (lambda: Bounded("rectangular", 1, 1), "lower"),
        (lambda: Bounded("rectangular", 0, math.inf), "lower"),
        (lambda: CurvilinearTrapezoid(1, 0, 0.1), "lower"),
        (lambda: CurvilinearTrapezoid(0, 1, 0.5), "plus_or_minus"),
        (lambda: Normal(math.nan, 1), "estimate"),
        (lambda: Normal(0, 0), "standard_uncertainty"),
        (lambda: Normal(0, 1, 0), "degrees_of_freedom"),
        (lambda: Normal.of_indications([1.0]), "values"),
        (lambda: Normal.of_indications([1.0, 1.0]), "standard_uncertainty"),
        (lambda: Exponential(0), "estimate"),
        (lambda: Counted(-1), "number"),
        (lambda: Sampled((1.0, 1.0)), "values"),
        (lambda: Sampled((1.0, math.nan)), "values"),
    ],
)
def test_what_is_no_distribution_is_refused(make, where):
    with pytest.raises(ComponentError) as caught:
        make()
    assert caught.value.where == (where,)
