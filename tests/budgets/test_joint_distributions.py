"""Several quantities together, against scipy.stats; and what draws them."""

import math

import numpy as np
import pytest
from scipy import stats

from budgets.errors import ComponentError
from budgets.joint_distributions import JointNormal, chi_square_ratios, root_of

MANY = 20_000


@pytest.mark.parametrize("freedom", [math.inf, 6.0])
def test_several_quantities_together(freedom):
    matrix = ((0.04, 0.03, 0.0), (0.03, 0.09, -0.02), (0.0, -0.02, 0.01))
    own = JointNormal(("a", "b", "c"), (1.0, 2.0, 3.0), matrix, freedom)
    drawn = own.draw(np.random.default_rng(7), MANY)
    exact = (
        stats.multivariate_normal((1, 2, 3), matrix)
        if math.isinf(freedom)
        else stats.multivariate_t((1, 2, 3), matrix, df=freedom)
    )
    other = exact.rvs(MANY, random_state=np.random.default_rng(8)).T
    for direction in ((1, 0, 0), (0, 1, 0), (1, -1, 0.5), (0.2, 1, 1)):
        assert stats.ks_2samp(direction @ drawn, direction @ other).pvalue > 0.001
    # Tails that come together, which independent t would not have.
    squares = [np.square(x - np.array([[1], [2], [3]])).sum(axis=0) for x in (drawn, other)]
    assert stats.ks_2samp(*squares).pvalue > 0.001


def test_a_root_of_a_singular_covariance():
    matrix = np.array([[0.04, 0.06], [0.06, 0.09]])
    root = root_of(matrix)
    assert root @ root.T == pytest.approx(matrix)


def test_variances_from_few_degrees_of_freedom():
    drawn = chi_square_ratios(5.0, MANY, np.random.default_rng(1))
    assert stats.kstest(5.0 / drawn, stats.chi2(5).cdf).pvalue > 0.001
    assert np.isfinite(chi_square_ratios(0.002, 1000, np.random.default_rng(1))).all()


@pytest.mark.parametrize(
    ("make", "where"),
    [
        (lambda: JointNormal(("a", "a"), (1, 2), ((1, 0), (0, 1))), "covariance"),
        (lambda: JointNormal(("a", "b"), (1, 2), ((1, 2), (2, 1))), "covariance"),
        (lambda: JointNormal(("a", "b"), (1, math.inf), ((1, 0), (0, 1))), "estimates"),
        (lambda: JointNormal(("a", "b"), (1, 2), ((1, 0), (0, 1)), 0.0), "degrees_of_freedom"),
    ],
)
def test_what_is_no_joint_distribution_is_refused(make, where):
    with pytest.raises(ComponentError) as caught:
        make()
    assert caught.value.where == (where,)
