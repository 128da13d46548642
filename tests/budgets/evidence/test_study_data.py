import math

import pytest

from budgets.errors import BudgetsError, EvidenceError, NotSupportedError
from budgets.evidence.evaluation import SetAside
from budgets.evidence.study_data import (
    DESIGNS,
    MOST_ROWS,
    VECTOR_DESIGNS,
    NamedSource,
    StudyData,
    evaluate_study,
)

COLUMNS = ("sample", "replicate", "reading")
ROWS = tuple((f"P{i}", k, 3.0 + i / 10 + d) for i in range(4) for k, d in ((1, 0.02), (2, -0.01), (3, 0.0)))


def evaluated(rows=ROWS, columns=COLUMNS, design="repeatability", **options):
    return evaluate_study(design, StudyData(columns, tuple(rows)), study="wmp-rep", **options)


def fault_of(where, match=None, kind=EvidenceError, **changes):
    with pytest.raises(kind, match=match) as caught:
        evaluated(**changes)
    assert [fault.where for fault in caught.value.each()] == [where]


def test_an_unknown_design_names_those_that_exist():
    fault_of(("design",), match=", ".join(DESIGNS), design="guess")


def test_columns_are_checked_against_the_design():
    fault_of(
        ("columns",), "'reading' is missing.*optional: replicate", columns=("sample", "replicate"), rows=()
    )
    fault_of(("columns", 3), "'colour' is unknown", columns=(*COLUMNS, "colour"))
    fault_of(("columns", 2), "occurs twice", columns=("sample", "reading", "reading"))


@pytest.mark.parametrize(
    ("row", "where", "match"),
    [
        (("P0", 1), ("rows", 12), "2 cells, expected 3"),
        (("P0", 1, "3,12"), ("rows", 12, 2), "got the text '3,12'"),
        (("P0", 1, True), ("rows", 12, 2), "expected a number"),
        (("P0", 1, None), ("rows", 12, 2), "the cell is empty"),
        (("P0", 1, math.nan), ("rows", 12, 2), "finite"),
        (("P0", 1, -math.inf), ("rows", 12, 2), "finite"),
        (("P0", 1, 1e15), ("rows", 12, 2), "below 1e\\+15 in size"),
        (("P0", 1, 10**400), ("rows", 12, 2), "below 1e\\+15 in size"),
        ((None, 1, 3.0), ("rows", 12, 0), "label is missing"),
        ((True, 1, 3.0), ("rows", 12, 0), "label is missing"),
        (("  ", 1, 3.0), ("rows", 12, 0), "label is empty"),
    ],
)
def test_bad_cells_are_named_by_row_and_column(row, where, match):
    fault_of(where, match, rows=(*ROWS, row))


@pytest.mark.parametrize("name", DESIGNS)
def test_a_value_below_its_reporting_limit_is_refused_where_no_likelihood_is_there_for_it(name):
    """Never taken as zero or half of the limit; the design agreement has a likelihood for it."""
    layout = DESIGNS[name].layout
    measured = next(column for column in layout.required if layout.is_number(column))
    assert (measured in layout.censorable) == (name == "agreement")
    if name != "agreement":
        row = tuple({"below": 0.1} if column == measured else "a" for column in layout.required)
        where = ("rows", 0, layout.required.index(measured))
        fault_of(where, kind=NotSupportedError, rows=[row], columns=layout.required, design=name)


def test_all_faults_are_told_at_once_but_not_more_than_twenty():
    with pytest.raises(EvidenceError, match="40 faults") as caught:
        evaluated(rows=[("P0", 1, "x")] * 40)
    assert len(caught.value.each()) == 20


def test_an_empty_study_is_refused():
    fault_of(("rows",), "no data", rows=())


@pytest.mark.parametrize("name", [*DESIGNS, *VECTOR_DESIGNS])
def test_every_design_says_how_many_rows_it_takes(name):
    """Before a single cell is looked at."""
    most = {**DESIGNS, **VECTOR_DESIGNS}[name].most_rows
    long = ("process_stream", "nested_precision")
    assert most == (20_000 if name in long else 5_000) <= MOST_ROWS
    rows = ((None,),) * (most + 1)
    fault_of(("rows",), f"{most + 1} rows; the design {name} takes at most {most}", rows=rows, design=name)


def test_labels_written_as_numbers_are_the_same_whatever_wrote_them():
    rows = [(1, 1, 3.1), (1.0, 2, 3.2), ("1", 3, 3.3), (1.5, 1, 3.0), (1.5, 2, 3.1)]
    assert [g["sample"] for g in evaluated(rows=rows).diagnostics["groups"]] == ["1", "1.5"]


def test_rows_set_aside_are_left_out_and_the_evaluation_with_them_is_kept():
    rows = (*ROWS, ("P0", 4, 9.0))
    evaluation = evaluated(rows=rows, set_aside=[SetAside(12, "cup not filled")])
    assert evaluation.estimates == evaluated().estimates
    assert evaluation.set_aside == (SetAside(12, "cup not filled"),)
    with_them = evaluation.diagnostics["with_set_aside"]["estimates"][0]["standard_uncertainty"]
    assert with_them > 10 * evaluation.estimate().standard_uncertainty


def test_a_row_that_cannot_be_read_may_be_set_aside():
    evaluation = evaluated(rows=(*ROWS, ("P0", 4, None)), set_aside=[SetAside(12, "cup not filled")])
    assert "the cell is empty" in evaluation.diagnostics["with_set_aside"]["error"]


@pytest.mark.parametrize(
    ("set_aside", "where"),
    [
        ([SetAside(99, "why")], ("set_aside", 0, "row")),
        ([SetAside(-1, "why")], ("set_aside", 0, "row")),
        ([SetAside(1, "why"), SetAside(1, "why")], ("set_aside", 1, "row")),
        ([SetAside(1, " ")], ("set_aside", 0, "reason")),
    ],
)
def test_what_cannot_be_set_aside(set_aside, where):
    fault_of(where, set_aside=set_aside)


def test_options_and_sources_that_a_design_does_not_take_are_refused(an_estimate):
    fault_of(("options", "independent"), "takes none", options={"independent": True})
    fault_of(("named_sources",), named_sources=[NamedSource("presentation", an_estimate())])
    with pytest.raises(EvidenceError, match="it takes independent"):
        evaluate_study("agreement", StudyData(("pair",), ()), study="v", options={"depth": 1})


def test_every_error_is_of_the_tree():
    for rows in ((), [("P0", 1)], [("P0", 1, "x")]):
        with pytest.raises(BudgetsError):
            evaluated(rows=rows)
