"""The invented plant, built through the API alone; and a caller that says what it expects."""

from __future__ import annotations

import copy
import json
import random
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone
from itertools import count
from typing import Any

from flask.testing import FlaskClient
from werkzeug.test import TestResponse

from service import documents
from service.schemas.examples import EXAMPLES

PASSWORD = "a long enough password"

# Evidence and readings are of now, whenever the tests run.
TODAY = datetime.now(UTC).date()
DONE_ON = (TODAY - timedelta(days=40)).isoformat()
SERVES_UNTIL = (TODAY + timedelta(days=300)).isoformat()
TAKEN_AT = datetime.now(UTC).replace(minute=0, second=0, microsecond=0) - timedelta(days=1)
_keys = count(1)


def example(kind: type[Any], /, **changes: Any) -> dict[str, Any]:
    """Give a valid document of a kind, with changes."""
    return {**copy.deepcopy(EXAMPLES[kind]), **changes}


@dataclass(frozen=True)
class Caller:
    """Somebody with a token. Recording calls get a fresh key unless one is given."""

    client: FlaskClient
    token: str | None

    def send(
        self,
        method: str,
        path: str,
        body: Any = None,
        *,
        raw: bytes | None = None,
        headers: Mapping[str, str] | None = None,
    ) -> TestResponse:
        sent = {} if self.token is None else {"Authorization": f"Bearer {self.token}"}
        content: dict[str, Any] = {}
        if raw is not None or body is not None:
            content = {
                "data": raw if raw is not None else json.dumps(body),
                "content_type": "application/json",
            }
        return self.client.open(path, method=method, headers={**sent, **(headers or {})}, **content)

    def get(self, path: str, **options: Any) -> TestResponse:
        return self.send("GET", path, **options)

    def put(self, path: str, body: Any, **headers: str) -> TestResponse:
        named = {name.replace("_", "-"): value for name, value in headers.items()}
        return self.send("PUT", path, body, headers=named)

    def post(self, path: str, body: Any = None, *, key: str | None = None) -> TestResponse:
        return self.send("POST", path, body, headers={"Idempotency-Key": key or fresh_key()})


def fresh_key() -> str:
    """Give a key that no other call uses."""
    return f"test-key-{next(_keys):08d}"


def signed(reason: str = "checked") -> dict[str, Any]:
    return {"reason": reason, "signature": {"password": PASSWORD}}


def done(response: TestResponse, status: int = 201) -> dict[str, Any]:
    """Give the answer, which has to have this status."""
    assert response.status_code == status, response.get_data(as_text=True)
    document: dict[str, Any] = response.get_json()
    return document


def a_study(**changes: Any) -> dict[str, Any]:
    """Make a study that serves now."""
    plain = {"done_on": DONE_ON, "serves_until": SERVES_UNTIL, "set_aside": [], "source": None}
    return example(documents.Study, **{**plain, **changes})


def repeatability_study(**changes: Any) -> dict[str, Any]:
    draw = random.Random(11)
    rows = [
        [f"P{sample:02d}", replicate, round(level + draw.gauss(0, 0.03), 3)]
        for sample, level in enumerate([2.6 + 0.04 * step for step in range(20)], start=1)
        for replicate in (1, 2)
    ]
    return a_study(**{"columns": ["sample", "replicate", "reading"], "rows": rows, **changes})


def duplicates_study() -> dict[str, Any]:
    draw = random.Random(12)
    rows = [
        [f"D{sample:02d}", determination, round(2.6 + 0.04 * sample + draw.gauss(0, 0.04), 3)]
        for sample in range(1, 21)
        for determination in (1, 2)
    ]
    return a_study(
        code="wmp-dup-2026-01",
        design="duplicates",
        calibrations={},
        laboratory="site-lab",
        columns=["sample", "determination", "result"],
        rows=rows,
    )


def agreement_study() -> dict[str, Any]:
    draw = random.Random(13)
    rows = []
    for pair in range(1, 61):
        true = draw.uniform(1.3, 5.7)
        reading = true + 0.03 + draw.gauss(0, 0.06) + draw.gauss(0, 0.03)
        rows.append(
            [f"V{pair:02d}", round(reading, 3), round(true + draw.gauss(0, 0.04), 3), f"batch-{pair % 12}"]
        )
    sources = [
        {
            "source": "analyzer_repeatability",
            "evidence": {"study": "wmp-rep-2026-01", "estimate": "repeatability"},
        },
        {
            "source": "reference_repeatability",
            "evidence": {"study": "wmp-dup-2026-01", "estimate": "repeatability"},
        },
    ]
    return a_study(
        code="wmp-val-2026-01",
        design="agreement",
        independent=True,
        laboratory="site-lab",
        named_sources=sources,
        columns=["pair", "reading", "reference", "group"],
        rows=rows,
    )


def put_master_data(engineer: Caller) -> None:
    """Put the plant's things by their codes."""
    oven = example(documents.Analyzer, code="oven", kind="laboratory", channels=["moisture"], decimals={})
    done(engineer.put("/v1/products/whole-milk-powder", example(documents.Product)))
    for code in ("moisture", "fat", "protein"):
        document = example(documents.Characteristic, code=code)
        done(engineer.put(f"/v1/products/whole-milk-powder/characteristics/{code}", document))
    done(engineer.put("/v1/analyzers/nir-1", example(documents.Analyzer)))
    done(engineer.put("/v1/analyzers/oven", oven))
    done(engineer.put("/v1/lines/tower-1", example(documents.Line)))
    done(engineer.put("/v1/analyzers/nir-1/calibrations/wmp-7", example(documents.Calibration)))
    done(engineer.put("/v1/laboratories/site-lab", example(documents.Laboratory)))


def specification(code: str, upper: float, rule: dict[str, Any] | None = None) -> dict[str, Any]:
    document = example(documents.Specification, code=code)
    document["requires"][0]["upper_tolerance_limit"]["value"] = upper
    if rule is not None:
        document["requires"][0]["decision_rule"] = rule
    return document


def put_in_force(engineer: Caller, approver: Caller, kind: str, document: dict[str, Any]) -> None:
    """Draft, submit and approve version 1."""
    done(engineer.post(f"/v1/{kind}", document))
    one = f"/v1/{kind}/{document['code']}/versions/1"
    done(engineer.post(f"{one}/submit"), 200)
    assert done(approver.post(f"{one}/approve", signed()), 200)["state"] == "in_force"


def build(engineer: Caller, approver: Caller) -> None:
    """Build the whole house: master data, evidence, a budget and two specifications in force."""
    put_master_data(engineer)
    for study in (repeatability_study(), duplicates_study(), agreement_study()):
        done(engineer.post("/v1/studies", study))
    put_in_force(engineer, approver, "specifications", specification("legal", 5.0))
    put_in_force(engineer, approver, "specifications", specification("customer-b", 3.2))
    put_in_force(engineer, approver, "budgets", example(documents.BudgetDocument))


def decision(
    lot: str = "W26-04711", moisture: tuple[float, ...] = (2.71, 2.74), **changes: Any
) -> dict[str, Any]:
    """Make a request to judge a lot, read as often as there are values."""
    first = TAKEN_AT + timedelta(milliseconds=sum(lot.encode()) % 1000)
    readings = [
        {
            **EXAMPLES[documents.DecisionRequest]["readings"][0],
            "taken_at": instant(first + timedelta(seconds=second)),
            "values": {"moisture": value, "fat": 26.4, "protein": 24.9},
        }
        for second, value in enumerate(moisture)
    ]
    return example(documents.DecisionRequest, **{"lot": lot, "readings": readings, **changes})


def instant(moment: datetime, hours: int = 1) -> str:
    """Write an instant as a line of another time zone would."""
    return moment.astimezone(timezone(timedelta(hours=hours))).isoformat(timespec="milliseconds")


def moved(request: dict[str, Any], **by: int) -> dict[str, Any]:
    """Give the same request with readings taken later, and its instants written in another zone."""
    later = copy.deepcopy(request)
    for reading in later["readings"]:
        moment = datetime.fromisoformat(reading["taken_at"]) + timedelta(**by)
        reading["taken_at"] = instant(moment, hours=-5)
    return later
