"""Lines with errors on both sides, and outlying values: published data, and what is computed from them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from budgets.evidence.errors_in_variables import FittedLine, line_with_uncertainties
from budgets.evidence.extreme_differences import extreme_deviates, extremes
from budgets.evidence.sums import f_quantile
from service.published.cases import Runner

Inputs = Mapping[str, Any]


def _parameters(line: FittedLine) -> dict[str, float]:
    return {
        "a": line.intercept,
        "b": line.slope,
        "u_a": line.intercept_standard_uncertainty,
        "u_b": line.slope_standard_uncertainty,
    }


def _exact_abscissae(i: Inputs) -> dict[str, Any]:
    """Only y errs; the prediction of x from a new y is another task than this program's."""
    line = line_with_uncertainties(i["x"], i["y"], [0.0] * len(i["x"]), i["u_y"])
    nu = line.degrees_of_freedom
    return {
        **_parameters(line),
        "cov": line.covariance,
        "chi2": line.sum_of_squares,
        "nu": nu,
        "chi2_95": nu * f_quantile(0.05, nu, math.inf),
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
