"""Lines with errors on both sides, and outlying values: published data, and what is computed from them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.evidence.errors_in_variables import FittedLine, line_with_uncertainties
from budgets.evidence.extreme_differences import extreme_deviates, extremes
from budgets.evidence.sums import f_quantile
from service.published.cases import Runner
from service.published.small_budgets import propagated

Inputs = Mapping[str, Any]


def _parameters(line: FittedLine) -> dict[str, float]:
    return {
        "a": line.intercept,
        "b": line.slope,
        "u_a": line.intercept_standard_uncertainty,
        "u_b": line.slope_standard_uncertainty,
    }


def _exact_abscissae(i: Inputs) -> dict[str, Any]:
    """Only y errs; x is predicted from a new y by the law of propagation."""
    line = line_with_uncertainties(i["x"], i["y"], [0.0] * len(i["x"]), i["u_y"])
    nu = line.degrees_of_freedom
    inputs = {**_inputs(line), "y0": (i["y0"], i["u_y0"])}
    predicted = propagated("(y0 - a)/b", inputs, correlations={("a", "b"): _correlation(line)})
    return {
        "x0": predicted.estimate,
        "u_x0": predicted.standard_uncertainty,
        **_parameters(line),
        "cov": line.covariance,
        "chi2": line.sum_of_squares,
        "nu": nu,
        "chi2_95": nu * f_quantile(0.05, nu, math.inf),
    }


def _inputs(line: FittedLine) -> dict[str, tuple[float, float]]:
    return {
        "a": (line.intercept, line.intercept_standard_uncertainty),
        "b": (line.slope, line.slope_standard_uncertainty),
    }


def _correlation(line: FittedLine) -> float:
    return line.covariance / (line.intercept_standard_uncertainty * line.slope_standard_uncertainty)


def thermometer(i: Inputs) -> dict[str, Any]:
    """Return the calibration line of JCGM 100, H.3, about a temperature, and a correction predicted by it."""
    x = [value - i["x0"] for value in i["x"]]
    line = line_with_uncertainties(x, i["y"], [0.0] * len(x), [1.0] * len(x))
    # All corrections err alike, by what is left of them.
    s = math.sqrt(line.sum_of_squares / line.degrees_of_freedom)
    inputs = {name: (value, u * s) for name, (value, u) in _inputs(line).items()}
    expression = f"a + b*{i['x_pred'] - i['x0']}"
    predicted = propagated(expression, inputs, correlations={("a", "b"): _correlation(line)})
    return {
        "b0": line.intercept,
        "s_b0": inputs["a"][1],
        "b1": line.slope,
        "s_b1": inputs["b"][1],
        "r_b0b1": _correlation(line),
        "s": s,
        "nu": line.degrees_of_freedom,
        "y_pred": predicted.estimate,
        "u_pred": predicted.standard_uncertainty,
    }


def _both_err(i: Inputs) -> dict[str, Any]:
    line = line_with_uncertainties(i["x"], i["y"], i["u_x"], i["u_y"])
    return {**_parameters(line), "cov": line.covariance, "S": line.sum_of_squares}


def _weights(i: Inputs) -> dict[str, Any]:
    """Weights are squares of reciprocal standard uncertainties."""
    u_x, u_y = ([1 / math.sqrt(w) for w in i[side]] for side in ("w_x", "w_y"))
    line = line_with_uncertainties(i["x"], i["y"], u_x, u_y)
    return {**_parameters(line), "S": line.sum_of_squares}


def _scaled(i: Inputs) -> dict[str, Any]:
    """The source widens its standard errors by the misfit, its covariances not."""
    line = line_with_uncertainties(i["x"], i["y"], i["u_x"], i["u_y"])
    misfit = math.sqrt(line.sum_of_squares / line.degrees_of_freedom)
    return {
        "a": line.intercept,
        "b": line.slope,
        "s_a": line.intercept_standard_uncertainty * misfit,
        "s_b": line.slope_standard_uncertainty * misfit,
        "cov_aa": line.intercept_standard_uncertainty**2,
        "cov_ab": line.covariance,
        "cov_bb": line.slope_standard_uncertainty**2,
    }


def outlying_values(i: Inputs) -> dict[str, Any]:
    """Return every step of the generalised test of extreme deviates, and how many values stand out."""
    steps = extreme_deviates(i["x"], i["most"])
    return {
        "R": [step.statistic for step in steps],
        "lambda": [step.critical_value for step in steps],
        "outliers": len(extremes(i["x"])),
    }


ISO_TS_28037: dict[str, Runner] = {"ts28037-6": _exact_abscissae, "ts28037-7": _both_err}
YORK: dict[str, Runner] = {"york-pearson": _weights, "odr-pearson": _scaled}
