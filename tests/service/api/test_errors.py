"""Errors under /v1 are problem documents, elsewhere pages; both keep the headers that belong to them."""

from __future__ import annotations

import logging
from typing import Any

import pytest
from flask import Flask

from service.errors import Unavailable
from service.workflows import lots
from tests.service.api.conftest import Callers
from tests.service.api.house import decision, done

PROBLEM, PAGE = "application/problem+json", "text/html; charset=utf-8"


@pytest.mark.parametrize("token", [None, "shm_wrong", ""])
def test_the_api_wants_to_know_who_asks(callers: Callers, token: str | None) -> None:
    for path in ("/v1/products", "/v1/nothing", "/v1"):
        headers = {} if token is None else {"Authorization": f"Bearer {token}"}
        response = callers["nobody"].client.get(path, headers=headers)
        assert (response.status_code, response.content_type) == (401, PROBLEM)
        assert response.headers["WWW-Authenticate"].startswith("Bearer")
        assert response.get_json()["type"] == "/problems/unauthenticated"


def test_a_revoked_token_is_useless_from_the_next_request_on(app: Flask, callers: Callers) -> None:
    from service.workflows import accounts

    assert callers["mes"].get("/v1/lots").status_code == 200
    accounts.revoke_token(app.extensions["shoalmark"].database, "mes.1")
    assert callers["mes"].get("/v1/lots").status_code == 401


def test_paths_outside_of_the_api_answer_with_pages(callers: Callers) -> None:
    client = callers["nobody"].client
    missing = client.get("/nothing")
    assert (missing.status_code, missing.content_type) == (404, PAGE)
    assert "There is no such page" in missing.get_data(as_text=True)
    assert client.get("/v1x").content_type == PAGE
    wrong = client.post("/")
    assert (wrong.status_code, wrong.content_type) == (405, PAGE)
    assert "GET" in wrong.headers["Allow"]


def test_a_405_of_the_api_keeps_allow(callers: Callers) -> None:
    response = callers["mes"].send("DELETE", "/v1/decisions")
    assert (response.status_code, response.content_type) == (405, PROBLEM)
    assert {"GET", "POST"} <= set(response.headers["Allow"].split(", "))
    assert response.get_json()["type"] == "about:blank"


def test_a_404_of_the_api_is_a_problem(callers: Callers) -> None:
    response = callers["mes"].get("/v1/nothing")
    assert (response.status_code, response.content_type) == (404, PROBLEM)


def broken(*_: Any, **__: Any) -> None:
    raise RuntimeError("a secret of the program")


def test_a_failure_tells_its_number_and_keeps_its_secret(
    callers: Callers, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    monkeypatch.setattr(lots, "listing", broken)
    with caplog.at_level(logging.ERROR):
        response = callers["mes"].get("/v1/lots")
    assert (response.status_code, response.content_type) == (500, PROBLEM)
    document = response.get_json()
    assert document["type"] == "/problems/internal-error"
    assert "secret" not in response.get_data(as_text=True)
    assert document["instance"].removeprefix("urn:uuid:") in caplog.text
    assert "a secret of the program" in caplog.text


def test_a_failing_page_is_a_page(
    app: Flask, callers: Callers, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    monkeypatch.setitem(app.view_functions, "pages.start", broken)
    response = callers["nobody"].client.get("/")
    assert (response.status_code, response.content_type) == (500, PAGE)
    assert "secret" not in response.get_data(as_text=True)
    assert "a secret of the program" in caplog.text


def test_no_answer_in_time_is_a_503_with_retry_after(
    app: Flask, callers: Callers, monkeypatch: pytest.MonkeyPatch
) -> None:
    def late(*_: Any, **__: Any) -> None:
        raise Unavailable("No answer within 2 s.", retry_after=3)

    monkeypatch.setattr(app.extensions["shoalmark"].writer, "submit", late)
    response = callers["mes"].post("/v1/decisions", decision())
    assert (response.status_code, response.headers["Retry-After"]) == (503, "3")
    assert response.get_json()["type"] == "/problems/unavailable"


def test_health_and_readiness_are_plain_json(app: Flask, callers: Callers) -> None:
    client = callers["nobody"].client
    assert client.get("/healthz").get_json() == {"alive": True}
    assert done(client.get("/readyz"), 200)["ready"] is True
    app.extensions["shoalmark"].writer.close()
    response = client.get("/readyz")
    assert (response.status_code, response.get_json()["ready"]) == (503, False)
    assert response.headers["Retry-After"]
    assert client.get("/healthz").status_code == 200
    assert "cannot record decisions" in client.get("/").get_data(as_text=True)


def test_a_process_without_its_database_is_not_ready(
    callers: Callers, monkeypatch: pytest.MonkeyPatch
) -> None:
    from service.workflows import health

    monkeypatch.setattr(health, "ready", broken)
    client = callers["nobody"].client
    response = client.get("/readyz")
    assert (response.status_code, response.get_json()["ready"]) == (503, False)
    assert "secret" not in response.get_data(as_text=True)
    assert "cannot record decisions" in client.get("/").get_data(as_text=True)
