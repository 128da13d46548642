"""Acts that a person signs."""

from __future__ import annotations

from service.documents import Extension, Signature, SignedAct
from service.schemas.base import StrictSchema
from service.schemas.fields import Day, Number, Part, Secret, Text

LARGEST_WIDENING = 10


class SignatureSchema(StrictSchema):
    """The person's password once more."""

    loads_to = Signature
    password = Secret(required=True, load_only=True)


class SignedActSchema(StrictSchema):
    """The body of approve, return and withdraw."""

    loads_to = SignedAct
    reason = Text(2000, lines=True, required=True)
    signature = Part(SignatureSchema, required=True)


class ExtensionSchema(StrictSchema):
    """A study let serve longer than it said, once, at the price of a wider uncertainty."""

    loads_to = Extension
    until = Day(required=True, about="The last day on which it serves now.")
    widening_factor = Number(
        above=1, most=LARGEST_WIDENING, required=True, about="By which its uncertainty is multiplied."
    )
    reason = Text(2000, lines=True, required=True)
    signature = Part(SignatureSchema, required=True)
