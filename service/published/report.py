"""Every published case computed on this machine, and the report of it."""

from __future__ import annotations

import platform
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from importlib import metadata

from service.published import (
    run_decisions,
    run_examples,
    run_jcgm_100,
    run_lines,
    run_monte_carlo,
    run_precision,
    run_risks,
)
from service.published.cases import AGREES, DIFFERS, LATER, Case, Outcome, Runner, document, outcomes

RUNNERS: Mapping[str, Mapping[str, Runner]] = {
    "jcgm_100": run_jcgm_100.RUNNERS,
    "jcgm_101": run_monte_carlo.JCGM_101,
    "jcgm_106": run_decisions.JCGM_106,
    "ilac_g8": run_decisions.ILAC_G8,
    "z540_3": run_risks.Z540_3,
    "iso_5725_2": run_precision.ISO_5725_2,
    "iso_5725_6": run_precision.ISO_5725_6,
    "iso_7870_2": run_precision.ISO_7870_2,
    "nist_tn_1297": run_examples.NIST_TN_1297,
    "nist_tn_1900": run_examples.NIST_TN_1900,
    "nist_handbook": run_precision.NIST_HANDBOOK,
    "nist_strd": run_precision.NIST_STRD,
    "nbs_handbook_91": run_precision.NBS_HANDBOOK_91,
    "ea_4_02": run_examples.EA_4_02,
    "eurachem_quam": run_examples.EURACHEM_QUAM,
    "eurachem_sampling": run_precision.EURACHEM_SAMPLING,
    "nordtest_tr_537": run_examples.NORDTEST,
    "iso_ts_28037": run_lines.ISO_TS_28037,
    "york": run_lines.YORK,
}
_LIBRARIES = ("numpy", "scipy", "uncertainties", "pint")


@dataclass(frozen=True)
class ReportRow:
    """One printed figure of one case, and what this machine computes for it."""

    document: str
    case: Case
    outcome: Outcome


def run_all() -> tuple[ReportRow, ...]:
    """Compute every published case. A case that fails ends the run: that is a fault of the program."""
    return tuple(_rows())


def _rows() -> Iterator[ReportRow]:
    for name, runners in RUNNERS.items():
        found = document(name)
        for case in found.cases:
            for outcome in outcomes(case, runners[case.id]):
                yield ReportRow(found.title, case, outcome)


def passed(rows: Sequence[ReportRow]) -> bool:
    """Say whether nothing differs."""
    return all(row.outcome.status != DIFFERS for row in rows)


def text_report(rows: Sequence[ReportRow], *, dated: datetime) -> str:
    """Write the report as text; the caller says what time it is."""
    libraries = ", ".join(f"{name} {metadata.version(name)}" for name in _LIBRARIES)
    lines = [
        f"Published checks, computed on {dated.isoformat(timespec='seconds')}",
        f"Python {platform.python_version()}, {libraries}",
        "",
        "Each printed figure is held against what this program computes from the printed inputs, to half a",
        "unit of its last digit unless a case gives a reason. 'From memory' says that the figures were not",
        "read from the document when this was written, only seen to follow from their inputs.",
    ]
    title, case = "", ""
    for row in rows:
        if row.document != title:
            title = row.document
            lines += ["", title, "=" * len(title)]
        if row.case.id != case:
            case = row.case.id
            lines += ["", *_heading(row.case)]
        lines.append(_line(row.outcome))
    counts = {
        status: sum(row.outcome.status == status for row in rows) for status in (AGREES, DIFFERS, LATER)
    }
    summary = ", ".join(f"{number} {status}" for status, number in counts.items())
    return "\n".join([*lines, "", f"{len(rows)} printed figures: {summary}.", ""])


def _heading(case: Case) -> list[str]:
    where = f"{case.clause}: " if case.clause else ""
    lines = [f"{where}{case.title} [{case.provenance}]"]
    return [*lines, f"  {case.remark}"] if case.remark else lines


def _line(outcome: Outcome) -> str:
    remark = f" ({outcome.remark})" if outcome.remark else ""
    if isinstance(outcome.published, list):
        shown = "table" if outcome.deviation is None else f"table, largest deviation {outcome.deviation:.2g}"
        return f"  {outcome.name}: {shown}: {outcome.status}{remark}"
    if outcome.computed is None:
        return f"  {outcome.name}: printed {outcome.published}: {outcome.status}{remark}"
    return (
        f"  {outcome.name}: printed {outcome.published}, computed {outcome.computed:.6g}: "
        f"{outcome.status}{remark}"
    )
