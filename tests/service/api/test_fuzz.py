"""A short run of schemathesis against the real application: answers are what openapi.yaml says they are.

Bounded and repeatable: few examples per operation, drawn from a fixed seed, in this process over WSGI.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import cycle
from pathlib import Path
from typing import Any

import pytest
import schemathesis
from flask import Flask
from hypothesis import HealthCheck, Phase, given, settings
from schemathesis import GenerationMode
from schemathesis.specs.openapi.checks import (
    content_type_conformance,
    negative_data_rejection,
    response_headers_conformance,
    response_schema_conformance,
    status_code_conformance,
)

from tests.service.api.conftest import copied, open_app
from tests.service.api.house import decision, done

pytestmark = pytest.mark.slow

EXAMPLES_PER_OPERATION = {GenerationMode.POSITIVE: 6, GenerationMode.NEGATIVE: 3}

CONFORMING = [
    schemathesis.checks.not_a_server_error,
    status_code_conformance,
    content_type_conformance,
    response_headers_conformance,
    response_schema_conformance,
]

# A precondition that is malformed fails like any other; the check does not count these as refusals.
REFUSED_BY_PRECONDITION = (412, 428)

Fuzzed = tuple[Flask, dict[str, dict[str, str]]]

# What is there in the house, so that not every path ends in a 404.
THERE: dict[str, dict[str, Any]] = {
    "/v1/products/{product}": {"product": "whole-milk-powder", "code": "moisture"},
    "/v1/analyzers/{analyzer}": {"analyzer": "nir-1", "code": "wmp-7"},
    "/v1/products": {"code": "whole-milk-powder"},
    "/v1/lines": {"code": "tower-1"},
    "/v1/analyzers": {"code": "nir-1"},
    "/v1/laboratories": {"code": "site-lab"},
    "/v1/specifications": {"code": "legal", "version": 1},
    "/v1/budgets": {"code": "wmp-moisture-nir", "version": 1},
    "/v1/plant": {"version": 1},
    "/v1/studies": {"code": "wmp-rep-2026-01"},
    "/v1/decisions": {"id": "tower-1.1"},
    "/v1/lots": {"product": "whole-milk-powder", "lot": "judged"},
    "/v1/acceptance-limits": {"product": "whole-milk-powder", "characteristic": "moisture"},
}


@schemathesis.serializer("text/csv")
def as_csv(context: Any, value: Any) -> Any:
    """Send generated text as the bytes of a CSV body."""
    return str(value).encode(errors="replace")


@pytest.fixture(scope="module")
def fuzzed(
    house_template: Path,
    empty_template: tuple[Path, dict[str, str]],
    tmp_path_factory: pytest.TempPathFactory,
) -> Iterator[Fuzzed]:
    app = open_app(copied(house_template, tmp_path_factory.mktemp("fuzzed")))
    tokens = {name: {"Authorization": f"Bearer {token}"} for name, token in empty_template[1].items()}
    headers = {**tokens["mes"], "Idempotency-Key": "before-the-fuzzing"}
    done(app.test_client().post("/v1/decisions", json=decision("judged"), headers=headers))
    yield app, tokens
    app.extensions["shoalmark"].close()


def run(app: Flask, headers: dict[str, str], mode: GenerationMode, checks: list[Any]) -> dict[str, set[int]]:
    """Send generated cases of every operation and check each answer; gives the statuses by operation."""
    schema = schemathesis.openapi.from_wsgi("/openapi.yaml", app)
    statuses: dict[str, set[int]] = {}
    failures = []
    for result in schema.get_all_operations():
        operation = result.ok()
        if mode is GenerationMode.NEGATIVE and not operation.path.startswith("/v1"):
            continue  # takes nothing, so nothing can be wrong with it
        seen = statuses.setdefault(operation.label, set())
        try:
            fuzz(operation, headers, mode, checks, seen)
        except (AssertionError, ExceptionGroup) as error:
            failures.append(f"{operation.label}: {error}")
    assert not failures, "\n\n".join(failures)
    return statuses


def fuzz(
    operation: Any, headers: dict[str, str], mode: GenerationMode, checks: list[Any], seen: set[int]
) -> None:
    turns = cycle((True, False))
    there = next((known for prefix, known in THERE.items() if operation.path.startswith(prefix)), {})

    @settings(
        max_examples=EXAMPLES_PER_OPERATION[mode],
        derandomize=True,
        database=None,
        deadline=None,
        phases=(Phase.generate,),
        suppress_health_check=list(HealthCheck),
    )
    @given(case=operation.as_strategy(generation_mode=mode))
    def send(case: Any) -> None:
        # Every other case is about a thing that exists, whatever is drawn.
        if next(turns) and mode is GenerationMode.POSITIVE:
            known = {name: value for name, value in there.items() if name in case.path_parameters}
            case.path_parameters.update(known)
            case.query.pop("cursor", None)  # a cursor is given out by a list, not made up
        response = case.call(headers=headers)
        seen.add(response.status_code)
        wanted = checks
        if response.status_code in REFUSED_BY_PRECONDITION:
            wanted = [check for check in checks if check is not negative_data_rejection]
        case.validate_response(response, checks=wanted, headers=headers)

    send()


def test_fitting_requests_get_the_answers_described(
    fuzzed: Fuzzed,
) -> None:
    app, tokens = fuzzed
    statuses = run(app, tokens["engineer"], GenerationMode.POSITIVE, CONFORMING)
    assert 200 in statuses["GET /healthz"]
    readable = {label for label in statuses if label.startswith("GET ")}
    unread = {label for label in readable if 200 not in statuses[label]}
    # No plant document and no renewal is under way in the house.
    absent = {"GET /v1/plant/versions/{version}", "GET /v1/studies/{code}/replacements/{replacement}"}
    assert unread <= absent, statuses


def test_requests_that_do_not_fit_are_refused_as_described(
    fuzzed: Fuzzed,
) -> None:
    app, tokens = fuzzed
    before = app.test_client().get("/v1/decisions", headers=tokens["mes"]).get_json()
    run(app, tokens["mes"], GenerationMode.NEGATIVE, [*CONFORMING, negative_data_rejection])
    assert app.test_client().get("/v1/decisions", headers=tokens["mes"]).get_json() == before
