"""The forms of answers in the words of JSON Schema, for openapi.yaml.

Answers are written by workflows, and rebuilt from entries for ever, so nothing here writes them; tests hold
real answers against these forms. Members may be added to answers later, so the forms stay open.
"""

from __future__ import annotations

from service.api.forms import Form, ref
from service.api.forms import list_of as _list
from service.api.forms import object_of as _object
from service.api.forms import or_null as _or_null
from service.api.global_risk_forms import GLOBAL_RISK_ANSWERS
from service.api.problems import slugs
from service.api.set_point_forms import SET_POINT_ANSWERS


def page_of(items: Form) -> Form:
    """A part of a list, newest first."""
    return _object("A part of a list, newest first.", {"items": _list(items), "next": _CURSOR})


_TEXT: Form = {"type": "string"}
_CODE: Form = {"type": "string"}
_WHOLE: Form = {"type": "integer"}
_YES: Form = {"type": "boolean"}
_NUMBER: Form = {"type": "number"}
_LIMIT: Form = {"type": ["number", "null"], "description": "null: no such limit"}
_NUMBER_OR_NULL: Form = {"type": ["number", "null"]}
_TEXT_OR_NULL: Form = {"type": ["string", "null"]}
_OBJECT_OR_NULL: Form = {"type": ["object", "null"]}
_INSTANT: Form = {"type": "string", "format": "date-time"}
_CURSOR: Form = {
    "type": ["string", "null"],
    "description": "Give as cursor for the next part; null: the end.",
}
_HASH: Form = {"type": "string", "pattern": "^[0-9a-f]{64}$"}
_OUTCOME: Form = {"type": "string", "enum": ["release", "hold", "reject"]}
_STATE: Form = {"type": "string", "enum": ["draft", "submitted", "in_force", "superseded", "withdrawn"]}
_REFERENCE = _object("A version.", {"code": _CODE, "version": {"type": ["integer", "null"]}})
_GUARD_BAND = {**_object("Positive: acceptance inside tolerance.", {"lower": _LIMIT, "upper": _LIMIT})}

_UNCERTAINTY: Form = {
    "combined_standard_uncertainty": _NUMBER_OR_NULL,
    "effective_degrees_of_freedom": {"type": ["number", "null"], "description": "null: infinite"},
    "coverage_probability": _NUMBER_OR_NULL,
    "coverage_factor": _NUMBER_OR_NULL,
    "expanded_uncertainty": _NUMBER_OR_NULL,
}
_COMPARISON = _object(
    "How estimates are compared with the limits.",
    {
        "kind": {"type": "string", "enum": ["absolute", "rounded"]},
        "decimals": {"type": ["integer", "null"], "description": "That estimates are rounded to."},
        "effective_lower_tolerance_limit": _LIMIT,
        "effective_upper_tolerance_limit": _LIMIT,
        "lower_inclusive": _YES,
        "upper_inclusive": _YES,
    },
)
_LIMITS: Form = {
    "lower_tolerance_limit": _LIMIT,
    "upper_tolerance_limit": _LIMIT,
    "comparison": _or_null(_COMPARISON),
    "lower_acceptance_limit": _LIMIT,
    "upper_acceptance_limit": _LIMIT,
    "guard_band": _or_null(_GUARD_BAND),
    "lower_rejection_limit": {**_LIMIT, "description": "null: nothing is rejected on that side"},
    "upper_rejection_limit": {**_LIMIT, "description": "null: nothing is rejected on that side"},
    "within_domain": {
        "type": ["boolean", "null"],
        "description": "Whether probabilities are those given that the value lies in the natural domain.",
    },
    "error_distribution": {
        "type": ["string", "null"],
        "enum": ["normal", "t", "monte_carlo", "items", None],
        "description": "What probabilities rest on.",
    },
}
_SURENESS: Form = {
    "standard_uncertainty_interval": _or_null(
        _object(
            "Where u itself lies; null: it is taken as known, or nothing was judged.",
            {"lower": _NUMBER, "upper": _NUMBER, "coverage_probability": _NUMBER},
        )
    ),
    "conformance_probability_interval": _or_null(
        _object("The conformance probability at the two ends.", {"lower": _NUMBER, "upper": _NUMBER})
    ),
}
_BUDGET = _object("The budget version used.", {"code": _CODE, "version": _WHOLE, "digest": _TEXT})

_FAULT = _object(
    "One thing that is wrong.",
    {"detail": {"type": "string", "description": "What was got."}},
    pointer={"type": "string", "description": "Where in the body (RFC 6901, as URI fragment)."},
    parameter={"type": "string", "description": "Which parameter of the query."},
    header={"type": "string", "description": "Which header."},
    expected={"type": "string", "description": "What would be right."},
)

_PROBLEM_TYPE: Form = {
    "type": "string",
    "description": "What kind of problem; about:blank says no more than its status.",
    "examples": ["about:blank", *(f"/problems/{slug}" for slug in sorted(slugs()))],
}

_PROBLEM = _object(
    "A problem document (RFC 9457). Nothing was recorded unless the type is /problems/unavailable.",
    {"type": _PROBLEM_TYPE, "title": _TEXT, "status": _WHOLE, "instance": _TEXT, "detail": _TEXT},
    errors=_list(_FAULT, "All faults at once."),
    link={"type": "string", "description": "What stands in the way."},
)

_ENTRY = _object("Where it is recorded; keep the hash.", {"chain": _CODE, "sequence": _WHOLE, "hash": _HASH})

_REASON = _object(
    "Why a lot is not released.",
    {
        "code": _TEXT,
        "characteristic": _TEXT_OR_NULL,
        "specification": _or_null(_REFERENCE),
        "detail": _TEXT,
        "next": {"type": "string", "description": "What to do now."},
    },
)

_REPLICATES = _object(
    "Whether the readings of each sample agree; null: nothing could be checked.",
    {
        "level": {"type": "number", "description": "Probability that replicates agree by their own spread."},
        "false_hold_rate": {
            "type": "number",
            "description": "How often these checks hold a good lot, at most.",
        },
        "checks": _list(
            _object(
                "The readings of one channel and one sample.",
                {
                    "characteristic": _CODE,
                    "sample": _TEXT,
                    "readings": _WHOLE,
                    "range": _NUMBER,
                    "critical_difference": _NUMBER,
                    "agrees": _YES,
                },
            )
        ),
    },
)

_JOINT = _object(
    "The characteristics of one specification together; null: not all were judged.",
    {
        "specification": _REFERENCE,
        "characteristics": _list(_CODE),
        "least_risk": {**_NUMBER_OR_NULL, "description": "That one or more do not conform, at least."},
        "most_risk": {**_NUMBER_OR_NULL, "description": "At most, whatever their errors have in common."},
        "risk": {**_NUMBER_OR_NULL, "description": "null: what the errors have in common is not known."},
        "conformance_probability": {**_NUMBER_OR_NULL, "description": "That all conform, where it is known."},
        "largest_lot_risk": {**_NUMBER_OR_NULL, "description": "The smallest cap that a rule states."},
        "rests_on": _TEXT,
    },
)

_PRIOR = _object(
    "Of the production, where the rule names one; the verdict rests on the reading.",
    {
        "study": _TEXT_OR_NULL,
        "document": _TEXT_OR_NULL,
        "distribution": {"type": "string", "enum": ["normal", "t", "empirical"]},
        "mean": _NUMBER,
        "standard_deviation": _NUMBER,
        "known_from": {"type": "string", "enum": ["true_values", "readings"]},
        "steered_by_this_analyzer": {"type": "boolean"},
        "global_consumers_risk": _NUMBER,
        "global_producers_risk": _NUMBER,
        "release_rate": _NUMBER,
        "used": {"type": ["boolean", "null"], "description": "false: the reading contradicts it."},
        "conflict": {**_NUMBER_OR_NULL, "description": "In standard deviations; beyond 3 it is left out."},
        "conformance_probability": _NUMBER_OR_NULL,
        "specific_consumers_risk": _NUMBER_OR_NULL,
        "statement": _TEXT_OR_NULL,
    },
)

_VERDICT = _object(
    "One characteristic judged against one specification.",
    {
        "characteristic": _TEXT_OR_NULL,
        "unit": _TEXT_OR_NULL,
        "specification": _or_null(_REFERENCE),
        "outcome": _OUTCOME,
        "estimate": _NUMBER_OR_NULL,
        **_UNCERTAINTY,
        **_LIMITS,
        "acceptance_limits": _TEXT_OR_NULL,
        "conformance_probability": _NUMBER_OR_NULL,
        "specific_consumers_risk": _NUMBER_OR_NULL,
        **_SURENESS,
        "prior": _or_null(_PRIOR),
        "judged": _TEXT_OR_NULL,
        "items": _or_null(
            _object(
                "What the items must meet, and their spread; null: the mean of the lot is judged.",
                {
                    "least_share": _NUMBER,
                    "spread": {"type": "string", "enum": ["known", "from_lot"]},
                    "standard_deviation": _NUMBER_OR_NULL,
                    "degrees_of_freedom": {**_NUMBER_OR_NULL, "description": "null: infinite"},
                },
            )
        ),
        "decision_rule": {"type": ["object", "null"]},
        "budget": _or_null(_BUDGET),
        "samples": _WHOLE,
        "readings": _WHOLE,
        "replicates": _or_null(_REPLICATES),
        "display": {"type": ["object", "null"], "description": "Rounded texts for people."},
    },
)

_JUDGED: Form = {
    "recorded_at": _INSTANT,
    "lot": _TEXT,
    "product": _CODE,
    "line": _CODE,
    "round": {**_WHOLE, "description": "1 for the first decision on the lot."},
    "rounds_left": {**_WHOLE, "description": "How often the lot may still be read again."},
    "joins": _list(_TEXT, "The earlier decisions whose readings were judged together with these."),
    "outcome": _OUTCOME,
    "reasons": _list(ref("Reason")),
    "verdicts": _list(ref("Verdict")),
    "joint_conformance": _list(_JOINT),
    "not_judged": _list(_TEXT),
    "notices": _list(_object("What will need attention.", {"code": _TEXT, "at": _INSTANT, "detail": _TEXT})),
    "caution": _TEXT,
}

_DECISION = _object(
    "A recorded decision.",
    {"id": _TEXT, "recorded": {"const": True}, **_JUDGED, "entry": ref("Entry")},
    request=ref("DecisionRequest"),
)

_DECISION_PREVIEW = _object(
    "What a decision would answer; nothing is recorded.",
    {"id": {"type": "null"}, "recorded": {"const": False}, **_JUDGED, "entry": {"type": "null"}},
)


def _version(document: str) -> Form:
    return _object(
        "A version of a document.",
        {
            "code": _CODE,
            "version": _WHOLE,
            "state": _STATE,
            "revision": {"type": "integer", "description": "The ETag, without its quotes."},
            "document": ref(document),
            "drafted_by": _TEXT,
            "submitted_by": _TEXT_OR_NULL,
            "approved_by": _TEXT_OR_NULL,
            "in_force_from": _TEXT_OR_NULL,
            "lapses_at": _TEXT_OR_NULL,
        },
        entry=ref("Entry"),
    )


_EVALUATION = _object(
    "What a study or declaration gives.",
    {
        "design": _TEXT,
        "estimates": _list(
            _object(
                "An estimate as a sum over independent mean squares.",
                {
                    "name": _TEXT,
                    "variance": _NUMBER_OR_NULL,
                    "standard_uncertainty": _NUMBER_OR_NULL,
                    "degrees_of_freedom": _NUMBER_OR_NULL,
                    "value": _NUMBER_OR_NULL,
                    "terms": _list({"type": "object"}),
                    "interval": {"type": ["object", "null"]},
                    "may_feed": _list(_TEXT, "At which levels a component may use it."),
                },
            )
        ),
        "used": _WHOLE,
        "set_aside": _list({"type": "object"}),
        "diagnostics": {"type": "object"},
        "warnings": _list(_object("In plain words.", {"code": _TEXT, "detail": _TEXT})),
    },
)

_EXTENDED: Form = {"until": _TEXT, "widening_factor": _NUMBER, "lapses_at": _INSTANT}
_EXTENSION = _object("A study let serve longer, with a wider uncertainty.", {"study": _CODE, **_EXTENDED})
_TWO_LIMITS = _object(
    "Acceptance limits; where nothing could be accepted, detail says why.",
    {"lower": _LIMIT, "upper": _LIMIT, "detail": _TEXT},
)
_ALTERNATIVE = _object(
    "The budget with this component changed; null where nothing is left without it.",
    {
        "combined_standard_uncertainty": _NUMBER_OR_NULL,
        "effective_degrees_of_freedom": _NUMBER_OR_NULL,
        "expanded_uncertainty": _NUMBER_OR_NULL,
        "acceptance_limits": _or_null(_TWO_LIMITS),
    },
)
_LINE: Form = {
    "code": _CODE,
    "quantities": _list(_TEXT),
    "level": _TEXT,
    "evaluation_type": {"type": "string", "enum": ["A", "B"]},
    "standard_uncertainty": {**_NUMBER, "description": "Of one draw."},
    "degrees_of_freedom": {**_NUMBER_OR_NULL, "description": "null: infinite"},
    "averaging_weight": {**_NUMBER, "description": "What averaging leaves of the variance of one draw."},
    "sensitivity_coefficient": {**_NUMBER_OR_NULL, "description": "null: of several quantities"},
    "contribution": _NUMBER,
    "share_of_variance": _NUMBER,
}
_ENDS = {"type": "array", "items": _NUMBER, "minItems": 2, "maxItems": 2}
_HELD_AGAINST = {
    "agrees": _YES,
    "sentence": {**_TEXT, "description": "The finding in words."},
    "coverage_probability": _NUMBER,
    "law_of_propagation": _object(
        "What the law of propagation gives.",
        {
            "estimate": _NUMBER,
            "combined_standard_uncertainty": _NUMBER,
            "expanded_uncertainty": _NUMBER,
            "coverage_interval": _ENDS,
        },
    ),
    "monte_carlo": _object(
        "What the trials give.",
        {
            "trials": _WHOLE,
            "tolerance": {
                **_NUMBER_OR_NULL,
                "description": "That the number of trials was chosen for; null: another reason.",
            },
            "holds_tolerance": _or_null(
                {**_YES, "description": "With a probability of 0.99; false: more trials than allowed."}
            ),
            "mean": {**_NUMBER_OR_NULL, "description": "null: too few degrees of freedom for one."},
            "standard_deviation": {
                **_NUMBER_OR_NULL,
                "description": "null: too few degrees of freedom for one.",
            },
            "median": _NUMBER,
            "coverage_interval": {**_ENDS, "description": "Probabilistically symmetric."},
            "shortest_coverage_interval": _ENDS,
            "scatter_of_ends": _or_null(
                {**_ENDS, "description": "By how much the ends scatter from seed to seed."}
            ),
        },
    ),
    "differences": {**_ENDS, "description": "Of the ends of both intervals."},
    "tolerance": _NUMBER,
    "with_known_variances": _or_null(
        _object(
            "The same with infinite degrees of freedom; null where they are.",
            {"agrees": _YES, "differences": _ENDS, "tolerance": _NUMBER},
        )
    ),
    "remarks": _list(_TEXT, "What was assumed beyond the distributions of the components."),
}
_AT_READINGS = {"type": "object", "description": "The readings at which it was run."}
_MONTE_CARLO = _object(
    "The law of propagation of a budget held against a Monte Carlo run.",
    {
        "code": _CODE,
        "version": _WHOLE,
        "state": _STATE,
        "unit": _TEXT,
        "digest": _TEXT,
        "samples": _WHOLE,
        "readings_per_sample": _WHOLE,
        "at": _AT_READINGS,
        "seed": _WHOLE,
        **_HELD_AGAINST,
    },
)
_MONTE_CARLO_AT_APPROVAL = _object(
    "What Monte Carlo runs found at approval.",
    {
        "agrees": _YES,
        "sentence": {**_TEXT, "description": "The finding in words."},
        "decisions_use": {"type": "string", "enum": ["law_of_propagation", "monte_carlo"]},
        "seed": _WHOLE,
        "program": {"type": "object", "description": "By what the trials were drawn."},
        "checks": _list(
            _object(
                "One run: so many readings, at these estimates.",
                {"readings_per_sample": _list(_WHOLE), "at": _AT_READINGS, **_HELD_AGAINST},
            )
        ),
    },
)
_BUDGET_FIGURES = _object(
    "A budget explained, for its planned procedure.",
    {
        "code": _CODE,
        "version": _WHOLE,
        "state": _STATE,
        "unit": _TEXT,
        "digest": _TEXT,
        "serves_until": _TEXT_OR_NULL,
        "extensions": _list(_EXTENSION, "Evidence that serves beyond its time."),
        "estimates": {"type": "object", "description": "Values of biases and the like."},
        "bias_treatment": _TEXT,
        "samples": _WHOLE,
        "readings_per_sample": _WHOLE,
        "at": {"type": "object", "description": "The readings at which it is shown, and their estimate."},
        **_UNCERTAINTY,
        "specification": _or_null(_REFERENCE),
        "acceptance_limits": _or_null(_TWO_LIMITS),
        "levels": _list(
            _object(
                "What the components of a level give together.",
                {
                    "level": _TEXT,
                    "variance": _NUMBER,
                    "contribution": _NUMBER,
                    "share_of_variance": _NUMBER,
                },
            )
        ),
        "components": _list(
            _object(
                "A component, and what would be without it or with half of it.",
                {**_LINE, "evidence": {"type": "object"}, "without": _ALTERNATIVE, "halved": _ALTERNATIVE},
                remark={**_TEXT, "description": "Why the expanded uncertainty rises without it, if it does."},
                laboratory={"type": "object", "description": "The entry that it was taken from, if any."},
            )
        ),
        "monte_carlo": _or_null(_MONTE_CARLO_AT_APPROVAL),
        "warnings": _list({"type": "object"}),
    },
)
_COMPARED = {
    **_UNCERTAINTY,
    "version": _WHOLE,
    "state": _STATE,
    "estimates": {"type": "object", "description": "Values of biases and the like."},
    "bias_treatment": _TEXT,
    "at": {"type": "object", "description": "The readings at which it is shown, and their estimate."},
    "acceptance_limits": _or_null(_TWO_LIMITS),
}
_BUDGET_COMPARISON = _object(
    "Two versions of a budget, line by line.",
    {
        "code": _CODE,
        "unit": _TEXT,
        "was": _object("The version compared with.", _COMPARED),
        "becomes": _object("The version asked about.", _COMPARED),
        "specification": _or_null(_REFERENCE),
        "components": _list(
            _object(
                "A line; the limits are those of the old budget with this line alone changed.",
                {
                    "code": _CODE,
                    "changed": _YES,
                    "was": _or_null(_object("Before.", _LINE)),
                    "becomes": _or_null(_object("After.", _LINE)),
                    "acceptance_limits": _or_null(_TWO_LIMITS),
                    "moves_lower_limit_by": _NUMBER_OR_NULL,
                    "moves_upper_limit_by": _NUMBER_OR_NULL,
                },
            )
        ),
        "document_changes": _list(
            _object("Another member that differs.", {"member": _TEXT, "was": {}, "becomes": {}})
        ),
    },
)

_ACCEPTANCE_LIMITS = _object(
    "What a reading must meet now, per analyzer, specification and procedure.",
    {
        "product": _CODE,
        "characteristic": _CODE,
        "unit": _TEXT,
        "items": _list(
            _object(
                "The limits for one procedure.",
                {
                    "analyzer": _CODE,
                    "specification": _REFERENCE,
                    "budget": _BUDGET,
                    "procedure": _object("How many.", {"samples": _WHOLE, "readings_per_sample": _WHOLE}),
                    "planned": _YES,
                    "state": {"type": "string", "enum": ["in_force", "lapsed"]},
                    "lapses_at": _TEXT_OR_NULL,
                    "extensions": _list(_EXTENSION, "Evidence that serves beyond its time."),
                    **_LIMITS,
                    **_UNCERTAINTY,
                },
            )
        ),
    },
)

_LOT: Form = {
    "product": _CODE,
    "lot": _TEXT,
    "line": _CODE,
    "outcome": _OUTCOME,
    "rounds": _WHOLE,
    "decision": _TEXT,
    "recorded_at": _INSTANT,
}

_LOT_DECISION: Form = {"id": _TEXT, "round": _WHOLE, "outcome": _OUTCOME, "recorded_at": _INSTANT}

_VERIFICATION = _object(
    "Whether the record is whole.",
    {
        "whole": _YES,
        "chains": _list(_object("A chain.", {"chain": _CODE, "entries": _WHOLE, "hash": _or_null(_HASH)})),
        "finding": {"type": ["string", "null"], "description": "The first altered entry, and what is wrong."},
    },
)

_PRECISION_PLAN = _object(
    "A study that knows a standard deviation well enough.",
    {
        "design": _TEXT,
        "samples": {**_WHOLE, "description": "Pairs, in the design agreement."},
        "values_per_sample": _WHOLE,
        "values": _WHOLE,
        "degrees_of_freedom": _WHOLE,
        "relative_standard_uncertainty": _NUMBER,
        "interval_lower": {**_NUMBER, "description": "How far that end lies, as a fraction."},
        "interval_upper": _NUMBER,
        "coverage_probability": _NUMBER,
        "statement": {**_TEXT, "description": "In words."},
    },
)
_BIAS_PLAN = _object(
    "A study that finds a bias.",
    {
        "pairs": _WHOLE,
        "groups": _WHOLE,
        "degrees_of_freedom": _WHOLE,
        "power": _NUMBER,
        "standard_uncertainty": {**_NUMBER, "description": "Of the bias that the study will show."},
        "statement": {**_TEXT, "description": "In words."},
    },
)

_EVALUATED_ANEW: Form = {"study": _CODE, "becomes": _CODE}
_ESTIMATES_COMPARED = _list(
    _object(
        "An estimate of either study; null where one does not give it.",
        {"name": _TEXT, "was": {"type": ["object", "null"]}, "becomes": {"type": ["object", "null"]}},
    )
)

_STUDY_SUMMARY = _object(
    "A study without its data.",
    {
        "code": _CODE,
        "design": _TEXT,
        "product": _CODE,
        "characteristic": _CODE,
        "unit": _TEXT,
        "done_on": _TEXT,
        "serves_until": _TEXT_OR_NULL,
    },
)


def _versions(name: str, document: str) -> dict[str, Form]:
    """Give the forms of a kind that has many codes."""
    now = {"in_force": _or_null(ref(name)), "open": _or_null(ref(name))}
    return {
        name: _version(document),
        f"{name}Page": page_of(ref(name)),
        f"{name}Summary": _object("The versions that matter now.", {"code": _CODE, "newest": _WHOLE, **now}),
    }


ANSWERS: dict[str, Form] = {
    "Problem": _PROBLEM,
    "Entry": _ENTRY,
    "Reason": _REASON,
    "Verdict": _VERDICT,
    "Decision": _DECISION,
    "DecisionPreview": _DECISION_PREVIEW,
    "DecisionPage": page_of(ref("Decision")),
    "Evaluation": _EVALUATION,
    "StudyAnswer": _object(
        "A study with its evaluation.",
        {"recorded": _YES, "study": ref("Study"), "evaluation": ref("Evaluation")},
        entry=ref("Entry"),
        extension=_or_null(_object("How it serves beyond its time.", _EXTENDED)),
    ),
    "StudyExtension": _object(
        "A study extended, and the versions of its budgets that are in force by that.",
        {"study": _CODE, "extension": _object("How it serves now.", _EXTENDED)}
        | {"budgets": _list(ref("BudgetVersion")), "entry": ref("Entry")},
    ),
    "StudyPage": page_of(_STUDY_SUMMARY),
    "Renewal": _object(
        "What an act on a renewal left of each budget.",
        {
            "study": _CODE,
            "replacement": _CODE,
            "evaluated_anew": _list(_object("A study that took the old one out.", _EVALUATED_ANEW)),
            "budgets": _list(ref("BudgetVersion")),
            "entry": ref("Entry"),
        },
    ),
    "RenewalComparison": _object(
        "What a renewal changes.",
        {
            "study": _CODE,
            "replacement": _CODE,
            "estimates": _ESTIMATES_COMPARED,
            "evaluated_anew": _list(
                _object(
                    "A study that took the old one out.",
                    {**_EVALUATED_ANEW, "estimates": _ESTIMATES_COMPARED},
                )
            ),
            "budgets": _list(ref("BudgetComparison"), "Each against the version in force."),
        },
    ),
    "StudyPlan": _object(
        "The smallest study for each wish; null where there was none.",
        {"precision": _or_null(_PRECISION_PLAN), "bias": _or_null(_BIAS_PLAN)},
    ),
    **GLOBAL_RISK_ANSWERS,
    **SET_POINT_ANSWERS,
    "BudgetFigures": _BUDGET_FIGURES,
    "BudgetComparison": _BUDGET_COMPARISON,
    "MonteCarlo": _MONTE_CARLO,
    "AcceptanceLimits": _ACCEPTANCE_LIMITS,
    "Lot": _object(
        "How a lot stands.",
        {
            **_LOT,
            "rounds_left": {**_WHOLE, "description": "How often the lot may still be read again."},
            "decisions": _list(_object("A decision on the lot.", _LOT_DECISION), "In their order."),
            "last_decision": ref("Decision"),
        },
    ),
    "LotPage": page_of(_object("How a lot stands.", _LOT)),
    "Verification": _VERIFICATION,
    **_versions("SpecificationVersion", "Specification"),
    **_versions("BudgetVersion", "BudgetDocument"),
    "PlantVersion": _version("Plant"),
    "PlantVersionPage": page_of(ref("PlantVersion")),
    **{
        f"{name}Page": page_of(ref(name))
        for name in ("Product", "Characteristic", "Line", "Analyzer", "Calibration", "Laboratory")
    },
    "Health": _object("The process answers.", {"alive": {"const": True}}),
    "Readiness": _object("Whether this process can decide.", {"ready": _YES}, detail=_TEXT, revision=_WHOLE),
}
