"""NIST, EA-4/02, QUAM and Nordtest: worked budgets."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.declarations import Declaration
from budgets.distributions import quantile
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.evidence.sums import mean
from budgets.propagation import coverage_factor
from service.published.cases import Runner
from service.published.small_budgets import propagated, stated

Inputs = Mapping[str, Any]


def _one_uncertainty(item: Mapping[str, Any]) -> float:
    if "u" in item:
        return float(item["u"])
    shape = {"rect": "rectangular"}.get(item["dist"], item["dist"])
    return stated(Declaration("half_width", item["a"], distribution=shape))


def _sum(i: Inputs) -> dict[str, Any]:
    """A sum of contributions, each with its printed sensitivity coefficient."""
    factors = [f"{item.get('c', 1.0)}*x{k}" for k, item in enumerate(i["components"])]
    inputs = {f"x{k}": (0.0, _one_uncertainty(item)) for k, item in enumerate(i["components"])}
    result = propagated("+".join(factors), inputs)
    found: dict[str, Any] = {"uc": result.standard_uncertainty}
    if "k" in i:
        found["U"] = i["k"] * result.standard_uncertainty
    if "x" in i:
        found["y"] = math.fsum(i["x"])
    return found


def _dominant_rectangle(i: Inputs) -> dict[str, Any]:
    """The coverage factor of the document is that of the rectangle itself, which outweighs the rest."""
    rectangles = [
        stated(Declaration("half_width", item["a"], distribution="rectangular")) for item in i["rect"]
    ]
    names = [f"x{k}" for k in range(len(rectangles) + len(i["other_u"]))]
    inputs = {name: (0.0, u) for name, u in zip(names, [*rectangles, *i["other_u"]], strict=True)}
    uc = propagated("+".join(names), inputs).standard_uncertainty
    k = quantile("rectangular", (1 + i["p"]) / 2)
    return {"uc": uc, "k": k, "U": k * uc}


def _product(i: Inputs) -> dict[str, Any]:
    parts = [f"{factor['name']}**{factor['p']}" for factor in i["factors"]]
    inputs = {factor["name"]: (factor["x"], factor["u"]) for factor in i["factors"]}
    result = propagated(f"{i.get('const', 1.0)}*{'*'.join(parts)}", inputs)
    y = result.estimate or math.nan
    return {"y": y, "u": result.standard_uncertainty, "u_rel": result.standard_uncertainty / y}


def _relative_sum(i: Inputs) -> dict[str, Any]:
    """Relative uncertainties of a value divided by its recovery."""
    names = [f"f{k}" for k in range(len(i["rel"]))]
    inputs = {name: (1.0, u) for name, u in zip(names, i["rel"], strict=True)}
    relative = propagated("*".join(names), inputs).standard_uncertainty
    y = 1 / i["recovery"]
    # The expanded uncertainty is given relative to the value.
    return {"u_rel": relative, "y": y, "u": y * relative, "U": i["k"] * relative}


def _recovery(i: Inputs) -> dict[str, Any]:
    u = stated(Declaration("standard_deviation", i["s"])) / math.sqrt(i["n"])
    return {"u": u, "u_rel": u / i["mean"], "t": abs(1 - i["mean"]) / u}


def _within_laboratory(i: Inputs) -> dict[str, Any]:
    """Nordtest: control chart limits, and the bias seen in proficiency tests, in percent."""
    u_rw = stated(Declaration("expanded", i["control_limit_pct"], coverage_factor=2.0))
    rows = tuple(
        (str(k), 100 * lab / nominal, 100.0)
        for k, (lab, nominal) in enumerate(zip(i["lab"], i["nominal"], strict=True))
    )
    data = StudyData(("pair", "reading", "reference"), rows)
    evaluation = evaluate_study("agreement", data, study="rounds", options={"independent": True})
    rms = evaluation.diagnostics["root_mean_square_error_of_prediction"]
    reference = mean([s / math.sqrt(n) for s, n in zip(i["sR_pct"], i["n_labs"], strict=True)])
    bias = propagated("a + b", {"a": (0.0, rms), "b": (0.0, reference)}).standard_uncertainty
    total = propagated("a + b", {"a": (0.0, u_rw), "b": (0.0, bias)}).standard_uncertainty
    return {"u_Rw": u_rw, "rms_bias": rms, "u_cref": reference, "u_bias": bias, "uc": total, "U": 2 * total}


def _month(i: Inputs) -> dict[str, Any]:
    data = StudyData(("sample", "reading"), tuple(("month", x) for x in i["x"]))
    evaluation = evaluate_study("repeatability", data, study="month")
    estimate = evaluation.estimate()
    centre = evaluation.diagnostics["groups"][0]["mean"]
    s = estimate.standard_uncertainty or math.nan
    u = s / math.sqrt(len(i["x"]))
    k = coverage_factor(i["p"], estimate.degrees_of_freedom)
    return {
        "n": evaluation.used,
        "mean": centre,
        "s": s,
        "u": u,
        "k": k,
        "lower": centre - k * u,
        "upper": centre + k * u,
    }


NIST_TN_1297: dict[str, Runner] = {"tn1297-D.1": _sum}
NIST_TN_1900: dict[str, Runner] = {"tn1900-E2": _month}
EA_4_02: dict[str, Runner] = {"ea402-S2": _sum, "ea402-S3": _sum, "ea402-S9": _dominant_rectangle}
EURACHEM_QUAM: dict[str, Runner] = {
    "quam-A1": _product,
    "quam-A2": _product,
    "quam-A4": _relative_sum,
    "quam-A4-recovery": _recovery,
    "quam-A5": _product,
}
NORDTEST: dict[str, Runner] = {"nordtest-537-NH4": _within_laboratory}
