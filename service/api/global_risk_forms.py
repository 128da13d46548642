"""The form of the answer about global risks."""

from __future__ import annotations

from service.api.forms import Form, list_of, object_of, or_null, ref

_TEXT: Form = {"type": "string"}
_WHOLE: Form = {"type": "integer"}
_NUMBER: Form = {"type": "number"}
_MAYBE: Form = {"type": ["number", "null"]}
_SHARE: Form = {"type": "number", "minimum": 0, "maximum": 1}
_MAYBE_SHARE: Form = {"type": ["number", "null"], "minimum": 0, "maximum": 1}
_MEAN = "of all lots; mean over the error that all readings share."
_QUANTILE = "The same, not exceeded for 95 % of the values of the error that all readings share."

_POINT = object_of(
    "One acceptance interval.",
    {
        "guard_band": {**_NUMBER, "description": "Positive: acceptance inside tolerance."},
        "lower_acceptance_limit": _MAYBE,
        "upper_acceptance_limit": _MAYBE,
        "release_rate": _SHARE,
        "global_consumers_risk": {**_SHARE, "description": f"Nonconforming and accepted, {_MEAN}"},
        "global_consumers_risk_quantile": {**_SHARE, "description": _QUANTILE},
        "conditional_global_consumers_risk": {
            **_MAYBE_SHARE,
            "description": "Nonconforming, of the accepted lots; null: none is accepted.",
        },
        "global_producers_risk": {**_SHARE, "description": f"Conforming and not accepted, {_MEAN}"},
        "global_producers_risk_quantile": {**_SHARE, "description": _QUANTILE},
        "conditional_global_producers_risk": {
            **_MAYBE_SHARE,
            "description": "Conforming, of the lots that are not accepted; null: all are.",
        },
    },
)
_ESTIMATED = object_of(
    "What the prior was estimated from.",
    {
        "lots": _WHOLE,
        "observed_standard_deviation": _NUMBER,
        "removed_standard_deviation": {**_NUMBER, "description": "What the measurement adds to every lot."},
        "interval": object_of(
            "Of the standard deviation of lots, 95 %.", {"lower": _NUMBER, "upper": _NUMBER}
        ),
        "degrees_of_freedom": _MAYBE,
        "warnings": list_of(object_of("A warning.", {"code": _TEXT, "detail": _TEXT})),
        "left_out": {
            "type": "object",
            "description": "Lots of the record that could not serve, by reason.",
            "additionalProperties": _WHOLE,
        },
        "whole_record_read": {"type": "boolean"},
    },
)
_PRIOR = object_of(
    "How the true values of lots are distributed.",
    {
        "distribution": {"type": "string", "enum": ["normal", "t", "empirical"]},
        "mean": _NUMBER,
        "standard_deviation": _NUMBER,
        "degrees_of_freedom": _MAYBE,
        "values": list_of(_NUMBER),
        "anchor": {
            "type": "string",
            "enum": ["true_values", "readings"],
            "description": "What the mean is known from.",
        },
        "steering": or_null(
            object_of(
                "The readings of a steered process.",
                {
                    "mean_of_readings": _NUMBER,
                    "standard_deviation_of_readings": _NUMBER,
                    "correlation": _NUMBER,
                },
            )
        ),
        "estimated_from": or_null(_ESTIMATED),
    },
)

GLOBAL_RISK_ANSWERS: dict[str, Form] = {
    "GlobalRiskPoint": _POINT,
    "GlobalRisks": object_of(
        "Global risks of a rule in force, and over the guard band.",
        {
            "product": _TEXT,
            "characteristic": _TEXT,
            "analyzer": _TEXT,
            "unit": {**_TEXT, "description": "Of all figures, that of the characteristic."},
            "budget": object_of("The budget in force.", {"code": _TEXT, "version": _WHOLE, "digest": _TEXT}),
            "specification": object_of("The specification in force.", {"code": _TEXT, "version": _WHOLE}),
            "procedure": object_of("How a lot is read.", {"samples": _WHOLE, "readings_per_sample": _WHOLE}),
            "lower_tolerance_limit": _MAYBE,
            "upper_tolerance_limit": _MAYBE,
            "random_standard_uncertainty": {**_NUMBER, "description": "Drawn anew with every lot."},
            "common_standard_uncertainty": {**_NUMBER, "description": "One error for all lots."},
            "effective_degrees_of_freedom": {**_MAYBE, "description": "null: infinite."},
            "uncorrected_bias": _NUMBER,
            "prior": _PRIOR,
            "nonconforming_share": {**_SHARE, "description": "Of all lots, accepted or not."},
            "in_force": ref("GlobalRiskPoint"),
            "guard_band": or_null(
                object_of(
                    "The smallest guard band that holds the global consumer's risk asked for.",
                    {
                        "largest_risk": _SHARE,
                        "guard_band": _NUMBER,
                        "global_consumers_risk": _SHARE,
                        "release_rate": _SHARE,
                    },
                )
            ),
            "curve": list_of(ref("GlobalRiskPoint")),
            "statement": _TEXT,
            "caution": _TEXT,
        },
    ),
}
