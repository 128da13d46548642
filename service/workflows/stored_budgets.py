"""What is stored of a budget at its approval, and the budget rebuilt from it.

Decisions rest on these stored numbers, never on evidence evaluated anew, so that a later release of this
program or of a library cannot move a verdict.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from budgets.budget import Budget, Count, Procedure
from budgets.components import Component
from budgets.correlations import Correlation
from budgets.errors import ComponentError
from budgets.evidence.evaluation import Estimate
from budgets.measurement_models import MeasurementModel, Quantity
from service.documents import Bounds, BudgetComponent, BudgetDocument, PlannedCount
from service.workflows.evidence import Behind
from service.workflows.laboratories import used

BIAS: Final = "bias"


@dataclass(frozen=True)
class ResolvedBudget:
    """A budget with what stands behind each of its components, in the order of the document.

    ``estimates`` holds the values of the quantities that evidence stands behind.
    """

    budget: Budget
    behind: tuple[Behind, ...]
    estimates: Mapping[str, float]
    serves_until: str | None


def is_default_model(document: BudgetDocument) -> bool:
    """Say whether the model is the reading less its bias, which needs no expression."""
    return "".join(document.model.expression.split()) == f"{document.characteristic}-{BIAS}"


def component_of(line: BudgetComponent, estimate: Estimate, evaluation_type: str) -> Component:
    """Make the component of a budget line. Raises ComponentError."""
    if bool(estimate.matrix_terms) != bool(line.quantities):
        expected = "quantities" if estimate.matrix_terms else "a quantity"
        raise ComponentError(
            f"component {line.code}: the estimate {estimate.name!r} belongs to {expected}",
            where=("quantity" if line.quantity else "quantities",),
        )
    return Component.from_estimate(
        line.code,
        line.quantity or "",
        line.level,
        estimate,
        evaluation_type,
        relative_to=line.relative_to or "",
        quantities=line.quantities,
    )


def assemble_budget(
    document: BudgetDocument, components: Sequence[Component], estimates: Mapping[str, float]
) -> Budget:
    """Put a budget together from its document and its resolved components. Raises the errors of budgets."""
    # Also the default model is checked as an expression, though it needs none to be computed.
    stated = _model(document, estimates)
    default = is_default_model(document)
    return Budget(
        components=tuple(components),
        procedure=Procedure(
            samples=_count(document.procedure.samples),
            readings_per_sample=_count(document.procedure.readings_per_sample),
        ),
        coverage_probability=document.coverage_probability,
        bias=estimates[BIAS] if default else None,
        bias_treatment=document.bias_treatment,
        validated_range=_ends(document.validated_range, "validated_range"),
        model=None if default else stated,
        correlations=tuple(
            Correlation(item.between, item.level, item.coefficient) for item in document.correlations
        ),
        validated_box={
            name: _ends(bounds, "validated_ranges", name)
            for name, bounds in document.validated_ranges.items()
        },
    )


def _model(document: BudgetDocument, estimates: Mapping[str, float]) -> MeasurementModel:
    expression, names = document.model.expression, {name: name for name in document.model.quantities}
    if is_default_model(document):
        # The code of a characteristic may hold hyphens, which in an expression are minus signs.
        expression, names[document.characteristic] = f"reading - {BIAS}", "reading"
    return MeasurementModel(
        expression,
        tuple(
            Quantity(
                names[name],
                quantity.unit,
                "reading" if quantity.source == "reading" else "given",
                None if quantity.source == "reading" else estimates[name],
            )
            for name, quantity in document.model.quantities.items()
        ),
        unit=document.unit,
    )


def _ends(bounds: Bounds, *where: str) -> tuple[float, float]:
    if bounds.lower is None or bounds.upper is None:
        raise ComponentError("a validated range needs both ends", where=where)
    return bounds.lower, bounds.upper


def budget_evaluation(document: dict[str, Any], resolved: ResolvedBudget) -> dict[str, Any]:
    """Write down the numbers of a budget, with a digest over the document and them."""
    numbers: dict[str, Any] = {
        "estimates": dict(resolved.estimates),
        "components": [
            {
                "evaluation_type": behind.evaluation_type,
                "estimate": behind.estimate.to_document(),
                **({} if behind.laboratory is None else {"laboratory": dict(used(behind))}),
            }
            for behind in resolved.behind
        ],
        "serves_until": resolved.serves_until,
    }
    extensions = {item.extension["study"]: dict(item.extension) for item in resolved.behind if item.extension}
    if extensions:
        numbers["extensions"] = list(extensions.values())
    return {**numbers, "digest": _digest({"document": document, **numbers})}


def budget_from_evaluation(document: BudgetDocument, evaluation: dict[str, Any]) -> Budget:
    """Rebuild the budget from its stored numbers."""
    components = [
        component_of(line, Estimate.from_document(stored["estimate"]), stored["evaluation_type"])
        for line, stored in zip(document.components, evaluation["components"], strict=True)
    ]
    return assemble_budget(document, components, evaluation["estimates"])


def _count(planned: PlannedCount) -> Count:
    return Count(least=planned.least, plan=planned.plan, most=planned.most)


def _digest(content: dict[str, Any]) -> str:
    text = json.dumps(content, sort_keys=True, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    return "sha256:" + hashlib.sha256(text.encode()).hexdigest()
