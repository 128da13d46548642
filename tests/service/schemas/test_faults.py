"""What does not fit is refused: every fault at once, where it is, what was got and what is expected."""

from __future__ import annotations

import copy
from typing import Any

import pytest

from service import documents
from service.errors import Fault, InvalidRequest, NotSupported
from service.schemas import SCHEMAS, load
from service.schemas.examples import EXAMPLES


def changed(kind: type[Any], path: str, value: Any) -> dict[str, Any]:
    """Give the example of a kind with one value set (or, for ``...``, removed) at a path of steps."""
    document = copy.deepcopy(EXAMPLES[kind])
    *steps, last = [int(step) if step.isdigit() else step for step in path.split("/")]
    place: Any = document
    for step in steps:
        place = place[step]
    if value is ...:
        del place[last]
    else:
        place[last] = value
    return document


def faults(kind: type[Any], document: Any) -> tuple[Fault, ...]:
    with pytest.raises(InvalidRequest) as caught:
        load(kind, document)
    return caught.value.faults


Request = documents.DecisionRequest


def test_the_fault_of_the_contract_reads_as_written_there() -> None:
    document = changed(Request, "readings/1/values/moisture", "3,12")
    expected = Fault('got the text "3,12"', "a finite JSON number", "#/readings/1/values/moisture")
    assert faults(Request, document) == (expected,)


@pytest.mark.parametrize("value", [True, "3.1", None, [], {}, float("nan"), float("inf"), 10**400])
def test_only_finite_numbers_are_numbers(value: Any) -> None:
    document = changed(Request, "readings/0/values/moisture", value)
    assert [fault.pointer for fault in faults(Request, document)] == ["#/readings/0/values/moisture"]


@pytest.mark.parametrize(
    "value",
    [
        "2026-03-02T06:12:04",
        "2026-03-02",
        "2026-03-02 06:12:04Z",
        "2026-02-30T06:12:04Z",
        "2026-03-02T24:12:04Z",
        "2026-03-02T06:12:60Z",
        "20260302T061204Z",
        "2026-W10-1T06:12:04Z",
        "0001-01-01T00:00:00+14:00",
        "2026-03-02T06:12:04.1234567890Z",
        "٢٠٢٦-03-02T06:12:04Z",
        1772431924,
    ],
)
def test_only_instants_with_an_offset_are_instants(value: Any) -> None:
    (fault,) = faults(Request, changed(Request, "readings/0/taken_at", value))
    assert fault.pointer == "#/readings/0/taken_at"
    assert fault.expected is not None and "offset" in fault.expected


@pytest.mark.parametrize("value", ["Tower-1", "-tower", "", "tower_1", "tower 1", "a" * 64, "töwer", 1, None])
def test_only_codes_are_codes(value: Any) -> None:
    assert [fault.pointer for fault in faults(Request, changed(Request, "line", value))] == ["#/line"]


@pytest.mark.parametrize("value", ["", "   ", "a" * 65, "lot\n1", "lot\u200b1", "lot\x07", "\ud800", 7, None])
def test_only_printable_text_names_a_lot(value: Any) -> None:
    assert [fault.pointer for fault in faults(Request, changed(Request, "lot", value))] == ["#/lot"]


def test_texts_that_look_the_same_are_the_same_lot() -> None:
    composed = load(Request, changed(Request, "lot", " Gru\u0308n 1 "))
    assert composed.lot == "Gr\u00fcn 1"


def test_all_faults_are_found_at_once_and_in_place() -> None:
    document = changed(Request, "readings/0/values/fat", "26")
    document["readings"][1]["colour"] = "white"
    document["un~/known"] = 1
    del document["line"]
    assert {fault.pointer for fault in faults(Request, document)} == {
        "#/readings/0/values/fat",
        "#/readings/1/colour",
        "#/un~0~1known",
        "#/line",
    }


def test_many_faults_are_counted_and_the_first_hundred_shown() -> None:
    document = changed(Request, "readings", [{}] * 50)
    with pytest.raises(InvalidRequest, match="250 faults, the first 100 are shown") as caught:
        load(Request, document)
    assert len(caught.value.faults) == 100


@pytest.mark.parametrize("value", [None, [], "text", 3, True])
@pytest.mark.parametrize("kind", SCHEMAS, ids=lambda kind: kind.__name__)
def test_a_document_is_an_object(kind: type[Any], value: Any) -> None:
    assert [fault.pointer for fault in faults(kind, value)] == ["#"]


@pytest.mark.parametrize("kind", SCHEMAS, ids=lambda kind: kind.__name__)
def test_every_required_member_is_missed_and_every_strange_one_refused(kind: type[Any]) -> None:
    found = {fault.pointer: fault for fault in faults(kind, {"strange": 1})}
    required = {
        f"#/{field.data_key or name}" for name, field in SCHEMAS[kind].load_fields.items() if field.required
    }
    # Of a plan either wish will do; a Monte Carlo run has a default for everything.
    assert required or kind in (documents.StudyPlanRequest, documents.MonteCarloRequest)
    assert required <= found.keys()
    assert found["#/strange"].detail == "unknown member"


Specification = documents.Specification
Budget = documents.BudgetDocument
_RULE = "requires/0/decision_rule"


@pytest.mark.parametrize(
    ("kind", "path", "value"),
    [
        (documents.Study, "rows", [["P01", 1, 3.1]] * 20_001),
    ],
)
def test_what_is_not_built_yet_is_refused_as_such(kind: type[Any], path: str, value: Any) -> None:
    document = changed(kind, path, value)
    if kind is documents.Study:
        document["set_aside"] = []
    with pytest.raises(NotSupported) as caught:
        load(kind, document)
    assert [fault.pointer for fault in caught.value.faults] == [f"#/{path}"]
    assert all(fault.detail.startswith("not supported yet") for fault in caught.value.faults)


def test_a_real_fault_beside_an_unsupported_form_is_an_invalid_request() -> None:
    document = changed(Request, "readings/0/weight", 2.5)
    document["lot"] = 5
    with pytest.raises(InvalidRequest) as caught:
        load(Request, document)
    assert type(caught.value) is InvalidRequest


@pytest.mark.parametrize(
    ("kind", "path", "value", "pointer"),
    [
        (Specification, "requires/0/upper_tolerance_limit", None, "requires/0"),
        (
            Specification,
            "requires/0/lower_tolerance_limit",
            {"value": 3.2, "unit": "%", "inclusive": True},
            "requires/0",
        ),
        (Specification, f"{_RULE}/largest_risk", 0.5, f"{_RULE}/largest_risk"),
        (Specification, f"{_RULE}/largest_risk", ..., f"{_RULE}/largest_risk"),
        (Specification, f"{_RULE}/multiple", 1.0, f"{_RULE}/multiple"),
        (Specification, _RULE, {"kind": "simple"}, f"{_RULE}/kind"),
        (Specification, "requires", [], "requires"),
        (Budget, "validated_range/lower", 5.6, "validated_range"),
        (Budget, "validated_range/lower", None, "validated_range/lower"),
        (Budget, "procedure/samples/least", 2, "procedure/samples"),
        (Budget, "procedure/samples/most", 51, "procedure/samples/most"),
        (Budget, "components/1/code", "repeatability", "components/1/code"),
        (Budget, "components/1/quantity", "fat", "components/1/quantity"),
        (Budget, "components/1/level", "day", "components/1/level"),
        (Budget, "components/1/evidence", {}, "components/1/evidence"),
        (Budget, "components/1/evidence/declaration", {}, "components/1/evidence"),
        (
            Budget,
            "components/3/evidence/declaration/meaning",
            ...,
            "components/3/evidence/declaration/meaning",
        ),
        (Budget, "components/0/relative_to", "fat", "components/0/relative_to"),
        (Budget, "components/0/quantity", None, "components/0"),
        (Budget, "components/0/quantities", {"fat": "fat"}, "components/0"),
        (Budget, "validated_ranges", {"moisture": {"lower": 1.0}}, "validated_ranges/moisture/upper"),
        (
            Budget,
            "correlations",
            [{"between": ["a", "a"], "level": "lot", "coefficient": 1, "evidence": {"document": "guess"}}],
            "correlations/0/between/1",
        ),
        (Request, "readings/0/weight", 2.5, "readings/0/weight"),
        (Budget, "model/quantities/bias", {"unit": "%"}, "model/quantities/bias"),
        (Budget, "coverage_probability", 1, "coverage_probability"),
        (documents.Characteristic, "natural_domain/upper", -1, "natural_domain"),
        (documents.Analyzer, "decimals/ash", 2, "decimals/ash"),
        (documents.Line, "analyzers", ["nir-1", "nir-1"], "analyzers/1"),
        (
            documents.Calibration,
            "flags/unexplained-spectrum/required",
            "yes",
            "flags/unexplained-spectrum/required",
        ),
        (documents.Calibration, "from", "2026-13-01", "from"),
        (documents.Plant, "time_zone", "Mars/Olympus", "time_zone"),
        (documents.Plant, "time_zone", "America", "time_zone"),
        (documents.Plant, "time_zone", "../etc/passwd", "time_zone"),
        (documents.Plant, "lapse_hour", "24:00", "lapse_hour"),
        (documents.Plant, "working_days/0", "moonday", "working_days/0"),
        (documents.Study, "rows/0/2", True, "rows/0/2"),
        (documents.Study, "rows/0", "P01", "rows/0"),
        (documents.Study, "rows/1/2", float("nan"), "rows/1/2"),
        (documents.Study, "columns/1", "sample", "columns/1"),
        (documents.Study, "serves_until", "2026-01-13", "serves_until"),
        (documents.Study, "set_aside/0/row", 8, "set_aside/0/row"),
        (documents.SignedAct, "signature/password", "", "signature/password"),
        (documents.SignedAct, "reason", " ", "reason"),
        (documents.SignedAct, "reason", "\n\n", "reason"),
        (documents.SignedAct, "reason", "a\rb", "reason"),
    ],
)
def test_each_wrong_value_is_named_where_it_stands(
    kind: type[Any], path: str, value: Any, pointer: str
) -> None:
    assert [fault.pointer for fault in faults(kind, changed(kind, path, value))] == [f"#/{pointer}"]


def test_a_password_is_not_repeated_in_a_fault() -> None:
    act = documents.SignedAct
    for secret in (["secret"], "secret" * 300):
        (fault,) = faults(act, changed(act, "signature/password", secret))
        assert "secret" not in fault.detail


def test_a_value_below_a_limit_is_a_cell() -> None:
    document = changed(documents.Study, "rows/0/2", {"below": 0.1})
    assert load(documents.Study, document).rows[0][2] == {"below": 0.1}


def test_a_model_without_its_bias_is_missed_by_the_components() -> None:
    found = {fault.pointer for fault in faults(Budget, changed(Budget, "model/quantities/bias", ...))}
    assert found == {"#/components/2/quantity", "#/components/3/quantity"}
