"""Uncertainty budgets as they are drafted."""

from __future__ import annotations

from typing import Any

from marshmallow import ValidationError, validates_schema

from budgets.levels import LEVELS
from service.documents import (
    BudgetComponent,
    BudgetDocument,
    Model,
    PlannedCount,
    PlannedProcedure,
    Quantity,
)
from service.schemas.base import StrictSchema, Wrong, complaint
from service.schemas.evidence import EvidenceField
from service.schemas.fields import ByKey, Choice, Code, Count, Later, Name, Number, Part, Parts, Text
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
    expression = Text(500, required=True)
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
    """A line of the budget."""

    loads_to = BudgetComponent
    code = Code(required=True)
    quantity = Name(required=True)
    level = Choice(*LEVELS, required=True, about="At which level the error is drawn anew.")
    evidence = EvidenceField(required=True)


class BudgetDocumentSchema(StrictSchema):
    """An uncertainty budget of one characteristic."""

    loads_to = BudgetDocument
    without = frozenset({"correlations"})
    code = Code(required=True)
    product = Code(required=True)
    characteristic = Code(required=True)
    unit = Text(32, required=True)
    calibrations = ByKey(
        Code(), Code(), least=1, most=20, required=True, about="Analyzer to the calibration it runs."
    )
    validated_range = Part(BoundsSchema, required=True)
    coverage_probability = Number(above=0.5, below=1, required=True)
    bias_treatment = Choice("corrected", "in_guard_band", required=True)
    model = Part(ModelSchema, required=True)
    procedure = Part(PlannedProcedureSchema, required=True)
    components = Parts(BudgetComponentSchema, least=1, most=200, required=True)
    correlations = Later(empty=[], load_only=True, about="Correlations are not supported yet.")
    reason = Text(2000, lines=True, required=True)

    @validates_schema(skip_on_field_errors=True)
    def _range_has_ends(self, data: dict[str, Any], **_: Any) -> None:
        bounds = data["validated_range"]
        wrongs = {
            name: [Wrong("got null", "a finite JSON number")]
            for name in ("lower", "upper")
            if getattr(bounds, name) is None
        }
        if wrongs:
            raise ValidationError({"validated_range": wrongs})

    @validates_schema(skip_on_field_errors=True)
    def _default_model(self, data: dict[str, Any], **_: Any) -> None:
        characteristic, model = data["characteristic"], data["model"]
        expected = f"{characteristic} - bias"
        if model.expression.split() != expected.split():
            wrong = Wrong(f"not supported yet: the model {model.expression!r}", expected, supported=False)
            raise ValidationError({"model": {"expression": [wrong]}})
        _check_quantities(model, characteristic)

    @validates_schema(skip_on_field_errors=True)
    def _components_fit(self, data: dict[str, Any], **_: Any) -> None:
        names, seen = data["model"].quantities, set[str]()
        wrongs: dict[int, dict[str, list[Wrong]]] = {}
        for index, component in enumerate(data["components"]):
            if component.code in seen:
                wrongs.setdefault(index, {})["code"] = [Wrong("a second time", "a code of its own")]
            if component.quantity not in names:
                wrong = Wrong("is no quantity of the model", "one of " + ", ".join(names))
                wrongs.setdefault(index, {})["quantity"] = [wrong]
            seen.add(component.code)
        if wrongs:
            raise ValidationError({"components": wrongs})


def _check_quantities(model: Model, characteristic: str) -> None:
    """The default model has the reading of the characteristic, a bias, and nothing else."""
    wrongs: dict[str, list[Wrong]] = {}
    for name in (characteristic, "bias"):
        if name not in model.quantities:
            wrongs[name] = [Wrong("missing", "a quantity of the expression")]
        elif (model.quantities[name].source == "reading") != (name == characteristic):
            form = '"from": "reading"' if name == characteristic else "evidence"
            wrongs[name] = [Wrong("stands on something else", form)]
    for name in model.quantities:
        if name not in (characteristic, "bias"):
            wrongs[name] = [Wrong("is not in the expression", "only quantities of the expression")]
    if wrongs:
        raise ValidationError({"model": {"quantities": wrongs}})
