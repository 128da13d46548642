"""Short ways to the budgets of published examples."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.correlations import Correlation
from budgets.declarations import Declaration, evaluate
from budgets.evidence.evaluation import MeanSquare, Term
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import CombinedUncertainty, Counts, combined

_ONCE = Procedure(Count(1, 1, 1), Count(1, 1, 1))
_ANYWHERE = (-1e300, 1e300)


def stated(declaration: Declaration) -> float:
    """Return the standard uncertainty of a declaration."""
    value = evaluate(declaration, code="stated").estimate().standard_uncertainty
    return math.nan if value is None else value


def a_component(
    code: str, quantity: str, u: float, nu: float = math.inf, *, distribution: str = "normal"
) -> Component:
    """Return a component of one quantity, drawn once."""
    terms = (Term(1.0, MeanSquare(code, u * u, nu)),)
    return Component(code, quantity, "lot", terms, "B", distribution)


def a_budget(
    expression: str,
    components: Sequence[Component],
    *,
    correlations: Sequence[Correlation] = (),
    coverage_probability: float = 0.95,
) -> Budget:
    """Return a budget whose quantities are those of its components."""
    names = dict.fromkeys(name for component in components for name in component.inputs)
    model = MeasurementModel(expression, tuple(Quantity(name) for name in names))
    return Budget(
        tuple(components),
        _ONCE,
        coverage_probability,
        None,
        "corrected",
        _ANYWHERE,
        model,
        tuple(correlations),
    )


def propagated(
    expression: str,
    inputs: Mapping[str, tuple[float, float]],
    *,
    freedoms: Mapping[str, float] | None = None,
    distributions: Mapping[str, str] | None = None,
    correlations: Mapping[tuple[str, str], float] | None = None,
    second_order: bool = False,
) -> CombinedUncertainty:
    """Propagate estimates and standard uncertainties, by name, through an expression."""
    components = [
        a_component(
            name,
            name,
            u,
            (freedoms or {}).get(name, math.inf),
            distribution=(distributions or {}).get(name, "normal"),
        )
        for name, (_, u) in inputs.items()
    ]
    pairs = [Correlation(pair, "lot", r) for pair, r in (correlations or {}).items()]
    budget = a_budget(expression, components, correlations=pairs)
    estimates = {name: x for name, (x, _) in inputs.items()}
    return combined(budget, Counts((1,)), estimates=estimates, second_order=second_order)
