"""The run as a whole: intervals against scipy, the promise of the stopping rule, repeatability, bounds."""

import math

import numpy as np
import pytest
from scipy import stats

from budgets.errors import LimitsError, ModelError
from budgets.input_distributions import Bounded, Normal
from budgets.joint_distributions import JointNormal
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.monte_carlo import PROMISE, monte_carlo
from budgets.trials import Trials, model_trials

NORMAL = Trials(lambda generator, size: generator.standard_normal(size))


def student(freedom):
    return Trials(lambda generator, size: generator.standard_t(freedom, size), freedom)


def test_intervals_of_a_skew_distribution():
    """Exponential: the shortest interval begins at zero, the symmetric one does not."""
    drawn = Trials(lambda generator, size: generator.standard_exponential(size))
    found = monte_carlo(drawn, coverage_probability=0.9, seed=3, trials=400_000, probabilities=(0.5, 0.99))
    exact = stats.expon()
    assert found.symmetric == pytest.approx(exact.interval(0.9), abs=0.02)
    assert found.shortest == pytest.approx((0.0, exact.ppf(0.9)), abs=0.02)
    assert (found.mean, found.standard_deviation) == pytest.approx((1, 1), abs=0.01)
    assert found.median == found.quantiles[0] == pytest.approx(math.log(2), abs=0.01)
    assert found.quantiles[1] == pytest.approx(exact.ppf(0.99), abs=0.06)
    assert found.tolerance is found.holds_tolerance is None


def test_the_extremes_are_the_first_and_the_last_rank():
    found = monte_carlo(NORMAL, coverage_probability=0.95, seed=3, trials=10_000, probabilities=(0, 1))
    blocks = np.random.Generator(np.random.PCG64(np.random.SeedSequence(3, spawn_key=(0,))))
    whole = blocks.standard_normal(10_000)
    assert found.quantiles == (whole.min(), whole.max())


@pytest.mark.slow
def test_the_stopping_rule_keeps_its_promise():
    """JCGM 101, 7.9.4 would miss with about 80 of these seeds (mathematics of the project, rule 25)."""
    tolerance, kept = 0.05, 0
    exact = (0.0, 1.0, *stats.norm.interval(0.95))
    for seed in range(1000):
        found = monte_carlo(NORMAL, coverage_probability=0.95, seed=seed, tolerance=tolerance)
        figures = (found.mean, found.standard_deviation, *found.symmetric)
        kept += max(abs(a - b) for a, b in zip(figures, exact, strict=True)) <= tolerance
        assert found.holds_tolerance
    assert kept >= 1000 * PROMISE


def test_scatter_is_what_the_figures_scatter_by():
    runs = [monte_carlo(NORMAL, coverage_probability=0.9, seed=s, trials=32_768) for s in range(60)]
    for name, figures in (
        ("mean", [run.mean for run in runs]),
        ("standard_deviation", [run.standard_deviation for run in runs]),
        ("lower", [run.symmetric[0] for run in runs]),
        ("upper", [run.symmetric[1] for run in runs]),
    ):
        stated = np.mean([getattr(run.scatter, name) for run in runs])
        assert stated == pytest.approx(np.std(figures, ddof=1), rel=0.3)


def test_the_same_seed_gives_the_same_and_another_one_not():
    first, again, other = (
        monte_carlo(NORMAL, coverage_probability=0.95, seed=seed, tolerance=0.03) for seed in (5, 5, 6)
    )
    assert first == again
    assert first.symmetric != other.symmetric


@pytest.mark.parametrize(
    ("freedom", "has_mean", "has_deviation", "mean_promised", "deviation_promised"),
    [
        (1.0, False, False, False, False),
        (2.0, True, False, False, False),
        (3.0, True, True, False, False),
        (6.0, True, True, True, False),
        (9.0, True, True, True, True),
    ],
)
def test_what_few_degrees_of_freedom_leave(
    freedom, has_mean, has_deviation, mean_promised, deviation_promised
):
    found = monte_carlo(student(freedom), coverage_probability=0.95, seed=2, tolerance=0.2)
    assert (found.mean is not None, found.standard_deviation is not None) == (has_mean, has_deviation)
    assert (found.scatter.mean is not None) == mean_promised
    assert (found.scatter.standard_deviation is not None) == deviation_promised
    assert found.symmetric == pytest.approx(stats.t(freedom).interval(0.95), abs=0.2)


def test_a_bound_on_the_trials_is_kept_and_said():
    found = monte_carlo(
        NORMAL, coverage_probability=0.95, seed=1, tolerance=0.001, most_trials=200_000, probabilities=(0.3,)
    )
    assert (found.trials, found.holds_tolerance) == (200_000, False)
    # Fewer than the first stage takes: nothing is known of the scatter, so nothing is promised.
    few = monte_carlo(NORMAL, coverage_probability=0.95, seed=1, tolerance=9.0, most_trials=10_000)
    assert (few.trials, few.holds_tolerance, few.scatter) == (10_000, False, None)


def test_a_wide_coverage_takes_larger_batches():
    found = monte_carlo(NORMAL, coverage_probability=0.999, seed=1, tolerance=0.2)
    assert found.trials == 32 * 32_768 and found.holds_tolerance
    assert found.symmetric == pytest.approx(stats.norm.interval(0.999), abs=0.2)


def test_more_trials_than_are_kept():
    found = monte_carlo(NORMAL, coverage_probability=0.95, seed=1, trials=1_500_000)
    assert found.symmetric == pytest.approx(stats.norm.interval(0.95), abs=0.01)
    assert found.shortest == pytest.approx(stats.norm.interval(0.95), abs=0.05)
    assert found.shortest[1] - found.shortest[0] <= found.symmetric[1] - found.symmetric[0]


def test_a_model_by_its_distributions():
    """The product of a normal and a rectangular quantity, by numerical integration."""
    model = MeasurementModel("a*b", (Quantity("a"), Quantity("b", source="given", estimate=2.0)))
    known = {"a": Normal(10.0, 0.5), "b": Bounded("rectangular", 1.0, 3.0)}
    found = monte_carlo(model_trials(model, known), coverage_probability=0.95, seed=1, trials=500_000)
    b = np.linspace(1, 3, 20_001)

    def probability(y):
        return np.trapezoid(stats.norm(10, 0.5).cdf(y / b), b) / 2

    assert [probability(y) for y in found.symmetric] == pytest.approx([0.025, 0.975], abs=0.001)
    fixed = monte_carlo(
        model_trials(model, {"a": known["a"]}), coverage_probability=0.95, seed=1, trials=100_000
    )
    assert fixed.standard_deviation == pytest.approx(1.0, rel=0.02)


def test_quantities_that_are_drawn_together():
    model = MeasurementModel("a - b", (Quantity("a"), Quantity("b")))
    joint = JointNormal(("a", "b"), (1.0, 0.0), ((0.01, 0.009), (0.009, 0.01)))
    found = monte_carlo(
        model_trials(model, {}, joint=[joint]), coverage_probability=0.95, seed=1, trials=200_000
    )
    assert found.standard_deviation == pytest.approx(math.sqrt(0.002), rel=0.01)


def test_distributions_must_be_those_of_the_model():
    model = MeasurementModel("a - b", (Quantity("a"), Quantity("b")))
    one = Normal(0, 1)
    joint = JointNormal(("a", "b"), (0, 0), ((1, 0), (0, 1)))
    for inputs, more, where in (
        ({"a": one}, (), ("inputs", "b")),
        ({"a": one, "b": one, "c": one}, (), ("inputs", "c")),
        ({"a": one}, (joint,), ("inputs", "a")),
    ):
        with pytest.raises(ModelError) as caught:
            model_trials(model, inputs, joint=more)
        assert caught.value.where == where


def test_a_model_without_a_value_at_a_trial():
    model = MeasurementModel("ln(a)", (Quantity("a"),))
    drawn = model_trials(model, {"a": Normal(1.0, 0.5)})
    with pytest.raises(ModelError, match=r"Monte Carlo trial .* reach too far"):
        monte_carlo(drawn, coverage_probability=0.95, seed=1, trials=100_000)


@pytest.mark.parametrize(
    ("changes", "where"),
    [
        ({"coverage_probability": 0.9999}, "coverage_probability"),
        ({"coverage_probability": 0.0}, "coverage_probability"),
        ({"seed": -1}, "seed"),
        ({"trials": 100_000, "tolerance": 0.1}, "trials"),
        ({"trials": None}, "trials"),
        ({"trials": 1_000}, "trials"),
        ({"trials": 100_000, "most_trials": 50_000}, "trials"),
        ({"most_trials": 1_000}, "most_trials"),
        ({"most_trials": 10**10}, "most_trials"),
        ({"trials": None, "tolerance": 0.0}, "tolerance"),
        ({"trials": None, "tolerance": math.inf}, "tolerance"),
        ({"probabilities": (0.5, 1.1)}, "probabilities"),
    ],
)
def test_numbers_out_of_range(changes, where):
    given = {"coverage_probability": 0.95, "seed": 1, "trials": 100_000, **changes}
    with pytest.raises(LimitsError) as caught:
        monte_carlo(NORMAL, **given)
    assert caught.value.where == (where,)
