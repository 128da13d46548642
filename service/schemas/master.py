"""Master data: products, characteristics, lines, analyzers, calibrations, laboratories, the plant."""

from __future__ import annotations

from typing import Any, ClassVar
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from marshmallow import ValidationError, validates_schema

from service.documents import (
    Adjustment,
    Analyzer,
    Bounds,
    Calibration,
    Characteristic,
    FlagLimit,
    InfluenceBounds,
    Laboratory,
    LaboratoryMethod,
    Line,
    Plant,
    Product,
)
from service.schemas.base import StrictSchema, Wrong, complaint, got
from service.schemas.evidence import EvidenceField
from service.schemas.fields import (
    ByKey,
    Choice,
    Code,
    Count,
    Day,
    Flag,
    HourOfDay,
    Name,
    Number,
    Part,
    Parts,
    Text,
)

WORKING_DAYS = ("monday", "tuesday", "wednesday", "thursday", "friday", "saturday", "sunday")


def external_codes() -> ByKey:
    """How other systems of the plant call the same thing; kept, never used to judge."""
    return ByKey(Text(64), Text(64), most=20, load_default=dict, about="Names in other systems.")


class BoundsSchema(StrictSchema):
    """A closed interval; null is no bound."""

    loads_to: ClassVar[type[Any]] = Bounds
    lower = Number(allow_none=True, load_default=None)
    upper = Number(allow_none=True, load_default=None)

    @validates_schema(skip_on_field_errors=False)
    def _in_order(self, data: dict[str, Any], **_: Any) -> None:
        lower, upper = data.get("lower"), data.get("upper")
        if lower is not None and upper is not None and lower >= upper:
            detail = f"got the bounds {lower!r} and {upper!r} the wrong way round"
            raise complaint(detail, "a lower bound below the upper one")


class ProductSchema(StrictSchema):
    """What is made and judged."""

    loads_to = Product
    code = Code(required=True)
    name = Text(200, required=True)
    default_specifications = Parts(
        Code(),
        most=20,
        distinct=True,
        load_default=(),
        about="Used by a decision that names no specifications.",
    )
    external_codes = external_codes()


class CharacteristicSchema(StrictSchema):
    """A measurand of a product."""

    loads_to = Characteristic
    code = Code(required=True)
    product = Code(required=True)
    unit = Text(32, required=True)
    accepted_units = Parts(Text(32), least=1, most=20, distinct=True, required=True)
    basis = Text(100, required=True, about="To what the value refers: as is, in solids-not-fat.")
    natural_domain = Part(BoundsSchema, required=True, about="Where values can lie at all.")
    decimals = Count(most=12, required=True)
    derived_from = Parts(
        Code(),
        least=1,
        most=20,
        distinct=True,
        allow_none=True,
        load_default=None,
        about="The characteristics of one scan that it is computed from; null when it is read directly.",
    )
    external_codes = external_codes()


class LineSchema(StrictSchema):
    """A production line with its analyzers in the order of fallback."""

    loads_to = Line
    code = Code(required=True)
    name = Text(200, required=True)
    analyzers = Parts(Code(), least=1, most=50, distinct=True, required=True)
    external_codes = external_codes()


class AnalyzerSchema(StrictSchema):
    """An instrument and the characteristics that it reads directly."""

    loads_to = Analyzer
    code = Code(required=True)
    kind = Choice("analyzer", "laboratory", required=True)
    channels = Parts(Code(), least=1, most=100, distinct=True, required=True)
    decimals = ByKey(Code(), Count(most=12), most=100, load_default=dict)
    external_codes = external_codes()

    @validates_schema(skip_on_field_errors=True)
    def _decimals_of_channels(self, data: dict[str, Any], **_: Any) -> None:
        strange = [code for code in data["decimals"] if code not in data["channels"]]
        if strange:
            wrong = [Wrong("is no channel of this analyzer", "one of " + ", ".join(data["channels"]))]
            raise ValidationError({"decimals": {code: wrong for code in strange}})


class AdjustmentSchema(StrictSchema):
    """The slope and bias that the analyzer itself applies; information, never applied again."""

    loads_to = Adjustment
    slope = Number(required=True)
    bias = Number(required=True)


class FlagLimitSchema(StrictSchema):
    """The largest value of a flag at which a scan counts, and whether the flag must be sent."""

    loads_to = FlagLimit
    largest = Number(required=True)
    required = Flag(required=True)


class InfluenceBoundsSchema(BoundsSchema):
    """The range of an influence quantity in which the calibration was validated."""

    loads_to = InfluenceBounds
    unit = Text(32, required=True)
    required = Flag(load_default=True, about="Whether a scan that comes without it is held.")


class CalibrationSchema(StrictSchema):
    """A version of the model in an analyzer, for one product."""

    loads_to = Calibration
    code = Code(required=True)
    analyzer = Code(required=True)
    product = Code(required=True)
    starts_on = Day(data_key="from", required=True)
    samples = Count(least=1, allow_none=True, load_default=None)
    latent_variables = ByKey(Code(), Count(least=1, most=1000), load_default=dict)
    standard_error_of_calibration = ByKey(Code(), Number(above=0), load_default=dict)
    adjustment = ByKey(Code(), AdjustmentSchema, load_default=dict)
    flags = ByKey(Name(), FlagLimitSchema, load_default=dict)
    influences = ByKey(Name(), InfluenceBoundsSchema, load_default=dict)
    external_codes = external_codes()


class LaboratoryMethodSchema(StrictSchema):
    """A reference method as a laboratory runs it."""

    loads_to = LaboratoryMethod
    method = Text(200, required=True)
    trueness = EvidenceField(
        stated=True,
        allow_none=True,
        load_default=None,
        about="What the laboratory as a whole may be off: never averaged away, never taken out.",
    )
    repeatability = EvidenceField(
        stated=True, allow_none=True, load_default=None, about="Of one determination within a run."
    )
    run = EvidenceField(
        stated=True,
        allow_none=True,
        load_default=None,
        about="What runs differ by, beside the repeatability within them.",
    )


class LaboratorySchema(StrictSchema):
    """A laboratory that gives reference values; methods by characteristic."""

    loads_to = Laboratory
    code = Code(required=True)
    kind = Choice("laboratory", required=True)
    methods = ByKey(Code(), LaboratoryMethodSchema, least=1, required=True)
    external_codes = external_codes()


class PlantSchema(StrictSchema):
    """What can change a verdict and belongs to no product."""

    loads_to = Plant
    time_zone = Text(64, required=True, about="A name of the IANA time zone database.")
    lapse_hour = HourOfDay(required=True, about="When evidence lapses, on a working day.")
    working_days = Parts(Choice(*WORKING_DAYS), least=1, most=7, distinct=True, required=True)
    serving_days = ByKey(
        Name(), Count(least=1, most=3650), required=True, about="How long a study serves, by its design."
    )
    replicate_level = Number(
        least=0.5,
        most=0.999999,
        allow_none=True,
        load_default=None,
        about="Level of the check of replicates where a decision rule names none; null is 0.99.",
    )
    identical_readings = Count(
        least=3,
        most=100,
        load_default=8,
        about="So many readings of a channel in a row with the same digits are those of a stuck sensor.",
    )
    reason = Text(2000, lines=True, required=True)

    @validates_schema(skip_on_field_errors=False)
    def _known_zone(self, data: dict[str, Any], **_: Any) -> None:
        name = data.get("time_zone")
        if name is None:
            return
        try:
            ZoneInfo(name)
        except (ZoneInfoNotFoundError, ValueError, OSError):  # a folder of the database is an OSError
            wrong = Wrong(got(name), "a time zone of the IANA database, as Europe/Berlin")
            raise ValidationError({"time_zone": [wrong]}) from None
