"""JCGM 101, JCGM 106 and ILAC-G8: coverage by the law of propagation, and conformity."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.conformity import Tolerance, conformance_probability, tails
from budgets.declarations import Declaration
from budgets.error_distributions import StudentT
from budgets.propagation import CombinedUncertainty, expanded_uncertainty
from service.published.cases import Runner
from service.published.small_budgets import propagated, stated

NORMAL = StudentT(math.inf)

Inputs = Mapping[str, Any]


def _additive(i: Inputs) -> dict[str, Any]:
    names = [f"x{k}" for k in range(len(i["u"]))]
    inputs = {name: (0.0, u) for name, u in zip(names, i["u"], strict=True)}
    shape = "rectangular" if i["dist"] == "rect" else str(i["dist"])
    result = propagated("+".join(names), inputs, distributions=dict.fromkeys(names, shape))
    half = expanded_uncertainty(result.standard_uncertainty, i["p"], math.inf)
    found = {"u": result.standard_uncertainty, "guf_half": half}
    # For normal inputs the sum is normal, so the exact interval is that of the law of propagation.
    return {**found, "half": half} if shape == "normal" else found


def _mass(i: Inputs) -> dict[str, Any]:
    rectangles = {
        name: (
            (low + high) / 2,
            stated(Declaration("half_width", (high - low) / 2, distribution="rectangular")),
        )
        for name, (low, high) in (("ra", i["rho_a"]), ("rw", i["rho_W"]), ("rr", i["rho_R"]))
    }
    inputs = {"mr": (i["mR"], i["u_mR"]), "dm": (i["dm"], i["u_dm"]), **rectangles}
    expression = f"(mr + dm)*(1 + (ra - {i['rho_a0']})*(1/rw - 1/rr)) - {i['m_nom']}"
    shapes = dict.fromkeys(rectangles, "rectangular")
    first = propagated(expression, inputs, distributions=shapes)
    second = propagated(expression, inputs, distributions=shapes, second_order=True)
    return {"y": first.estimate, **_interval(first, "1"), **_interval(second, "2")}


def _interval(result: CombinedUncertainty, order: str) -> dict[str, Any]:
    half = expanded_uncertainty(result.standard_uncertainty, 0.95, math.inf)
    y = result.estimate or 0.0
    return {f"u_guf{order}": result.standard_uncertainty, f"lo{order}": y - half, f"hi{order}": y + half}


def _comparison_loss(i: Inputs) -> dict[str, Any]:
    """In units of 1e-6. With correlated inputs the document gives the Monte Carlo figures only."""
    if i["r"]:
        return {}
    inputs = {"x1": (i["x1"], i["u"]), "x2": (0.0, i["u"])}
    expression = "(x1**2 + x2**2)*1000000"
    first = propagated(expression, inputs)
    second = propagated(expression, inputs, second_order=True)
    return {"y_guf": first.estimate, **_interval(first, "1"), **_interval(second, "2")}


def _conformance(i: Inputs) -> dict[str, Any]:
    tolerance = Tolerance(i.get("TL"), i["TU"])
    return {"pc": conformance_probability(i["y"], i["u"], NORMAL, tolerance)}


def _false_acceptance(i: Inputs) -> dict[str, Any]:
    """One limit, the estimate at the acceptance limit, U = 2 u."""
    tolerance = Tolerance(None, 10.0)
    return {"pfa": [tails(10.0 - ratio * 2.0, 1.0, NORMAL, tolerance)[1] for ratio in i["w_over_U"]]}


JCGM_101: dict[str, Runner] = {
    "jcgm101-9.2.2": _additive,
    "jcgm101-9.2.3": _additive,
    "jcgm101-9.3": _mass,
    "jcgm101-9.4-x0.05-r0": _comparison_loss,
    "jcgm101-9.4-x0.01-r0.9": _comparison_loss,
}
JCGM_106: dict[str, Runner] = {"jcgm106-7.3.3-ex1": _conformance, "jcgm106-7.4": _conformance}
ILAC_G8: dict[str, Runner] = {"ilac-g8-table": _false_acceptance}
