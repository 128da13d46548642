"""What a decision costs outside of the writer: reading, loading, the token, the answer.

`pytest tests/benchmarks/test_decision_route.py --benchmark-enable` shows the times; without that each part
runs once, and the whole answer is checked.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from flask import Flask
from pytest_benchmark.fixture import BenchmarkFixture
from werkzeug.test import EnvironBuilder

from service import create_app, create_services
from service.api.reader import read
from service.documents import DecisionRequest
from service.ledger import GENESIS, write_entry
from service.schemas import load
from service.schemas.examples import EXAMPLES
from service.settings import load_settings
from service.store.acts import Recorded
from service.store.schema import migrate
from service.workflows import accounts

BODY = json.dumps(EXAMPLES[DecisionRequest]).encode()


def test_read_a_decision_request(benchmark: BenchmarkFixture) -> None:
    assert benchmark(read, BODY) == EXAMPLES[DecisionRequest]


def test_load_a_decision_request(benchmark: BenchmarkFixture) -> None:
    assert benchmark(load, DecisionRequest, EXAMPLES[DecisionRequest]).lot == "W26-04711"


def test_parse_the_same_by_the_standard_library(benchmark: BenchmarkFixture) -> None:
    """Give the bare figure to hold the strict reader against."""
    assert benchmark(json.loads, BODY) == EXAMPLES[DecisionRequest]


@pytest.fixture
def app(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Flask]:
    """Give the application with a writer that answers at once with an entry of usual size."""
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(tmp_path)})
    migrate(settings.database_url)
    services = create_services(settings)
    golden = Path(__file__).parents[1] / "project" / "documents" / "decision-hold.json"
    document: dict[str, Any] = json.loads(golden.read_text())
    content = {name: value for name, value in document.items() if name not in ("id", "recorded", "entry")}
    entry = write_entry(
        chain="tower-1",
        sequence=1,
        previous=GENESIS,
        recorded_at="2026-03-02T05:12:43.120934Z",
        actor="mes",
        kind="decision",
        content=content,
    )
    monkeypatch.setattr(services.writer, "submit", lambda *_, **__: Recorded(entry, earlier=False))
    yield create_app(services)
    services.close()


def test_the_decision_route_outside_of_the_writer(app: Flask, benchmark: BenchmarkFixture) -> None:
    token = accounts.add_token(app.extensions["shoalmark"].database, "mes", ("line",)).secret
    headers = {"Authorization": f"Bearer {token}", "Idempotency-Key": "benchmark-1"}
    statuses: list[str] = []

    def environ() -> tuple[tuple[dict[str, Any]], dict[str, Any]]:
        builder = EnvironBuilder(
            path="/v1/decisions", method="POST", data=BODY, content_type="application/json", headers=headers
        )
        return (builder.get_environ(),), {}

    def answer(given: dict[str, Any]) -> bytes:
        return b"".join(app.wsgi_app(given, lambda status, *_: statuses.append(status)))

    body = benchmark.pedantic(answer, setup=environ, rounds=500)
    assert set(statuses) == {"201 CREATED"}
    assert json.loads(body)["id"] == "tower-1.1"
