"""Set points, improvements and giveaway: how the lots vary, what is wanted, what it is worth."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from marshmallow import ValidationError, validates_schema

from service.documents import (
    GiveawayRequest,
    ImprovementOption,
    ImprovementsRequest,
    LookNumbers,
    SetPointRequest,
    StatedMoney,
    StatedVariation,
    WantedShares,
)
from service.schemas.base import StrictSchema, Wrong
from service.schemas.fields import Choice, Code, Count, Day, Flag, Number, Part, Parts, Text

# Larger figures are no plant's: their squares and products would no longer be numbers.
LARGEST = 1e12
# Which members each source of the variation needs, and which it may have beside them.
_STEERED = ("true_standard_deviation",)
VARIATIONS: Mapping[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "record": (("steered_by_this_analyzer",), ("first_day", "last_day", *_STEERED)),
    "study": (("study",), _STEERED),
    "stated": (
        ("mean", "steered_by_this_analyzer"),
        ("lot_to_lot", "drift", "within_lot", "reading_standard_deviation", *_STEERED),
    ),
}
# The same for kinds of options.
OPTIONS: Mapping[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "procedure": ((), ("samples", "readings_per_sample", "increments_per_sample")),
    "fewer_looks": (("looks",), ()),
    "component": (("component",), ("standard_uncertainty", "factor", "degrees_of_freedom")),
    "corrected_bias": ((), ()),
    "reference_determinations": (
        ("component", "standard_deviation", "determinations", "instead_of", "pairs"),
        (),
    ),
    "budget": (("budget", "version"), ()),
}


def _members_of(table: Mapping[str, Any], chosen: str, data: Mapping[str, Any]) -> dict[str, list[Wrong]]:
    """Find members that are missing, and those that belong to another choice."""
    needed, allowed = table[chosen]
    owned = {name for both in table.values() for part in both for name in part}
    wrongs = {}
    for name in sorted(owned):
        given = data.get(name) is not None
        if given and name not in needed + allowed:
            wrongs[name] = [Wrong(f"does not belong to {chosen}", "no such member")]
        elif not given and name in needed:
            wrongs[name] = [Wrong("missing", f"a value, for {chosen}")]
    return wrongs


def _numbers_of(data: Mapping[str, Any]) -> dict[str, list[Wrong]]:
    """Find an option that changes nothing, and a component of two figures after the change."""
    names = OPTIONS["procedure"][1] if data["kind"] == "procedure" else ("standard_uncertainty", "factor")
    given = [name for name in names if data[name] is not None]
    if data["kind"] == "procedure" and not given:
        return {names[0]: [Wrong("nothing is changed", f"one of {', '.join(names)}")]}
    if data["kind"] == "component" and len(given) != 1:
        return {names[0]: [Wrong(f"got {len(given)} figures", f"one of {' and '.join(names)}")]}
    return {}


class StatedVariationSchema(StrictSchema):
    """How the lots vary about the set point."""

    loads_to = StatedVariation
    source = Choice(
        *VARIATIONS,
        data_key="from",
        required=True,
        about="record: first readings of judged lots; study: of the design production.",
    )
    steered_by_this_analyzer = Flag(
        allow_none=True, load_default=None, about="Whether the process is corrected by these readings."
    )
    study = Code(allow_none=True, load_default=None)
    first_day = Day(allow_none=True, load_default=None, about="Of the readings of the record.")
    last_day = Day(allow_none=True, load_default=None)
    mean = Number(
        least=-LARGEST,
        most=LARGEST,
        allow_none=True,
        load_default=None,
        about="Of the readings: today's set point.",
    )
    lot_to_lot = Number(
        least=0,
        most=LARGEST,
        allow_none=True,
        load_default=None,
        about="Standard deviation of true means of lots.",
    )
    drift = Number(
        least=0, most=LARGEST, allow_none=True, load_default=None, about="Standard deviation of periods."
    )
    within_lot = Number(least=0, most=LARGEST, allow_none=True, load_default=None)
    true_standard_deviation = Number(
        above=0,
        most=LARGEST,
        allow_none=True,
        load_default=None,
        about="Of a steered process: from reference values.",
    )
    reading_standard_deviation = Number(
        above=0,
        most=LARGEST,
        allow_none=True,
        load_default=None,
        about="Of a steered process: of its first readings.",
    )

    @validates_schema(skip_on_field_errors=True)
    def _members(self, data: dict[str, Any], **_: Any) -> None:
        wrongs = _members_of(VARIATIONS, data["source"], data)
        if data["source"] == "stated" and not wrongs:
            steered = ("true_standard_deviation", "reading_standard_deviation")
            both: tuple[tuple[str, ...], tuple[str, ...]] = (steered, ("lot_to_lot",))
            own, others = both if data["steered_by_this_analyzer"] else both[::-1]
            wrongs = {name: [Wrong("missing", "a number")] for name in own if data[name] is None}
            wrongs |= {
                name: [Wrong("got a number", "null, unless the process is steered otherwise")]
                for name in others
                if data[name] is not None
            }
        if data["source"] == "record" and data.get("steered_by_this_analyzer") is not None:
            given = data["true_standard_deviation"] is not None
            if given != data["steered_by_this_analyzer"]:
                expected = "a number of a steered process, and of no other"
                wrongs["true_standard_deviation"] = [Wrong("got null" if not given else "got one", expected)]
        if wrongs:
            raise ValidationError(dict(wrongs))


class WantedSharesSchema(StrictSchema):
    """What a set point must keep."""

    loads_to = WantedShares
    release_rate = Number(above=0, below=1, required=True, about="Share of lots, at whatever look.")
    largest_risk = Number(
        above=0,
        below=1,
        allow_none=True,
        load_default=None,
        about="Of the released lots, the share that does not conform.",
    )


class StatedMoneySchema(StrictSchema):
    """What lots are worth, all in one currency."""

    loads_to = StatedMoney
    currency = Text(10, required=True)
    lot_size = Number(above=0, most=LARGEST, required=True)
    quantity_unit = Text(32, required=True, about="Of the lot size, as t.")
    lots_per_year = Number(above=0, most=LARGEST, required=True)
    value_of_one_unit = Number(
        least=0,
        most=LARGEST,
        required=True,
        about="Of one unit of quantity, for one unit of the characteristic closer.",
    )
    cost_of_hold = Number(least=0, most=LARGEST, required=True, about="Of each lot held at its first look.")
    cost_of_retest = Number(least=0, most=LARGEST, required=True, about="Of each further look.")
    cost_of_nonconforming = Number(
        least=0, most=LARGEST, required=True, about="Of each such lot that was released."
    )
    cost_of_not_released = Number(
        least=0,
        most=LARGEST,
        allow_none=True,
        load_default=None,
        about="Of each lot not released in the end; as a hold.",
    )


class LookNumbersSchema(StrictSchema):
    """What is done at every look at a lot."""

    loads_to = LookNumbers
    samples = Count(least=1, most=50, required=True)
    readings_per_sample = Count(least=1, most=50, required=True)
    increments_per_sample = Count(least=1, most=50, load_default=1, about="A sample is made of so many.")


class SetPointRequestSchema(StrictSchema):
    """How close to the limit the process may run; figures of the characteristic are in ``unit``."""

    loads_to = SetPointRequest
    product = Code(required=True)
    characteristic = Code(required=True)
    analyzer = Code(required=True)
    unit = Text(32, required=True)
    specifications = Parts(
        Code(), least=1, most=20, distinct=True, allow_none=True, load_default=None, about="The product's."
    )
    procedure = Part(LookNumbersSchema, allow_none=True, load_default=None, about="As the budget plans.")
    process_variation = Part(StatedVariationSchema, required=True)
    wanted = Part(WantedSharesSchema, required=True)
    money = Part(StatedMoneySchema, allow_none=True, load_default=None)
    towards = Choice("upper", "lower", allow_none=True, load_default=None, about="The limit to run towards.")
    wanted_set_point = Number(
        least=-LARGEST,
        most=LARGEST,
        allow_none=True,
        load_default=None,
        about="Which uncertainty would this set point need?",
    )


class ImprovementOptionSchema(StrictSchema):
    """Something that can be bought."""

    loads_to = ImprovementOption
    code = Code(required=True)
    kind = Choice(*OPTIONS, required=True)
    cost_per_lot = Number(least=0, most=LARGEST, load_default=0.0)
    cost_per_year = Number(least=0, most=LARGEST, load_default=0.0)
    samples = Count(least=1, most=50, allow_none=True, load_default=None)
    readings_per_sample = Count(least=1, most=50, allow_none=True, load_default=None)
    increments_per_sample = Count(least=1, most=50, allow_none=True, load_default=None)
    looks = Count(least=1, most=10, allow_none=True, load_default=None)
    component = Code(allow_none=True, load_default=None, about="A line of the budget.")
    standard_uncertainty = Number(
        above=0, most=LARGEST, allow_none=True, load_default=None, about="Of one draw, after the change."
    )
    factor = Number(
        above=0, most=LARGEST, allow_none=True, load_default=None, about="On the standard uncertainty."
    )
    degrees_of_freedom = Number(above=0, most=LARGEST, allow_none=True, load_default=None)
    standard_deviation = Number(
        above=0,
        most=LARGEST,
        allow_none=True,
        load_default=None,
        about="Of single determinations by the reference.",
    )
    determinations = Count(least=1, most=50, allow_none=True, load_default=None, about="For each pair.")
    instead_of = Count(least=1, most=50, allow_none=True, load_default=None)
    pairs = Count(least=2, most=100_000, allow_none=True, load_default=None)
    budget = Code(allow_none=True, load_default=None, about="Another budget, or another version.")
    version = Count(least=1, allow_none=True, load_default=None)

    @validates_schema(skip_on_field_errors=True)
    def _members(self, data: dict[str, Any], **_: Any) -> None:
        wrongs = _members_of(OPTIONS, data["kind"], data) or _numbers_of(data)
        if wrongs:
            raise ValidationError(dict(wrongs))


class ImprovementsRequestSchema(StrictSchema):
    """What to buy first; the production needs money."""

    loads_to = ImprovementsRequest
    production = Part(SetPointRequestSchema, required=True)
    options = Parts(ImprovementOptionSchema, least=1, most=12, required=True)


class GiveawayRequestSchema(StrictSchema):
    """A production with money, and the days whose released lots are counted."""

    loads_to = GiveawayRequest
    production = Part(SetPointRequestSchema, required=True)
    first_day = Day(allow_none=True, load_default=None)
    last_day = Day(allow_none=True, load_default=None)
