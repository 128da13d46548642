"""How large a study must be; pure figures, nothing is read and nothing recorded."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from budgets.study_plans import bias_plan, precision_plan
from service.access import require
from service.documents import Actor, StudyPlanRequest
from service.workflows.evidence import FaultCollector


def plan(actor: Actor, wanted: StudyPlanRequest) -> dict[str, Any]:
    """Give the smallest study for each wish: to know a standard deviation, to find a bias.

    Raises
    ------
    InvalidRequest
        A wish is outside of its range, or needs more than any plant measures.
    """
    require(actor, "read")
    collector = FaultCollector()
    precision = bias = None
    if wanted.precision is not None:
        precision = collector.attempt("#/precision", lambda wish: precision_plan(**wish), wanted.precision)
    if wanted.bias is not None:
        bias = collector.attempt("#/bias", lambda wish: bias_plan(**wish), wanted.bias)
    collector.finish("A study cannot be planned.")
    return {
        "precision": None if precision is None else asdict(precision),
        "bias": None if bias is None else asdict(bias),
    }
