"""A renewal that waits: compared, and approved in one act."""

from __future__ import annotations

from typing import Any, Final

from service.access import require, require_another, require_person
from service.documents import Actor, SignedAct
from service.errors import NotFound
from service.ledger import Entry
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows import budget_figures
from service.workflows.accounts import verify_signature
from service.workflows.approvals import RENEWED, Approving, approving, authors_of
from service.workflows.monte_carlo import findings
from service.workflows.recording import PLANT_CHAIN, Request
from service.workflows.renewals import each_budget, evaluated_in, renewal_recorded
from service.workflows.services import Services
from service.workflows.version_steps import Answer, answer_of

_APPROVED: Final = "renewal-approved"


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
    found = findings(services, actor, request, lambda unit: _waiting(unit, code, replacement))

    def perform(unit_of_work: UnitOfWork) -> Entry:
        waiting = _waiting(unit_of_work, code, replacement)
        for stored in waiting:
            require_another(actor, authors_of(unit_of_work, actor, stored))
        steps = each_budget(waiting, lambda stored: approving(unit_of_work, actor, stored, found))
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

    return renewal_recorded(services, actor, request, perform)


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
        submitted = unit_of_work.ledger.entry(waiting[0].chain, waiting[0].sequence)
        assert submitted is not None  # found by it
        anew = evaluated_in(submitted.content)
        estimates = [
            _estimates_compared(unit_of_work, *each)
            for each in ((code, replacement), *((item["study"], item["becomes"]) for item in anew))
        ]
    return {
        "study": code,
        "replacement": replacement,
        "estimates": estimates[0],
        "evaluated_anew": [
            {**item, "estimates": compared} for item, compared in zip(anew, estimates[1:], strict=True)
        ],
        "budgets": [
            budget_figures.comparison(services, actor, stored.code, stored.version) for stored in waiting
        ],
    }


def _waiting(unit_of_work: UnitOfWork, code: str, replacement: str) -> list[StoredVersion]:
    """Give the versions of a renewal that are submitted still, by the entry that submitted them."""
    found = []
    for before in unit_of_work.versions.all_in_force("budget"):
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


def _written(step: Approving) -> dict[str, Any]:
    return {
        "version": answer_of(step.approved),
        "evaluation": step.approval.evaluation,
        "supersedes": None if step.before is None else step.before.version,
        "release_rules": step.approval.rules_document(),
    }


def _estimates_compared(unit_of_work: UnitOfWork, code: str, other: str) -> list[Answer]:
    before, after = (_estimates(unit_of_work, each) for each in (code, other))
    return [
        {"name": name, "was": before.get(name), "becomes": after.get(name)}
        for name in dict.fromkeys([*before, *after])
    ]


def _estimates(unit_of_work: UnitOfWork, code: str) -> dict[str, Answer]:
    stored = unit_of_work.studies.get(code)
    shown = ("value", "standard_uncertainty", "degrees_of_freedom", "interval")
    estimates = [] if stored is None else stored.evaluation["estimates"]
    return {each["name"]: {member: each[member] for member in shown} for each in estimates}
