"""JCGM 100:2008: what this program computes for its examples."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.declarations import Declaration
from budgets.evidence.evaluation import MeanSquare, Term, effective_degrees_of_freedom
from budgets.evidence.study_data import StudyData, evaluate_study
from budgets.evidence.sums import f_quantile, mean
from budgets.measurement_models import MeasurementModel, Quantity
from budgets.propagation import coverage_factor, expanded_uncertainty
from service.published.cases import Runner, degrees
from service.published.run_lines import thermometer
from service.published.small_budgets import propagated, stated

Inputs = Mapping[str, Any]


def _twenty_readings(i: Inputs) -> dict[str, Any]:
    data = StudyData(("sample", "reading"), tuple(("bath", x) for x in i["x"]))
    evaluation = evaluate_study("repeatability", data, study="bath")
    s = evaluation.estimate("repeatability").standard_uncertainty or math.nan
    figures = evaluation.diagnostics["groups"][0]
    return {"mean": figures["mean"], "s": s, "u": s / math.sqrt(len(i["x"]))}


def _type_b(i: Inputs) -> dict[str, Any]:
    found = {}
    for item in i["items"]:
        kind = item["dist"]
        if kind == "multiple_of_sd":
            declaration = Declaration("expanded", item["U"], coverage_factor=item["k"])
        elif kind == "normal_interval":
            declaration = Declaration(
                "half_width", item["a"], distribution="normal", coverage_probability=item["p"]
            )
        elif kind == "arcsine":
            declaration = Declaration("half_width", item["a"], distribution="arcsine")
        else:
            # An asymmetric rectangle is the half-width of its range.
            half = item["a"] if kind == "rect" else (item["b_plus"] + item["b_minus"]) / 2
            declaration = Declaration("half_width", half, distribution="rectangular")
        found[item["name"]] = stated(declaration)
    return found


def _resistors(i: Inputs) -> dict[str, Any]:
    names = [f"r{k}" for k in range(i["n"])]
    inputs = {name: (i["R"], i["u"]) for name in names}
    pairs = {(one, other): 1.0 for k, one in enumerate(names) for other in names[k + 1 :]}
    together = propagated("+".join(names), inputs, correlations=pairs)
    apart = propagated("+".join(names), inputs)
    return {
        "R": together.estimate,
        "u_corr": together.standard_uncertainty,
        "u_uncorr": apart.standard_uncertainty,
    }


def _product_of_three(i: Inputs) -> dict[str, Any]:
    # Relative uncertainties in percent: factors of 100 with them as they stand, divided by 100 twice.
    names = ("x1", "x2", "x3")
    inputs = {name: (100.0, u) for name, u in zip(names, i["u"], strict=True)}
    result = propagated("x1*x2*x3/10000", inputs, freedoms=dict(zip(names, i["nu"], strict=True)))
    nu = result.effective_degrees_of_freedom
    return {
        "uc": result.standard_uncertainty,
        "nu_eff": nu,
        # The GUM rounds 18.9987 to 19.0 before it truncates.
        "nu_trunc": math.floor(round(nu, 1)),
        "k": coverage_factor(i["p"], nu),
        "U": expanded_uncertainty(result.standard_uncertainty, i["p"], nu),
    }


def _table_of_t(i: Inputs) -> dict[str, Any]:
    # 68.27, 95.45 and 99.73 % stand for one, two and three standard deviations.
    sigmas = {68.27: 1, 95.45: 2, 99.73: 3}
    probabilities = [math.erf(sigmas[p] / math.sqrt(2)) if p in sigmas else p / 100 for p in i["p_percent"]]
    return {"t": [[coverage_factor(p, degrees(nu)) for p in probabilities] for nu in i["nu"]]}


def _expanded(i: Inputs) -> dict[str, Any]:
    return {
        "k": coverage_factor(i["p"], i["nu"]),
        "U": expanded_uncertainty(i["u"], i["p"], i["nu"]),
    }


# H.1: the length of an end gauge. d is the sum of what the comparator shows and its two corrections.
_END_GAUGE = "ls + d + d1 + d2 - ls*(dalpha*theta + alpha*dtheta)"


def _end_gauge(i: Inputs) -> dict[str, Any]:
    random = Declaration(
        "expanded_with_probability",
        i["U_comp_random"],
        coverage_probability=0.95,
        degrees_of_freedom=i["nu_comp"],
    )
    u_theta = math.hypot(
        i["u_thbar"], stated(Declaration("half_width", i["a_cycle"], distribution="arcsine"))
    )
    rectangles = {
        name: stated(Declaration("half_width", i[f"a_{name}"], distribution="rectangular"))
        for name in ("alpha", "dalpha", "dtheta")
    }
    inputs = {
        "ls": (i["ls_nm"], stated(Declaration("expanded", i["U_std"], coverage_factor=i["k_std"]))),
        "d": (i["d_nm"], i["s_repeat"] / math.sqrt(i["n_repeat"])),
        "d1": (0.0, stated(random)),
        "d2": (0.0, stated(Declaration("expanded", i["U_comp_syst"], coverage_factor=3.0))),
        "dalpha": (0.0, rectangles["dalpha"]),
        "theta": (i["theta"], u_theta),
        "alpha": (i["alpha"], rectangles["alpha"]),
        "dtheta": (0.0, rectangles["dtheta"]),
    }
    freedoms = {
        "ls": i["nu_std"], "d": i["nu_repeat"], "d1": i["nu_comp"], "d2": i["nu_syst"],
        "dalpha": i["nu_dalpha"], "dtheta": i["nu_dtheta"],
    }  # fmt: skip
    first = propagated(_END_GAUGE, inputs, freedoms=freedoms)
    second = propagated(_END_GAUGE, inputs, second_order=True)
    by_name = {part.component.code: part for part in first.contributions}
    terms = [
        Term(1.0, MeanSquare(name, by_name[name].contribution ** 2, freedoms[name]))
        for name in ("d", "d1", "d2")
    ]
    nu = math.floor(first.effective_degrees_of_freedom)
    return {
        "l_mm": None if first.estimate is None else first.estimate * 1e-6,
        "u_dbar": by_name["d"].contribution,
        "u_d1": by_name["d1"].contribution,
        "u_d2": by_name["d2"].contribution,
        "u_d": math.sqrt(sum(term.mean_square.value for term in terms)),
        "nu_d": effective_degrees_of_freedom(terms),
        "u_ls": by_name["ls"].contribution,
        "u_dalpha_term": by_name["dalpha"].contribution,
        "u_dtheta_term": by_name["dtheta"].contribution,
        "u_theta": u_theta,
        "uc": first.standard_uncertainty,
        "uc2": first.variance,
        "nu_eff": first.effective_degrees_of_freedom,
        "nu_trunc": nu,
        "k99": coverage_factor(0.99, nu),
        "U99": expanded_uncertainty(first.standard_uncertainty, 0.99, nu),
        # H.1.7: the two terms of second order, each by leaving the other's quantities known.
        "second1": _second_order_alone(inputs, ("dalpha", "theta")),
        "second2": _second_order_alone(inputs, ("alpha", "dtheta")),
        "uc_2nd": second.standard_uncertainty,
    }


def _second_order_alone(inputs: Mapping[str, tuple[float, float]], names: tuple[str, str]) -> float:
    model = MeasurementModel(_END_GAUGE, tuple(Quantity(name) for name in inputs))
    variances = {name: inputs[name][1] ** 2 for name in names}
    found = model.second_order({name: x for name, (x, _) in inputs.items()}, variances)
    return math.sqrt(found.variance)


_IMPEDANCE = {"R": "V/I*cos(phi)", "X": "V/I*sin(phi)", "Z": "V/I"}


def _impedance(i: Inputs) -> dict[str, Any]:
    """H.2: five simultaneous observations, by both approaches."""
    # In amperes, so that V/I is in ohms.
    sets = {"V": i["V"], "I": [x * 1e-3 for x in i["I_mA"]], "phi": i["phi"]}
    n = len(i["V"])
    rows = tuple(("s", *values) for values in zip(*sets.values(), strict=True))
    evaluation = evaluate_study("covariance", StudyData(("sample", *sets), rows), study="h2")
    deviations = dict(zip(sets, evaluation.diagnostics["repeatability_standard_deviations"], strict=True))
    matrix = evaluation.diagnostics["repeatability_correlations"]
    pairs = {("V", "I"): matrix[0][1], ("V", "phi"): matrix[0][2], ("I", "phi"): matrix[1][2]}
    inputs = {name: (mean(values), deviations[name] / math.sqrt(n)) for name, values in sets.items()}
    found: dict[str, Any] = {
        "V": inputs["V"][0], "I_mA": inputs["I"][0] * 1e3, "phi": inputs["phi"][0],
        "uV": inputs["V"][1], "uI_mA": inputs["I"][1] * 1e3, "uphi": inputs["phi"][1],
        "r_VI": pairs["V", "I"], "r_Vphi": pairs["V", "phi"], "r_Iphi": pairs["I", "phi"],
    }  # fmt: skip
    slopes: dict[str, dict[str, float]] = {}
    for name, expression in _IMPEDANCE.items():
        used = {key: inputs[key] for key in inputs if key != "phi" or "phi" in expression}
        own = {pair: r for pair, r in pairs.items() if set(pair) <= set(used)}
        result = propagated(expression, used, correlations=own)
        found[name], found[f"u{name}"] = result.estimate, result.standard_uncertainty
        model = MeasurementModel(expression, tuple(Quantity(key) for key in used))
        slopes[name] = model.sensitivity_coefficients({key: x for key, (x, _) in used.items()})
        # Approach 2: the quantity from every single observation.
        values = model.values({key: sets[key] for key in used}).tolist()
        single = StudyData(("sample", "reading"), tuple(("s", value) for value in values))
        own_s = (
            evaluate_study("repeatability", single, study="h2").estimate().standard_uncertainty or math.nan
        )
        found[f"{name}2"], found[f"u{name}2"] = mean(values), own_s / math.sqrt(n)
    for one, other in (("R", "X"), ("R", "Z"), ("X", "Z")):
        covariance = sum(
            a
            * b
            * inputs[p][1]
            * inputs[q][1]
            * (1.0 if p == q else pairs.get((p, q), pairs.get((q, p), 0.0)))
            for p, a in slopes[one].items()
            for q, b in slopes[other].items()
        )
        found[f"r_{one}{other}"] = covariance / (found[f"u{one}"] * found[f"u{other}"])
    return found


def _between_days(i: Inputs) -> dict[str, Any]:
    """H.5: five readings a day, rebuilt from the printed means and standard deviations."""
    pattern = (math.sqrt(2), -math.sqrt(2), 0.0, 0.0, 0.0)  # mean 0, standard deviation 1
    rows = tuple(
        (f"{day}.{k}", m + s * z, 0.0, f"day {day}")
        for day, (m, s) in enumerate(zip(i["day_means_uV_offset"], i["day_sd_uV"], strict=True))
        for k, z in enumerate(pattern)
    )
    data = StudyData(("pair", "reading", "reference", "group"), rows)
    evaluation = evaluate_study("agreement", data, study="zener", options={"independent": True})
    bias = evaluation.estimate("bias")
    between, within = (term.mean_square for term in bias.terms)
    s_means = math.sqrt(between.value / i["K"])
    days = len(i["day_sd_uV"])
    pooled = StudyData(("sample", "reading"), tuple(("all", row[1]) for row in rows))
    whole = evaluate_study("repeatability", pooled, study="zener").estimate().standard_uncertainty or math.nan
    return {
        "mean": i["offset_V"] + (bias.value or 0.0) * 1e-6,
        "s_means": s_means,
        "s_a": math.sqrt(between.value),
        "s_b": math.sqrt(within.value),
        "F": between.value / within.value,
        "F95": f_quantile(0.05, days - 1, days * (i["K"] - 1)),
        "F975": f_quantile(0.025, days - 1, days * (i["K"] - 1)),
        "s_B": math.sqrt((between.value - within.value) / i["K"]),
        "u_mean": bias.standard_uncertainty,
        "u_pooled": whole / math.sqrt(days * i["K"]),
    }


RUNNERS: dict[str, Runner] = {
    "gum-4.3": _type_b,
    "gum-4.4.3": _twenty_readings,
    "gum-5.2.2": _resistors,
    "gum-7.2-expand": _expanded,
    "gum-G.2-t-table": _table_of_t,
    "gum-G.4.1": _product_of_three,
    "gum-H.1": _end_gauge,
    "gum-H.2": _impedance,
    "gum-H.3": thermometer,
    "gum-H.5": _between_days,
}
