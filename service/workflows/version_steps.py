"""What every act on a version has in common: it is found, checked, recorded, and answered from its entry."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping
from typing import Any, Final

from service.documents import Actor
from service.errors import Conflict, NotFound, StaleVersion
from service.ledger import Entry
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows import budgets, plant, specifications
from service.workflows.recording import PLANT_CHAIN, Request, entry_reference, record
from service.workflows.services import Services
from service.workflows.versioned_kind import VersionedKind

KINDS: Final[Mapping[str, VersionedKind]] = {
    kind.name: kind for kind in (budgets.BUDGET, specifications.SPECIFICATION, plant.PLANT)
}

Answer = dict[str, Any]


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


def changed_version(stored: StoredVersion, **changes: Any) -> StoredVersion:
    """Give a version as the act at hand leaves it, one revision later."""
    return dataclasses.replace(stored, revision=stored.revision + 1, **changes)


def append_version(
    unit_of_work: UnitOfWork, actor: Actor, version: StoredVersion, what: str, **particulars: Any
) -> Entry:
    """Record what becomes of a version; the entry alone suffices to rebuild the answer."""
    content = {"version": answer_of(version), "evaluation": version.evaluation, **particulars}
    return unit_of_work.append(PLANT_CHAIN, f"{version.kind}-{what}", actor.principal, content)


def recorded(
    services: Services, actor: Actor, request: Request, perform: Callable[[UnitOfWork], Entry]
) -> tuple[Answer, bool]:
    """Have an act on a version recorded; gives the answer and whether it had been recorded earlier."""
    act = record(services, actor, request, {PLANT_CHAIN}, perform)
    return {**act.entry.content["version"], "entry": entry_reference(act.entry)}, act.earlier


def version_of(unit_of_work: UnitOfWork, kind: str, code: str, version: int) -> StoredVersion:
    """Find a version. Raises NotFound."""
    stored = unit_of_work.versions.get(kind, code, version)
    if stored is None:
        raise NotFound(f"There is no version {version} of a {kind} {code!r}.")
    return stored


def in_state(
    unit_of_work: UnitOfWork,
    kind: str,
    code: str,
    version: int,
    state: str,
    *,
    act: str,
    if_match: int | None = None,
) -> StoredVersion:
    """Find a version that has to be in a state for ``act``. Raises NotFound, Conflict or StaleVersion."""
    stored = version_of(unit_of_work, kind, code, version)
    if stored.state != state:
        raise wrong_state(stored, act, state)
    check_revision(stored, if_match)
    return stored


def check_revision(stored: StoredVersion, if_match: int | None) -> None:
    """Refuse to act on another revision than the caller has read. Raises StaleVersion."""
    if if_match is not None and stored.revision != if_match:
        raise StaleVersion(
            f"The version stands at revision {stored.revision}, not {if_match}; read it again."
        )


def wrong_state(stored: StoredVersion, act: str, needed: str) -> Conflict:
    """Say that a version is in no state for ``act``."""
    return Conflict(
        "not-in-this-state",
        f"Version {stored.version} of {stored.code!r} is {stored.state.replace('_', ' ')}; "
        f"only one that is {needed} can be {act}.",
    )
