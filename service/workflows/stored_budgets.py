"""What is stored of a budget at its approval, and the budget rebuilt from it.

Decisions rest on these stored numbers, never on evidence evaluated anew, so that a later release of this
program or of a library cannot move a verdict.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.errors import ComponentError
from budgets.evidence.evaluation import Estimate
from service.documents import BudgetComponent, BudgetDocument, PlannedCount
from service.workflows.evidence import Behind


@dataclass(frozen=True)
class ResolvedBudget:
    """A budget with what stands behind each of its components, in the order of the document."""

    budget: Budget
    behind: tuple[Behind, ...]
    serves_until: str | None


def component_of(line: BudgetComponent, estimate: Estimate, evaluation_type: str) -> Component:
    """Make the component of a budget line. Raises ComponentError."""
    return Component.from_estimate(line.code, line.quantity, line.level, estimate, evaluation_type)


def assemble_budget(document: BudgetDocument, components: Sequence[Component], bias: float | None) -> Budget:
    """Put a budget together from its document and its resolved components. Raises ComponentError."""
    lower, upper = document.validated_range.lower, document.validated_range.upper
    if lower is None or upper is None:
        raise ComponentError("the validated range needs both ends", where=("validated_range",))
    return Budget(
        components=tuple(components),
        procedure=Procedure(
            samples=_count(document.procedure.samples),
            readings_per_sample=_count(document.procedure.readings_per_sample),
        ),
        coverage_probability=document.coverage_probability,
        bias=bias,
        bias_treatment=document.bias_treatment,
        validated_range=(lower, upper),
    )


def budget_evaluation(document: dict[str, Any], resolved: ResolvedBudget) -> dict[str, Any]:
    """Write down the numbers of a budget, with a digest over the document and them."""
    numbers = {
        "bias": resolved.budget.bias,
        "components": [
            {"evaluation_type": behind.evaluation_type, "estimate": behind.estimate.to_document()}
            for behind in resolved.behind
        ],
        "serves_until": resolved.serves_until,
    }
    return {**numbers, "digest": _digest({"document": document, **numbers})}


def budget_from_evaluation(document: BudgetDocument, evaluation: dict[str, Any]) -> Budget:
    """Rebuild the budget from its stored numbers."""
    components = [
        component_of(line, Estimate.from_document(stored["estimate"]), stored["evaluation_type"])
        for line, stored in zip(document.components, evaluation["components"], strict=True)
    ]
    return assemble_budget(document, components, evaluation["bias"])


def _count(planned: PlannedCount) -> Count:
    return Count(least=planned.least, plan=planned.plan, most=planned.most)


def _digest(content: dict[str, Any]) -> str:
    text = json.dumps(content, sort_keys=True, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    return "sha256:" + hashlib.sha256(text.encode()).hexdigest()
