"""Production priors: by a study, or declared."""

from __future__ import annotations

from typing import Any, ClassVar

from marshmallow import ValidationError, validates_schema

from budgets.production_priors import ANCHORS, DISTRIBUTIONS, LEAST_EMPIRICAL_VALUES
from service.documents import (
    AskedPrior,
    DeclaredPrior,
    GlobalRisksRequest,
    LotReadings,
    RecordedPrior,
    StatedPrior,
    SteeredReadings,
)
from service.schemas.base import StrictSchema, Wrong
from service.schemas.fields import Choice, Code, Count, Day, Flag, Number, Part, Parts, Text, at_schema

# A verdict goes through all of them.
MOST_VALUES = 100
MOST_BANDS = 200


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
    sources: ClassVar[tuple[str, ...]] = ("study", "declaration")
    distribution = Choice(*DISTRIBUTIONS, load_default="normal")
    study = Code(allow_none=True, load_default=None, about="Of the design production.")
    declaration = Part(DeclaredPriorSchema, allow_none=True, load_default=None)

    @validates_schema(skip_on_field_errors=True)
    def _one_source(self, data: dict[str, Any], **_: Any) -> None:
        declared = data["declaration"]
        if sum(data[source] is not None for source in self.sources) != 1:
            raise at_schema(Wrong("got no source, or several", " or ".join(self.sources)))
        empirical = data["distribution"] == "empirical"
        if declared is None:
            if empirical and data["study"] is not None:
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


class RecordedPriorSchema(StrictSchema):
    """The first look at every lot that the record holds, held and rejected lots included."""

    loads_to = RecordedPrior
    steered_by_this_analyzer = Flag(
        required=True, about="Whether the process is corrected by these readings: then they show no prior."
    )
    first_day = Day(allow_none=True, load_default=None, about="Of the readings.")
    last_day = Day(allow_none=True, load_default=None)


class AskedPriorSchema(StatedPriorSchema):
    """How the true values of lots are distributed: by a study, by the record, or declared."""

    loads_to = AskedPrior
    sources = ("study", "declaration", "record")
    record = Part(RecordedPriorSchema, allow_none=True, load_default=None)


class LotReadingsSchema(StrictSchema):
    """How a lot is read."""

    loads_to = LotReadings
    samples = Count(least=1, most=50, required=True)
    readings_per_sample = Count(least=1, most=50, required=True)


class GlobalRisksRequestSchema(StrictSchema):
    """Global risks of a budget and a specification in force, over a guard band."""

    loads_to = GlobalRisksRequest
    product = Code(required=True)
    characteristic = Code(required=True)
    analyzer = Code(required=True)
    specification = Code(required=True)
    unit = Text(32, required=True, about="Of the guard bands that are asked for.")
    prior = Part(AskedPriorSchema, required=True)
    procedure = Part(
        LotReadingsSchema, allow_none=True, load_default=None, about="null: as the budget plans it."
    )
    guard_bands = Parts(
        Number(),
        least=1,
        most=MOST_BANDS,
        allow_none=True,
        load_default=None,
        about="Ascending; null: from 0 up.",
    )
    largest_risk = Number(
        above=0,
        below=0.5,
        allow_none=True,
        load_default=None,
        about="The global consumer's risk that a guard band is looked for.",
    )
