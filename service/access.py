"""Who may do what, and the rule that nobody approves their own work. Pure; no storage, no HTTP."""

from __future__ import annotations

from typing import Final

from service.documents import Actor
from service.errors import Forbidden

ROLES: Final = ("line", "engineer", "approver", "auditor", "administrator")

_EVERYONE: Final = frozenset(ROLES)

PERMISSIONS: Final[dict[str, frozenset[str]]] = {
    "read": _EVERYONE,
    "judge a lot": frozenset({"line"}),
    "preview a decision": frozenset({"line", "engineer"}),
    "change master data": frozenset({"engineer"}),
    "record a study": frozenset({"engineer"}),
    "draft a version": frozenset({"engineer"}),
    "submit a version": frozenset({"engineer"}),
    "approve a version": frozenset({"approver"}),
    "return a version": frozenset({"approver"}),
    "withdraw an open version": frozenset({"engineer", "approver"}),
    "extend a study": frozenset({"approver"}),
    "withdraw a version in force": frozenset({"approver"}),
    "verify the record": frozenset({"engineer", "approver", "auditor", "administrator"}),
}


def require(actor: Actor, act: str) -> None:
    """Refuse ``act`` to an actor without one of its roles. Raises Forbidden."""
    allowed = PERMISSIONS[act]
    if not actor.roles & allowed:
        raise Forbidden(
            f"{actor.principal} may not {act}: that needs the role {' or '.join(sorted(allowed))}."
        )


def require_person(actor: Actor, act: str) -> str:
    """Give the account code of the person who acts. Raises Forbidden for a machine's token."""
    if actor.person is None:
        raise Forbidden(f"To {act} takes a person's signature; {actor.principal} is a machine's token.")
    return actor.person


def require_another(actor: Actor, authors: frozenset[str]) -> None:
    """Refuse an approval by one who drafted or submitted the version. Raises Forbidden."""
    if actor.principal in authors:
        raise Forbidden(f"{actor.principal} worked on this version; another person has to approve it.")
