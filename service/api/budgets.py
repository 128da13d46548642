"""Uncertainty budgets, their life and their figures."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer
from service.api.operations import Operation, describe
from service.api.versioned import Versioned, register_collection, register_versions
from service.documents import BudgetDocument
from service.workflows import versions

blueprint = Blueprint("budgets", __name__, description="Uncertainty budgets in the sense of the GUM.")

_KIND = Versioned("budget", BudgetDocument, "BudgetVersion")

register_collection(blueprint, "/v1/budgets", _KIND)
register_versions(blueprint, "/v1/budgets/<code:code>", _KIND)


@describe(
    blueprint,
    "/v1/budgets/<code:code>/versions/<version:version>/evaluation",
    "GET",
    Operation("BudgetFigures", problems=(422,)),
)
def get_evaluation(code: str, version: int) -> Response:
    """Give the figures of a budget version for its planned procedure."""
    requests.query()
    return answer(versions.evaluation(requests.services(), requests.actor(), code, version))
