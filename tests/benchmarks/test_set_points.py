"""How long a set point takes, and twelve options with all their pairs; beside one call of the computation."""

import numpy as np
import pytest

from budgets.budget import Budget, Count, Procedure
from budgets.changed_measurements import ChangedComponent, ChangedLooks, ReferenceDeterminations
from budgets.components import Component
from budgets.conformity import Tolerance
from budgets.decision_rules import DecisionRule
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.improvements import Option, Situation, improvements
from budgets.lot_procedures import Demand, LotProcedure
from budgets.money import Money
from budgets.planned_measurements import planned_measurement
from budgets.process_variation import ProcessVariation
from budgets.set_point_figures import Production
from budgets.set_point_search import Wanted
from budgets.set_points import set_points

RISK = DecisionRule("guarded_by_specific_risk", largest_risk=0.05)
FACTOR = DecisionRule("guarded_by_factor", multiple=1.0, coverage_probability=0.95, sides=1)
DEMANDS = (
    Demand("legal", Tolerance(None, 5.0), FACTOR, legal=True),
    Demand("customer-b", Tolerance(None, 3.2), RISK),
)
PROCESS = ProcessVariation(2.9, 0.08, 0.03)
MONEY = Money(25.0, 2000.0, 120.0, 300.0, 40.0, 20_000.0, 1500.0)
WANTED = Wanted(0.95, 0.01)


def line(code, u, nu, level, quantity="moisture"):
    return Component(code, quantity, level, (Term(1.0, MeanSquare(code, u * u, nu)),), "A")


BUDGET = Budget(
    (
        line("repeatability", 0.03, 80, "reading"),
        line("sampling", 0.03, 8, "sample"),
        line("remainder", 0.05, 40, "lot"),
        line("bias", 0.012, 59, "calibration", "bias"),
        line("trueness", 0.05, 8, "reference", "bias"),
    ),
    Procedure(Count(1, 1, 3), Count(1, 2, 4)),
    0.95,
    0.04,
    "corrected",
    (2.2, 4.5),
)
OPTIONS = (
    *(Option(f"readings-{n}", ChangedLooks(readings_per_sample=n), 2.0 * n) for n in (3, 4, 6)),
    *(Option(f"samples-{n}", ChangedLooks(samples=n), 10.0 * n) for n in (2, 3)),
    Option("increments", ChangedLooks(increments_per_sample=4), 3.0),
    *(
        Option(f"{code}-better", ChangedComponent(code, factor=0.6), 0.0, 5000.0)
        for code in ("trueness", "remainder")
    ),
    *(
        Option(f"{code}-half", ChangedComponent(code, factor=0.5), 0.0, 9000.0)
        for code in ("sampling", "repeatability")
    ),
    Option("determinations", ReferenceDeterminations("bias", 0.05, 2, 1, 60), 0.0, 500.0),
    Option("known-better", ChangedComponent("bias", factor=0.9, degrees_of_freedom=200), 0.0, 800.0),
)


@pytest.mark.parametrize("looks", [1, 2])
def test_a_set_point(benchmark, looks):
    def answer():
        measurement = planned_measurement(BUDGET, LotProcedure(1, 2, looks=looks), DEMANDS)
        return set_points(Production(PROCESS, measurement, MONEY), WANTED)

    found = benchmark(answer)
    assert found.nearest is not None


def test_twelve_options_with_all_pairs(benchmark):
    situation = Situation(BUDGET, LotProcedure(1, 2), DEMANDS, PROCESS, MONEY, WANTED)
    found = benchmark(improvements, situation, OPTIONS)
    assert len(found.ranked) >= 12 + 50
    assert not found.impossible


def test_bare_65_set_points(benchmark):
    """What one round of a search costs: the distribution of the readings and the risk at 65 set points."""
    measurement = planned_measurement(BUDGET, LotProcedure(1, 2), DEMANDS)
    production = Production(PROCESS, measurement, MONEY)
    found = benchmark(production.outcomes, np.linspace(2.8, 3.1, 65))
    assert (np.diff(found.release_rate) < 0).all()
