"""People and tokens: who is who, what they may do, and the signature that binds an act to a person.

Only hashes are kept: Argon2 of passwords, SHA-256 of tokens (which are random and long enough for it).
"""

from __future__ import annotations

import hashlib
import re
import secrets
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING, Any, Final

from service.access import ROLES
from service.documents import Actor, Signature
from service.errors import Conflict, Fault, Forbidden, InvalidRequest, NotFound, Unauthenticated
from service.ledger import Entry
from service.store.rows import StoredPerson, StoredToken
from service.store.unit_of_work import Database, UnitOfWork
from service.workflows.recording import PLANT_CHAIN
from service.workflows.services import Services

if TYPE_CHECKING:
    from argon2 import PasswordHasher

SHORTEST_PASSWORD: Final = 12
_CODE: Final = re.compile(r"[a-z0-9][a-z0-9-]{0,62}")
_TOKEN_PREFIX: Final = "shm_"
COMMAND_LINE: Final = "command-line"


@dataclass(frozen=True)
class NewToken:
    """A token as it is shown once: its code for the list, its secret for the machine."""

    code: str
    secret: str


def authenticate(services: Services, token: str) -> Actor:
    """Find who a bearer token belongs to. Raises Unauthenticated."""
    with services.database.reading() as unit_of_work:
        stored = unit_of_work.tokens.find_digest(_digest(token))
        if stored is None or stored.revoked_at is not None:
            raise Unauthenticated("This token is not known, or was revoked.")
        if stored.person is None:
            return Actor(stored.principal, frozenset(stored.roles))
        person = unit_of_work.people.get(stored.person)
    if person is None or person.disabled_at is not None:
        raise Unauthenticated("The person behind this token has no account any more.")
    return Actor(person.code, frozenset(person.roles), person=person.code)


def verify_signature(services: Services, person: str, signature: Signature) -> None:
    """Check that the person who acts knows the password of the account. Raises Forbidden."""
    from argon2.exceptions import Argon2Error, InvalidHashError

    with services.database.reading() as unit_of_work:
        stored = unit_of_work.people.get(person)
    if stored is None or stored.disabled_at is not None:
        raise Forbidden(f"{person} has no account.")
    try:
        _hasher().verify(stored.password_hash, signature.password)
    except (Argon2Error, InvalidHashError):
        raise Forbidden("The signature does not match: that is not the password of this account.") from None


def add_person(database: Database, code: str, name: str, roles: tuple[str, ...], password: str) -> None:
    """Open an account. Raises Conflict when the code is taken, InvalidRequest for unusable input."""
    _check_code(code)
    _check_roles(roles)
    if len(password) < SHORTEST_PASSWORD:
        raise InvalidRequest(f"The password needs at least {SHORTEST_PASSWORD} characters.")
    password_hash = _hasher().hash(password)
    with database.writing([PLANT_CHAIN]) as unit_of_work:
        if unit_of_work.people.get(code) is not None or _tokens_of(unit_of_work, code):
            raise Conflict("already-exists", f"The code {code!r} is taken.")
        entry = _append(unit_of_work, "person-added", {"code": code, "name": name, "roles": list(roles)})
        unit_of_work.people.add(code, name=name, roles=roles, password_hash=password_hash, entry=entry)
        unit_of_work.commit()


def list_people(database: Database) -> list[StoredPerson]:
    """List the accounts."""
    with database.reading() as unit_of_work:
        return list(unit_of_work.people.list())


def add_token(database: Database, principal: str, roles: tuple[str, ...]) -> NewToken:
    """Make a token for a machine with roles, or for a person, whose account gives the roles.

    Raises
    ------
    InvalidRequest
        Roles were given for a person, or none for a machine.
    """
    _check_code(principal)
    secret = _TOKEN_PREFIX + secrets.token_urlsafe(32)
    with database.writing([PLANT_CHAIN]) as unit_of_work:
        person = unit_of_work.people.get(principal)
        if person is not None and roles:
            raise InvalidRequest(f"{principal} is a person; the account's roles count. Leave --role out.")
        if person is None:
            _check_roles(roles)
        number = len(_tokens_of(unit_of_work, principal)) + 1
        code = f"{principal}.{number}"
        content = {"code": code, "principal": principal, "roles": list(roles), "person": person is not None}
        entry = _append(unit_of_work, "token-added", content)
        unit_of_work.tokens.add(
            code,
            principal=principal,
            roles=roles,
            digest=_digest(secret),
            entry=entry,
            person=None if person is None else principal,
        )
        unit_of_work.commit()
    return NewToken(code, secret)


def list_tokens(database: Database) -> list[StoredToken]:
    """List the tokens, without their secrets, which nobody has any more."""
    with database.reading() as unit_of_work:
        return list(unit_of_work.tokens.list())


def revoke_token(database: Database, code: str) -> None:
    """Make a token useless from the next request on. Raises NotFound or Conflict."""
    with database.writing([PLANT_CHAIN]) as unit_of_work:
        stored = unit_of_work.tokens.get(code)
        if stored is None:
            raise NotFound(f"There is no token {code!r}.")
        if stored.revoked_at is not None:
            raise Conflict("not-in-this-state", f"The token {code!r} was revoked at {stored.revoked_at}.")
        entry = _append(unit_of_work, "token-revoked", {"code": code})
        unit_of_work.tokens.revoke(stored, entry)
        unit_of_work.commit()


def _tokens_of(unit_of_work: UnitOfWork, principal: str) -> list[StoredToken]:
    return [token for token in unit_of_work.tokens.list() if token.principal == principal]


def _append(unit_of_work: UnitOfWork, kind: str, content: dict[str, Any]) -> Entry:
    return unit_of_work.append(PLANT_CHAIN, kind, COMMAND_LINE, content)


def _check_code(code: str) -> None:
    if _CODE.fullmatch(code) is None:
        raise InvalidRequest(f"{code!r} is not a code: small letters, digits and hyphens, at most 63.")
    if code == COMMAND_LINE:
        raise InvalidRequest(f"{code!r} names what is done by command in the record; take another code.")


def _check_roles(roles: tuple[str, ...]) -> None:
    unknown = [role for role in roles if role not in ROLES]
    if unknown or not roles:
        got = f"got {', '.join(unknown)}" if unknown else "none given"
        expected = f"one or more of {', '.join(ROLES)}"
        raise InvalidRequest(f"Roles: {got}; expected {expected}.", faults=(Fault(got, expected=expected),))


def _digest(secret: str) -> str:
    return hashlib.sha256(secret.encode()).hexdigest()


@cache
def _hasher() -> PasswordHasher:
    from argon2 import PasswordHasher

    return PasswordHasher()
