"""A million Monte Carlo trials of a budget, beside numpy drawing, adding and partly sorting the same numbers.

`pytest --benchmark-enable` measures: the budget should take less than twice as long.
"""

import math

import numpy as np

from budgets.budget import Budget, Count, Procedure
from budgets.budget_trials import budget_trials
from budgets.components import Component
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.monte_carlo import monte_carlo
from budgets.propagation import Counts

TRIALS = 1_000_000
# Shape, standard uncertainty and degrees of freedom of eight components.
EIGHT = [
    ("normal", 0.04, 30),
    ("normal", 0.05, 40),
    ("normal", 0.02, 59),
    ("normal", 0.08, math.inf),
    ("rectangular", 0.03, math.inf),
    ("rectangular", 0.02, math.inf),
    ("triangular", 0.04, math.inf),
    ("arcsine", 0.01, math.inf),
]


def a_budget() -> Budget:
    components = tuple(
        Component(f"c{k}", "moisture", "lot", (Term(1.0, MeanSquare(f"c{k}", u * u, nu)),), "B", shape)
        for k, (shape, u, nu) in enumerate(EIGHT)
    )
    once = Procedure(Count(1, 1, 1), Count(1, 1, 1))
    return Budget(components, once, 0.95, None, "corrected", (0.0, 10.0))


def bare(generator: np.random.Generator) -> tuple[float, float]:
    total = np.zeros(TRIALS)
    for shape, u, nu in EIGHT:
        if shape == "normal":
            drawn = generator.standard_normal(TRIALS) if math.isinf(nu) else generator.standard_t(nu, TRIALS)
        elif shape == "triangular":
            drawn = math.sqrt(6) * (generator.random(TRIALS) - generator.random(TRIALS))
        elif shape == "rectangular":
            drawn = math.sqrt(3) * (2 * generator.random(TRIALS) - 1)
        else:
            drawn = math.sqrt(2) * np.sin(math.pi * (generator.random(TRIALS) - 0.5))
        total += u * drawn
    ends = (25_000, 975_000)
    total.partition(ends)
    return float(total[ends[0]]), float(total[ends[1]])


def test_a_million_trials_of_eight_components(benchmark):
    benchmark.group = "a million Monte Carlo trials"
    drawn = budget_trials(a_budget(), Counts((1,)), estimates={"moisture": 3.0})
    found = benchmark.pedantic(
        monte_carlo,
        args=(drawn,),
        kwargs={"coverage_probability": 0.95, "seed": 1, "trials": TRIALS},
        rounds=5,
    )
    assert found.trials == TRIALS


def test_the_same_numbers_drawn_added_and_partly_sorted(benchmark):
    benchmark.group = "a million Monte Carlo trials"
    low, high = benchmark.pedantic(bare, args=(np.random.default_rng(1),), rounds=5)
    assert low < 0 < high
