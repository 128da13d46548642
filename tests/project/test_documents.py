"""Golden copies of the documents, computed by the program itself from the demo plant (documents/*.json).

They fix names, order and figures of what callers get. When a change is meant, write them anew with
TEST_WRITE_DOCUMENTS=1 and read the difference. Days, hashes and instants are put aside: they are
other ones every day.
"""

from __future__ import annotations

import copy
import json
import os
import re
from collections.abc import Iterator
from itertools import count
from pathlib import Path
from typing import Any

import pytest
from flask.testing import FlaskClient

from service import create_app, create_services
from service.demo import plant
from service.demo.run import open_accounts
from service.demo.walk import Access
from service.settings import load_settings

FOLDER = Path(__file__).with_name("documents")
WRITE = "TEST_WRITE_DOCUMENTS"

MASTER_DATA = {
    "products": "product",
    "characteristics": "characteristic",
    "lines": "line",
    "analyzers": "analyzer",
    "calibrations": "calibration",
    "laboratories": "laboratory",
}
# From library to library the last digits of a quantile may differ.
RELATIVE_TOLERANCE = 1e-9
PATTERNS = {
    "<instant>": r"\d{4}-\d{2}-\d{2}T\d{2}:\d{2}:\d{2}(\.\d+)?(Z|[+-]\d{2}:\d{2})",
    "<hash>": r"(sha256:)?[0-9a-f]{64}",
    "<release>": r"^\d+\.\d+\.\d+$",
    "<day>": r"\d{4}-\d{2}-\d{2}",
}


class Caller:
    """Makes the demo's calls in this process and gives the documents answered."""

    def __init__(self, client: FlaskClient, access: Access) -> None:
        self._client = client
        self._access = access
        self._calls = 0

    def call(self, method: str, path: str, who: str, document: Any = None) -> Any:
        self._calls += 1
        headers = {"Authorization": f"Bearer {getattr(self._access, who)}"}
        if method != "GET":
            headers["Idempotency-Key"] = f"documents-{self._calls}"
        answer = self._client.open(path, method=method, json=document, headers=headers)
        return answer.get_json(force=True)

    def upload(self, path: str, who: str, query: dict[str, str], content: bytes) -> Any:
        headers = {
            "Authorization": f"Bearer {getattr(self._access, who)}",
            "Content-Type": "text/csv",
        }
        answer = self._client.post(path, query_string=query, data=content, headers=headers)
        return answer.get_json(force=True)

    def signed(self) -> dict[str, Any]:
        return {"reason": "checked", "signature": {"password": self._access.approver_password}}


def reading_of(moisture: float, number: int, **changes: Any) -> plant.Document:
    taken_at = f"2026-03-02T06:12:{number:02d}.120+01:00"
    # A channel that never moved would be stuck.
    fat, protein = (value + number % 2 / 100 for value in (27.1, 24.9))
    return plant.reading("1", taken_at, moisture, fat, protein, distance=1.8, temperature=24.5) | changes


def documents_of(caller: Caller) -> Iterator[tuple[str, Any]]:
    """Walk the job and give each kind of document once."""
    for path, document in plant.master_data():
        put = caller.call("PUT", path, "engineer", document)
        yield MASTER_DATA[path.split("/")[-2]], put
    for study in plant.studies():
        recorded = caller.call("POST", "/v1/studies", "engineer", study)
        if study["characteristic"] == "moisture":
            yield f"evaluation-{study['design']}", recorded["evaluation"]
    for kind, document in (
        *(("budget", each) for each in plant.budgets()),
        *(("specification", each) for each in plant.specifications()),
    ):
        drafted = caller.call("POST", f"/v1/{kind}s", "engineer", document)
        version = f"/v1/{kind}s/{document['code']}/versions/1"
        caller.call("POST", f"{version}/submit", "engineer")
        approved = caller.call("POST", f"{version}/approve", "approver", caller.signed())
        if document["code"] in (plant.BUDGET, "customer-b"):
            yield f"{kind}-draft", drafted
            yield f"{kind}-in-force", approved
    figures = f"/v1/budgets/{plant.BUDGET}/versions/1/evaluation"
    yield "budget-evaluation", caller.call("GET", figures, "engineer")
    limits = f"/v1/acceptance-limits/{plant.PRODUCT}/moisture"
    yield "acceptance-limits", caller.call("GET", limits, "line")
    second = count(1)
    for outcome, values in {"release": (2.84, 2.88), "hold": (3.02, 3.06), "reject": (3.30, 3.34)}.items():
        readings = [reading_of(value, next(second)) for value in values]
        request = plant.decision_request(f"W26-{outcome}", readings)
        decision = caller.call("POST", "/v1/decisions", "line", request)
        assert decision["outcome"] == outcome
        yield f"decision-{outcome}", decision
    outside = [reading_of(4.8, number, calibration="wmp-7") for number in (31, 32)]
    request = plant.decision_request("W26-outside", outside)
    yield "decision-hold-outside-range", caller.call("POST", "/v1/decisions/preview", "line", request)
    wrong = plant.decision_request(
        "W26-wrong", [reading_of(2.9, 41, values={"moisture": "3,12", "fat": 27.1})]
    )
    yield "problem", caller.call("POST", "/v1/decisions", "line", wrong)
    yield "lot", caller.call("GET", f"/v1/lots/{plant.PRODUCT}/W26-hold", "line")
    yield from looks_of(caller)


def looks_of(caller: Caller) -> Iterator[tuple[str, Any]]:
    """Judge a lot in two rounds: held, read again, and where it stands then."""
    document = next(each for each in plant.specifications() if each["code"] == "customer-b")
    document = copy.deepcopy(document) | {"code": "customer-two-rounds"}
    for requirement in document["requires"]:
        requirement["decision_rule"]["rounds"] = 2
    caller.call("POST", "/v1/specifications", "engineer", document)
    version = f"/v1/specifications/{document['code']}/versions/1"
    caller.call("POST", f"{version}/submit", "engineer")
    assert caller.call("POST", f"{version}/approve", "approver", caller.signed())["state"] == "in_force"
    readings = [reading_of(value, number) for value, number in ((3.02, 51), (3.06, 52))]
    request = plant.decision_request("W26-twice", readings) | {"specifications": [document["code"]]}
    held = caller.call("POST", "/v1/decisions", "line", request)
    assert (held["outcome"], held["rounds_left"]) == ("hold", 1)
    again = plant.decision_request(
        "W26-twice", [reading_of(value, number, sample="2") for value, number in ((2.90, 53), (2.93, 54))]
    )
    again = {name: again[name] for name in ("line", "units", "readings")}
    retested = caller.call("POST", f"/v1/lots/{plant.PRODUCT}/W26-twice/retests", "line", again)
    yield "decision-retest", retested
    yield "lot-read-again", caller.call("GET", f"/v1/lots/{plant.PRODUCT}/W26-twice", "line")


@pytest.fixture(scope="module")
def computed(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    folder = tmp_path_factory.mktemp("documents")
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(folder)})
    access = open_accounts(settings)
    services = create_services(settings)
    try:
        return dict(documents_of(Caller(create_app(services).test_client(), access)))
    finally:
        services.close()


def settled(thing: Any) -> Any:
    """Put aside what is another one every day."""
    if isinstance(thing, dict):
        return {
            name: "urn:uuid:<id>" if name == "instance" else settled(value) for name, value in thing.items()
        }
    if isinstance(thing, list):
        return [settled(value) for value in thing]
    if isinstance(thing, str):
        for word, pattern in PATTERNS.items():
            thing = re.sub(pattern, word, thing)
    return thing


def same(found: Any, kept: Any, where: str) -> None:
    if "/monte_carlo/" in where and where.endswith("/sentence"):
        found, kept = (re.sub(r"[0-9.]+", "<number>", text) for text in (found, kept))
    if isinstance(kept, dict) and isinstance(found, dict):
        assert list(found) == list(kept), where
        for name in kept:
            same(found[name], kept[name], f"{where}/{name}")
    elif isinstance(kept, list) and isinstance(found, list):
        assert len(found) == len(kept), where
        for index, (one, other) in enumerate(zip(found, kept, strict=True)):
            same(one, other, f"{where}/{index}")
    elif isinstance(kept, float) and isinstance(found, float):
        if "/monte_carlo/" in where:
            # Another release of numpy may draw other numbers.
            assert found == pytest.approx(kept, rel=0.5, abs=0.01), where
        else:
            assert found == pytest.approx(kept, rel=RELATIVE_TOLERANCE, abs=1e-15), where
    else:
        assert found == kept, where
        assert type(found) is type(kept), where


def test_the_documents_are_those_that_were_agreed(computed: dict[str, Any]) -> None:
    found = {name: settled(document) for name, document in computed.items()}
    if os.environ.get(WRITE):
        for name, document in found.items():
            text = json.dumps(document, indent=1, ensure_ascii=False)
            (FOLDER / f"{name}.json").write_text(text + "\n", "utf-8")
    kept = {path.stem: json.loads(path.read_text("utf-8")) for path in FOLDER.glob("*.json")}
    assert set(found) == set(kept)
    for name, document in found.items():
        same(document, kept[name], name)
