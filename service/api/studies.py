"""Studies: test data in, evaluation out."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer, listed, recorded
from service.api.operations import PAGING, Operation, describe, parameter
from service.api.study_bodies import CSV, CSV_EXAMPLE, CSV_QUERY, faults_where_they_were_said, study
from service.documents import Study
from service.workflows import studies

blueprint = Blueprint("studies", __name__, description="Test data in, evaluation out.")


@describe(
    blueprint,
    "/v1/studies",
    "POST",
    Operation(
        "StudyAnswer",
        (201,),
        Study,
        query=CSV_QUERY,
        other_bodies={CSV: CSV_EXAMPLE},
        key="required",
        problems=(409,),
    ),
)
def record_study() -> Response:
    """Evaluate a study and record it; as CSV with its other members in the query, or as JSON."""
    with faults_where_they_were_said():
        given = study()
        request = requests.recording()
        return recorded(studies.record_study(requests.services(), requests.actor(), given, request))


@describe(
    blueprint,
    "/v1/studies/preview",
    "POST",
    Operation("StudyAnswer", body=Study, query=CSV_QUERY, other_bodies={CSV: CSV_EXAMPLE}, problems=(503,)),
)
def preview_study() -> Response:
    """Evaluate a study, given as for recording; nothing is recorded."""
    with faults_where_they_were_said():
        return answer(studies.preview(requests.services(), requests.actor(), study()))


@describe(
    blueprint,
    "/v1/studies",
    "GET",
    Operation("StudyPage", query=(*PAGING, parameter("product", "Only studies of this product."))),
)
def list_studies() -> Response:
    """List the studies without their data, newest first."""
    page = requests.page("product")
    return listed(studies.listing(requests.services(), requests.actor(), **page))


@describe(blueprint, "/v1/studies/<code:code>", "GET", Operation("StudyAnswer", problems=(422,)))
def get_study(code: str) -> Response:
    """Read a study with its data and evaluation."""
    requests.query()
    return answer(studies.get(requests.services(), requests.actor(), code))
