"""ISO 5725-2, NIST reference data and handbooks: precision from data, and tables of critical values."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.control_charts import chart_factors
from budgets.evidence.screening import cochran_critical_value, grubbs_critical_value
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.evidence.sums import standard_deviation_factors
from service.published.cases import Runner

Inputs = Mapping[str, Any]


def _sulfur(i: Inputs) -> dict[str, Any]:
    """Repeatability and the number of laboratories; the mean and reproducibility need another design."""
    deviations, laboratories = [], []
    for level in i["levels"]:
        rows = tuple((lab, x) for lab, values in level["cells"].items() for x in values)
        evaluation = evaluate_study("repeatability", StudyData(("sample", "reading"), rows), study="coal")
        deviations.append(evaluation.estimate().standard_uncertainty)
        laboratories.append(evaluation.diagnostics["samples"])
    return {"sr": deviations, "p": laboratories}


def _grubbs(i: Inputs) -> dict[str, Any]:
    return {"G": [[grubbs_critical_value(alpha, p) for alpha in i["alpha"]] for p in i["p"]]}


def _cochran(i: Inputs) -> dict[str, Any]:
    return {
        "C": [
            [cochran_critical_value(i["alpha"], p, n - 1, (p - 1) * (n - 1)) for n in i["n"]] for p in i["p"]
        ]
    }


def _chart_factors(i: Inputs) -> dict[str, Any]:
    factors = [chart_factors(n) for n in i["n"]]
    members = {"A2": "a2", "D3": "range_lower", "D4": "range_upper"}
    members |= {"B3": "deviation_lower", "B4": "deviation_upper", "d2": "d2", "d3": "d3", "c4": "c4"}
    return {name: [getattr(factor, member) for factor in factors] for name, member in members.items()}


def _mean_factors(i: Inputs) -> dict[str, Any]:
    return {"A3": [chart_factors(n).a3 for n in i["n"]]}


def _confidence_factors(i: Inputs) -> dict[str, Any]:
    factors = [standard_deviation_factors(n - 1) for n in i["n_list"]]
    return {"lower": [low for low, _ in factors], "upper": [high for _, high in factors]}


def _gear(i: Inputs) -> dict[str, Any]:
    nu = i["n"] - 1
    factors = [standard_deviation_factors(nu, confidence=1 - alpha) for alpha in i["alpha"]]
    # A factor is sqrt(nu / chi-square): the critical values are read off the 95 and 90 % factors.
    (low95, high95), (low90, high90) = (standard_deviation_factors(nu, confidence=c) for c in (0.95, 0.9))
    return {
        "lo": [i["s"] * low for low, _ in factors],
        "hi": [i["s"] * high for _, high in factors],
        "T": nu * (i["s"] / i["sigma0"]) ** 2,
        "crit": [nu / factor**2 for factor in (high95, high90, low90, low95)],
    }


def _one_way(i: Inputs) -> dict[str, Any]:
    """Within groups by the repeatability design, between them as an agreement study sees its clusters."""
    groups = list(enumerate(i["groups"]))
    rows = tuple((str(k), x) for k, group in groups for x in group)
    evaluation = evaluate_study("repeatability", StudyData(("sample", "reading"), rows), study="strd")
    estimate = evaluation.estimate()
    square, nu = estimate.variance, estimate.degrees_of_freedom
    pairs = tuple((f"{k}.{j}", x, 0.0, str(k)) for k, group in groups for j, x in enumerate(group))
    data = StudyData(("pair", "reading", "reference", "group"), pairs)
    bias = evaluate_study("agreement", data, study="strd", options={"independent": True}).estimate("bias")
    between = next(term.mean_square for term in bias.terms if term.mean_square.code == "strd/between_groups")
    sums = between.value * between.degrees_of_freedom, square * nu
    return {
        "df_b": between.degrees_of_freedom,
        "df_w": nu,
        "SSB": sums[0],
        "SSW": sums[1],
        "MSB": between.value,
        "MSW": square,
        "F": between.value / square,
        "R2": sums[0] / sum(sums),
        "s": math.sqrt(square),
    }


def _lettuce(i: Inputs) -> dict[str, Any]:
    """Duplicate analyses of every sample; the sampling itself needs another design."""
    rows = tuple(
        (f"{target}-{sample}", value)
        for target, values in enumerate(i["data"])
        for sample in (0, 1)
        for value in values[2 * sample : 2 * sample + 2]
    )
    evaluation = evaluate_study("repeatability", StudyData(("sample", "reading"), rows), study="lettuce")
    return {"s_anal": evaluation.estimate().standard_uncertainty}


ISO_5725_2: dict[str, Runner] = {
    "iso5725-2-coal": _sulfur,
    "iso5725-2-grubbs": _grubbs,
    "cochran-95": _cochran,
}
ISO_7870_2: dict[str, Runner] = {"chart-constants": _chart_factors, "chart-A3": _mean_factors}
NIST_HANDBOOK: dict[str, Runner] = {"nist-gear": _gear}
NBS_HANDBOOK_91: dict[str, Runner] = {"chi2-factors": _confidence_factors}
NIST_STRD: dict[str, Runner] = dict.fromkeys(
    ("strd-SiRstv", "strd-SmLs01", "strd-SmLs04", "strd-SmLs07"), _one_way
)
EURACHEM_SAMPLING: dict[str, Runner] = {"ufs-A1-classical": _lettuce}
