"""One study renewed behind many budgets: versions drafted and submitted in one act, approved in another.

A renewal is the versions that one entry submitted, as far as they still wait. Each is an ordinary version, so
a single one can still be returned or withdrawn, and approved by itself.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from typing import Any, Final, TypeVar

from service.access import require, require_another, require_person
from service.documents import Actor, Replacement, SignedAct
from service.errors import Conflict, Fault, InvalidRequest, NotFound
from service.ledger import Entry
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows import budget_figures
from service.workflows.accounts import verify_signature
from service.workflows.approvals import RENEWED, Approving, approval_of, approving, authors_of
from service.workflows.recording import PLANT_CHAIN, Request, entry_reference, record
from service.workflows.services import Services
from service.workflows.version_steps import Answer, answer_of, changed_version

_T = TypeVar("_T")
_APPROVED: Final = "renewal-approved"


def submit(
    services: Services, actor: Actor, code: str, replacement: Replacement, request: Request
) -> tuple[Answer, bool]:
    """Draft and submit a version of every budget in force that uses a study, with another one in its place.

    Raises
    ------
    NotFound
        There is no such study.
    Conflict
        No budget in force uses it, or one of them is being worked on.
    InvalidRequest
        The other study does not suit one of the budgets; nothing is drafted then.
    """
    require(actor, "draft a version")
    require(actor, "submit a version")

    def perform(unit_of_work: UnitOfWork) -> Entry:
        _check_studies(unit_of_work, code, replacement.study)
        drafts = [
            _draft(unit_of_work, actor, before, code, replacement) for before in _using(unit_of_work, code)
        ]
        if not drafts:
            raise Conflict("nothing-in-force", f"No budget in force uses the study {code!r}.")
        _each(drafts, lambda draft: approval_of(unit_of_work, draft))
        submitted = [
            changed_version(draft, state="submitted", submitted_by=actor.principal) for draft in drafts
        ]
        content = {
            "study": code,
            "replacement": replacement.study,
            "reason": replacement.reason,
            "versions": [{"version": answer_of(version), "evaluation": None} for version in submitted],
        }
        entry = unit_of_work.append(PLANT_CHAIN, RENEWED, actor.principal, content)
        for draft in drafts:
            kept = unit_of_work.versions.insert(
                draft.kind,
                draft.code,
                draft.version,
                draft.document,
                entry,
                drafted_by=draft.drafted_by,
                product=draft.product,
                characteristic=draft.characteristic,
            )
            unit_of_work.versions.set_state(kept, "submitted", entry, submitted_by=actor.principal)
        return entry

    return _recorded(services, actor, request, perform)


def approve(
    services: Services, actor: Actor, code: str, replacement: str, signed: SignedAct, request: Request
) -> tuple[Answer, bool]:
    """Put all versions of a renewal that wait in force, in one entry, or none of them.

    Raises
    ------
    NotFound
        No version of such a renewal waits.
    Forbidden
        No approver, no person, the own work, or a signature that does not match.
    Conflict, InvalidRequest
        One of them cannot be approved as things stand now.
    """
    require(actor, "approve a version")
    verify_signature(services, require_person(actor, "approve"), signed.signature)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        waiting = _waiting(unit_of_work, code, replacement)
        for stored in waiting:
            require_another(actor, authors_of(unit_of_work, actor, stored))
        steps = _each(waiting, lambda stored: approving(unit_of_work, actor, stored))
        content = {
            "study": code,
            "replacement": replacement,
            "reason": signed.reason,
            "versions": [_written(step) for step in steps],
        }
        entry = unit_of_work.append(PLANT_CHAIN, _APPROVED, actor.principal, content)
        for step in steps:
            step.store(unit_of_work, entry)
        unit_of_work.bump_revision()
        return entry

    return _recorded(services, actor, request, perform)


def comparison(services: Services, actor: Actor, code: str, replacement: str) -> Answer:
    """Compare what a renewal changes: the estimates of both studies, and each budget line by line.

    Raises
    ------
    NotFound
        No version of such a renewal waits.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        waiting = _waiting(unit_of_work, code, replacement)
        before, after = (_estimates(unit_of_work, each) for each in (code, replacement))
    return {
        "study": code,
        "replacement": replacement,
        "estimates": [
            {"name": name, "was": before.get(name), "becomes": after.get(name)}
            for name in dict.fromkeys([*before, *after])
        ],
        "budgets": [
            budget_figures.comparison(services, actor, stored.code, stored.version) for stored in waiting
        ],
    }


# --- the budgets of a study ----------------------------------------------------------------------------


def _check_studies(unit_of_work: UnitOfWork, code: str, replacement: str) -> None:
    if unit_of_work.studies.get(code) is None:
        raise NotFound(f"There is no study {code!r}.")
    if replacement == code:
        raise _refused([Fault("got the study itself", "the code of another recorded study", "#/study")])
    if unit_of_work.studies.get(replacement) is None:
        detail = f"there is no study {replacement!r}"
        raise _refused([Fault(detail, "the code of a recorded study", "#/study")])


def _using(unit_of_work: UnitOfWork, code: str) -> list[StoredVersion]:
    """Give the budgets in force that name a study as evidence anywhere."""
    in_force = unit_of_work.versions.all_in_force("budget")
    return [stored for stored in in_force if _replaced(stored.document, code, "") != stored.document]


def _replaced(part: Any, code: str, replacement: str) -> Any:
    """Give a part of a document with the evidence of one study in the place of another's."""
    if isinstance(part, list):
        return [_replaced(item, code, replacement) for item in part]
    if not isinstance(part, dict):
        return part
    if part.keys() == {"study", "estimate"} and part["study"] == code:
        return {**part, "study": replacement}
    return {name: _replaced(item, code, replacement) for name, item in part.items()}


def _draft(
    unit_of_work: UnitOfWork, actor: Actor, before: StoredVersion, code: str, replacement: Replacement
) -> StoredVersion:
    opened = unit_of_work.versions.open("budget", before.code)
    if opened is not None:
        raise Conflict(
            "open-version-exists",
            f"Version {opened.version} of {before.code!r} is still {opened.state}; "
            "approve or withdraw it before the study is renewed.",
            link=f"/v1/budgets/{before.code}/versions/{opened.version}",
        )
    document = _replaced(before.document, code, replacement.study)
    return dataclasses.replace(
        before,
        version=unit_of_work.versions.next_number("budget", before.code),
        state="draft",
        revision=1,
        document={**document, "reason": replacement.reason},
        evaluation=None,
        lapses_at=None,
        drafted_by=actor.principal,
        submitted_by=None,
        approved_by=None,
        in_force_from=None,
    )


def _each(versions: list[StoredVersion], step: Callable[[StoredVersion], _T]) -> list[_T]:
    """Do a step for each version; all are refused with every fault of each, by the code of its budget."""
    done: list[_T] = []
    faults: list[Fault] = []
    for stored in versions:
        try:
            done.append(step(stored))
        except InvalidRequest as error:
            found = error.faults or (Fault(error.message),)
            faults.extend(_of_budget(stored.code, fault) for fault in found)
    if faults:
        raise _refused(faults)
    return done


def _of_budget(code: str, fault: Fault) -> Fault:
    place = (fault.pointer or "#").removeprefix("#").removeprefix("/")
    said = f"{place}: {fault.detail}" if place else fault.detail
    return dataclasses.replace(fault, pointer="#/study", detail=f"budget {code}: {said}")


def _refused(faults: list[Fault]) -> InvalidRequest:
    return InvalidRequest("The study cannot be renewed so; nothing was recorded.", faults=tuple(faults))


def _waiting(unit_of_work: UnitOfWork, code: str, replacement: str) -> list[StoredVersion]:
    """Give the versions of a renewal that are submitted still, by the entry that submitted them."""
    found = []
    for before in _using(unit_of_work, code):
        stored = unit_of_work.versions.open("budget", before.code)
        if stored is None or stored.state != "submitted":
            continue
        entry = unit_of_work.ledger.entry(stored.chain, stored.sequence)
        if entry is not None and entry.kind == RENEWED:
            if (entry.content["study"], entry.content["replacement"]) == (code, replacement):
                found.append(stored)
    if not found:
        raise NotFound(f"No budget waits for {replacement!r} in the place of {code!r}.")
    return found


# --- answers -------------------------------------------------------------------------------------------


def _written(step: Approving) -> dict[str, Any]:
    return {
        "version": answer_of(step.approved),
        "evaluation": step.approval.evaluation,
        "supersedes": None if step.before is None else step.before.version,
        "release_rules": step.approval.rules_document(),
    }


def _recorded(services: Services, actor: Actor, request: Request, perform: Any) -> tuple[Answer, bool]:
    act = record(services, actor, request, {PLANT_CHAIN}, perform)
    content = act.entry.content
    answer = {
        "study": content["study"],
        "replacement": content["replacement"],
        "budgets": [part["version"] for part in content["versions"]],
        "entry": entry_reference(act.entry),
    }
    return answer, act.earlier


def _estimates(unit_of_work: UnitOfWork, code: str) -> dict[str, Answer]:
    stored = unit_of_work.studies.get(code)
    shown = ("value", "standard_uncertainty", "degrees_of_freedom", "interval")
    estimates = [] if stored is None else stored.evaluation["estimates"]
    return {each["name"]: {member: each[member] for member in shown} for each in estimates}
