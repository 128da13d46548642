"""What stands behind a figure: an estimate of a study, or a declaration with its meaning."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from marshmallow import fields

from budgets.declarations import DISTRIBUTIONS, MEANINGS, RELATIVE_MEANINGS
from service.documents import DeclaredEvidence, StudyEvidence
from service.schemas.base import StrictSchema, complaint, got
from service.schemas.fields import Choice, Code, Count, Name, Number, Part, Text, _Stating


class FactorField(_Stating, fields.Raw):
    """The divisor of a precision limit: a number, or "exact" for 1.96 times the square root of 2."""

    expected = 'a number above 0, or the text "exact"'

    def __init__(self, **kwargs: Any) -> None:
        form = {"oneOf": [{"type": "number", "exclusiveMinimum": 0}, {"type": "string", "enum": ["exact"]}]}
        super().__init__(schema=form, **kwargs)
        self._number = Number(above=0)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        if isinstance(value, str):
            if value != "exact":
                raise self.wrong(value)
            return value
        return self._number.deserialize(value)


class DeclarationSchema(StrictSchema):
    """A stated figure and what it means; which options belong to which meaning is judged by budgets."""

    meaning = Choice(
        *MEANINGS, "relative", required=True, about="What the figure means; a bare one is refused."
    )
    value = Number(required=True, least=0)
    unit = Text(32)
    results = Count(least=2, about="From how many results the standard deviation was computed.")
    determinations = Count(least=1)
    coverage_factor = Number(above=0)
    coverage_probability = Number(above=0, below=1)
    degrees_of_freedom = Number(above=0)
    factor = FactorField()
    repeatability_limit = Number(least=0)
    distribution = Choice(*DISTRIBUTIONS)
    top_to_base_ratio = Number(least=0, most=1)
    reliability = Number(above=0, about="Relative uncertainty of the figure itself, as 0.25.")
    figure = Choice(*RELATIVE_MEANINGS, about="Of a relative figure: what the fraction is.")
    absolute = Number(least=0, about="Of a relative figure: the part that does not depend on the value.")
    title = Text(200)
    document = Text(200, about="The document that the figure was taken from.")
    edition = Text(100)
    sha256 = Text(64, about="Of the document.")


class StudyEvidenceSchema(StrictSchema):
    """An estimate of a recorded study."""

    loads_to = StudyEvidence
    study = Code(required=True)
    estimate = Name(required=True)


class DeclaredEvidenceSchema(StrictSchema):
    """A declaration; ``estimate`` chooses where its meaning gives several."""

    loads_to = DeclaredEvidence
    declaration = Part(DeclarationSchema, required=True)
    estimate = Name(allow_none=True, load_default=None)


class EvidenceField(_Stating, fields.Raw):
    """Either form of evidence; which one is said by its members."""

    expected = "an object with study and estimate, or with a declaration"

    def __init__(self, **kwargs: Any) -> None:
        names = ("StudyEvidence", "DeclaredEvidence")
        either: list[dict[str, Any]] = [{"$ref": f"#/components/schemas/{name}"} for name in names]
        null = [{"type": "null"}] if kwargs.get("allow_none") else []
        super().__init__(schema={"oneOf": either + null}, **kwargs)
        self._study, self._declared = StudyEvidenceSchema(), DeclaredEvidenceSchema()

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        if not isinstance(value, dict):
            raise self.wrong(value)
        if "declaration" in value and "study" in value:
            raise complaint("got both a study and a declaration", self.expected)
        if "declaration" in value:
            return self._declared.load(value)
        if "study" in value:
            return self._study.load(value)
        raise complaint(got(value) + " with neither of them", self.expected)

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> Any:
        if isinstance(value, StudyEvidence):
            return asdict(value)
        if isinstance(value, DeclaredEvidence):
            stated: Mapping[str, Any] = value.declaration
            return {"declaration": dict(stated), "estimate": value.estimate}
        return None
