"""Speed of risk curves, beside a loop over scipy.integrate with the same integrands: shown, never asserted.

`pytest --benchmark-enable` measures.
"""

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import ndtr, stdtr

from budgets.conformity import Tolerance
from budgets.measurement_errors import MeasurementErrors
from budgets.production_laws import Production
from budgets.production_priors import ProductionPrior

LOWER, UPPER, MEAN, DEVIATION, U = 2.7, 3.2, 3.0, 0.08, 0.05
BANDS = np.linspace(0.0, 0.15, 100)
PRIOR = ProductionPrior("normal", MEAN, DEVIATION)


def loop(nu: float) -> list[tuple[float, float]]:
    """Return both risks point by point, each integral by quad; the distribution functions are scipy's C."""
    constant = 1 / (DEVIATION * math.sqrt(2 * math.pi))

    def error(z: float) -> float:
        return float(ndtr(z) if math.isinf(nu) else stdtr(nu, z))

    def one(band: float) -> tuple[float, float]:
        def density(x: float) -> float:
            return constant * math.exp(-0.5 * ((x - MEAN) / DEVIATION) ** 2)

        def accepted(x: float) -> float:
            return error((UPPER - band - x) / U) - error((LOWER + band - x) / U)

        consumers = quad(lambda x: density(x) * accepted(x), UPPER, math.inf)[0]
        consumers += quad(lambda x: density(x) * accepted(x), -math.inf, LOWER)[0]
        return consumers, quad(lambda x: density(x) * (1 - accepted(x)), LOWER, UPPER)[0]

    return [one(band) for band in BANDS]


def curve(nu: float) -> np.ndarray:
    production = Production(PRIOR, MeasurementErrors.of(U, 0.0, nu), Tolerance(LOWER, UPPER))
    rates = production.mean(production.rows(LOWER + BANDS, UPPER - BANDS))
    return np.column_stack(rates[:2])


@pytest.mark.parametrize("nu", [math.inf, 9.5], ids=["normal", "t"])
def test_a_curve_of_a_hundred_guard_bands(benchmark, nu):
    benchmark.group = f"global risks at a hundred guard bands, nu {nu}"
    np.testing.assert_allclose(benchmark(curve, nu), loop(nu), rtol=1e-6, atol=1e-9)


@pytest.mark.parametrize("nu", [math.inf, 9.5], ids=["normal", "t"])
def test_the_loop_over_scipy_integrate(benchmark, nu):
    benchmark.group = f"global risks at a hundred guard bands, nu {nu}"
    assert len(benchmark.pedantic(loop, (nu,), rounds=1)) == BANDS.size
