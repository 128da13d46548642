"""The decision request: the readings of a lot."""

from __future__ import annotations

from service.documents import DecisionRequest, Reading, RetestRequest
from service.schemas.base import StrictSchema
from service.schemas.fields import ByKey, Code, Instant, Name, Number, Parts, Text

LONGEST_LOT = 64


class ReadingSchema(StrictSchema):
    """A scan: one look of one analyzer at one sample, with a value per channel."""

    loads_to = Reading
    sample = Text(64, required=True)
    analyzer = Code(required=True)
    calibration = Code(required=True)
    taken_at = Instant(required=True)
    values = ByKey(Code(), Number(), least=1, most=100, required=True)
    flags = ByKey(Name(), Number(), most=100, load_default=dict)
    influences = ByKey(Name(), Number(), most=100, load_default=dict)
    measurement = Text(64, allow_none=True, load_default=None)
    presentation = Text(
        64, allow_none=True, load_default=None, about="Readings of one filling of the cup; else the sample's."
    )
    increment = Text(64, allow_none=True, load_default=None, about="Readings of one increment of the lot.")
    session = Text(64, allow_none=True, load_default=None, about="Readings between two set-ups.")
    weight = Number(
        least=0, most=1, allow_none=True, load_default=None, about="Weights of all readings add up to 1."
    )


class DecisionRequestSchema(StrictSchema):
    """The readings of a lot, to be judged against specifications."""

    loads_to = DecisionRequest
    lot = Text(LONGEST_LOT, required=True)
    product = Code(required=True)
    line = Code(required=True)
    operator = Text(64, allow_none=True, load_default=None)
    specifications = Parts(
        Code(),
        least=1,
        most=20,
        distinct=True,
        allow_none=True,
        load_default=None,
        about="The product's own where none are named.",
    )
    units = ByKey(Code(), Text(32), least=1, most=100, required=True)
    readings = Parts(ReadingSchema, least=1, most=2500, required=True)


class RetestRequestSchema(StrictSchema):
    """Further readings of a lot on hold; the lot keeps the specifications that it was judged against."""

    loads_to = RetestRequest
    line = Code(required=True, about="The line that acts.")
    operator = Text(64, allow_none=True, load_default=None)
    units = ByKey(Code(), Text(32), least=1, most=100, required=True)
    readings = Parts(
        ReadingSchema,
        least=1,
        most=2500,
        required=True,
        about="New ones only. The same name of a sample is the same sample; new samples have new names.",
    )
