"""How large a study must be."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer
from service.api.operations import Operation, describe
from service.documents import StudyPlanRequest
from service.workflows import study_plans

blueprint = Blueprint("study-plans", __name__, description="How many replicates, samples and pairs.")


@describe(blueprint, "/v1/study-plans", "POST", Operation("StudyPlan", body=StudyPlanRequest))
def plan_study() -> Response:
    """Plan a study that knows a standard deviation well enough, or finds a bias; nothing is recorded."""
    return answer(study_plans.plan(requests.actor(), requests.body(StudyPlanRequest)))
