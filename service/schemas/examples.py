"""A valid example of every document, in the invented plant; shown in openapi.yaml and used by tests."""

from __future__ import annotations

from typing import Any

from service import documents

_SCAN: dict[str, Any] = {"sample": "1", "analyzer": "nir-1", "calibration": "wmp-7"}

_TRUENESS: dict[str, Any] = {
    "declaration": {
        "meaning": "standard_deviation",
        "value": 0.08,
        "unit": "%",
        "reliability": 0.25,
        "document": "ring test 12",
    },
    "estimate": None,
}


def _of_study(study: str, estimate: str) -> dict[str, Any]:
    return {"study": study, "estimate": estimate}


_SET_POINT: dict[str, Any] = {
    "product": "whole-milk-powder",
    "characteristic": "moisture",
    "analyzer": "nir-1",
    "unit": "%",
    "specifications": ["legal", "customer-b"],
    "procedure": None,
    "process_variation": {
        "from": "stated",
        "steered_by_this_analyzer": False,
        "study": None,
        "first_day": None,
        "last_day": None,
        "mean": 2.85,
        "lot_to_lot": 0.08,
        "drift": 0.02,
        "within_lot": 0.03,
        "true_standard_deviation": None,
        "reading_standard_deviation": None,
    },
    "wanted": {"release_rate": 0.95, "largest_risk": 0.001},
    "money": {
        "currency": "EUR",
        "lot_size": 25.0,
        "quantity_unit": "t",
        "lots_per_year": 2000.0,
        "value_of_one_unit": 30.0,
        "cost_of_hold": 250.0,
        "cost_of_retest": 40.0,
        "cost_of_nonconforming": 20000.0,
        "cost_of_not_released": 1500.0,
    },
    "towards": "upper",
    "wanted_set_point": 2.95,
}

_NO_OPTION: dict[str, Any] = {
    "cost_per_lot": 0.0,
    "cost_per_year": 0.0,
    **dict.fromkeys(
        (
            "samples",
            "readings_per_sample",
            "increments_per_sample",
            "looks",
            "component",
            "standard_uncertainty",
            "factor",
            "degrees_of_freedom",
            "standard_deviation",
            "determinations",
            "instead_of",
            "pairs",
            "budget",
            "version",
        )
    ),
}

EXAMPLES: dict[type[Any], dict[str, Any]] = {
    documents.Product: {
        "code": "whole-milk-powder",
        "name": "Whole-milk powder",
        "default_specifications": ["legal", "customer-b"],
        "external_codes": {"mes": "4711"},
    },
    documents.Characteristic: {
        "code": "moisture",
        "product": "whole-milk-powder",
        "unit": "%",
        "accepted_units": ["%", "g/kg"],
        "basis": "as is",
        "natural_domain": {"lower": 0, "upper": 100},
        "decimals": 2,
        "derived_from": None,
        "external_codes": {},
    },
    documents.Line: {
        "code": "tower-1",
        "name": "Tower 1",
        "analyzers": ["nir-1", "oven"],
        "external_codes": {},
    },
    documents.Analyzer: {
        "code": "nir-1",
        "kind": "analyzer",
        "channels": ["moisture", "fat", "protein"],
        "decimals": {"moisture": 2},
        "external_codes": {},
    },
    documents.Calibration: {
        "code": "wmp-7",
        "analyzer": "nir-1",
        "product": "whole-milk-powder",
        "from": "2026-01-10",
        "samples": 420,
        "latent_variables": {"moisture": 6},
        "standard_error_of_calibration": {"moisture": 0.09},
        "adjustment": {"moisture": {"slope": 1.0, "bias": 0.0}},
        "flags": {
            "distance-from-calibration-set": {"largest": 3.0, "required": True},
            "unexplained-spectrum": {"largest": 2.5, "required": False},
        },
        "influences": {"sample_temperature": {"unit": "degC", "lower": 15, "upper": 30}},
        "external_codes": {},
    },
    documents.Laboratory: {
        "code": "site-lab",
        "kind": "laboratory",
        "methods": {"moisture": {"method": "ISO 5537", "trueness": _TRUENESS}},
        "external_codes": {},
    },
    documents.Plant: {
        "time_zone": "Europe/Berlin",
        "lapse_hour": "11:00",
        "working_days": ["monday", "tuesday", "wednesday", "thursday", "friday"],
        "serving_days": {"repeatability": 365, "duplicates": 365, "agreement": 365},
        "replicate_level": None,
        "reason": "first rules of the plant",
    },
    documents.Specification: {
        "code": "customer-b",
        "product": "whole-milk-powder",
        "kind": "customer",
        "requires": [
            {
                "characteristic": "moisture",
                "method": "ISO 5537",
                "judged": "lot_mean",
                "lower_tolerance_limit": None,
                "upper_tolerance_limit": {"value": 3.2, "unit": "%", "inclusive": True},
                "comparison": "absolute",
                "decimals": 2,
                "decision_rule": {
                    "kind": "guarded_by_specific_risk",
                    "largest_risk": 0.05,
                    "rejection": "at_tolerance_limit",
                    "rounds": 1,
                },
            }
        ],
        "not_judged": ["microbiology"],
        "reason": "contract of January",
    },
    documents.BudgetDocument: {
        "code": "wmp-moisture-nir",
        "product": "whole-milk-powder",
        "characteristic": "moisture",
        "unit": "%",
        "calibrations": {"nir-1": "wmp-7"},
        "validated_range": {"lower": 1.5, "upper": 5.5},
        "coverage_probability": 0.95,
        "bias_treatment": "corrected",
        "model": {
            "expression": "moisture - bias",
            "quantities": {
                "moisture": {"unit": "%", "from": "reading"},
                "bias": {"unit": "%", "evidence": _of_study("wmp-val-2026-01", "bias")},
            },
        },
        "procedure": {
            "samples": {"least": 1, "plan": 1, "most": 3},
            "readings_per_sample": {"least": 2, "plan": 2, "most": 4},
        },
        "components": [
            {
                "code": "repeatability",
                "quantity": "moisture",
                "level": "reading",
                "evidence": _of_study("wmp-rep-2026-01", "repeatability"),
            },
            {
                "code": "remainder",
                "quantity": "moisture",
                "level": "lot",
                "evidence": _of_study("wmp-val-2026-01", "remainder"),
            },
            {
                "code": "bias",
                "quantity": "bias",
                "level": "calibration",
                "evidence": _of_study("wmp-val-2026-01", "bias"),
            },
            {
                "code": "reference-trueness",
                "quantity": "bias",
                "level": "reference",
                "evidence": _TRUENESS,
            },
        ],
        "correlations": [],
        "reason": "new reference study",
    },
    documents.Study: {
        "code": "wmp-rep-2026-01",
        "design": "repeatability",
        "product": "whole-milk-powder",
        "characteristic": "moisture",
        "unit": "%",
        "calibrations": {"nir-1": "wmp-7"},
        "laboratory": None,
        "done_on": "2026-01-14",
        "serves_until": "2027-01-14",
        "done_by": "lab",
        "procedure": "lab method 12",
        "independent": None,
        "named_sources": [],
        "columns": ["sample", "replicate", "reading"],
        "rows": [
            ["P01", 1, 3.11],
            ["P01", 2, 3.14],
            ["P02", 1, 2.87],
            ["P02", 2, 2.91],
            ["P02", 3, 2.02],
            ["P03", 1, 3.32],
            ["P03", 2, 3.29],
        ],
        "set_aside": [{"row": 5, "reason": "cup not filled"}],
        "source": {"name": "replicates.csv", "sha256": None},
    },
    documents.Replacement: {"study": "wmp-rep-2027-01", "reason": "yearly study of repeatability"},
    documents.Extension: {
        "until": "2027-03-01",
        "widening_factor": 1.5,
        "reason": "the new study is under way; check samples show no drift",
        "signature": {"password": "the person's own"},
    },
    documents.StudyPlanRequest: {
        "precision": {"relative_uncertainty": 0.25, "design": "repeatability", "values_per_sample": 2},
        "bias": {"bias": 0.05, "standard_deviation": 0.1, "power": 0.9, "pairs_per_group": 2},
    },
    documents.MonteCarloRequest: {
        "trials": 1000000,
        "seed": 7,
        "significant_digits": 2,
        "at": {"moisture": 3.1},
    },
    documents.GlobalRisksRequest: {
        "product": "whole-milk-powder",
        "characteristic": "moisture",
        "analyzer": "nir-1",
        "specification": "customer-b",
        "unit": "%",
        "prior": {
            "distribution": "normal",
            "study": None,
            "declaration": {
                "mean": 2.95,
                "standard_deviation": 0.12,
                "degrees_of_freedom": None,
                "values": [],
                "unit": "%",
                "known_from": "true_values",
                "steered_by_this_analyzer": False,
                "readings": None,
                "document": "laboratory results of 2025",
            },
            "record": None,
        },
        "procedure": None,
        "guard_bands": None,
        "largest_risk": 0.001,
    },
    documents.SetPointRequest: _SET_POINT,
    documents.ImprovementsRequest: {
        "production": _SET_POINT,
        "options": [
            {**_NO_OPTION, "code": "two-samples", "kind": "procedure", "cost_per_lot": 12.0, "samples": 2},
            {
                **_NO_OPTION,
                "code": "better-reference",
                "kind": "component",
                "cost_per_year": 3000.0,
                "component": "reference-trueness",
                "standard_uncertainty": 0.02,
            },
        ],
    },
    documents.GiveawayRequest: {
        "production": _SET_POINT,
        "first_day": "2026-02-01",
        "last_day": "2026-02-28",
    },
    documents.DecisionRequest: {
        "lot": "W26-04711",
        "product": "whole-milk-powder",
        "line": "tower-1",
        "operator": "shift 2",
        "specifications": ["legal", "customer-b"],
        "units": {"moisture": "%", "fat": "%", "protein": "%"},
        "readings": [
            {
                **_SCAN,
                "taken_at": "2026-03-02T06:12:04.120+01:00",
                "values": {"moisture": 3.12, "fat": 26.4, "protein": 24.9},
                "flags": {"distance-from-calibration-set": 1.8},
                "influences": {"sample_temperature": 24.5},
            },
            {
                **_SCAN,
                "taken_at": "2026-03-02T06:12:41.480+01:00",
                "values": {"moisture": 3.15, "fat": 26.5, "protein": 24.8},
                "flags": {"distance-from-calibration-set": 1.7},
                "influences": {"sample_temperature": 24.4},
            },
        ],
    },
    documents.RetestRequest: {
        "line": "tower-1",
        "operator": "shift 2",
        "units": {"moisture": "%"},
        "readings": [
            {
                **_SCAN,
                "sample": "2",
                "taken_at": f"2026-03-02T06:31:{second}+01:00",
                "values": {"moisture": moisture},
                "flags": {"distance-from-calibration-set": 1.6},
                "influences": {"sample_temperature": 24.1},
            }
            for second, moisture in (("10.020", 3.02), ("44.310", 3.05))
        ],
    },
    documents.SignedAct: {
        "reason": "limits agree with the contract",
        "signature": {"password": "the person's own"},
    },
}
