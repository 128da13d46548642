"""A service that starts again judges by what is stored, to the last bit."""

from __future__ import annotations

from itertools import islice
from pathlib import Path
from typing import Any

from service.demo import plant
from tests.service.api.conftest import Callers, callers_of, copied, open_app
from tests.service.api.house import done, put_in_force


def verdicts(callers: Callers, requests: list[dict[str, Any]]) -> list[list[dict[str, Any]]]:
    return [done(callers["mes"].post("/v1/decisions/preview", body), 200)["verdicts"] for body in requests]


def test_verdicts_are_the_same_after_a_restart(
    empty_template: tuple[Path, dict[str, str]], tmp_path: Path
) -> None:
    """Fixed limits, limits at the readings, and readings in groups that no approval foresaw."""
    template, tokens = empty_template
    folder = copied(template, tmp_path / "data")
    app = open_app(folder)
    callers = callers_of(app, tokens)
    for path, document in plant.master_data():
        done(callers["engineer"].put(path, document))
    for study in plant.studies():
        done(callers["engineer"].post("/v1/studies", study))
    for kind, documents in (("budgets", plant.budgets()), ("specifications", plant.specifications())):
        for document in documents:
            put_in_force(callers["engineer"], callers["max"], kind, document)
    requests = list(islice(plant.lots(), 40))
    for body in requests[::2]:
        for number, reading in enumerate(body["readings"]):
            reading["presentation"] = str(number)
    before = verdicts(callers, requests)
    app.extensions["shoalmark"].close()
    app = open_app(folder)
    after = verdicts(callers_of(app, tokens), requests)
    app.extensions["shoalmark"].close()
    assert after == before
    assert {verdict["outcome"] for lot in before for verdict in lot} >= {"release", "hold"}
    assert {verdict["acceptance_limits"] for lot in before for verdict in lot} >= {"fixed", "at_this_reading"}
