"""Global risks of published examples."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from budgets.conformity import Tolerance
from budgets.global_risks import global_risks
from budgets.measurement_errors import MeasurementErrors
from budgets.production_priors import ProductionPrior
from budgets.propagation import coverage_factor
from service.published.cases import Runner


def _false_accept_and_reject(i: Mapping[str, Any]) -> dict[str, Any]:
    """Tolerance -1 to 1, the test uncertainty ratio is its half width over U = k u, simple acceptance."""
    prior = ProductionPrior("normal", 0.0, 1 / coverage_factor(i["p_in_tol"], float("inf")))
    found = global_risks(prior, MeasurementErrors.of(1 / (i["TUR"] * i["k"])), Tolerance(-1.0, 1.0), 0.0)
    return {"pfa": found.global_consumers_risk[0], "pfr": found.global_producers_risk[0]}


Z540_3: dict[str, Runner] = {"global-risk-4to1": _false_accept_and_reject}
