"""A version submitted, approved by another person, returned or withdrawn; one for every kind.

What is computed and stored at approval is given by a VersionedKind; see specifications.py, budgets.py and
plant.py.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

from service.access import require, require_another, require_person
from service.documents import Actor, SignedAct
from service.ledger import Entry
from service.schemas import load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.accounts import verify_signature
from service.workflows.budget_validation import Findings
from service.workflows.monte_carlo import findings
from service.workflows.recording import PLANT_CHAIN, Request
from service.workflows.services import Services
from service.workflows.version_steps import (
    KINDS,
    Answer,
    append_version,
    changed_version,
    check_revision,
    in_state,
    recorded,
    version_of,
    wrong_state,
)
from service.workflows.versioned_kind import Approval

RENEWED: Final = "renewal-submitted"
"""The kind of an entry that drafts and submits versions of several budgets."""


def submit(
    services: Services,
    actor: Actor,
    kind: str,
    code: str,
    version: int,
    request: Request,
    *,
    if_match: int | None = None,
) -> tuple[Answer, bool]:
    """Submit a draft for approval, after the same checks that the approval will make.

    Raises
    ------
    Conflict
        The version is no draft.
    StaleVersion
        It is another revision than ``if_match``.
    InvalidRequest
        It could not be approved as it stands.
    """
    require(actor, "submit a version")
    found = findings(services, actor, request, lambda unit: _standing(unit, kind, code, version, "draft"))

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = in_state(unit_of_work, kind, code, version, "draft", act="submitted", if_match=if_match)
        approval_of(unit_of_work, stored, found)
        return _move(unit_of_work, actor, stored, "submitted", "submitted", submitted_by=actor.principal)

    return recorded(services, actor, request, perform)


def approve(
    services: Services,
    actor: Actor,
    kind: str,
    code: str,
    version: int,
    signed: SignedAct,
    request: Request,
    *,
    if_match: int | None = None,
) -> tuple[Answer, bool]:
    """Put a submitted version in force; the one before is superseded in the same entry.

    Raises
    ------
    Forbidden
        No approver, no person, the own work, or a signature that does not match.
    Conflict
        The version is not submitted, or another budget serves the same analyzer.
    StaleVersion
        It is another revision than ``if_match``.
    InvalidRequest
        It cannot be computed, or this measurement cannot prove a specification.
    """
    require(actor, "approve a version")
    verify_signature(services, require_person(actor, "approve"), signed.signature)
    found = findings(services, actor, request, lambda unit: _standing(unit, kind, code, version, "submitted"))

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = in_state(unit_of_work, kind, code, version, "submitted", act="approved", if_match=if_match)
        require_another(actor, authors_of(unit_of_work, actor, stored))
        step = approving(unit_of_work, actor, stored, found)
        entry = append_version(
            unit_of_work,
            actor,
            step.approved,
            "approved",
            reason=signed.reason,
            supersedes=None if step.before is None else step.before.version,
            release_rules=step.approval.rules_document(),
        )
        step.store(unit_of_work, entry)
        unit_of_work.bump_revision()
        return entry

    return recorded(services, actor, request, perform)


def return_(
    services: Services,
    actor: Actor,
    kind: str,
    code: str,
    version: int,
    signed: SignedAct,
    request: Request,
    *,
    if_match: int | None = None,
) -> tuple[Answer, bool]:
    """Give a submitted version back as a draft. Raises Forbidden, Conflict or StaleVersion."""
    require(actor, "return a version")
    verify_signature(services, require_person(actor, "return"), signed.signature)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = in_state(unit_of_work, kind, code, version, "submitted", act="returned", if_match=if_match)
        return _move(
            unit_of_work, actor, stored, "draft", "returned", reason=signed.reason, submitted_by=None
        )

    return recorded(services, actor, request, perform)


def withdraw(
    services: Services,
    actor: Actor,
    kind: str,
    code: str,
    version: int,
    signed: SignedAct,
    request: Request,
    *,
    if_match: int | None = None,
) -> tuple[Answer, bool]:
    """Withdraw an open version or, by an approver, the one in force.

    Raises Forbidden, Conflict or StaleVersion.
    """
    require(actor, "withdraw an open version")
    verify_signature(services, require_person(actor, "withdraw"), signed.signature)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = version_of(unit_of_work, kind, code, version)
        check_revision(stored, if_match)
        if stored.state == "in_force":
            require(actor, "withdraw a version in force")
            unit_of_work.bump_revision()
        elif stored.state not in {"draft", "submitted"}:
            raise wrong_state(stored, "withdrawn", "draft, submitted or in force")
        return _move(unit_of_work, actor, stored, "withdrawn", "withdrawn", reason=signed.reason)

    return recorded(services, actor, request, perform)


def _move(
    unit_of_work: UnitOfWork,
    actor: Actor,
    stored: StoredVersion,
    state: str,
    what: str,
    *,
    reason: str | None = None,
    **changes: Any,
) -> Entry:
    changed = changed_version(stored, state=state, **changes)
    entry = append_version(unit_of_work, actor, changed, what, reason=reason)
    unit_of_work.versions.set_state(stored, state, entry, **changes)
    return entry


@dataclass(frozen=True)
class Approving:
    """A version on its way into force: what is computed for it, and what it supersedes."""

    stored: StoredVersion
    before: StoredVersion | None
    approval: Approval
    changes: Mapping[str, Any]

    @property
    def approved(self) -> StoredVersion:
        """The version as it will stand."""
        return changed_version(self.stored, state="in_force", **self.changes)

    def store(self, unit_of_work: UnitOfWork, entry: Entry) -> None:
        """Bring the tables to what the entry says."""
        if self.before is not None:
            unit_of_work.versions.set_state(self.before, "superseded", entry)
        unit_of_work.versions.set_state(self.stored, "in_force", entry, **self.changes)
        for key, numbers in self.approval.rules:
            unit_of_work.rules.add(key.stored(numbers))


def approving(unit_of_work: UnitOfWork, actor: Actor, stored: StoredVersion, found: Findings) -> Approving:
    """Compute what is stored when a version comes into force. Raises Conflict or InvalidRequest."""
    approval = approval_of(unit_of_work, stored, found)
    changes = {
        "approved_by": actor.principal,
        "in_force_from": unit_of_work.now(PLANT_CHAIN),
        "evaluation": approval.evaluation,
        "lapses_at": approval.lapses_at,
    }
    before = unit_of_work.versions.in_force(stored.kind, stored.code)
    return Approving(stored, before, approval, changes)


def _standing(
    unit_of_work: UnitOfWork, kind: str, code: str, version: int, state: str
) -> list[StoredVersion]:
    """Give the version, if it is in this state: else there is nothing to be found before it is refused."""
    stored = unit_of_work.versions.get(kind, code, version)
    return [] if stored is None or stored.state != state else [stored]


def approval_of(unit_of_work: UnitOfWork, stored: StoredVersion, found: Findings) -> Approval:
    """Compute what an approval would store, with what the helper process found for a budget before.

    Raises Conflict or InvalidRequest; Unavailable if nothing was found for the budget as it stands now.
    """
    kind = KINDS[stored.kind]
    document = load(kind.document_class, stored.document)
    kind.check(unit_of_work, document)
    return kind.approval(unit_of_work, stored, document, found)


def authors_of(unit_of_work: UnitOfWork, actor: Actor, stored: StoredVersion) -> frozenset[str]:
    """Say who worked on a version; ``actor`` too, if only earlier than those whom the version names."""
    named = {stored.drafted_by, stored.submitted_by or stored.drafted_by}
    acts = [f"{stored.kind}-{what}" for what in ("drafted", "redrafted", "submitted")]
    if stored.kind == "budget":
        acts.append(RENEWED)
    for entry in unit_of_work.ledger.of_actor(PLANT_CHAIN, actor.principal, acts):
        for part in entry.content.get("versions", (entry.content,)):
            version = part["version"]
            if (version["code"], version["version"]) == (stored.code, stored.version):
                named.add(actor.principal)
    return frozenset(named)
