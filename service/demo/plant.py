"""The documents of the demo plant: master data, studies, budget and specifications, as the API takes them.

The legal limit is that of the Codex standard for milk powders, CXS 207, water at most 5 % m/m (from memory);
the customer's limit and everything else is invented. Dates are counted back from today, so that the evidence
of the demo serves whenever it is run.
"""

from __future__ import annotations

import csv
import hashlib
from collections.abc import Iterator
from datetime import UTC, date, datetime, time, timedelta
from importlib.resources import files
from typing import Any, Final

Document = dict[str, Any]

PRODUCT: Final = "whole-milk-powder"
LINE: Final = "tower-1"
ANALYZER: Final = "nir-1"
CALIBRATION: Final = "wmp-7"
LABORATORY: Final = "site-lab"
BUDGET: Final = "wmp-moisture-nir"


def rows_of(name: str) -> list[dict[str, str]]:
    """Read a raw data file of the demo."""
    text = files("service.demo").joinpath("data", name).read_text("utf-8")
    return list(csv.DictReader(text.splitlines()))


def master_data() -> Iterator[tuple[str, Document]]:
    """Give path and document of everything that the plant has, in the order in which it can be put."""
    yield (
        f"/v1/products/{PRODUCT}",
        {
            "code": PRODUCT,
            "name": "Whole-milk powder",
            "external_codes": {"mes": "4711"},
            "default_specifications": ["legal", "customer-b"],
        },
    )
    yield (
        f"/v1/products/{PRODUCT}/characteristics/moisture",
        {
            "code": "moisture",
            "product": PRODUCT,
            "unit": "%",
            "accepted_units": ["%", "g/kg", "g/100 g"],
            "basis": "as is",
            "natural_domain": {"lower": 0, "upper": 100},
            "decimals": 2,
            "derived_from": None,
        },
    )
    yield (
        f"/v1/analyzers/{ANALYZER}",
        {"code": ANALYZER, "kind": "analyzer", "channels": ["moisture"], "decimals": {"moisture": 2}},
    )
    yield f"/v1/lines/{LINE}", {"code": LINE, "name": "Tower 1", "analyzers": [ANALYZER]}
    yield (
        f"/v1/analyzers/{ANALYZER}/calibrations/{CALIBRATION}",
        {
            "code": CALIBRATION,
            "analyzer": ANALYZER,
            "product": PRODUCT,
            "from": _days_ago(60),
            "samples": 420,
            "latent_variables": {"moisture": 6},
            "standard_error_of_calibration": {"moisture": 0.08},
            "adjustment": {"moisture": {"slope": 1.0, "bias": 0.0}},
            "flags": {"distance-from-calibration-set": {"largest": 3.0, "required": True}},
            "influences": {"sample_temperature": {"unit": "degC", "lower": 15, "upper": 30}},
        },
    )
    yield (
        f"/v1/laboratories/{LABORATORY}",
        {
            "code": LABORATORY,
            "kind": "laboratory",
            "methods": {"moisture": {"method": "oven method", "trueness": {"declaration": _trueness()}}},
        },
    )


def studies() -> Iterator[Document]:
    """Give the three studies, in the order in which they build on each other."""
    yield _study("wmp-rep", "repeatability", "replicate-scans.csv", days_ago=40, on_analyzer=True)
    yield _study("oven-dup", "duplicates", "oven-duplicates.csv", days_ago=38, laboratory=LABORATORY)
    yield {
        **_study(
            "wmp-val",
            "agreement",
            "validation-pairs.csv",
            days_ago=30,
            on_analyzer=True,
            laboratory=LABORATORY,
        ),
        "independent": True,
        "named_sources": [
            {
                "source": "analyzer_repeatability",
                "evidence": {"study": "wmp-rep", "estimate": "repeatability"},
            },
            {
                "source": "reference_repeatability",
                "evidence": {"study": "oven-dup", "estimate": "repeatability"},
            },
        ],
    }


def budget() -> Document:
    """Give the budget of moisture on the analyzer."""

    def component(code: str, quantity: str, level: str, evidence: Document) -> Document:
        return {"code": code, "quantity": quantity, "level": level, "evidence": evidence}

    sampling = {"meaning": "standard_deviation", "value": 0.03, "unit": "%", "reliability": 0.25}
    return {
        "code": BUDGET,
        "product": PRODUCT,
        "characteristic": "moisture",
        "unit": "%",
        "calibrations": {ANALYZER: CALIBRATION},
        "validated_range": {"lower": 2.0, "upper": 4.6},
        "coverage_probability": 0.95,
        "bias_treatment": "corrected",
        "model": {
            "expression": "moisture - bias",
            "quantities": {
                "moisture": {"unit": "%", "from": "reading"},
                "bias": {"unit": "%", "evidence": {"study": "wmp-val", "estimate": "bias"}},
            },
        },
        "procedure": {
            "samples": {"least": 1, "plan": 1, "most": 3},
            "readings_per_sample": {"least": 2, "plan": 2, "most": 4},
        },
        "components": [
            component(
                "repeatability", "moisture", "reading", {"study": "wmp-rep", "estimate": "repeatability"}
            ),
            component(
                "sampling",
                "moisture",
                "sample",
                {"declaration": {**sampling, "document": "sampling trial, invented"}},
            ),
            component("remainder", "moisture", "lot", {"study": "wmp-val", "estimate": "remainder"}),
            component("bias", "bias", "calibration", {"study": "wmp-val", "estimate": "bias"}),
            component("reference-trueness", "bias", "reference", {"declaration": _trueness()}),
        ],
        "correlations": [],
        "reason": "first budget of this calibration",
    }


def specifications() -> Iterator[Document]:
    """Give the legal specification and that of a customer."""
    yield _specification(
        "legal",
        "legal",
        5.0,
        {"kind": "guarded_by_factor", "multiple": 1, "coverage_probability": 0.95, "sides": 1},
    )
    yield _specification(
        "customer-b", "customer", 3.2, {"kind": "guarded_by_specific_risk", "largest_risk": 0.05}
    )


def lots() -> Iterator[Document]:
    """Give a decision request for each of the production lots, the first lot first."""
    by_lot: dict[str, list[dict[str, str]]] = {}
    for row in rows_of("production-lots.csv"):
        by_lot.setdefault(row["lot"], []).append(row)
    last_day = max(int(row["day"]) for rows in by_lot.values() for row in rows)
    for lot, rows in by_lot.items():
        yield decision_request(lot, [_reading(row, last_day) for row in rows])


def decision_request(lot: str, readings: list[Document]) -> Document:
    """Give the request by which the line asks about a lot."""
    return {
        "lot": lot,
        "product": PRODUCT,
        "line": LINE,
        "operator": "shift 2",
        "units": {"moisture": "%"},
        "readings": readings,
    }


def reading(sample: str, taken_at: str, moisture: float, *, distance: float, temperature: float) -> Document:
    """Give one scan as the analyzer's computer sends it."""
    return {
        "sample": sample,
        "analyzer": ANALYZER,
        "calibration": CALIBRATION,
        "taken_at": taken_at,
        "values": {"moisture": moisture},
        "flags": {"distance-from-calibration-set": distance},
        "influences": {"sample_temperature": temperature},
    }


def _reading(row: dict[str, str], last_day: int) -> Document:
    # Day n of the file becomes so many days before today.
    day = datetime.now(UTC).date() - timedelta(days=last_day - int(row["day"]) + 1)
    taken_at = datetime.combine(day, time.fromisoformat(row["time"]), tzinfo=UTC)
    return reading(
        row["sample"],
        taken_at.isoformat(timespec="milliseconds"),
        float(row["moisture"]),
        distance=float(row["distance_from_calibration_set"]),
        temperature=float(row["sample_temperature"]),
    )


def _trueness() -> Document:
    return {
        "meaning": "standard_deviation",
        "value": 0.05,
        "unit": "%",
        "reliability": 0.25,
        "document": "ring test 12, invented",
    }


def _specification(code: str, kind: str, limit: float, rule: Document) -> Document:
    return {
        "code": code,
        "product": PRODUCT,
        "kind": kind,
        "requires": [
            {
                "characteristic": "moisture",
                "method": "oven method",
                "judged": "lot_mean",
                "lower_tolerance_limit": None,
                "upper_tolerance_limit": {"value": limit, "unit": "%", "inclusive": True},
                "comparison": "absolute",
                "decimals": 2,
                "decision_rule": {**rule, "rejection": "at_tolerance_limit", "rounds": 1},
            }
        ],
        "not_judged": ["microbiology"],
        "reason": "first version",
    }


def _study(
    code: str,
    design: str,
    file: str,
    *,
    days_ago: int,
    on_analyzer: bool = False,
    laboratory: str | None = None,
) -> Document:
    content = files("service.demo").joinpath("data", file).read_bytes()
    header, *rows = csv.reader(content.decode("utf-8").splitlines())
    text_columns = {"sample", "pair", "group"}
    return {
        "code": code,
        "design": design,
        "product": PRODUCT,
        "characteristic": "moisture",
        "unit": "%",
        "calibrations": {ANALYZER: CALIBRATION} if on_analyzer else {},
        "laboratory": laboratory,
        "done_on": _days_ago(days_ago),
        "done_by": "laboratory",
        "columns": header,
        "rows": [
            [cell if name in text_columns else float(cell) for name, cell in zip(header, row, strict=True)]
            for row in rows
        ],
        "set_aside": [],
        "source": {"name": file, "sha256": hashlib.sha256(content).hexdigest()},
    }


def _days_ago(days: int) -> str:
    today: date = datetime.now(UTC).date()
    return (today - timedelta(days=days)).isoformat()
