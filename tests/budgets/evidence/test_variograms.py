import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, stats
from scipy.signal import lfilter

from budgets.errors import EvidenceError
from budgets.evidence.variograms import (
    SCHEMES,
    cycle,
    fold_nugget,
    periodogram,
    quadratic_degrees_of_freedom,
    sampling_weights,
    variogram,
)


def autoregressive(generator, phi, size):
    noise = generator.normal(0, math.sqrt(1 - phi * phi), size + 400)
    return lfilter([1], [1, -phi], noise)[400:]


def test_the_variogram_is_half_the_mean_squared_difference():
    x = np.random.default_rng(1).normal(1e6, 1, 60)
    expected = [((x[k:] - x[:-k]) ** 2).mean() / 2 for k in range(1, 31)]
    assert variogram(x, 30)[1:] == pytest.approx(expected, rel=1e-8)


def test_fifty_systematic_increments_of_an_autoregressive_lot():
    """True value 0.058 sigma for phi = 0.95 and a lot of 1000, checked here by sampling such lots."""
    found = 1 - 0.95 ** np.arange(1001.0)
    computed = math.sqrt(sampling_weights(1000, 50, "systematic", 1000) @ found)
    assert computed == pytest.approx(0.058, abs=0.0005)
    generator = np.random.default_rng(2)
    errors = []
    for _ in range(4000):
        lot = autoregressive(generator, 0.95, 1000)
        errors.append(lot[generator.integers(20) :: 20].mean() - lot.mean())
    # Increments of one reading's length: the lot is a sum, not an integral, which matters little here.
    assert computed == pytest.approx(np.std(errors), rel=0.04)


def test_a_cycle_that_meets_every_increment_does_not_average_out():
    found = 1 - np.cos(2 * np.pi * np.arange(1001) / 20)
    assert sampling_weights(1000, 50, "systematic", 1000) @ found == pytest.approx(1.0, abs=1e-9)
    assert sampling_weights(1000, 50, "stratified", 1000) @ found == pytest.approx(1 / 50, rel=1e-6)


def test_the_short_form_of_the_literature_ignores_cross_terms():
    """[2 w(j/2) - w'(j)]/N: 3 to 10 % low for a slow process, N times too small where a cycle meets j.

    w(j) = (1/j) int_0^j v, w'(j) = (2/j^2) int_0^j t w(t) dt, by quadrature.
    """

    def short_form(v, j, number):
        def w(length):
            return integrate.quad(v, 0, length)[0] / length

        spread = 2 / j**2 * integrate.quad(lambda t: t * w(t), 0, j)[0]
        return (2 * w(j / 2) - spread) / number

    for phi in (0.9, 0.95, 0.98):
        exact = sampling_weights(1000, 50, "systematic", 1000) @ (1 - phi ** np.arange(1001.0))
        low = short_form(lambda s, phi=phi: 1 - phi**s, 20, 50) / exact
        assert 0.9 <= low <= 0.975, (phi, low)
    found = 1 - np.cos(2 * np.pi * np.arange(1001) / 20)
    exact = sampling_weights(1000, 50, "systematic", 1000) @ found
    assert exact == pytest.approx(1.0, abs=1e-9)
    assert short_form(lambda s: 1 - math.cos(2 * math.pi * s / 20), 20, 50) == pytest.approx(0.02, rel=1e-6)


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize(("lot", "increments"), [(20.0, 4), (17.3, 5), (0.6, 3), (30.0, 1)])
def test_the_weights_are_those_of_the_integrals(scheme, lot, increments):
    nodes = np.random.default_rng(3).uniform(0.5, 1.5, 31)

    def v(s):
        return float(np.interp(s, np.arange(31), nodes))

    def within(length):
        marks = [k for k in range(31) if k < length]
        return 2 / length**2 * integrate.quad(lambda s: (length - s) * v(s), 0, length, points=marks)[0]

    step = lot / increments
    expected = {
        "random": within(lot) / increments,
        "stratified": within(step) / increments,
        "systematic": within(lot)
        - 2 / increments**2 * sum((increments - k) * v(k * step) for k in range(1, increments)),
    }[scheme]
    weights = sampling_weights(lot, increments, scheme, 30)
    assert weights @ nodes == pytest.approx(expected, rel=1e-6)
    # So that a constant variance, the analyzer's, has its weight of 1/N.
    assert weights.sum() == pytest.approx(1 / increments)


def test_stratified_increments_are_those_of_a_simulation():
    generator = np.random.default_rng(4)
    errors = []
    for _ in range(4000):
        lot = autoregressive(generator, 0.9, 200)
        errors.append(lot[np.arange(0, 200, 20) + generator.integers(0, 20, 10)].mean() - lot.mean())
    computed = sampling_weights(200, 10, "stratified", 200) @ (1 - 0.9 ** np.arange(201.0))
    assert computed == pytest.approx(np.var(errors), rel=0.08)


def test_the_nugget_is_extrapolated_but_not_beyond_what_it_can_be():
    weights = np.array([0.5, 0.2, 0.1, 0.1])
    line = np.array([0.0, 0.3, 0.4, 0.5])
    folded, nugget = fold_nugget(weights, line, 0.0)
    assert nugget == pytest.approx(0.2)
    assert folded @ line == pytest.approx(weights @ np.array([0.2, 0.3, 0.4, 0.5]))
    falling = np.array([0.0, 0.4, 0.3, 0.5])
    folded, nugget = fold_nugget(weights, falling, 0.0)
    assert nugget == 0.4 and folded @ falling == pytest.approx(weights @ np.array([0.4, 0.4, 0.3, 0.5]))
    steep = np.array([0.0, 0.1, 0.4, 0.5])
    folded, nugget = fold_nugget(weights, steep, 0.05)
    assert nugget == 0.05 and folded.tolist() == [0.0, 0.2, 0.1, 0.1]


@settings(max_examples=25, deadline=None)
@given(st.integers(2, 60), st.integers(0, 1000))
def test_the_periodogram_adds_up_to_the_variance(n, seed):
    x = np.random.default_rng(seed).normal(size=2 * n + 1)
    assert 2 * periodogram(x).sum() / len(x) == pytest.approx(x.var(), rel=1e-9)


def test_independent_values_have_the_degrees_of_freedom_of_their_variance():
    generator = np.random.default_rng(5)
    found = [quadratic_degrees_of_freedom(periodogram(generator.normal(size=401))) for _ in range(200)]
    assert np.mean(found) == pytest.approx(400, rel=0.03)
    assert quadratic_degrees_of_freedom(np.zeros(5)) == 1
    assert quadratic_degrees_of_freedom(np.array([3.0])) == 2


def test_a_cycle_is_found_and_slow_variation_is_none():
    generator = np.random.default_rng(6)
    wave = 1.2 * np.sin(2 * np.pi * np.arange(500) / 12.3)
    found = [cycle(periodogram(autoregressive(generator, 0.9, 500) + wave)) for _ in range(50)]
    assert sum(abs((number or 0) - 500 / 12.3) < 1 for number in found) >= 48
    for phi in (0.0, 0.9, 0.99):
        assert (
            sum(cycle(periodogram(autoregressive(generator, phi, 500))) is not None for _ in range(50)) <= 2
        )
    assert cycle(np.ones(20)) is None
    assert stats.expon.sf(1.5 * math.log(249 / 0.001)) < 0.001 / 249


@pytest.mark.parametrize(
    ("arguments", "where"),
    [((31, 3, "random", 30), "lot_length"), ((20, 3, "zigzag", 30), "scheme")],
)
def test_what_the_variogram_does_not_know_is_refused(arguments, where):
    with pytest.raises(EvidenceError) as caught:
        sampling_weights(*arguments)
    assert caught.value.where == ("options", where)
