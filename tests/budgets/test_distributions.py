import math

import numpy as np
import pytest
from scipy import stats

from budgets.components import Component
from budgets.declarations import Declaration, evaluate
from budgets.distributions import SHAPES, check_shape, draws, excess, quantile, relative_half_width
from budgets.errors import ComponentError
from budgets.evidence.evaluation import Estimate


# The same distributions by scipy.stats, with a standard deviation of 1.
def a_trapezoid(ratio):
    half = math.sqrt(6 / (1 + ratio**2))
    return stats.trapezoid((1 - ratio) / 2, (1 + ratio) / 2, -half, 2 * half)


REFERENCE = {
    ("normal", None): stats.norm(),
    ("rectangular", None): stats.uniform(-math.sqrt(3), 2 * math.sqrt(3)),
    ("triangular", None): stats.triang(0.5, -math.sqrt(6), 2 * math.sqrt(6)),
    ("arcsine", None): stats.arcsine(-math.sqrt(2), 2 * math.sqrt(2)),
    **{("trapezoidal", ratio): a_trapezoid(ratio) for ratio in (0.0, 0.3, 0.8, 1.0)},
}


@pytest.mark.parametrize(("shape", "ratio"), REFERENCE)
def test_moments_quantiles_and_draws_agree_with_scipy(shape, ratio):
    exact = REFERENCE[shape, ratio]
    assert exact.std() == pytest.approx(1)
    assert excess(shape, ratio) == pytest.approx(float(exact.stats(moments="k")), abs=1e-9)
    for p in (0.001, 0.025, 0.3, 0.5, 0.62, 0.975, 0.9999):
        assert quantile(shape, p, top_to_base_ratio=ratio) == pytest.approx(exact.ppf(p), abs=1e-9)
    drawn = draws(shape, 2.0, 20_000, np.random.default_rng(6), top_to_base_ratio=ratio)
    assert stats.kstest(drawn / 2.0, exact.cdf).pvalue > 0.001


def test_finite_degrees_of_freedom_give_student():
    assert quantile("normal", 0.975, degrees_of_freedom=9) == pytest.approx(stats.t(9).ppf(0.975))
    drawn = draws("normal", 0.5, (100, 200), np.random.default_rng(6), degrees_of_freedom=4)
    assert drawn.shape == (100, 200)
    assert stats.kstest(drawn.ravel() / 0.5, stats.t(4).cdf).pvalue > 0.001


@pytest.mark.parametrize(
    ("shape", "ratio", "where"),
    [
        ("cosine", None, ("distribution",)),
        ("normal", 0.5, ("top_to_base_ratio",)),
        ("trapezoidal", 1.5, ("top_to_base_ratio",)),
    ],
)
def test_shapes_are_checked(shape, ratio, where):
    with pytest.raises(ComponentError) as caught:
        check_shape(shape, ratio)
    assert caught.value.where == where
    for known in SHAPES:
        check_shape(known)


@pytest.mark.parametrize(
    "call",
    [
        lambda: relative_half_width("normal"),
        lambda: excess("trapezoidal"),
        lambda: quantile("trapezoidal", 0.5),
    ],
)
def test_what_a_shape_lacks_is_said(call):
    with pytest.raises(ComponentError):
        call()


@pytest.mark.parametrize(
    ("declaration", "shape", "ratio"),
    [
        (Declaration("half_width", 0.1, distribution="rectangular"), "rectangular", None),
        (
            Declaration("half_width", 0.1, distribution="trapezoidal", top_to_base_ratio=0.5),
            "trapezoidal",
            0.5,
        ),
        (Declaration("half_width", 0.1, distribution="normal", coverage_probability=0.95), "normal", None),
        (Declaration("resolution", 0.1), "rectangular", None),
        (Declaration("expanded", 0.1, coverage_factor=2.0), "normal", None),
        (Declaration("relative", 0.1, figure="half_width", distribution="arcsine"), "arcsine", None),
    ],
)
def test_a_declared_shape_reaches_the_component(declaration, shape, ratio):
    estimate = evaluate(declaration, code="declared").estimate()
    assert Estimate.from_document(estimate.to_document()) == estimate
    component = Component.from_estimate("d", "moisture", None, estimate, "B")
    assert (component.distribution, component.top_to_base_ratio) == (shape, ratio)
    other = Component.from_estimate("d", "moisture", None, estimate, "B", distribution="normal")
    assert (other.distribution, other.top_to_base_ratio) == ("normal", None)
