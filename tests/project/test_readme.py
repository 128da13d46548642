"""What the README pastes into a shell is answered by the demo plant as it says."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pytest

from service import create_app, create_services
from service.demo.run import open_accounts
from service.settings import load_settings
from tests.project.test_documents import Caller, documents_of

README = (Path(__file__).parents[2] / "README.md").read_text("utf-8")


def body_of(call: str) -> Any:
    """Give the JSON that the README sends with a call, as a shell would make it."""
    found = re.search(re.escape(call) + r"[^\n]*-d '(\{\n.*?\})'\n", README, re.S)
    assert found is not None, call
    today = datetime.now(UTC).date().isoformat()
    return json.loads(found[1].replace("'$(date -u +%F)'", today))


@pytest.fixture(scope="module")
def caller(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Caller]:
    folder = tmp_path_factory.mktemp("readme")
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(folder)})
    access = open_accounts(settings)
    services = create_services(settings)
    caller = Caller(create_app(services).test_client(), access)
    list(documents_of(caller))
    yield caller
    services.close()


def test_the_lot_of_the_readme_is_released(caller: Caller) -> None:
    answer = caller.call("POST", "/v1/decisions", "line", body_of("$URL/v1/decisions"))
    assert answer["outcome"] == "release", answer
    assert [verdict["outcome"] for verdict in answer["verdicts"]] == ["release"] * 5


def test_the_study_of_the_readme_is_evaluated(caller: Caller) -> None:
    answer = caller.call("POST", "/v1/studies/preview", "engineer", body_of("$URL/v1/studies/preview"))
    assert answer["recorded"] is False
    assert answer["evaluation"]["estimates"][0]["name"] == "repeatability"


def test_the_file_of_the_demo_in_the_readme_is_evaluated(caller: Caller) -> None:
    found = re.search(r"--data-binary @(service/demo/data/\S+) \\\n(.*?)\n```", README, re.S)
    assert found is not None
    said = dict(re.findall(r"--url-query '?(\w+)=((?:(?<==)\{[^']*\})|[^\s']+)", found[2]))
    assert set(said) >= {"code", "design", "product", "characteristic", "unit", "calibrations", "done_on"}
    content = (Path(__file__).parents[2] / found[1]).read_bytes()
    answer = caller.upload("/v1/studies/preview", "engineer", said, content)
    names = [estimate["name"] for estimate in answer["evaluation"]["estimates"]]
    assert names == ["repeatability", "between_days", "between_runs", "intermediate_precision"]


def test_every_path_of_the_readme_is_in_the_description_of_the_api() -> None:
    described = (Path(__file__).parents[2] / "openapi.yaml").read_text("utf-8")
    templates = re.findall(r"^  (/\S+):$", described, re.M)
    patterns = [re.compile(re.sub(r"\\\{[^}]*\\\}", "[^/]+", re.escape(template))) for template in templates]
    for path in re.findall(r"\$URL(/[^\s?\"']+)", README):
        assert any(pattern.fullmatch(path) for pattern in patterns), path
