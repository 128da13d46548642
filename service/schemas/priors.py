"""Production priors: by a study, or declared."""

from __future__ import annotations

from typing import Any

from marshmallow import ValidationError, validates_schema

from budgets.production_priors import ANCHORS, DISTRIBUTIONS, LEAST_EMPIRICAL_VALUES
from service.documents import DeclaredPrior, StatedPrior, SteeredReadings
from service.schemas.base import StrictSchema, Wrong
from service.schemas.fields import Choice, Code, Flag, Number, Part, Parts, Text, at_schema

# A verdict goes through all of them.
MOST_VALUES = 200


class SteeredReadingsSchema(StrictSchema):
    """Readings of a steered process, observed on the lots that the reference values are of."""

    loads_to = SteeredReadings
    mean = Number(required=True)
    standard_deviation = Number(above=0, required=True)
    correlation = Number(above=-1, below=1, required=True, about="Between true value and reading.")


class DeclaredPriorSchema(StrictSchema):
    """Mean and standard deviation of the true values of lots, or values of lots."""

    loads_to = DeclaredPrior
    mean = Number(allow_none=True, load_default=None)
    standard_deviation = Number(above=0, allow_none=True, load_default=None)
    degrees_of_freedom = Number(above=2, allow_none=True, load_default=None, about="Of a t distribution.")
    values = Parts(
        Number(),
        most=MOST_VALUES,
        load_default=(),
        about=f"Of an empirical distribution: one of each lot, at least {LEAST_EMPIRICAL_VALUES}.",
    )
    unit = Text(32, required=True)
    known_from = Choice(
        *ANCHORS,
        load_default="true_values",
        about="readings of this analyzer: its common error is in them.",
    )
    steered_by_this_analyzer = Flag(
        required=True, about="Whether the process is corrected by the readings that judge it."
    )
    readings = Part(SteeredReadingsSchema, allow_none=True, load_default=None)
    document = Text(200, required=True, about="Where the figures stand.")

    @validates_schema(skip_on_field_errors=True)
    def _steered(self, data: dict[str, Any], **_: Any) -> None:
        if data["steered_by_this_analyzer"] != (data["readings"] is not None):
            expected = "mean, standard deviation and correlation of a steered process, and of no other"
            raise ValidationError({"readings": [Wrong("does not fit steered_by_this_analyzer", expected)]})


class StatedPriorSchema(StrictSchema):
    """How the true values of lots are distributed."""

    loads_to = StatedPrior
    distribution = Choice(*DISTRIBUTIONS, load_default="normal")
    study = Code(allow_none=True, load_default=None, about="Of the design production.")
    declaration = Part(DeclaredPriorSchema, allow_none=True, load_default=None)

    @validates_schema(skip_on_field_errors=True)
    def _one_source(self, data: dict[str, Any], **_: Any) -> None:
        declared = data["declaration"]
        if (data["study"] is None) == (declared is None):
            raise at_schema(Wrong("got no source, or two", "a study or a declaration"))
        empirical = data["distribution"] == "empirical"
        if declared is None:
            if empirical:
                wrong = Wrong("a study gives no empirical prior", "normal or t")
                raise ValidationError({"distribution": [wrong]})
            return
        members = ("values",) if empirical else ("mean", "standard_deviation")
        wrongs = {
            name: [Wrong("missing", f"a value, for a distribution {data['distribution']}")]
            for name in members
            if getattr(declared, name) in (None, ())
        }
        others = ("mean", "standard_deviation") if empirical else ("values",)
        wrongs |= {
            name: [Wrong(f"does not belong to the distribution {data['distribution']}", "no such member")]
            for name in others
            if getattr(declared, name) not in (None, ())
        }
        if wrongs:
            raise ValidationError({"declaration": wrongs})
