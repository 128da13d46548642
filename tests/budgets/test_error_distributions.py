import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from mpmath import mp
from scipy.special import ndtr, ndtri

from budgets.error_distributions import StudentT, Tabulated, probability_between
from budgets.errors import LimitsError, ModelError

Z = [*np.linspace(-37, 37, 75), 1e-8, 3.3e-9, 1e-4, -1e-6]
P = (1e-4, 1e-3, 0.01, 0.05, 0.2, 0.5, 0.8, 0.95, 0.99, 0.999, 0.9999)


def exact_tail(z, nu):
    """Student's t in forty digits by mpmath; the incomplete beta function for the tail itself."""
    z = mp.mpf(float(z))
    if math.isinf(nu):
        return mp.ncdf(-z)
    nu = mp.mpf(nu)
    tail = mp.betainc(nu / 2, mp.mpf(1) / 2, 0, nu / (nu + z * z), regularized=True) / 2
    return tail if z >= 0 else 1 - tail


@pytest.mark.parametrize("nu", [0.7, 1, 1.0001, 2, 2.3, 5, 18.9987, 41.2, 300.5, 1e5, 1e9, math.inf])
def test_tails_agree_with_mpmath(nu):
    distribution = StudentT(nu)
    with mp.workdps(40):
        for z in Z:
            exact = exact_tail(z, nu)
            if exact > 1e-300:
                assert abs(distribution.upper_tail(float(z)) / exact - 1) < 1e-12, z
                assert abs(distribution.lower_tail(-float(z)) / exact - 1) < 1e-12, z


def test_the_scale_of_t_is_u_itself():
    # Computed for the project's rules: z = 1.96, nu = 8: normal 2.50 %, t 4.28 %.
    assert StudentT(math.inf).upper_tail(1.96) == pytest.approx(0.0250, abs=5e-5)
    assert StudentT(8).upper_tail(1.96) == pytest.approx(0.0428, abs=5e-5)
    # On a u inflated to the standard deviation of that t it would be 6.40 %, which is wrong.
    assert StudentT(8).upper_tail(1.96 / math.sqrt(8 / 6)) == pytest.approx(0.0640, abs=5e-5)


@pytest.mark.parametrize("nu", [1, 3.7, 41.2, math.inf])
def test_quantiles_undo_the_tails(nu):
    distribution = StudentT(nu)
    for p in (1e-9, 1e-4, 0.023, 0.3, 0.7):
        assert distribution.upper_tail(distribution.upper_quantile(p)) == pytest.approx(p, rel=1e-12)
        assert distribution.lower_tail(distribution.lower_quantile(p)) == pytest.approx(p, rel=1e-12)


def a_table(trials=1_000_000, probabilities=P):
    return Tabulated(probabilities, tuple(float(ndtri(p)) for p in probabilities), trials)


def test_a_table_of_normal_quantiles_is_the_normal_distribution():
    table, normal = a_table(), StudentT(math.inf)
    for z in (-3.5, -1.2, 0.0, 0.3, 2.4):
        assert table.upper_tail(z) == pytest.approx(normal.upper_tail(z), rel=1e-12)
        assert table.lower_tail(z) == pytest.approx(normal.lower_tail(z), rel=1e-12)
    for p in (2e-4, 0.05, 0.6):
        assert table.upper_quantile(p) == pytest.approx(normal.upper_quantile(p), rel=1e-12)
        assert table.lower_quantile(p) == pytest.approx(normal.lower_quantile(p), rel=1e-12)


def test_quantiles_of_draws_are_interpolated_well():
    """A gamma distribution: its own tails by scipy are the reference."""
    from scipy.stats import gamma

    shape = gamma(4.0)
    p = np.concatenate(
        [np.geomspace(1e-5, 0.1, 60), np.linspace(0.11, 0.89, 79), 1 - np.geomspace(0.1, 1e-5, 60)]
    )
    table = Tabulated(tuple(p), tuple(shape.ppf(p)), 10_000_000)
    for x in (0.3, 1.0, 3.0, 6.5, 12.0, 15.0):
        assert table.upper_tail(x) == pytest.approx(shape.sf(x), rel=2e-3)
        assert table.lower_tail(x) == pytest.approx(shape.cdf(x), rel=2e-3)


def test_no_event_in_all_trials_is_a_bound_and_never_zero():
    # Rule of three: no event in M trials, at most 3/M with 95 % (common practice, no source).
    seen = a_table(trials=10_000)
    assert seen.upper_tail(50.0) == seen.lower_tail(-50.0) == 3e-4
    assert seen.upper_tail(50.0) + seen.lower_tail(50.0) == pytest.approx(1)
    # A table that stops short of its trials: the probability of its last quantile.
    short = a_table(trials=10_000_000)
    assert short.upper_tail(50.0) == pytest.approx(1e-4)
    with pytest.raises(LimitsError, match=r"10000 trials cannot show a risk of 0\.0001.*0\.0003"):
        seen.upper_quantile(1e-4)
    with pytest.raises(LimitsError, match="More trials"):
        seen.lower_quantile(1 - 1e-4)


@pytest.mark.parametrize(
    ("p", "q", "trials", "words"),
    [
        ((0.5,), (0.0,), 1000, "at least two"),
        ((0.1, 0.9), (0.0,), 1000, "at least two"),
        ((0.1, 0.9), (1.0, 1.0), 1000, "increase"),
        ((0.9, 0.1), (0.0, 1.0), 1000, "increase"),
        ((0.1, 0.9), (0.0, math.inf), 1000, "increase"),
        ((0.0, 0.9), (0.0, 1.0), 1000, "between 0 and 1"),
        ((0.1, 0.9), (0.0, 1.0), 999, "1000 trials"),
    ],
)
def test_tables_that_are_none_are_refused(p, q, trials, words):
    with pytest.raises(ModelError, match=words):
        Tabulated(p, q, trials)


def test_a_table_survives_its_document():
    table = a_table()
    assert Tabulated.from_document(json.loads(json.dumps(table.to_document()))) == table


@given(
    st.floats(-30, 30), st.floats(-30, 30), st.sampled_from([StudentT(3.7), StudentT(math.inf), a_table()])
)
def test_probabilities_between_are_differences_of_tails(first, second, distribution):
    found = probability_between(distribution, first, second)
    expected = distribution.lower_tail(second) - distribution.lower_tail(first)
    assert found == pytest.approx(max(0.0, expected), abs=1e-12)
    many = probability_between(distribution, np.array([first, -40.0]), np.array([second, 40.0]))
    assert many[0] == found


def test_nothing_cancels_far_outside():
    with mp.workdps(60):
        exact = mp.ncdf(-20) - mp.ncdf(-28)
    for low, high in ((20.0, 28.0), (-28.0, -20.0)):
        assert probability_between(StudentT(math.inf), low, high) == pytest.approx(float(exact), rel=1e-12)
    assert float(ndtr(28.0) - ndtr(20.0)) == 0.0  # what the naive difference gives
