"""The description of the API is valid, complete, held to the code, and the code is held to it."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import pytest
import yaml
from flask import Flask
from openapi_spec_validator import validate

from service import api, create_app, create_services
from service.api.operations import PHRASES
from service.settings import load_settings
from service.store.schema import migrate

ROOT = Path(__file__).parents[2]
# What computes and records nothing.
COMPUTING = (
    *("/global-risks", "/preview", "/study-plans", "/set-points", "/improvements", "/giveaway"),
    "/monte-carlo",
)


@pytest.fixture(scope="module")
def app(tmp_path_factory: pytest.TempPathFactory) -> Any:
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(tmp_path_factory.mktemp("openapi"))})
    migrate(settings.database_url)
    app = create_app(create_services(settings))
    yield app
    app.extensions["shoalmark"].close()


@pytest.fixture(scope="module")
def document(app: Flask) -> dict[str, Any]:
    return api.openapi_document(app)


def operations(document: dict[str, Any]) -> list[tuple[str, str, dict[str, Any]]]:
    return [
        (path, method, operation)
        for path, item in document["paths"].items()
        if path.startswith("/v1")
        for method, operation in item.items()
        if method in ("get", "post", "put", "delete", "patch")
    ]


def test_it_is_valid_openapi_3_1(document: dict[str, Any]) -> None:
    assert document["openapi"] == "3.1.0"
    validate(document)


def test_the_file_is_what_the_program_writes(app: Flask) -> None:
    written = yaml.safe_load((ROOT / "openapi.yaml").read_text())
    assert written == api.openapi_document(app), "run: shoalmark openapi > openapi.yaml"


def test_people_can_read_the_file() -> None:
    """Text of several lines stands as a literal block, and none is full of escapes."""
    for event in yaml.parse((ROOT / "openapi.yaml").read_text()):
        if isinstance(event, yaml.ScalarEvent):
            lines = event.end_mark.line - event.start_mark.line
            literal = event.style == "|"
            assert literal == ("\n" in event.value), event.value
            assert literal or (lines == 0 and event.style != '"'), event.value


def test_its_version_is_that_of_the_distribution(document: dict[str, Any]) -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert document["info"]["version"] == project["version"]


def test_every_route_of_the_api_is_described(app: Flask, document: dict[str, Any]) -> None:
    routed = {
        (rule.rule.count("/"), method.lower(), rule.rule.split("<")[0])
        for rule in app.url_map.iter_rules()
        if rule.rule.startswith("/v1")
        for method in (rule.methods or set()) - {"HEAD", "OPTIONS"}
    }
    described = {(path.count("/"), method, path.split("{")[0]) for path, method, _ in operations(document)}
    assert described == routed


def test_only_what_is_outside_of_the_prefix_needs_no_token(document: dict[str, Any]) -> None:
    assert document["security"] == [{"token": []}]
    public = {
        path
        for path, item in document["paths"].items()
        for operation in item.values()
        if isinstance(operation, dict) and operation.get("security") == []
    }
    assert public == {"/healthz", "/readyz", "/openapi.yaml"}


def test_every_form_is_used(document: dict[str, Any]) -> None:
    text = yaml.safe_dump(document)
    unused = [
        name
        for name in document["components"]["schemas"]
        if f"schemas/{name}'" not in text and f"schemas/{name}\n" not in text
    ]
    assert unused == []


def test_every_operation_names_its_problems(document: dict[str, Any]) -> None:
    for path, method, operation in operations(document):
        responses = operation["responses"]
        assert {"401", "403", "500"} <= responses.keys(), (method, path)
        assert ("404" in responses) == ("{" in path), (method, path)
        if "requestBody" in operation:
            assert {"400", "413", "415", "422"} <= responses.keys(), (method, path)
        for status, response in responses.items():
            if int(status) >= 400:
                shared = document["components"]["responses"][response["$ref"].rsplit("/", 1)[1]]
                assert list(shared["content"]) == ["application/problem+json"], (method, path, status)
                assert shared["description"] == PHRASES[int(status)]
        assert operation["summary"], (method, path)


def test_recording_posts_need_a_key(document: dict[str, Any]) -> None:
    for path, method, operation in operations(document):
        keys = [each for each in operation.get("parameters", []) if each["name"] == "Idempotency-Key"]
        if method == "post" and not path.endswith(COMPUTING):
            assert [each["required"] for each in keys] == [True], path
            assert "503" in operation["responses"]


def test_every_operation_has_a_name_of_its_own(document: dict[str, Any]) -> None:
    names = [operation["operationId"] for _, _, operation in operations(document)]
    assert len(set(names)) == len(names)


def test_every_body_shows_a_valid_example(document: dict[str, Any]) -> None:
    for path, method, operation in operations(document):
        if "requestBody" in operation:
            assert operation["requestBody"]["content"]["application/json"]["example"], (method, path)


def test_it_is_served_as_it_is_written(app: Flask) -> None:
    response = app.test_client().get("/openapi.yaml")
    assert (response.status_code, response.mimetype) == (200, "application/yaml")
    assert yaml.safe_load(response.get_data()) == api.openapi_document(app)
