"""Versions drafted, replaced and read; one for every kind. approvals.py has what becomes of a draft.

What differs between the kinds (what a draft must meet) is given by a VersionedKind; see specifications.py,
budgets.py and plant.py.
"""

from __future__ import annotations

from typing import Any

from service.access import require
from service.documents import Actor
from service.errors import Conflict, NotFound, PreconditionRequired
from service.ledger import Entry
from service.schemas import dump
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import FaultCollector
from service.workflows.paging import page_of, start_after
from service.workflows.recording import PLANT_CHAIN, Page, Request, was_recorded
from service.workflows.services import Services
from service.workflows.version_steps import (
    KINDS,
    Answer,
    answer_of,
    append_version,
    changed_version,
    check_revision,
    in_state,
    recorded,
    version_of,
)
from service.workflows.versioned_kind import VersionedKind

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

    return recorded(services, actor, request, perform)


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

    return recorded(services, actor, request, perform)


def _draft(unit_of_work: UnitOfWork, actor: Actor, kind: VersionedKind, code: str, document: Any) -> Entry:
    open_version = unit_of_work.versions.open(kind.name, code)
    if open_version is not None:
        raise Conflict(
            "open-version-exists",
            f"Version {open_version.version} of {code!r} is still {open_version.state}; "
            "replace, return or withdraw it first.",
        )
    number = unit_of_work.versions.next_number(kind.name, code)
    _check_subject_is_kept(unit_of_work, kind, code, number, document)
    kind.check(unit_of_work, document)
    product, characteristic = kind.subject(document)
    draft = StoredVersion(
        kind=kind.name,
        code=code,
        version=number,
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
    entry = append_version(unit_of_work, actor, draft, "drafted")
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


def _check_subject_is_kept(
    unit_of_work: UnitOfWork, kind: VersionedKind, code: str, version: int, document: Any
) -> None:
    """Refuse a further version about something else than the first: it would take that one out of force."""
    first = unit_of_work.versions.get(kind.name, code, 1)
    if first is None or version == 1:
        return
    collector = FaultCollector()
    kept = {"product": first.product, "characteristic": first.characteristic}
    for (member, before), now in zip(kept.items(), kind.subject(document), strict=True):
        if now != before:
            detail = f"{code!r} is a {kind.name} of the {member} {before!r}"
            collector.add(f"#/{member}", detail, f"{before!r}; for another one draft a new code")
    collector.finish("The versions of a code are about one thing.")


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
    InvalidRequest
        The document cannot be a version of this code, or the key was used for another request.
    """
    require(actor, "draft a version")
    kind_of = KINDS[kind]
    kind_of.check_code(document, code)
    content = dump(document)
    with services.database.reading() as unit_of_work:
        stored = version_of(unit_of_work, kind, code, version)
        repeated = was_recorded(unit_of_work, actor, request)
    if not repeated and stored.state == "draft" and stored.document == content:
        return answer_of(stored), False
    if not repeated and if_match is None:
        raise PreconditionRequired("Replacing a draft needs If-Match with the ETag that was read.")

    def perform(unit_of_work: UnitOfWork) -> Entry:
        stored = in_state(unit_of_work, kind, code, version, "draft", act="replaced")
        check_revision(stored, if_match)
        _check_subject_is_kept(unit_of_work, kind_of, code, version, document)
        kind_of.check(unit_of_work, document)
        product, characteristic = kind_of.subject(document)
        changes = {"product": product, "characteristic": characteristic, "drafted_by": actor.principal}
        changed = changed_version(stored, document=content, **changes)
        entry = append_version(unit_of_work, actor, changed, "redrafted")
        unit_of_work.versions.revise(stored, content, entry, **changes)
        return entry

    return recorded(services, actor, request, perform)


# --- reading -------------------------------------------------------------------------------------------


def get(services: Services, actor: Actor, kind: str, code: str, version: int) -> Answer:
    """Read one version. Raises NotFound."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        return answer_of(version_of(unit_of_work, kind, code, version))


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


def _find(unit_of_work: UnitOfWork, kind: str, cursor: str) -> StoredVersion | None:
    code, _, version = cursor.rpartition(".")
    if not (version.isascii() and version.isdigit() and len(version) < 10):
        return None
    return unit_of_work.versions.get(kind, code, int(version))
