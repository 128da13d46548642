"""The acceptance limits now: what a reading must meet, per analyzer, specification and procedure."""

from __future__ import annotations

import hashlib
import json
from typing import Any

from budgets.derived_release import DerivedReleaseRule
from budgets.item_rules import LotSpreadRule
from service.access import require
from service.documents import Actor
from service.errors import Conflict, NotFound
from service.workflows.register import BudgetInForce, Register, SpecificationInForce
from service.workflows.rule_figures import FIGURES, figures_of, tolerance_figures
from service.workflows.rules import AnyRule, RuleKey, counts_from_text, counts_text, planned_counts
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
                "extensions": [dict(extension) for extension in budget.extensions],
                "bias": budget.budget.bias,
                "bias_treatment": budget.budget.bias_treatment,
                **_figures(rule),
            }
        )
    return items


def _figures(rule: AnyRule) -> dict[str, Any]:
    """Write the figures of a rule; those that a derived characteristic has only at its readings are null."""
    if isinstance(rule, LotSpreadRule):
        return {
            **dict.fromkeys(FIGURES),
            "acceptance_limits": rule.acceptance_limits,
            **tolerance_figures(rule.tolerance),
            "coverage_probability": rule.coverage_probability,
        }
    if isinstance(rule, DerivedReleaseRule):
        return {
            **dict.fromkeys(FIGURES),
            "acceptance_limits": rule.acceptance_limits,
            **tolerance_figures(rule.tolerance),
            "within_domain": rule.truncated,
            "coverage_probability": rule.coverage_probability,
            "smallest_standard_uncertainty": rule.box.smallest_standard_uncertainty,
            "largest_standard_uncertainty": rule.box.largest_standard_uncertainty,
        }
    return figures_of(rule, rule.acceptance_limits)
