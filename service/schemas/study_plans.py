"""What a study is wanted for; whether a wish can be met is judged by the computation."""

from __future__ import annotations

from typing import Any

from marshmallow import validates_schema

from budgets.study_plans import CRITERIA
from service.documents import StudyPlanRequest
from service.schemas.base import StrictSchema, Wrong
from service.schemas.fields import Choice, Count, Name, Number, Part, at_schema


class PrecisionWishSchema(StrictSchema):
    """A standard deviation that has to be known well enough."""

    relative_uncertainty = Number(required=True, about="As a fraction: 0.25 for 25 %.")
    design = Name(about="repeatability (if not said), duplicates or agreement.")
    criterion = Choice(*CRITERIA, about="What has to be so small; interval_end if not said.")
    coverage_probability = Number(about="Of the interval; 0.95 if not said.")
    samples = Count(about="Where it is settled, the values of each sample are looked for.")
    values_per_sample = Count(about="Where it is settled, the samples are looked for; 2 without both.")


class BiasWishSchema(StrictSchema):
    """A bias that must not go unnoticed, in the unit of the characteristic."""

    bias = Number(required=True)
    standard_deviation = Number(required=True, about="Of the differences: the standard error of prediction.")
    power = Number(about="The probability of finding it; 0.9 if not said.")
    significance = Number(about="Of the two-sided t test; 0.05 if not said.")
    standard_deviation_between_groups = Number(about="From day to day or lot to lot; 0 if not said.")
    pairs_per_group = Count(about="Pairs of one day or lot; 1 if not said.")


class StudyPlanRequestSchema(StrictSchema):
    """What a study is wanted for; one wish or both."""

    loads_to = StudyPlanRequest
    precision = Part(PrecisionWishSchema, allow_none=True, load_default=None)
    bias = Part(BiasWishSchema, allow_none=True, load_default=None)

    @validates_schema(skip_on_field_errors=True)
    def _wants_something(self, data: dict[str, Any], **_: Any) -> None:
        if data["precision"] is None and data["bias"] is None:
            raise at_schema(Wrong("got no wish", "precision, bias, or both"))
