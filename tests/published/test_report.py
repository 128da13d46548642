"""The cases as data, the comparison, and the report that a user gets."""

from dataclasses import replace
from datetime import UTC, datetime

import pytest

from service.published.cases import AGREES, DIFFERS, LATER, document, document_names, outcomes
from service.published.report import RUNNERS, passed, run_all, text_report

NOON = datetime(2026, 3, 2, 12, 0, tzinfo=UTC)
PROVENANCE = {"from memory", "found", "package data"}


@pytest.fixture(scope="module")
def rows():
    return run_all()


def a_case(identity="gum-7.2-expand"):
    return next(case for case in document("jcgm_100").cases if case.id == identity)


def test_every_document_is_run_and_every_case_has_its_runner(rows):
    assert set(document_names()) == set(RUNNERS)
    for name in document_names():
        assert {case.id for case in document(name).cases} == set(RUNNERS[name])
    assert len({row.case.id for row in rows}) == sum(len(runners) for runners in RUNNERS.values())
    assert passed(rows)


def test_every_case_names_its_source_and_how_it_was_come_by():
    for name in document_names():
        for case in document(name).cases:
            assert case.source and case.provenance in PROVENANCE and case.provenance_note
            for item in case.expected:
                # Never looser than half a unit of the last digit without a written reason.
                assert item.tolerance_reason or item.bound or _half_a_unit(item) or item.does_not_follow, (
                    case.id, item.name,
                )  # fmt: skip


def _half_a_unit(item):
    printed = _flat(item.published)
    tolerances = _flat(item.tolerance)
    tolerances = tolerances * len(printed) if len(tolerances) == 1 else tolerances
    return all(float(t) <= 1.03 * _unit(text) for text, t in zip(printed, tolerances, strict=True))


def _unit(text):
    mantissa, _, exponent = str(text).lower().partition("e")
    decimals = len(mantissa.partition(".")[2])
    return 0.5 * 10.0 ** (int(exponent or 0) - decimals)


def _flat(thing):
    return [value for item in thing for value in _flat(item)] if isinstance(thing, list) else [thing]


def test_a_figure_beyond_its_last_digit_is_found():
    case = a_case()
    right = {item.name: item.value for item in case.expected}
    assert {o.status for o in outcomes(case, lambda _: right)} == {AGREES}
    tolerance = case.expected[0].tolerance
    wrong = {**right, case.expected[0].name: right[case.expected[0].name] + 1.01 * tolerance}
    assert [o.status for o in outcomes(case, lambda _: wrong)].count(DIFFERS) == 1
    assert {o.status for o in outcomes(case, lambda _: {})} == {LATER}
    with pytest.raises(ValueError, match="nothing printed is called other"):
        outcomes(case, lambda _: {"other": 1.0})


def test_bounds_and_misprints():
    (bounds,) = document("ilac_g8").cases
    too_large = {"pfa": [1.0] * len(bounds.expected[0].value)}
    assert outcomes(bounds, lambda _: too_large)[0].status == DIFFERS
    table = a_case("gum-G.2-t-table")
    (item,) = table.expected
    bent = replace(item, misprints=({"index": [0, 0], "printed": "1", "correct": "99.0"},))
    computed = [list(row) for row in item.value]
    computed[0][0] = 99.0
    assert outcomes(replace(table, expected=(bent,)), lambda _: {"t": computed})[0].status == AGREES
    assert outcomes(replace(table, expected=(bent,)), lambda _: {"t": item.value})[0].status == DIFFERS


def test_the_report_is_dated_and_says_where_every_figure_is_from(rows):
    text = text_report(rows, dated=NOON)
    assert text.startswith("Published checks, computed on 2026-03-02T12:00:00+00:00\n")
    assert "numpy" in text and "from memory" in text
    for row in rows:
        assert f"{row.case.title} [{row.case.provenance}]" in text
    assert "uX: printed 0.295, computed 0.29558" in text
    assert "does not follow from its inputs: straight propagation gives 0.2956" in text
    assert f"{len(rows)} printed figures: " in text and ", 0 differs, " in text


def test_a_difference_is_reported_and_fails(rows):
    outcome = replace(rows[0].outcome, status=DIFFERS)
    bad = (replace(rows[0], outcome=outcome), *rows[1:])
    assert not passed(bad)
    assert ", 1 differs, " in text_report(bad, dated=NOON)
