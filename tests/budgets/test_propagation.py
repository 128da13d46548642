import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from mpmath import mp

from budgets.budget import Count, Procedure
from budgets.errors import LimitsError, ProcedureError
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.levels import LEVELS
from budgets.propagation import (
    Counts,
    averaging_weights,
    combined,
    coverage_factor,
    expanded_uncertainty,
    upper_quantile,
)

COUNTS = st.lists(st.integers(1, 9), min_size=1, max_size=6).map(tuple)


@pytest.mark.parametrize("readings", [(), (2, 0)])
def test_nothing_measured_is_refused(readings):
    with pytest.raises(ProcedureError):
        Counts(readings)


@pytest.mark.parametrize("readings", [(1,), (2, 2, 2, 2), (5,), (2, 1)])
def test_counts_outside_of_the_procedure_are_refused(readings):
    procedure = Procedure(Count(1, 1, 3), Count(2, 2, 4))
    Counts((2, 4)).check(procedure)
    with pytest.raises(ProcedureError, match="the procedure of the budget allows"):
        Counts(readings).check(procedure)


@given(COUNTS)
def test_weights_are_those_of_a_simulated_mean_of_sample_means(readings):
    # The rule itself: sum over groups of (sum of weights in the group)^2.
    samples = len(readings)
    w = [[1 / samples / n] * n for n in readings]
    weights = averaging_weights(Counts(readings))
    assert weights["reading"] == pytest.approx(sum(x * x for row in w for x in row))
    for level in ("presentation", "increment", "sample"):
        assert weights[level] == pytest.approx(sum(sum(row) ** 2 for row in w))
    for level in LEVELS[4:]:
        assert weights[level] == 1.0


def test_the_combination_agrees_with_a_simulation(a_budget):
    """Independent check by simulating readings with errors drawn anew at their levels."""
    budget = a_budget()
    result = combined(budget, Counts((2, 4)))
    generator = np.random.default_rng(7)
    size = 200_000
    total = generator.normal(0, 0.05, size) - generator.normal(0, 0.02, size)
    for number in (2, 4):
        total += generator.normal(0, 0.04, (size, number)).mean(axis=1) / 2
    assert result.standard_uncertainty == pytest.approx(total.std(), rel=0.01)
    assert sum(line.share_of_variance for line in result.contributions) == pytest.approx(1)
    assert result.variance == pytest.approx(sum(line.contribution**2 for line in result.contributions))


def test_coefficients_of_shared_mean_squares_are_added_over_the_budget(a_budget, a_component):
    sep, ref, rep = MeanSquare("sep", 0.09, 59), MeanSquare("ref", 0.02, 20), MeanSquare("rep", 0.04, 10)
    budget = a_budget(
        components=(
            a_component("rest", level="lot", terms=(Term(1, sep), Term(-1, ref), Term(-1, rep))),
            a_component("r", terms=(Term(1, rep),)),
        ),
        bias=None,
    )
    result = combined(budget, Counts((1,)))
    assert result.variance == pytest.approx(0.07)
    assert result.effective_degrees_of_freedom == pytest.approx(31.2, abs=0.05)


def test_only_the_weight_beyond_the_study_counts(a_budget, a_component):
    whole = a_component("sep", 0.06, contains=("repeatability", "remainder"), level="lot")
    beyond = a_component("beyond", 0.04, contains=("repeatability",), covered_weight=0.5)
    budget = a_budget(components=(whole, beyond), bias=None)
    # SEP^2 + s_r^2 max(0, 1/n - 1/n_r)
    assert combined(budget, Counts((1,))).variance == pytest.approx(0.06**2 + 0.5 * 0.04**2)
    assert combined(budget, Counts((4,))).variance == pytest.approx(0.06**2)


@given(COUNTS, st.integers(0, 5))
def test_more_readings_never_make_it_worse(readings, index):
    more = list(readings)
    more[index % len(more)] += 1
    assert averaging_weights(Counts(tuple(more)))["reading"] <= averaging_weights(Counts(readings))["reading"]


@pytest.mark.parametrize("nu", [1.0, 1.7, 4.44, 9.0, 41.2, 1e4])
@pytest.mark.parametrize("p", [0.68, 0.95, 0.9999])
def test_quantiles_agree_with_mpmath(nu, p):
    """Mpmath: the tail beyond k must be the tail asked for; its error over the density is that of k."""
    with mp.workdps(40):
        for sides in (1, 2):
            k = coverage_factor(p, nu, sides=sides)
            x = mp.mpf(nu) / (nu + mp.mpf(k) ** 2)
            tail = mp.betainc(mp.mpf(nu) / 2, mp.mpf(1) / 2, 0, x, regularized=True) / 2
            asked = (1 - mp.mpf(p)) / sides
            density = mp.gamma((nu + mp.mpf(1)) / 2) / mp.gamma(mp.mpf(nu) / 2) / mp.sqrt(nu * mp.pi)
            density *= (1 + mp.mpf(k) ** 2 / nu) ** (-(mp.mpf(nu) + 1) / 2)
            assert abs((tail - asked) / density / k) < 1e-12


@pytest.mark.parametrize("tail", [1e-9, 0.0013, 0.05, 0.4])
def test_normal_quantiles_agree_with_mpmath(tail):
    with mp.workdps(40):
        exact = mp.sqrt(2) * mp.erfinv(1 - 2 * mp.mpf(tail))
        assert abs(upper_quantile(tail, math.inf) / exact - 1) < 1e-13


def test_leaving_a_well_known_component_out_may_enlarge_the_expanded_uncertainty():
    # Computed for the project's rules: u = 1, nu = 2: 4.30; with 0.7 known added: nu 4.44, U = 3.26.
    assert expanded_uncertainty(1, 0.95, 2) == pytest.approx(4.30, abs=0.005)
    assert expanded_uncertainty(math.sqrt(1.49), 0.95, 1.49**2 / 0.5) == pytest.approx(3.26, abs=0.005)


@pytest.mark.parametrize(("p", "sides"), [(0.0, 2), (1.0, 2), (0.5, 1), (0.95, 3), (math.nan, 2)])
def test_impossible_coverage_is_refused(p, sides):
    with pytest.raises(LimitsError):
        coverage_factor(p, 10, sides=sides)
