"""Speed of the law of propagation, beside a loop over the package `uncertainties`: shown, never asserted.

`pytest --benchmark-enable` measures. One evaluation of a compiled expression with ten components should stay
within 200 microseconds; ten thousand "what if" in one call should be 50 times faster than the loop.
"""

import time

import numpy as np
import pytest
import uncertainties

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import Counts, combined, compiled

NAMES = "abcdefghij"
AT = {name: 1.0 + index / 7 for index, name in enumerate(NAMES)}
EXPRESSION = "a*b/(c + d) + exp(e/10)*f - g**2/h + sqrt(i)*j"
MANY = 10_000


def a_budget() -> Budget:
    components = tuple(
        Component(name, name, "lot", (Term(1.0, MeanSquare(name, 0.01**2 * (1 + k), 5 + k)),), "A")
        for k, name in enumerate(NAMES)
    )
    once = Procedure(Count(1, 1, 1), Count(1, 1, 1))
    model = MeasurementModel(EXPRESSION, tuple(Quantity(name) for name in NAMES))
    return Budget(components, once, 0.95, None, "corrected", (-1e3, 1e3), model)


def many_estimates() -> dict[str, np.ndarray]:
    generator = np.random.default_rng(1)
    return {name: value + generator.uniform(0, 0.1, MANY) for name, value in AT.items()}


def loop(budget: Budget, estimates: dict[str, np.ndarray], number: int) -> list[float]:
    deviations = {c.quantity: c.standard_uncertainty for c in budget.components}
    return [
        budget.model.uncertain_value(
            {name: uncertainties.ufloat(values[i], deviations[name]) for name, values in estimates.items()}
        ).std_dev
        for i in range(number)
    ]


def test_one_evaluation_of_a_compiled_expression(benchmark):
    law = compiled(a_budget(), Counts((1,)))
    benchmark.group = "one evaluation of ten components"
    assert benchmark(law.at, AT).standard_uncertainty > 0


def test_one_combination_with_its_explanation(benchmark):
    budget = a_budget()
    benchmark.group = "one evaluation of ten components"
    assert benchmark(combined, budget, Counts((1,)), estimates=AT).standard_uncertainty > 0


def test_one_evaluation_of_the_package_uncertainties(benchmark):
    budget, estimates = a_budget(), {name: np.array([value]) for name, value in AT.items()}
    benchmark.group = "one evaluation of ten components"
    assert benchmark(loop, budget, estimates, 1)[0] > 0


def test_ten_thousand_what_if_in_one_call(benchmark):
    budget, estimates = a_budget(), many_estimates()
    law = compiled(budget, Counts((1,)))
    benchmark.group = "ten thousand what if"
    few = 200
    loop(budget, estimates, 1)
    start = time.perf_counter()
    looped = loop(budget, estimates, few)
    slow = (time.perf_counter() - start) * MANY / few
    start = time.perf_counter()
    law.at_many(estimates)
    benchmark.extra_info["times faster than the loop"] = slow / (time.perf_counter() - start)
    found = benchmark(law.at_many, estimates).standard_uncertainties
    assert found[:few] == pytest.approx(looped, rel=1e-9)


@pytest.mark.parametrize("number", [5, 50])
def test_the_cost_by_the_number_of_components(benchmark, number):
    names = [f"x{i}" for i in range(number)]
    model = MeasurementModel("+".join(f"{n}*{n}" for n in names), tuple(Quantity(n) for n in names))
    components = tuple(Component(n, n, "lot", (Term(1.0, MeanSquare(n, 0.01, 9)),), "A") for n in names)
    once = Procedure(Count(1, 1, 1), Count(1, 1, 1))
    law = compiled(Budget(components, once, 0.95, None, "corrected", (0.0, 1.0), model), Counts((1,)))
    benchmark.group = "five and fifty components"
    assert benchmark(law.at, dict.fromkeys(names, 1.0)).estimate == number
