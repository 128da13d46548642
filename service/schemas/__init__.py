"""JSON <-> dataclass, once for API and pages: `load` reads a document strictly, `dump` writes it.

What `dump` writes, `load` reads back to the equal dataclass (secrets excepted: they are never written).
"""

from __future__ import annotations

from typing import Any, TypeVar, cast

from marshmallow import ValidationError

from service import documents
from service.errors import Fault, InvalidRequest
from service.schemas.acts import ExtensionSchema, SignedActSchema
from service.schemas.base import StrictSchema, got, refusal
from service.schemas.budgets import BudgetDocumentSchema
from service.schemas.decisions import DecisionRequestSchema, RetestRequestSchema
from service.schemas.fields import trimmed_text
from service.schemas.master import (
    AnalyzerSchema,
    CalibrationSchema,
    CharacteristicSchema,
    LaboratorySchema,
    LineSchema,
    PlantSchema,
    ProductSchema,
)
from service.schemas.monte_carlo import MonteCarloRequestSchema
from service.schemas.priors import GlobalRisksRequestSchema
from service.schemas.set_points import (
    GiveawayRequestSchema,
    ImprovementsRequestSchema,
    SetPointRequestSchema,
)
from service.schemas.specifications import SpecificationSchema
from service.schemas.studies import ReplacementSchema, StudySchema
from service.schemas.study_plans import StudyPlanRequestSchema

__all__ = ["SCHEMAS", "dump", "load", "trimmed_text"]

T = TypeVar("T")

SCHEMAS: dict[type[Any], StrictSchema] = {
    documents.Product: ProductSchema(),
    documents.Characteristic: CharacteristicSchema(),
    documents.Line: LineSchema(),
    documents.Analyzer: AnalyzerSchema(),
    documents.Calibration: CalibrationSchema(),
    documents.Laboratory: LaboratorySchema(),
    documents.Plant: PlantSchema(),
    documents.Specification: SpecificationSchema(),
    documents.BudgetDocument: BudgetDocumentSchema(),
    documents.Study: StudySchema(),
    documents.Replacement: ReplacementSchema(),
    documents.Extension: ExtensionSchema(),
    documents.StudyPlanRequest: StudyPlanRequestSchema(),
    documents.GlobalRisksRequest: GlobalRisksRequestSchema(),
    documents.SetPointRequest: SetPointRequestSchema(),
    documents.ImprovementsRequest: ImprovementsRequestSchema(),
    documents.GiveawayRequest: GiveawayRequestSchema(),
    documents.MonteCarloRequest: MonteCarloRequestSchema(),
    documents.DecisionRequest: DecisionRequestSchema(),
    documents.RetestRequest: RetestRequestSchema(),
    documents.SignedAct: SignedActSchema(),
}


def load(kind: type[T], data: object) -> T:
    """Read a JSON document into its dataclass; raises InvalidRequest with a fault for all that is wrong."""
    if not isinstance(data, dict):
        fault = Fault(got(data), "a JSON object", "#")
        raise InvalidRequest("1 fault; nothing was recorded.", faults=(fault,))
    try:
        return cast(T, SCHEMAS[kind].load(data))
    except ValidationError as error:
        raise refusal(error) from None


def dump(instance: Any) -> dict[str, Any]:
    """Write a dataclass as the JSON document that `load` reads."""
    return cast(dict[str, Any], SCHEMAS[type(instance)].dump(instance))
