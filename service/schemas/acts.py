"""Acts that a person signs."""

from __future__ import annotations

from service.documents import Signature, SignedAct
from service.schemas.base import StrictSchema
from service.schemas.fields import Part, Secret, Text


class SignatureSchema(StrictSchema):
    """The person's password once more."""

    loads_to = Signature
    password = Secret(required=True, load_only=True)


class SignedActSchema(StrictSchema):
    """The body of approve, return and withdraw."""

    loads_to = SignedAct
    reason = Text(2000, lines=True, required=True)
    signature = Part(SignatureSchema, required=True)
