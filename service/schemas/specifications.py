"""Specifications: tolerance limits and the decision rule of each requirement."""

from __future__ import annotations

from typing import Any

from marshmallow import ValidationError, validates_schema

from service.documents import Requirement, RuleOfDecision, Specification, ToleranceLimit
from service.schemas.base import StrictSchema, Wrong, complaint
from service.schemas.fields import Choice, Code, Count, Flag, Number, Part, Parts, Text
from service.schemas.priors import StatedPriorSchema

# Which members a kind of rule takes: all of the first, at least one of the second.
RULE_MEMBERS: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "simple": ((), ("largest_standard_uncertainty", "least_capability_index")),
    "guarded_by_factor": (("multiple", "coverage_probability", "sides"), ()),
    "guarded_by_specific_risk": (("largest_risk",), ()),
    "guarded_by_global_risk": (("largest_risk", "specific_risk_cap", "prior"), ()),
}
_OWN_MEMBERS = (
    "multiple",
    "coverage_probability",
    "sides",
    "largest_risk",
    "largest_standard_uncertainty",
    "least_capability_index",
    "specific_risk_cap",
)


class ToleranceLimitSchema(StrictSchema):
    """A limit of the permitted true value."""

    loads_to = ToleranceLimit
    value = Number(required=True)
    unit = Text(32, required=True)
    inclusive = Flag(load_default=True, about="Whether the limit itself is permitted.")


class DecisionRuleSchema(StrictSchema):
    """How uncertainty is taken into account when conformity is stated."""

    loads_to = RuleOfDecision
    kind = Choice(*RULE_MEMBERS, required=True)
    multiple = Number(above=0, most=10, allow_none=True, load_default=None, about="Guard band, in U.")
    coverage_probability = Number(above=0, below=1, allow_none=True, load_default=None)
    sides = Count(least=1, most=2, allow_none=True, load_default=None)
    largest_risk = Number(above=0, below=0.5, allow_none=True, load_default=None)
    largest_standard_uncertainty = Number(above=0, allow_none=True, load_default=None)
    least_capability_index = Number(above=0, allow_none=True, load_default=None)
    rejection = Choice("at_tolerance_limit", "guarded", load_default="at_tolerance_limit")
    rounds = Count(
        least=1,
        most=10,
        load_default=1,
        about="How often a lot may be judged while it is held; the risk is that of all looks together.",
    )
    replicate_level = Number(
        least=0.5,
        most=0.999999,
        allow_none=True,
        load_default=None,
        about="Probability that replicates agree by their own spread; null: the plant's.",
    )
    specific_risk_cap = Number(
        above=0,
        below=0.5,
        allow_none=True,
        load_default=None,
        about="Of a rule by global risk: largest specific risk of any lot.",
    )
    prior = Part(
        StatedPriorSchema,
        allow_none=True,
        load_default=None,
        about="Of the production. Needed by global risk; else only shown beside the verdict.",
    )
    largest_lot_risk = Number(
        above=0,
        below=0.5,
        allow_none=True,
        load_default=None,
        about="Largest risk that a released lot misses any limit of the specification.",
    )

    @validates_schema(skip_on_field_errors=True)
    def _members_of_kind(self, data: dict[str, Any], **_: Any) -> None:
        kind = data["kind"]
        needed, one_of = RULE_MEMBERS[kind]
        wrongs: dict[str, list[Wrong]] = {}
        for member in _OWN_MEMBERS:
            given = data.get(member) is not None
            if given and member not in needed + one_of:
                wrongs[member] = [Wrong(f"does not belong to the rule {kind}", "no such member")]
        for member in needed:
            if data.get(member) is None:
                wrongs[member] = [Wrong("missing", f"a value, for the rule {kind}")]
        if one_of and all(data.get(member) is None for member in one_of):
            wrong = Wrong("a simple rule without its condition", "one of " + ", ".join(one_of))
            wrongs["kind"] = [wrong]
        if kind == "simple" and data["rejection"] == "guarded":
            wrong = Wrong("a simple rule has no guard band to mirror", "at_tolerance_limit")
            wrongs["rejection"] = [wrong]
        if kind == "simple" and data["rounds"] > 1:
            wrong = Wrong("a simple rule holds nothing about the value, so nothing is read again", "1")
            wrongs["rounds"] = [wrong]
        if kind == "guarded_by_global_risk" and data["rounds"] > 1:
            wrong = Wrong("not supported yet: further rounds of a rule by global risk", "1", supported=False)
            wrongs["rounds"] = [wrong]
        if wrongs:
            raise ValidationError(dict(wrongs))


class RequirementSchema(StrictSchema):
    """What one characteristic must meet, and by which rule that is decided."""

    loads_to = Requirement
    characteristic = Code(required=True)
    method = Text(200, allow_none=True, load_default=None)
    judged = Choice(
        "lot_mean",
        "item",
        load_default="lot_mean",
        about="Whether the limits are for the mean of the lot or for its items.",
    )
    item_share = Number(
        least=0.5,
        below=1,
        allow_none=True,
        load_default=None,
        about="Least share of the items that must lie within the limits.",
    )
    item_spread = Choice(
        "known",
        "from_lot",
        allow_none=True,
        load_default=None,
        about="Spread between items: of the budget at the level sample, or of the samples of the lot.",
    )
    lower_tolerance_limit = Part(ToleranceLimitSchema, required=True, allow_none=True)
    upper_tolerance_limit = Part(ToleranceLimitSchema, required=True, allow_none=True)
    comparison = Choice("absolute", "rounded", load_default="absolute")
    decimals = Count(
        most=12,
        allow_none=True,
        load_default=None,
        about="Estimates compared rounded are rounded to so many, half to even.",
    )
    within_domain = Flag(
        load_default=False,
        about="Probabilities are those given that the true value lies in the natural domain.",
    )
    decision_rule = Part(DecisionRuleSchema, required=True)

    @validates_schema(skip_on_field_errors=True)
    def _limits(self, data: dict[str, Any], **_: Any) -> None:
        lower, upper = data["lower_tolerance_limit"], data["upper_tolerance_limit"]
        if lower is None and upper is None:
            raise complaint("got no tolerance limit at all", "a lower or an upper tolerance limit")
        if lower and upper and lower.unit == upper.unit and lower.value >= upper.value:
            detail = f"got the limits {lower.value!r} and {upper.value!r} {upper.unit} the wrong way round"
            raise complaint(detail, "a lower tolerance limit below the upper one")

    @validates_schema(skip_on_field_errors=True)
    def _rounding(self, data: dict[str, Any], **_: Any) -> None:
        if data["comparison"] == "rounded" and data["decimals"] is None:
            wrong = Wrong("missing", "to how many decimals estimates are rounded")
            raise ValidationError({"decimals": [wrong]})

    @validates_schema(skip_on_field_errors=True)
    def _items(self, data: dict[str, Any], **_: Any) -> None:
        wrongs: dict[str, list[Wrong]] = {}
        for member in ("item_share", "item_spread"):
            if data["judged"] == "item" and data[member] is None:
                wrongs[member] = [Wrong("missing", "a value, where items are judged")]
            elif data["judged"] != "item" and data[member] is not None:
                wrongs[member] = [Wrong("belongs to items", "no such member for the mean of the lot")]
        if wrongs:
            raise ValidationError(dict(wrongs))


class SpecificationSchema(StrictSchema):
    """What a product must meet, for whom."""

    loads_to = Specification
    code = Code(required=True)
    product = Code(required=True)
    kind = Choice("legal", "customer", "internal", required=True)
    requires = Parts(RequirementSchema, least=1, most=100, required=True)
    not_judged = Parts(Text(100), most=100, distinct=True, load_default=())
    reason = Text(2000, lines=True, required=True)

    @validates_schema(skip_on_field_errors=True)
    def _each_once(self, data: dict[str, Any], **_: Any) -> None:
        seen: set[str] = set()
        for index, requirement in enumerate(data["requires"]):
            if requirement.characteristic in seen:
                wrong = Wrong("required a second time", "each characteristic once")
                raise ValidationError({"requires": {index: {"characteristic": [wrong]}}})
            seen.add(requirement.characteristic)
