"""The forms of the answers about set points, improvements and giveaway."""

from __future__ import annotations

from service.api.forms import Form, list_of, object_of, or_null, ref

_TEXT: Form = {"type": "string"}
_WHOLE: Form = {"type": "integer"}
_YES: Form = {"type": "boolean"}
_NUMBER: Form = {"type": "number"}
_MAYBE: Form = {"type": ["number", "null"]}
_MAYBE_TEXT: Form = {"type": ["string", "null"]}
_SHARE: Form = {"type": "number", "minimum": 0, "maximum": 1}

_FIGURES: Form = {
    "set_point": {**_NUMBER, "description": "Mean of the readings."},
    "true_mean": {**_NUMBER, "description": "Mean of the true values: the set point less the bias."},
    "release_rate": {**_SHARE, "description": "Of all lots, released at some look."},
    "release_rate_of_first_look": _SHARE,
    "hold_rate": {**_SHARE, "description": "Held at the first look."},
    "reject_rate": _SHARE,
    "further_looks": {**_NUMBER, "description": "Mean number of looks after the first."},
    "global_consumers_risk": {**_SHARE, "description": "Released and nonconforming, of all lots."},
    "conditional_global_consumers_risk": {**_SHARE, "description": "Nonconforming, of the released lots."},
    "conditional_global_consumers_risk_quantile": {
        "type": ["number", "null"],
        "description": "The same, not exceeded for 95 % of the values of the error that all lots share.",
    },
    "global_producers_risk": {**_SHARE, "description": "Conforming and not released, of all lots."},
    "cost": {**_MAYBE, "description": "Expected, of a lot."},
    "cost_parts": {"type": ["object", "null"], "additionalProperties": _NUMBER},
}
_WITH_GAIN = object_of(
    "A set point with its gain.",
    {
        **_FIGURES,
        "bound_by": {
            **_MAYBE_TEXT,
            "description": "What keeps it from running nearer, or cheaper; null: nothing.",
        },
        "gain_per_year": {**_MAYBE, "description": "Against today."},
    },
)
_ENDS = object_of("From here to there.", {"lower": _NUMBER, "upper": _NUMBER})
_RESTS_ON: Form = {
    "product": _TEXT,
    "characteristic": _TEXT,
    "analyzer": _TEXT,
    "calibration": _TEXT,
    "unit": {**_TEXT, "description": "Of all figures of the characteristic, that of the characteristic."},
    "budget": object_of("The budget in force.", {"code": _TEXT, "version": _WHOLE, "digest": _TEXT}),
    "specifications": list_of(
        object_of("A specification in force.", {"code": _TEXT, "version": _WHOLE, "legal": _YES})
    ),
    "valid_until": {**_MAYBE_TEXT, "description": "When the evidence lapses; null: it does not."},
    "procedure": object_of(
        "What is done at every look, and how many looks there are.",
        {
            "samples": _WHOLE,
            "readings_per_sample": _WHOLE,
            "increments_per_sample": _WHOLE,
            "looks": _WHOLE,
        },
    ),
    "process_variation": object_of(
        "How the lots vary.",
        {
            "from": _TEXT,
            "mean": {**_NUMBER, "description": "Of the readings: today's set point."},
            "lot_to_lot": _NUMBER,
            "drift": _NUMBER,
            "within_lot": _MAYBE,
            "steering": {**_NUMBER, "description": "Answer of the process to an error of the analyzer."},
            "true_standard_deviation": _NUMBER,
            "reading_standard_deviation": _NUMBER,
            "lots": {"type": ["integer", "null"]},
            "interval": or_null(_ENDS),
            "left_out": {"type": "object", "additionalProperties": _WHOLE},
            "recorded_release_rate": {**_MAYBE, "description": "To compare with the release rate today."},
            "warnings": list_of(object_of("A warning.", {"code": _TEXT, "detail": _TEXT})),
        },
    ),
    "measurement": object_of(
        "The first look.",
        {
            "combined_standard_uncertainty": _NUMBER,
            "effective_degrees_of_freedom": _MAYBE,
            "random_standard_uncertainty": {**_NUMBER, "description": "Drawn anew with every lot."},
            "common_standard_uncertainty": {**_NUMBER, "description": "Shared by all lots."},
            "lower_acceptance_limit": _MAYBE,
            "upper_acceptance_limit": _MAYBE,
            "lower_tolerance_limit": _MAYBE,
            "upper_tolerance_limit": _MAYBE,
            "reading_less_estimate": _NUMBER,
            "uncorrected_bias": _NUMBER,
        },
    ),
    "wanted": object_of("What is to be kept.", {"release_rate": _NUMBER, "largest_risk": _MAYBE}),
    "towards": _MAYBE_TEXT,
    "money": {"type": ["object", "null"], "description": "As it was stated."},
}
_SAID: Form = {"statement": {**_TEXT, "description": "In words."}, "caution": _TEXT}
_CONTROLLER = object_of(
    "For the MES or the controller, to take as it is.",
    {
        "set_point": {**_NUMBER, "description": "Rounded so that what is wanted is kept."},
        "unit": _TEXT,
        "scale": {"type": "string", "enum": ["reading"]},
        "analyzer": _TEXT,
        "calibration": _TEXT,
        "valid_until": _MAYBE_TEXT,
        "basis": {"type": "string", "enum": ["cheapest", "nearest", "best_centre"]},
    },
)
_IMPROVEMENT = object_of(
    "What options give, at the cheapest set point with them.",
    {
        "options": list_of(_TEXT),
        "combined_standard_uncertainty": _NUMBER,
        "lower_acceptance_limit": _MAYBE,
        "upper_acceptance_limit": _MAYBE,
        "set_point": {
            **_NUMBER,
            "description": "The cheapest within risk and law, whatever share of lots it releases.",
        },
        "true_mean": _NUMBER,
        "release_rate": _SHARE,
        "conditional_global_consumers_risk": _SHARE,
        "cost": _NUMBER,
        "gain_per_year": {**_NUMBER, "description": "Against the cheapest set point as it is."},
        "cost_per_year": {**_NUMBER, "description": "Of the options."},
        "net_gain_per_year": _NUMBER,
        "remarks": list_of(_TEXT),
    },
)

SET_POINT_ANSWERS: dict[str, Form] = {
    "SetPointFigures": object_of("What happens at a set point.", _FIGURES),
    "SetPoints": object_of(
        "Set points, all in the scale of the readings.",
        {
            **_RESTS_ON,
            "nearest": or_null(_WITH_GAIN),
            "keeping_what_is_wanted": _ENDS,
            "cheapest": or_null(_WITH_GAIN),
            "today": ref("SetPointFigures"),
            "best_centre": or_null(ref("SetPointFigures")),
            "nearest_without_drift": _MAYBE,
            "nearest_over_the_interval": or_null(
                object_of(
                    "The nearest set point at both ends of the interval of the variation.",
                    {
                        "least_variation": _MAYBE,
                        "most_variation": {**_MAYBE, "description": "null: none keeps what is wanted."},
                    },
                )
            ),
            "required_uncertainty": or_null(
                object_of(
                    "The largest uncertainty with which the wanted set point keeps what is wanted.",
                    {
                        "set_point": _NUMBER,
                        "factor": {**_NUMBER, "description": "On every standard uncertainty."},
                        "standard_uncertainty": _NUMBER,
                        "todays_standard_uncertainty": _NUMBER,
                    },
                )
            ),
            "curve": list_of(ref("SetPointFigures")),
            "controller": or_null(_CONTROLLER),
            **_SAID,
        },
    ),
    "Improvement": _IMPROVEMENT,
    "Improvements": object_of(
        "Options and pairs of them, ranked.",
        {
            **_RESTS_ON,
            "as_it_is": ref("Improvement"),
            "ranked": list_of(ref("Improvement"), "By net gain, the largest first."),
            "frontier": list_of(list_of(_TEXT), "What no other beats in both cost and gain, by cost."),
            "impossible": list_of(
                object_of("What cannot be had, and why.", {"options": list_of(_TEXT), "detail": _TEXT})
            ),
            "best": {"type": ["array", "null"], "items": _TEXT, "description": "null: nothing pays."},
            **_SAID,
        },
    ),
    "Giveaway": object_of(
        "What the released lots of a period gave away.",
        {
            **_RESTS_ON,
            "first_day": _TEXT,
            "last_day": _TEXT,
            "whole_record_read": _YES,
            "needed_set_point": _NUMBER,
            "giveaway": object_of(
                "Against the true mean, on released lots.",
                {
                    "lots": _WHOLE,
                    "true_mean": _NUMBER,
                    "needed_true_mean": _NUMBER,
                    "distance": {**_NUMBER, "description": "Further than needed; below 0: nearer."},
                    "value": _NUMBER,
                    "value_per_lot": _NUMBER,
                    "standard_uncertainty": {**_NUMBER, "description": "Of the value."},
                    "lots_nearer_than_needed": _WHOLE,
                },
            ),
            **_SAID,
        },
    ),
}
