"""The acceptance limits now: what a reading must meet, per analyzer, specification and procedure."""

from __future__ import annotations

import hashlib
import json
from typing import Any

from service.access import require
from service.documents import Actor
from service.errors import Conflict, NotFound
from service.workflows.register import BudgetInForce, Register, SpecificationInForce
from service.workflows.rules import RuleKey, counts_from_text, counts_text, planned_counts
from service.workflows.services import Services


def now(services: Services, actor: Actor, product: str, characteristic: str) -> tuple[dict[str, Any], str]:
    """Give the limits in force with an ETag that changes whenever they or their state do.

    Raises
    ------
    NotFound
        There is no such characteristic.
    Conflict
        No budget, or no specification that requires it, is in force.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        register = services.registers.current(unit_of_work)
        instant = unit_of_work.now("plant")
    if (product, characteristic) not in register.characteristics:
        raise NotFound(f"There is no characteristic {characteristic!r} of {product!r}.")
    items = [
        item
        for (of_product, of_characteristic, analyzer), budget in sorted(register.budgets.items())
        if (of_product, of_characteristic) == (product, characteristic)
        for specification in register.specifications.values()
        if specification.document.product == product
        for item in _items(register, specification, budget, analyzer, characteristic, instant)
    ]
    if not items:
        raise Conflict(
            "nothing-in-force",
            f"No budget and specification for {characteristic} of {product} are in force together.",
        )
    answer = {
        "product": product,
        "characteristic": characteristic,
        "unit": register.characteristics[product, characteristic].unit,
        "items": items,
    }
    text = json.dumps(answer, sort_keys=True, allow_nan=False)
    return answer, hashlib.sha256(text.encode()).hexdigest()[:32]


def _items(
    register: Register,
    specification: SpecificationInForce,
    budget: BudgetInForce,
    analyzer: str,
    characteristic: str,
    instant: str,
) -> list[dict[str, Any]]:
    planned = counts_text(planned_counts(budget.budget.procedure))
    lapsed = budget.lapses_at is not None and instant >= budget.lapses_at
    items = []
    for key, rule in sorted(register.rules.items(), key=lambda item: item[0].counts):
        ours = RuleKey(
            specification.document.code,
            specification.version,
            characteristic,
            budget.document.code,
            budget.version,
            key.counts,
        )
        counts = counts_from_text(key.counts).readings_per_sample
        if key != ours or len(set(counts)) != 1:
            continue
        nu = rule.effective_degrees_of_freedom
        items.append(
            {
                "analyzer": analyzer,
                "specification": {"code": specification.document.code, "version": specification.version},
                "budget": {
                    "code": budget.document.code,
                    "version": budget.version,
                    "digest": budget.digest,
                },
                "procedure": {"samples": len(counts), "readings_per_sample": counts[0]},
                "planned": key.counts == planned,
                "state": "lapsed" if lapsed else "in_force",
                "lapses_at": budget.lapses_at,
                "lower_tolerance_limit": rule.lower_tolerance_limit,
                "upper_tolerance_limit": rule.upper_tolerance_limit,
                "lower_acceptance_limit": rule.lower_acceptance_limit,
                "upper_acceptance_limit": rule.upper_acceptance_limit,
                "guard_band": {"lower": rule.guard_band_lower, "upper": rule.guard_band_upper},
                "bias": budget.budget.bias,
                "bias_treatment": budget.budget.bias_treatment,
                "combined_standard_uncertainty": rule.combined_standard_uncertainty,
                "effective_degrees_of_freedom": None if nu == float("inf") else nu,
                "coverage_probability": rule.coverage_probability,
                "coverage_factor": rule.coverage_factor,
                "expanded_uncertainty": rule.expanded_uncertainty,
                "measurement_capability_index": rule.measurement_capability_index,
                "largest_specific_risk": rule.largest_specific_risk,
            }
        )
    return items
