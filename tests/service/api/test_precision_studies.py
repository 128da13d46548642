"""Studies of variance components over HTTP: their arrangement is an option, their data may come as CSV."""

from __future__ import annotations

import random
from typing import Any

from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import done
from tests.service.api.test_bad_input import problem


def precision_study(**changes: Any) -> dict[str, Any]:
    draw = random.Random(21)
    days, operators = [draw.gauss(0, 0.05) for _ in range(6)], [draw.gauss(0, 0.03) for _ in range(3)]
    rows = [
        [f"d{i}", f"o{k}", round(3 + a + b + draw.gauss(0, 0.02), 3)]
        for i, a in enumerate(days)
        for k, b in enumerate(operators)
        for _ in (1, 2)
    ]
    return house.a_study(
        **{
            "code": "wmp-precision",
            "design": "nested_precision",
            "columns": ["day", "operator", "reading"],
            "rows": rows,
            **changes,
        }
    )


def test_the_arrangement_decides_what_is_estimated(callers: Callers) -> None:
    for options, names in (
        ({}, {"between_days", "between_operators"}),
        ({"arrangement": "crossed"}, {"between_days", "between_operators", "interaction"}),
    ):
        code = f"wmp-precision-{options.get('arrangement', 'nested')}"
        document = precision_study(code=code, options=options)
        answer = done(callers["engineer"].post("/v1/studies", document))
        found = {estimate["name"] for estimate in answer["evaluation"]["estimates"]}
        assert found == {"repeatability", "intermediate_precision", *names}
        assert answer["study"]["serves_until"] is not None


def test_an_arrangement_that_there_is_not_is_named(callers: Callers) -> None:
    document = precision_study(options={"arrangement": "star"})
    found = problem(callers["engineer"].send("POST", "/v1/studies/preview", document), 422, "invalid-request")
    assert [fault["pointer"] for fault in found["errors"]] == ["#/options/arrangement"]


def test_duplicate_samples_of_lots(callers: Callers) -> None:
    draw = random.Random(22)
    rows = [
        [f"L{lot}", s, round(3 + a + b + draw.gauss(0, 0.02), 3)]
        for lot, a in enumerate(draw.gauss(0, 0.1) for _ in range(8))
        for s, b in enumerate(draw.gauss(0, 0.06) for _ in (1, 2))
        for _ in (1, 2)
    ]
    document = precision_study(
        code="wmp-sampling", design="sampling", columns=["target", "sample", "result"], rows=rows
    )
    answer = done(callers["engineer"].post("/v1/studies", document))
    names = [estimate["name"] for estimate in answer["evaluation"]["estimates"]]
    assert names[:4] == ["repeatability", "sampling", "between_targets", "measurement"]
    assert names[4:] == [f"robust_{name}" for name in names[:4]]
