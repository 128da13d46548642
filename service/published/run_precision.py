"""ISO 5725-2, NIST reference data and handbooks: precision from data, and tables of critical values."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from budgets.control_charts import chart_factors
from budgets.evidence.screening import cochran_critical_value, grubbs_critical_value
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.evidence.sums import standard_deviation_factors
from budgets.replicates import critical_range_factor
from service.published.cases import Runner
from service.published.run_lines import outlying_values

Inputs = Mapping[str, Any]


def _sulfur(i: Inputs) -> dict[str, Any]:
    found: dict[str, list[Any]] = {"m": [], "sr": [], "sR": [], "p": []}
    for level in i["levels"]:
        rows = tuple((lab, x) for lab, values in level["cells"].items() for x in values)
        data = StudyData(("laboratory", "reading"), rows)
        evaluation = evaluate_study("nested_precision", data, study="coal")
        found["m"].append(evaluation.diagnostics["mean"])
        found["sr"].append(evaluation.estimate("repeatability").standard_uncertainty)
        found["sR"].append(evaluation.estimate("reproducibility").standard_uncertainty)
        found["p"].append(evaluation.diagnostics["analysis_of_variance"][0]["degrees_of_freedom"] + 1)
    return found


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
    rows = tuple((k, x) for k, group in enumerate(i["groups"]) for x in group)
    evaluation = evaluate_study("nested_precision", StudyData(("instrument", "reading"), rows), study="strd")
    between, within = evaluation.diagnostics["analysis_of_variance"]
    sums = between["sum_of_squares"], within["sum_of_squares"]
    return {
        "df_b": between["degrees_of_freedom"],
        "df_w": within["degrees_of_freedom"],
        "SSB": sums[0],
        "SSW": sums[1],
        "MSB": between["mean_square"],
        "MSW": within["mean_square"],
        "F": between["f_statistic"],
        "R2": sums[0] / sum(sums),
        "s": evaluation.estimate("repeatability").standard_uncertainty,
    }


def _lettuce(i: Inputs) -> dict[str, Any]:
    rows = tuple(
        (target, k // 2, k % 2, x) for target, values in enumerate(i["data"]) for k, x in enumerate(values)
    )
    data = StudyData(("target", "sample", "analysis", "result"), rows)
    evaluation = evaluate_study("sampling", data, study="lettuce")
    return {
        "mean": evaluation.diagnostics["mean"],
        "s_target": evaluation.estimate("between_targets").standard_uncertainty,
        "s_samp": evaluation.estimate("sampling").standard_uncertainty,
        "s_anal": evaluation.estimate("repeatability").standard_uncertainty,
        "s_meas": evaluation.estimate("measurement").standard_uncertainty,
        "s_total": evaluation.diagnostics["total_standard_deviation"],
    }


def _critical_range_factors(i: Mapping[str, Any]) -> dict[str, Any]:
    return {"f": [critical_range_factor(number, i["level"]) for number in i["results"]]}


ISO_5725_2: dict[str, Runner] = {
    "iso5725-2-coal": _sulfur,
    "iso5725-2-grubbs": _grubbs,
    "cochran-95": _cochran,
}
ISO_5725_6: dict[str, Runner] = {"iso5725-6-critical-range-factors": _critical_range_factors}

ISO_7870_2: dict[str, Runner] = {"chart-constants": _chart_factors, "chart-A3": _mean_factors}
NIST_HANDBOOK: dict[str, Runner] = {"nist-gear": _gear, "rosner-esd": outlying_values}
NBS_HANDBOOK_91: dict[str, Runner] = {"chi2-factors": _confidence_factors}
NIST_STRD: dict[str, Runner] = dict.fromkeys(
    ("strd-SiRstv", "strd-SmLs01", "strd-SmLs04", "strd-SmLs07"), _one_way
)
EURACHEM_SAMPLING: dict[str, Runner] = {"ufs-A1-classical": _lettuce}
