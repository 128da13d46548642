"""What the process engineer of the demo plant asks: how close to the limit, what does it bring, what to buy.

The money is invented: powder is sold by weight, so every per cent of moisture more is powder more.
"""

from __future__ import annotations

from typing import Any, Final

from service.demo import plant

Document = dict[str, Any]

MONEY: Final[Document] = {
    "currency": "EUR",
    "lot_size": 25.0,
    "quantity_unit": "t",
    "lots_per_year": 2400.0,
    # A tonne of powder is worth 3000 EUR: one per cent more of it is 30 EUR.
    "value_of_one_unit": 30.0,
    "cost_of_hold": 60.0,
    "cost_of_retest": 15.0,
    "cost_of_nonconforming": 25000.0,
    "cost_of_not_released": 400.0,
}


def set_point_question(**changes: Any) -> Document:
    """Ask how close to the limits of moisture the dryer may run."""
    return {
        "product": plant.PRODUCT,
        "characteristic": "moisture",
        "analyzer": plant.ANALYZER,
        "unit": "%",
        "process_variation": {"from": "record", "steered_by_this_analyzer": False},
        "wanted": {"release_rate": 0.95, "largest_risk": 0.001},
        "money": MONEY,
        **changes,
    }


def improvements_question() -> Document:
    """Ask what to buy first, of twelve things."""
    return {"production": set_point_question(), "options": _options()}


def giveaway_question() -> Document:
    """Ask what the lots of the record gave away."""
    return {"production": set_point_question()}


def _options() -> list[Document]:
    def procedure(code: str, cost_per_lot: float, **numbers: int) -> Document:
        return {"code": code, "kind": "procedure", "cost_per_lot": cost_per_lot, **numbers}

    def component(code: str, line: str, factor: float, cost_per_year: float) -> Document:
        return {
            "code": code,
            "kind": "component",
            "component": line,
            "factor": factor,
            "cost_per_year": cost_per_year,
        }

    return [
        procedure("four-scans", 0.5, readings_per_sample=4),
        procedure("eight-scans", 1.5, readings_per_sample=8),
        procedure("two-samples", 4.0, samples=2),
        procedure("three-samples", 8.0, samples=3),
        procedure("two-samples-four-scans", 5.0, samples=2, readings_per_sample=4),
        procedure("composite-of-four", 1.0, increments_per_sample=4),
        component("better-ring-test", "reference-trueness", 0.4, 2500.0),
        component("wider-calibration-set", "remainder", 0.7, 12000.0),
        component("better-cup", "sampling", 0.5, 1500.0),
        component("quieter-lamp", "repeatability", 0.7, 4000.0),
        component("more-validation-pairs", "bias", 0.6, 3000.0),
        {
            "code": "duplicate-determinations",
            "kind": "reference_determinations",
            "component": "bias",
            "standard_deviation": 0.04,
            "determinations": 2,
            "instead_of": 1,
            "pairs": 60,
            "cost_per_year": 600.0,
        },
    ]
