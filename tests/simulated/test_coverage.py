"""How often the 95 % intervals of every design hold the truth, at the least data that the design takes.

The figures stand in the table of DEVELOPERS.md, from 2,000 simulated studies of each row. They are measured
anew, and held against the table, with TEST_SIMULATED_STUDIES=2000; a run without it takes a few studies of
each. TEST_WRITE_COVERAGE=1 writes the table.
"""

from __future__ import annotations

import os
import re
import zlib
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from budgets.errors import EvidenceError
from budgets.evidence.evaluation import Evaluation
from budgets.evidence.study_data import DESIGNS, VECTOR_DESIGNS, StudyData, evaluate_study
from tests.simulated.studies import APPROXIMATE, CAUTIOUS, EXACT, Case, Span, cases

DEVELOPERS = Path(__file__).parents[2] / "DEVELOPERS.md"
HEADINGS = ("design", "data", "intervals", "held the truth in %")
IN_FULL = 2000
STUDIES = int(os.environ.get("TEST_SIMULATED_STUDIES", "40"))
WRITE = "TEST_WRITE_COVERAGE"
CASES = list(cases())
# What may be measured: of 2,000 studies the standard error of 95 % is 0.5 %.
BOUNDS = {EXACT: (93.0, 97.0), CAUTIOUS: (93.0, 100.0), APPROXIMATE: (90.0, 100.0)}


def spans_of(case: Case, evaluation: Evaluation) -> Mapping[str, Span | None]:
    if case.spans is not None:
        return case.spans(evaluation)
    intervals = {name: evaluation.estimate(name).interval for name in case.truths}
    return {name: None if own is None else (own.lower, own.upper) for name, own in intervals.items()}


def counted(case: Case, studies: int) -> dict[str, tuple[int, int]]:
    """Count how many intervals were stated, and how many of them hold the truth."""
    stated, held = dict.fromkeys(case.truths, 0), dict.fromkeys(case.truths, 0)
    for number in range(studies):
        generator = np.random.default_rng([zlib.crc32(case.name.encode()), number])
        data = StudyData(case.columns, tuple(case.draw(generator)))
        try:
            evaluation = evaluate_study(
                case.design,
                data,
                study="simulated",
                options=case.options,
                named_sources=case.sources(generator),
            )
        except EvidenceError:
            # A series that still hangs together at its end is refused: nothing is stated then.
            assert case.design == "process_stream"
            continue
        for name, span in spans_of(case, evaluation).items():
            if span is not None:
                stated[name] += 1
                held[name] += span[0] <= case.truths[name] <= span[1]
    return {name: (stated[name], held[name]) for name in case.truths}


def row_of(case: Case, counts: Mapping[str, tuple[int, int]]) -> str:
    shown = ", ".join(f"{name} {100 * held / of:.1f}" for name, (of, held) in counts.items())
    return f"| {case.design} | {case.size} | {case.kind} | {shown} |"


def rows_of_table() -> dict[str, tuple[str, dict[str, float]]]:
    """Read kind and figures of every row of the table."""
    head = "| " + " | ".join(HEADINGS) + " |\n"
    _, found, after = DEVELOPERS.read_text("utf-8").partition(head)
    assert found, "DEVELOPERS.md has no table of coverage"
    rows = {}
    for line in after.partition("\n\n")[0].splitlines()[1:]:
        design, size, kind, shown = (cell.strip() for cell in line.strip("|").split("|"))
        figures = re.findall(r"([^,]+?) (\d+\.\d)(?:, |$)", shown)
        rows[f"{design}, {size}"] = kind, {name.strip(): float(figure) for name, figure in figures}
    return rows


@pytest.fixture(scope="module")
def table() -> dict[str, tuple[str, dict[str, float]]]:
    if os.environ.get(WRITE):
        lines = [row_of(case, counted(case, IN_FULL)) for case in CASES]
        head = "| " + " | ".join(HEADINGS) + " |\n"
        text = DEVELOPERS.read_text("utf-8")
        before, _, after = text.partition(head)
        rest = after.partition("\n\n")[2]
        written = head + "| " + " | ".join("---" for _ in HEADINGS) + " |\n" + "\n".join(lines)
        DEVELOPERS.write_text(f"{before}{written}\n\n{rest}", "utf-8")
    return rows_of_table()


def test_the_table_has_every_design_and_case(table: Mapping[str, object]) -> None:
    assert {case.design for case in CASES} == {*DESIGNS, *VECTOR_DESIGNS}
    assert list(table) == [case.name for case in CASES]


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_the_intervals_hold_the_truth(
    case: Case, table: Mapping[str, tuple[str, Mapping[str, float]]]
) -> None:
    """As often as the table says: the count lies within the 1 in 100,000 ends of the binomial on either side.

    In full also within 2 % of the table: with the same draws only another library makes any difference.
    """
    kind, figures = table[case.name]
    assert (kind, list(figures)) == (case.kind, list(case.truths))
    least, most = BOUNDS[kind]
    assert all(least <= figure <= most for figure in figures.values()), figures
    for name, (stated, held) in counted(case, STUDIES).items():
        assert stated > STUDIES / 3, name
        share = min(figures[name], 99.9) / 100
        below, above = stats.binom.cdf(held, stated, share), stats.binom.sf(held - 1, stated, share)
        assert min(below, above) > 1e-5, (name, held, stated)
        if STUDIES >= IN_FULL:
            assert 100 * held / stated == pytest.approx(figures[name], abs=2.0), name
