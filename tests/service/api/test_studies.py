"""Studies over HTTP: what a design takes beside its data, and data as they come out of other programs."""

from __future__ import annotations

from typing import Any

import pytest

from tests.service.api import house
from tests.service.api.conftest import Callers
from tests.service.api.house import done
from tests.service.api.test_bad_input import problem

PREVIEW = "/v1/studies/preview"


# --- options -------------------------------------------------------------------------------------------


def with_options(options: Any, **changes: Any) -> dict[str, Any]:
    return {**house.agreement_study(), "code": "new-study", "options": options, **changes}


def test_options_reach_the_design_and_are_kept(callers: Callers) -> None:
    # A limit in the middle of the pairs: the design then looks at what happens near it.
    document = with_options({"tolerance_limits": [3.5], "presentations_per_pair": 1})
    answer = done(callers["engineer"].post("/v1/studies", document))
    assert answer["study"]["options"] == document["options"]
    kept = done(callers["engineer"].get("/v1/studies/new-study"), 200)
    assert kept["study"]["options"] == document["options"]


@pytest.mark.parametrize(
    ("options", "pointer"),
    [
        ({"colour": "red"}, "#/options/colour"),
        ({"presentations_per_pair": 1.5}, "#/options/presentations_per_pair"),
        ({"tolerance_limits": ["3.5"]}, "#/options/tolerance_limits"),
        ({"tolerance_limits": None}, "#/options/tolerance_limits"),
        ({"tolerance_limits": [[[3.5]]]}, "#/options/tolerance_limits"),
        ({"tolerance_limits": [None]}, "#/options/tolerance_limits"),
        ({"tolerance_limits": {"": {"a": {}}}}, "#/options/tolerance_limits"),
        ({"Colour": 1}, "#/options/Colour"),
        ({"independent": True}, "#/options/independent"),
        ([], "#/options"),
    ],
)
def test_an_option_that_a_design_does_not_know_is_refused(
    callers: Callers, options: Any, pointer: str
) -> None:
    found = problem(callers["engineer"].send("POST", PREVIEW, with_options(options)), 422, "invalid-request")
    assert [fault["pointer"] for fault in found["errors"]] == [pointer]


def test_independence_is_a_member_of_its_own(callers: Callers) -> None:
    document = with_options({}, independent=None)
    found = problem(callers["engineer"].send("POST", PREVIEW, document), 422, "invalid-request")
    assert [fault["pointer"] for fault in found["errors"]] == ["#/independent"]
