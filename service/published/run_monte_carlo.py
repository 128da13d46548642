"""JCGM 101: coverage intervals by the law of propagation and by Monte Carlo."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.budget_trials import budget_trials
from budgets.declarations import Declaration
from budgets.input_distributions import Bounded, InputDistribution, Normal
from budgets.joint_distributions import JointNormal
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.monte_carlo import MonteCarlo, monte_carlo
from budgets.propagation import CombinedUncertainty, Counts, expanded_uncertainty
from budgets.propagation_validation import numerical_tolerance
from budgets.trials import Trials, model_trials
from service.published.cases import Runner
from service.published.small_budgets import a_budget, a_component, propagated, stated

Inputs = Mapping[str, Any]

# As many as the published trials had, about.
_TRIALS = 1_000_000
_SEED = 102


def _run(drawn: Trials, coverage_probability: float = 0.95) -> MonteCarlo:
    return monte_carlo(drawn, coverage_probability=coverage_probability, seed=_SEED, trials=_TRIALS)


def _model(expression: str, names: Mapping[str, Any]) -> MeasurementModel:
    return MeasurementModel(expression, tuple(Quantity(name) for name in names))


def _additive(i: Inputs) -> dict[str, Any]:
    names = [f"x{k}" for k in range(len(i["u"]))]
    shape = "rectangular" if i["dist"] == "rect" else str(i["dist"])
    components = [
        a_component(name, name, u, distribution=shape) for name, u in zip(names, i["u"], strict=True)
    ]
    budget = a_budget("+".join(names), components, coverage_probability=i["p"])
    zeros = dict.fromkeys(names, 0.0)
    run = _run(budget_trials(budget, Counts((1,)), estimates=zeros), i["p"])
    inputs = {name: (0.0, u) for name, u in zip(names, i["u"], strict=True)}
    result = propagated("+".join(names), inputs, distributions=dict.fromkeys(names, shape))
    return {
        "u": result.standard_uncertainty,
        "guf_half": expanded_uncertainty(result.standard_uncertainty, i["p"], math.inf),
        # Both ends of a symmetric distribution, so that half of the trials' scatter goes.
        "half": (run.symmetric[1] - run.symmetric[0]) / 2,
    }


def _mass(i: Inputs) -> dict[str, Any]:
    limits = {"ra": i["rho_a"], "rw": i["rho_W"], "rr": i["rho_R"]}
    rectangles = {
        name: (
            (low + high) / 2,
            stated(Declaration("half_width", (high - low) / 2, distribution="rectangular")),
        )
        for name, (low, high) in limits.items()
    }
    inputs = {"mr": (i["mR"], i["u_mR"]), "dm": (i["dm"], i["u_dm"]), **rectangles}
    expression = f"(mr + dm)*(1 + (ra - {i['rho_a0']})*(1/rw - 1/rr)) - {i['m_nom']}"
    shapes = dict.fromkeys(rectangles, "rectangular")
    first = propagated(expression, inputs, distributions=shapes)
    second = propagated(expression, inputs, distributions=shapes, second_order=True)
    known: dict[str, InputDistribution] = {name: Normal(*inputs[name]) for name in ("mr", "dm")}
    known |= {name: Bounded("rectangular", low, high) for name, (low, high) in limits.items()}
    run = _run(model_trials(_model(expression, inputs), known))
    return {"y": first.estimate, **_interval(first, "1"), **_interval(second, "2"), **_figures(run)}


def _interval(result: CombinedUncertainty, order: str) -> dict[str, Any]:
    half = expanded_uncertainty(result.standard_uncertainty, 0.95, math.inf)
    y = result.estimate or 0.0
    return {f"u_guf{order}": result.standard_uncertainty, f"lo{order}": y - half, f"hi{order}": y + half}


def _figures(run: MonteCarlo) -> dict[str, Any]:
    low, high = run.shortest
    return {"y_mc": run.mean, "u_mc": run.standard_deviation, "lo_mc": low, "hi_mc": high}


def _comparison_loss(i: Inputs) -> dict[str, Any]:
    """In units of 1e-6. With correlated inputs the document gives the Monte Carlo figures only."""
    inputs = {"x1": (i["x1"], i["u"]), "x2": (0.0, i["u"])}
    expression = "(x1**2 + x2**2)*1000000"
    square = i["u"] ** 2
    covariance = ((square, i["r"] * square), (i["r"] * square, square))
    joint = JointNormal(("x1", "x2"), (i["x1"], 0.0), covariance)
    found = _figures(_run(model_trials(_model(expression, inputs), {}, joint=[joint])))
    if i["r"]:
        return found
    first = propagated(expression, inputs)
    second = propagated(expression, inputs, second_order=True)
    return {"y_guf": first.estimate, **_interval(first, "1"), **_interval(second, "2"), **found}


def _tolerances(i: Inputs) -> dict[str, Any]:
    return {"delta": [numerical_tolerance(item["u"], significant_digits=item["ndig"]) for item in i["items"]]}


JCGM_101: dict[str, Runner] = {
    "jcgm101-9.2.2": _additive,
    "jcgm101-9.2.3": _additive,
    "jcgm101-9.3": _mass,
    "jcgm101-9.4-x0.05-r0": _comparison_loss,
    "jcgm101-9.4-x0.01-r0.9": _comparison_loss,
    "jcgm101-7.9.2": _tolerances,
}
