"""Uncertainty budgets as they are drafted."""

from __future__ import annotations

from typing import Any

from marshmallow import ValidationError, validates_schema

from budgets.levels import LEVELS
from service.documents import (
    Bounds,
    BudgetComponent,
    BudgetCorrelation,
    BudgetDocument,
    Model,
    PlannedCount,
    PlannedProcedure,
    Quantity,
    TypeBSource,
)
from service.schemas.base import StrictSchema, Wrong, complaint
from service.schemas.evidence import EvidenceField
from service.schemas.fields import ByKey, Choice, Code, Count, Name, Number, Part, Parts, Text
from service.schemas.master import BoundsSchema


class QuantitySchema(StrictSchema):
    """A quantity of the measurement model: the reading itself, or one with evidence behind it."""

    loads_to = Quantity
    unit = Text(32, required=True)
    source = Choice("reading", data_key="from", allow_none=True, load_default=None)
    evidence = EvidenceField(allow_none=True, load_default=None)

    @validates_schema(skip_on_field_errors=True)
    def _one_of_both(self, data: dict[str, Any], **_: Any) -> None:
        if (data["source"] is None) == (data["evidence"] is None):
            both = "both" if data["source"] else "neither"
            raise complaint(f"got {both} of from and evidence", '"from": "reading", or evidence')


class ModelSchema(StrictSchema):
    """The measurement model: an expression over named quantities."""

    loads_to = Model
    expression = Text(
        500, required=True, about="A name that holds a hyphen stands in single quotes: 'total-solids'."
    )
    quantities = ByKey(Name(), QuantitySchema, least=1, most=50, required=True)


class PlannedCountSchema(StrictSchema):
    """How many: at least, as planned, at most."""

    loads_to = PlannedCount
    least = Count(least=1, most=50, required=True)
    plan = Count(least=1, most=50, required=True)
    most = Count(least=1, most=50, required=True)

    @validates_schema(skip_on_field_errors=True)
    def _in_order(self, data: dict[str, Any], **_: Any) -> None:
        if not data["least"] <= data["plan"] <= data["most"]:
            found = f"got {data['least']}, {data['plan']} and {data['most']}"
            raise complaint(found, "least at most plan, and plan at most most")


class PlannedProcedureSchema(StrictSchema):
    """How many samples of a lot are read how often."""

    loads_to = PlannedProcedure
    samples = Part(PlannedCountSchema, required=True)
    readings_per_sample = Part(PlannedCountSchema, required=True)


class BudgetComponentSchema(StrictSchema):
    """A line of the budget: of one quantity, or of several whose errors go together."""

    loads_to = BudgetComponent
    code = Code(required=True)
    quantity = Name(allow_none=True, load_default=None)
    quantities = ByKey(
        Text(64),
        Name(),
        most=50,
        load_default=dict,
        about="Column of the study to quantity of the model, where a study gives a covariance.",
    )
    level = Choice(*LEVELS, required=True, about="At which level the error is drawn anew.")
    evidence = EvidenceField(required=True)
    relative_to = Name(
        allow_none=True,
        load_default=None,
        about="The quantity that a relative figure is relative to, if another one.",
    )

    @validates_schema(skip_on_field_errors=True)
    def _one_of_both(self, data: dict[str, Any], **_: Any) -> None:
        if (data["quantity"] is None) == (not data["quantities"]):
            both = "both" if data["quantity"] else "neither"
            raise complaint(f"got {both} of quantity and quantities", "one of them")


class TypeBSourceSchema(StrictSchema):
    """The document that a figure was taken from."""

    loads_to = TypeBSource
    document = Text(200, required=True)
    edition = Text(100, allow_none=True, load_default=None)
    sha256 = Text(64, allow_none=True, load_default=None)


class BudgetCorrelationSchema(StrictSchema):
    """A correlation between two lines of the budget."""

    loads_to = BudgetCorrelation
    between = Parts(Code(), least=2, most=2, distinct=True, required=True)
    level = Choice(*LEVELS, required=True)
    coefficient = Number(least=-1, most=1, required=True)
    evidence = Part(TypeBSourceSchema, required=True)


class BudgetDocumentSchema(StrictSchema):
    """An uncertainty budget of one characteristic."""

    loads_to = BudgetDocument
    code = Code(required=True)
    product = Code(required=True)
    characteristic = Code(required=True)
    unit = Text(32, required=True)
    calibrations = ByKey(
        Code(), Code(), least=1, most=20, required=True, about="Analyzer to the calibration it runs."
    )
    validated_range = Part(BoundsSchema, required=True)
    validated_ranges = ByKey(
        Name(),
        BoundsSchema,
        most=20,
        load_default=dict,
        about="Where each quantity that is read was validated, beside the range of the characteristic.",
    )
    coverage_probability = Number(above=0.5, below=1, required=True)
    bias_treatment = Choice("corrected", "in_guard_band", required=True)
    model = Part(ModelSchema, required=True)
    procedure = Part(PlannedProcedureSchema, required=True)
    components = Parts(BudgetComponentSchema, least=1, most=200, required=True)
    correlations = Parts(BudgetCorrelationSchema, most=1000, load_default=())
    reason = Text(2000, lines=True, required=True)

    @validates_schema(skip_on_field_errors=True)
    def _ranges_have_ends(self, data: dict[str, Any], **_: Any) -> None:
        wrongs: dict[str, Any] = {}
        if ends := _missing_ends(data["validated_range"]):
            wrongs["validated_range"] = ends
        for name, bounds in data["validated_ranges"].items():
            if ends := _missing_ends(bounds):
                wrongs.setdefault("validated_ranges", {})[name] = ends
        if wrongs:
            raise ValidationError(wrongs)

    @validates_schema(skip_on_field_errors=True)
    def _components_fit(self, data: dict[str, Any], **_: Any) -> None:
        names, seen = data["model"].quantities, set[str]()
        wrongs: dict[int, dict[str, Any]] = {}
        stray = Wrong("is no quantity of the model", "one of " + ", ".join(names))
        for index, component in enumerate(data["components"]):
            if component.code in seen:
                wrongs.setdefault(index, {})["code"] = [Wrong("a second time", "a code of its own")]
            for member in ("quantity", "relative_to"):
                if getattr(component, member) not in (None, *names):
                    wrongs.setdefault(index, {})[member] = [stray]
            unknown = {column: [stray] for column, name in component.quantities.items() if name not in names}
            if unknown:
                wrongs.setdefault(index, {})["quantities"] = unknown
            seen.add(component.code)
        if wrongs:
            raise ValidationError({"components": wrongs})


def _missing_ends(bounds: Bounds) -> dict[str, list[Wrong]]:
    return {
        name: [Wrong("got null", "a finite JSON number")]
        for name in ("lower", "upper")
        if getattr(bounds, name) is None
    }
