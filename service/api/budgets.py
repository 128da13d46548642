"""Uncertainty budgets, their life and their figures."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer
from service.api.operations import Operation, describe, parameter
from service.api.versioned import Versioned, register_collection, register_versions
from service.documents import BudgetDocument, MonteCarloRequest
from service.workflows import budget_figures, monte_carlo

blueprint = Blueprint("budgets", __name__, description="Uncertainty budgets in the sense of the GUM.")

_KIND = Versioned("budget", BudgetDocument, "BudgetVersion")

register_collection(blueprint, "/v1/budgets", _KIND)
register_versions(blueprint, "/v1/budgets/<code:code>", _KIND)


_SPECIFICATION = parameter("specification", "Also the acceptance limits by this specification in force.")


@describe(
    blueprint,
    "/v1/budgets/<code:code>/versions/<version:version>/evaluation",
    "GET",
    Operation("BudgetFigures", problems=(422,), query=(_SPECIFICATION,)),
)
def get_evaluation(code: str, version: int) -> Response:
    """Explain a budget version: shares of variance, and what would be without a component or half of it."""
    given = requests.query("specification")
    return answer(budget_figures.evaluation(requests.services(), requests.actor(), code, version, **given))


@describe(
    blueprint,
    "/v1/budgets/<code:code>/versions/<version:version>/comparison",
    "GET",
    Operation(
        "BudgetComparison",
        problems=(422,),
        query=(_SPECIFICATION, parameter("against", "The version to compare with; else the one in force.")),
    ),
)
def get_comparison(code: str, version: int) -> Response:
    """Compare a version with the one in force, line by line."""
    given = requests.query("specification", "against")
    against = requests.version_number(given.pop("against", None), "against")
    return answer(
        budget_figures.comparison(
            requests.services(), requests.actor(), code, version, against=against, **given
        )
    )


@describe(
    blueprint,
    "/v1/budgets/<code:code>/versions/<version:version>/monte-carlo",
    "POST",
    Operation("MonteCarlo", body=MonteCarloRequest, problems=(503,)),
)
def run_monte_carlo(code: str, version: int) -> Response:
    """Hold the law of propagation of a budget against a Monte Carlo run; nothing is recorded."""
    wanted = requests.body(MonteCarloRequest)
    return answer(monte_carlo.run(requests.services(), requests.actor(), code, version, wanted))
