"""What stands behind a figure: an estimate of a study, or a declaration with its meaning."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from marshmallow import ValidationError, fields, validates_schema

from budgets.declarations import DISTRIBUTIONS, MEANINGS, RELATIVE_MEANINGS
from service.documents import DeclaredEvidence, LaboratoryEvidence, StudyEvidence
from service.schemas.base import StrictSchema, Wrong, complaint, got
from service.schemas.fields import Choice, Code, Count, Day, Name, Number, Part, Text, _Stating

LABORATORY_COMPONENTS = ("trueness", "repeatability", "run")


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
    stated_on = Day(allow_none=True, load_default=None, about="The day of the document.")
    serves_until = Day(
        allow_none=True, load_default=None, about="The last day on which the figure serves; null: no end."
    )

    @validates_schema(skip_on_field_errors=True)
    def _dates_in_order(self, data: dict[str, Any], **_: Any) -> None:
        stated_on, serves_until = data["stated_on"], data["serves_until"]
        if None not in (stated_on, serves_until) and serves_until < stated_on:
            wrong = Wrong("lies before stated_on", "a date not before stated_on")
            raise ValidationError({"serves_until": [wrong]})


class LaboratoryEvidenceSchema(StrictSchema):
    """A component of a laboratory, as its entry in the master data has it."""

    loads_to = LaboratoryEvidence
    laboratory = Code(required=True)
    component = Choice(*LABORATORY_COMPONENTS, required=True)
    characteristic = Code(
        allow_none=True, load_default=None, about="Whose method, where several are spoken of."
    )


class EvidenceField(_Stating, fields.Raw):
    """One of the forms of evidence; which one is said by its members.

    The evidence of a laboratory's own components is stated: it does not lead to a laboratory again.
    """

    def __init__(self, *, stated: bool = False, **kwargs: Any) -> None:
        self._forms: dict[str, StrictSchema] = {
            "declaration": DeclaredEvidenceSchema(),
            "study": StudyEvidenceSchema(),
            **({} if stated else {"laboratory": LaboratoryEvidenceSchema()}),
        }
        self.expected = "an object with study and estimate, " + (
            "or with a declaration" if stated else "with laboratory and component, or with a declaration"
        )
        names = [type(form).__name__.removesuffix("Schema") for form in self._forms.values()]
        either: list[dict[str, Any]] = [{"$ref": f"#/components/schemas/{name}"} for name in names]
        null = [{"type": "null"}] if kwargs.get("allow_none") else []
        super().__init__(schema={"oneOf": either + null}, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        if not isinstance(value, dict):
            raise self.wrong(value)
        found = [name for name in self._forms if name in value]
        if len(found) > 1:
            raise complaint(f"got {' and '.join(found)} at once", self.expected)
        if not found:
            raise complaint(got(value) + " with none of them", self.expected)
        return self._forms[found[0]].load(value)

    def _serialize(self, value: Any, attr: str | None, obj: Any, **kwargs: Any) -> Any:
        if isinstance(value, (StudyEvidence, LaboratoryEvidence)):
            return asdict(value)
        if isinstance(value, DeclaredEvidence):
            stated: Mapping[str, Any] = value.declaration
            # Only what is there: documents from before declarations had dates stay as they are.
            days = {"stated_on": value.stated_on, "serves_until": value.serves_until}
            dated = {name: day.isoformat() for name, day in days.items() if day is not None}
            return {"declaration": dict(stated), "estimate": value.estimate, **dated}
        return None
