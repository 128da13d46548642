"""A study let serve longer: once, by an approver, with a wider uncertainty, in every budget that uses it.

Evidence grows old; that a new study is late is no reason to take the old one as it was. Each budget in force
gets a version of its own with the uncertainty of the study widened, so that decisions, limits and the record
say by which figures a lot was judged.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from typing import Any, Final

from service.access import require, require_another, require_person
from service.documents import Actor, BudgetDocument, Extension, Study
from service.errors import Conflict, NotFound
from service.ledger import Entry, format_instant
from service.schemas import load
from service.store.rows import StoredStudy, StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows import plant
from service.workflows.accounts import verify_signature
from service.workflows.approvals import authors_of
from service.workflows.budget_validation import Findings
from service.workflows.budgets import approval_of_resolved
from service.workflows.calendar import lapse_instant
from service.workflows.evidence import LONGEST_SERVICE, FaultCollector
from service.workflows.extended_limits import check_limits_are_narrower
from service.workflows.monte_carlo import findings
from service.workflows.recording import PLANT_CHAIN, Request, entry_reference, record
from service.workflows.reevaluations import evidence_of
from service.workflows.renewals import each_budget
from service.workflows.resolved_budgets import resolve_budget
from service.workflows.services import Services
from service.workflows.version_steps import Answer, answer_of
from service.workflows.versioned_kind import Approval

EXTENDED: Final = "study-extended"
_SAME: Final = 1e-9
"""Relative difference of variances that libraries of several ages may leave."""


@dataclass(frozen=True)
class Widened:
    """A version of a budget with the study extended, and the one that it supersedes."""

    before: StoredVersion
    version: StoredVersion
    approval: Approval

    def written(self) -> dict[str, Any]:
        """Write it down for the record."""
        return {
            "version": answer_of(self.version),
            "evaluation": self.version.evaluation,
            "supersedes": self.before.version,
            "release_rules": self.approval.rules_document(),
        }

    def store(self, unit_of_work: UnitOfWork, entry: Entry) -> None:
        """Bring the tables to what the entry says."""
        unit_of_work.versions.set_state(self.before, "superseded", entry)
        unit_of_work.versions.insert_in_force(self.version, entry)
        for key, numbers in self.approval.rules:
            unit_of_work.rules.add(key.stored(numbers))


def extend(
    services: Services, actor: Actor, code: str, extension: Extension, request: Request
) -> tuple[Answer, bool]:
    """Let a study serve until another day, and put a version with it in force of every budget that uses it.

    Raises
    ------
    NotFound
        There is no such study.
    Forbidden
        No approver, no person, the own work, or a signature that does not match.
    Conflict
        It was extended before, no budget in force uses it, or a laboratory behind one changed meanwhile.
    InvalidRequest
        The day is none that it may serve until, or a budget does not bear the wider uncertainty.
    """
    require(actor, "extend a study")
    verify_signature(services, require_person(actor, "extend"), extension.signature)
    found = findings(services, actor, request, lambda unit: _expected(unit, actor, code, extension))

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = unit_of_work.studies.get(code)
        if stored is None:
            raise NotFound(f"There is no study {code!r}.")
        using = _using(unit_of_work, actor, stored)
        said = _said(unit_of_work, load(Study, stored.document), extension)
        with unit_of_work.extensions.expecting({code: said}):
            steps = each_budget(
                using,
                lambda before: _widened(unit_of_work, actor, before, code, extension.reason, found),
                pointer="#/widening_factor",
                act="extended",
            )
        content = {
            "study": code,
            "extension": said,
            "reason": extension.reason,
            "versions": [step.written() for step in steps],
        }
        entry = unit_of_work.append(PLANT_CHAIN, EXTENDED, actor.principal, content)
        unit_of_work.extensions.add(code, said, entry)
        for step in steps:
            step.store(unit_of_work, entry)
        unit_of_work.bump_revision()
        return entry

    act = record(services, actor, request, {PLANT_CHAIN}, perform)
    content = act.entry.content
    answer = {
        "study": content["study"],
        "extension": content["extension"],
        "budgets": [part["version"] for part in content["versions"]],
        "entry": entry_reference(act.entry),
    }
    return answer, act.earlier


def _using(unit_of_work: UnitOfWork, actor: Actor, study: StoredStudy) -> list[StoredVersion]:
    """Give the budgets in force that rest on a study; neither they nor it may be the actor's own work."""
    earlier = unit_of_work.extensions.get(study.code)
    if earlier is not None:
        raise Conflict(
            "already-extended",
            f"{study.code!r} was extended until {earlier.document['until']}, which is done once; renew it.",
            link=f"/v1/studies/{study.code}",
        )
    in_force = unit_of_work.versions.all_in_force("budget")
    using = [version for version in in_force if study.code in evidence_of(version)]
    if not using:
        raise Conflict("nothing-in-force", f"No budget in force uses the study {study.code!r}.")
    recorded = unit_of_work.ledger.entry(study.chain, study.sequence)
    assert recorded is not None  # a foreign key holds it
    require_another(actor, frozenset({recorded.actor}))
    for version in using:
        require_another(actor, authors_of(unit_of_work, actor, version))
    return using


def _said(unit_of_work: UnitOfWork, study: Study, extension: Extension) -> dict[str, Any]:
    """Write down how the study serves from now on. Raises InvalidRequest for a day that it may not."""
    collector = FaultCollector()
    pointer, until, serves_until = "#/until", extension.until, study.serves_until
    lapses_at = format_instant(lapse_instant(until, plant.in_force(unit_of_work)))
    if serves_until is None:
        collector.add(pointer, f"{study.code} serves without an end", "a study that lapses")
    elif until <= serves_until:
        collector.add(pointer, f"got {until}", f"a day after {serves_until}, until which it serves")
    elif until > (last := _last_day(study.done_on, serves_until)):
        expected = f"a day not after {last}: not longer again than it was to serve"
        collector.add(pointer, f"got {until}", expected)
    elif lapses_at <= unit_of_work.now(PLANT_CHAIN):
        collector.add(pointer, f"got {until}", "a day to come")
    collector.finish("The study cannot be extended so; nothing was recorded.")
    return {
        "until": until.isoformat(),
        "widening_factor": extension.widening_factor,
        "lapses_at": lapses_at,
    }


def _last_day(done_on: date, serves_until: date) -> date:
    try:
        again = serves_until + (serves_until - done_on)
        return min(again, done_on + timedelta(days=LONGEST_SERVICE))
    except OverflowError:  # a study of the last days of the calendar
        return serves_until


def _expected(
    unit_of_work: UnitOfWork, actor: Actor, code: str, extension: Extension
) -> Iterator[StoredVersion]:
    """Give the versions one by one, each while the study is known to be extended."""
    stored = unit_of_work.studies.get(code)
    if stored is None:
        return
    using = _using(unit_of_work, actor, stored)
    said = _said(unit_of_work, load(Study, stored.document), extension)
    with unit_of_work.extensions.expecting({code: said}):
        yield from (_version(unit_of_work, actor, before, extension.reason) for before in using)


def _version(unit_of_work: UnitOfWork, actor: Actor, before: StoredVersion, reason: str) -> StoredVersion:
    return dataclasses.replace(
        before,
        version=unit_of_work.versions.next_number("budget", before.code),
        revision=1,
        document={**before.document, "reason": reason},
        evaluation=None,
        approved_by=actor.principal,
        in_force_from=unit_of_work.now(PLANT_CHAIN),
    )


def _widened(
    unit_of_work: UnitOfWork, actor: Actor, before: StoredVersion, code: str, reason: str, found: Findings
) -> Widened:
    """Compute the version that comes into force; the evidence beside the study has to be what it was."""
    version = _version(unit_of_work, actor, before, reason)
    budget = load(BudgetDocument, version.document)
    resolved = resolve_budget(unit_of_work, budget)
    approval = approval_of_resolved(unit_of_work, version, budget, resolved, found)
    assert before.evaluation is not None and approval.evaluation is not None  # of budgets in force
    _check_unchanged(before, approval.evaluation["components"], code)
    check_limits_are_narrower(unit_of_work, before, approval)
    version = dataclasses.replace(version, evaluation=approval.evaluation, lapses_at=approval.lapses_at)
    return Widened(before, version, approval)


def _check_unchanged(before: StoredVersion, components: Sequence[Mapping[str, Any]], code: str) -> None:
    """Refuse to bring in, with the extension, what a laboratory's entry says by now. Raises Conflict."""
    assert before.evaluation is not None
    for was, becomes in zip(before.evaluation["components"], components, strict=True):
        if "laboratory" not in becomes or becomes["laboratory"]["study"] == code:
            continue
        same = math.isclose(was["estimate"]["variance"], becomes["estimate"]["variance"], rel_tol=_SAME)
        if not same or was["laboratory"]["serves_until"] != becomes["laboratory"]["serves_until"]:
            taken = becomes["laboratory"]
            raise Conflict(
                "evidence-changed",
                f"The {taken['component']} of {taken['code']} is another one than when {before.code!r} was "
                "approved; have a version of it approved first, then extend the study.",
                link=f"/v1/budgets/{before.code}",
            )
