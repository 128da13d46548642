"""The life of a version: draft, submitted, in force, superseded, withdrawn; one for every kind.

What differs between the kinds (what a draft must meet, what is computed and stored at approval) is given by a
VersionedKind; see specifications.py, budgets.py and plant.py.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from typing import Any, Final

from service.access import require, require_another, require_person
from service.documents import Actor, SignedAct
from service.errors import Conflict, NotFound, PreconditionRequired, StaleVersion
from service.ledger import Entry
from service.schemas import dump, load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows import budgets, plant, specifications
from service.workflows.accounts import verify_signature
from service.workflows.paging import page_of, start_after
from service.workflows.recording import PLANT_CHAIN, Page, Request, entry_reference, record
from service.workflows.services import Services
from service.workflows.versioned_kind import Approval, VersionedKind

KINDS: Final[Mapping[str, VersionedKind]] = {
    kind.name: kind for kind in (budgets.BUDGET, specifications.SPECIFICATION, plant.PLANT)
}

Answer = dict[str, Any]


# --- drafting ------------------------------------------------------------------------------------------


def create(
    services: Services, actor: Actor, kind: str, document: Any, request: Request
) -> tuple[Answer, bool]:
    """Draft version 1 of a new code; gives the answer and whether it had been recorded earlier.

    Raises
    ------
    Conflict
        The code is taken.
    InvalidRequest
        The document names what does not exist or cannot be computed.
    """
    require(actor, "draft a version")

    def perform(unit_of_work: UnitOfWork) -> Entry:
        if unit_of_work.versions.next_number(kind, document.code) > 1:
            raise Conflict(
                "already-exists",
                f"There is a {kind} {document.code!r} already; draft a further version of it.",
                link=f"/v1/{kind}s/{document.code}",
            )
        return _draft(unit_of_work, actor, KINDS[kind], document.code, document)

    return _recorded(services, actor, request, perform)


def add_version(
    services: Services, actor: Actor, kind: str, code: str, document: Any, request: Request
) -> tuple[Answer, bool]:
    """Draft the next version of a code. Raises NotFound, Conflict or InvalidRequest."""
    require(actor, "draft a version")
    kind_of = KINDS[kind]
    kind_of.check_code(document, code)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        if unit_of_work.versions.next_number(kind, code) == 1 and not kind_of.singleton:
            raise NotFound(f"There is no {kind} {code!r}.")
        return _draft(unit_of_work, actor, kind_of, code, document)

    return _recorded(services, actor, request, perform)


def _draft(unit_of_work: UnitOfWork, actor: Actor, kind: VersionedKind, code: str, document: Any) -> Entry:
    open_version = unit_of_work.versions.open(kind.name, code)
    if open_version is not None:
        raise Conflict(
            "open-version-exists",
            f"Version {open_version.version} of {code!r} is still {open_version.state}; "
            "replace, return or withdraw it first.",
        )
    kind.check(unit_of_work, document)
    product, characteristic = kind.subject(document)
    draft = StoredVersion(
        kind=kind.name,
        code=code,
        version=unit_of_work.versions.next_number(kind.name, code),
        state="draft",
        revision=1,
        product=product,
        characteristic=characteristic,
        document=dump(document),
        evaluation=None,
        lapses_at=None,
        drafted_by=actor.principal,
        submitted_by=None,
        approved_by=None,
        in_force_from=None,
        chain=PLANT_CHAIN,
        sequence=0,  # known once the entry is there
    )
    entry = _append(unit_of_work, actor, draft, "drafted")
    unit_of_work.versions.insert(
        draft.kind,
        draft.code,
        draft.version,
        draft.document,
        entry,
        drafted_by=draft.drafted_by,
        product=product,
        characteristic=characteristic,
    )
    if draft.version == 1:
        unit_of_work.bump_revision()  # a decision may name the new code from now on
    return entry


def replace(
    services: Services,
    actor: Actor,
    kind: str,
    code: str,
    version: int,
    document: Any,
    *,
    if_match: int | None,
    request: Request,
) -> tuple[Answer, bool]:
    """Replace a draft; the same document again is answered with what stands.

    Raises
    ------
    PreconditionRequired, StaleVersion
        If-Match is missing, or names another revision.
    Conflict
        The version is no draft any more.
    """
    require(actor, "draft a version")
    kind_of = KINDS[kind]
    kind_of.check_code(document, code)
    content = dump(document)
    with services.database.reading() as unit_of_work:
        stored = _stored(unit_of_work, kind, code, version)
        if stored.state == "draft" and stored.document == content:
            return answer_of(stored), False
    if if_match is None:
        raise PreconditionRequired("Replacing a draft needs If-Match with the ETag that was read.")

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = _in_state(unit_of_work, kind, code, version, "draft", act="replaced")
        _check_revision(stored, if_match)
        kind_of.check(unit_of_work, document)
        product, characteristic = kind_of.subject(document)
        changes = {"product": product, "characteristic": characteristic, "drafted_by": actor.principal}
        changed = _changed(stored, document=content, **changes)
        entry = _append(unit_of_work, actor, changed, "redrafted")
        unit_of_work.versions.revise(stored, content, entry, **changes)
        return entry

    return _recorded(services, actor, request, perform)


# --- submission and approval ---------------------------------------------------------------------------


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

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = _in_state(unit_of_work, kind, code, version, "draft", act="submitted", if_match=if_match)
        _approval(unit_of_work, stored)
        return _move(unit_of_work, actor, stored, "submitted", "submitted", submitted_by=actor.principal)

    return _recorded(services, actor, request, perform)


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

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = _in_state(unit_of_work, kind, code, version, "submitted", act="approved", if_match=if_match)
        require_another(actor, _authors(unit_of_work, actor, stored))
        approval = _approval(unit_of_work, stored)
        before = unit_of_work.versions.in_force(kind, code)
        changes = {
            "approved_by": actor.principal,
            "in_force_from": unit_of_work.now(PLANT_CHAIN),
            "evaluation": approval.evaluation,
            "lapses_at": approval.lapses_at,
        }
        entry = _append(
            unit_of_work,
            actor,
            _changed(stored, state="in_force", **changes),
            "approved",
            reason=signed.reason,
            supersedes=None if before is None else before.version,
            release_rules=approval.rules_document(),
        )
        if before is not None:
            unit_of_work.versions.set_state(before, "superseded", entry)
        unit_of_work.versions.set_state(stored, "in_force", entry, **changes)
        for key, numbers in approval.rules:
            unit_of_work.rules.add(key.stored(numbers))
        unit_of_work.bump_revision()
        return entry

    return _recorded(services, actor, request, perform)


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
        stored = _in_state(unit_of_work, kind, code, version, "submitted", act="returned", if_match=if_match)
        return _move(
            unit_of_work, actor, stored, "draft", "returned", reason=signed.reason, submitted_by=None
        )

    return _recorded(services, actor, request, perform)


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
        stored = _stored(unit_of_work, kind, code, version)
        _check_revision(stored, if_match)
        if stored.state == "in_force":
            require(actor, "withdraw a version in force")
            unit_of_work.bump_revision()
        elif stored.state not in {"draft", "submitted"}:
            raise _wrong_state(stored, "withdrawn", "draft, submitted or in force")
        return _move(unit_of_work, actor, stored, "withdrawn", "withdrawn", reason=signed.reason)

    return _recorded(services, actor, request, perform)


# --- reading -------------------------------------------------------------------------------------------


def get(services: Services, actor: Actor, kind: str, code: str, version: int) -> Answer:
    """Read one version. Raises NotFound."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        return answer_of(_stored(unit_of_work, kind, code, version))


def listing(
    services: Services,
    actor: Actor,
    kind: str,
    code: str | None = None,
    *,
    state: str | None = None,
    limit: int = 50,
    cursor: str | None = None,
) -> Page:
    """List versions, newest first: of one code, or of all. Raises NotFound for a code without any."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        if (
            code is not None
            and unit_of_work.versions.next_number(kind, code) == 1
            and not KINDS[kind].singleton
        ):
            raise NotFound(f"There is no {kind} {code!r}.")
        before = start_after(
            cursor,
            lambda text: _find(unit_of_work, kind, text),
            lambda last: (last.sequence, last.code, last.version),
        )
        found = unit_of_work.versions.list(kind, code=code, state=state, limit=limit + 1, before=before)
    return page_of(found, limit, answer_of, lambda stored: f"{stored.code}.{stored.version}")


def evaluation(services: Services, actor: Actor, code: str, version: int) -> Answer:
    """Give the figures of a budget version, stored at approval or as of now. Raises NotFound."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        stored = _stored(unit_of_work, "budget", code, version)
        return budgets.figures(unit_of_work, stored)


# --- shared steps --------------------------------------------------------------------------------------


def answer_of(stored: StoredVersion) -> Answer:
    """Write a version as callers see it; the same from a stored row and from an entry."""
    return {
        "code": stored.code,
        "version": stored.version,
        "state": stored.state,
        "revision": stored.revision,
        "document": stored.document,
        "drafted_by": stored.drafted_by,
        "submitted_by": stored.submitted_by,
        "approved_by": stored.approved_by,
        "in_force_from": stored.in_force_from,
        "lapses_at": stored.lapses_at,
    }


def _changed(stored: StoredVersion, **changes: Any) -> StoredVersion:
    return dataclasses.replace(stored, revision=stored.revision + 1, **changes)


def _append(
    unit_of_work: UnitOfWork, actor: Actor, version: StoredVersion, what: str, **particulars: Any
) -> Entry:
    """Record what becomes of a version; the entry alone suffices to rebuild the answer."""
    content = {"version": answer_of(version), "evaluation": version.evaluation, **particulars}
    return unit_of_work.append(PLANT_CHAIN, f"{version.kind}-{what}", actor.principal, content)


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
    changed = _changed(stored, state=state, **changes)
    entry = _append(unit_of_work, actor, changed, what, reason=reason)
    unit_of_work.versions.set_state(stored, state, entry, **changes)
    return entry


def _recorded(
    services: Services, actor: Actor, request: Request, perform: Callable[[UnitOfWork], Entry]
) -> tuple[Answer, bool]:
    recorded = record(services, actor, request, {PLANT_CHAIN}, perform)
    entry = recorded.entry
    return {**entry.content["version"], "entry": entry_reference(entry)}, recorded.earlier


def _approval(unit_of_work: UnitOfWork, stored: StoredVersion) -> Approval:
    kind = KINDS[stored.kind]
    document = load(kind.document_class, stored.document)
    kind.check(unit_of_work, document)
    return kind.approval(unit_of_work, stored, document)


def _find(unit_of_work: UnitOfWork, kind: str, cursor: str) -> StoredVersion | None:
    code, _, version = cursor.rpartition(".")
    if not (version.isascii() and version.isdigit() and len(version) < 10):
        return None
    return unit_of_work.versions.get(kind, code, int(version))


def _stored(unit_of_work: UnitOfWork, kind: str, code: str, version: int) -> StoredVersion:
    stored = unit_of_work.versions.get(kind, code, version)
    if stored is None:
        raise NotFound(f"There is no version {version} of a {kind} {code!r}.")
    return stored


def _in_state(
    unit_of_work: UnitOfWork,
    kind: str,
    code: str,
    version: int,
    state: str,
    *,
    act: str,
    if_match: int | None = None,
) -> StoredVersion:
    stored = _stored(unit_of_work, kind, code, version)
    if stored.state != state:
        raise _wrong_state(stored, act, state)
    _check_revision(stored, if_match)
    return stored


def _check_revision(stored: StoredVersion, if_match: int | None) -> None:
    if if_match is not None and stored.revision != if_match:
        raise StaleVersion(
            f"The version stands at revision {stored.revision}, not {if_match}; read it again."
        )


def _authors(unit_of_work: UnitOfWork, actor: Actor, stored: StoredVersion) -> frozenset[str]:
    """Say who worked on a version; ``actor`` too, if only earlier than those whom the version names."""
    named = {stored.drafted_by, stored.submitted_by or stored.drafted_by}
    acts = tuple(f"{stored.kind}-{what}" for what in ("drafted", "redrafted", "submitted"))
    for entry in unit_of_work.ledger.of_actor(PLANT_CHAIN, actor.principal, acts):
        version = entry.content["version"]
        if (version["code"], version["version"]) == (stored.code, stored.version):
            named.add(actor.principal)
    return frozenset(named)


def _wrong_state(stored: StoredVersion, act: str, needed: str) -> Conflict:
    return Conflict(
        "not-in-this-state",
        f"Version {stored.version} of {stored.code!r} is {stored.state.replace('_', ' ')}; "
        f"only one that is {needed} can be {act}.",
    )
