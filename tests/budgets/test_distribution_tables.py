import numpy as np
import pytest
from scipy.special import stdtr

from budgets.distribution_tables import DistributionTable, tail_table
from budgets.error_distributions import StudentT


@pytest.mark.parametrize("nu", [0.5, 1, 1.3, 2, 4.44, 18.9987, 300, 1e5, 1e9])
def test_the_table_is_near_the_distribution_function_and_rises(nu):
    z = np.sort(np.concatenate([np.linspace(-40, 40, 40_001), [0.0, -0.0], np.geomspace(1, 1e15, 500)]))
    exact = stdtr(nu, z)
    if nu == 1:
        exact = 0.5 + np.arctan(z) / np.pi
    found = z.copy()
    DistributionTable(nu).fill(found)
    assert np.abs(found - exact).max() < 1e-10
    # Rounding in the last place is no fall.
    assert np.diff(found).min() > -1e-14
    assert found.min() >= -1e-15
    assert found.max() <= 1


@pytest.mark.parametrize("nu", [0.5, 1, 2.1, 4.44, 18.9987, 300, 1e5, 1e9])
def test_the_table_of_tails_keeps_their_relative_digits(nu):
    z = np.concatenate([np.linspace(0, 40, 40_001), np.geomspace(1e-9, 1e12, 2000)])
    exact = StudentT(nu).upper_tail(z)
    found = tail_table(nu).upper_tail(z)
    seen = exact > 1e-40
    assert np.abs(found[seen] / exact[seen] - 1).max() < 5e-10
    assert (found[~seen] < 1e-30).all() and (found > 0).all()
    assert tail_table(nu) is tail_table(nu)
