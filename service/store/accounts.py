"""Repositories of people and tokens. Accounts appear in the record by code only."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, replace
from typing import Any

from sqlalchemy import Row, Table, bindparam, select, update

from service.errors import NotFound
from service.ledger import Entry
from service.store.rows import StoredPerson, StoredToken, read_roles, write_roles
from service.store.session import Session
from service.store.tables import people, tokens


def _person(row: Row[Any]) -> StoredPerson:
    return StoredPerson(**{**row._mapping, "roles": read_roles(row.roles)})


def _token(row: Row[Any]) -> StoredToken:
    return StoredToken(**{**row._mapping, "roles": read_roles(row.roles)})


def _save(session: Session, table: Table, stored: StoredPerson | StoredToken) -> None:
    values = {**asdict(stored), "roles": write_roles(stored.roles)}
    if session.write(update(table).where(table.c.code == stored.code).values(**values)) != 1:
        raise NotFound(f"{stored.code} is not known")


class People:
    """People by code."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def get(self, code: str) -> StoredPerson | None:
        """Return a person, also a disabled one."""
        row = self._session.row(select(people).where(people.c.code == code))
        return None if row is None else _person(row)

    def list(self) -> list[StoredPerson]:
        """Return all people by code."""
        return [_person(row) for row in self._session.rows(select(people).order_by(people.c.code))]

    def add(
        self, code: str, *, name: str, roles: Sequence[str], password_hash: str, entry: Entry
    ) -> StoredPerson:
        """Keep a new person."""
        stored = StoredPerson(code, name, tuple(roles), password_hash, None, entry.chain, entry.sequence)
        self._session.write(people.insert().values(**{**asdict(stored), "roles": write_roles(stored.roles)}))
        return stored

    def change(self, stored: StoredPerson, entry: Entry, **changes: Any) -> StoredPerson:
        """Replace columns of a person, as ``password_hash``, ``roles`` or ``disabled_at``."""
        changed = replace(stored, chain=entry.chain, sequence=entry.sequence, **changes)
        _save(self._session, people, changed)
        return changed


# Built once: every request looks its token up.
_BY_DIGEST = select(tokens).where(tokens.c.digest == bindparam("digest"))


class Tokens:
    """Bearer tokens by code, and by the SHA-256 of their secret."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def get(self, code: str) -> StoredToken | None:
        """Return a token, also a revoked one."""
        row = self._session.row(select(tokens).where(tokens.c.code == code))
        return None if row is None else _token(row)

    def find_digest(self, digest: str) -> StoredToken | None:
        """Return the token whose secret has this SHA-256 (hex), also a revoked one."""
        row = self._session.row(_BY_DIGEST, digest=digest)
        return None if row is None else _token(row)

    def list(self) -> list[StoredToken]:
        """Return all tokens by code."""
        return [_token(row) for row in self._session.rows(select(tokens).order_by(tokens.c.code))]

    def add(
        self,
        code: str,
        *,
        principal: str,
        roles: Sequence[str],
        digest: str,
        entry: Entry,
        person: str | None = None,
    ) -> StoredToken:
        """Keep a new token."""
        stored = StoredToken(
            code=code,
            principal=principal,
            person=person,
            roles=tuple(roles),
            digest=digest,
            created_at=entry.recorded_at,
            revoked_at=None,
            chain=entry.chain,
            sequence=entry.sequence,
        )
        self._session.write(tokens.insert().values(**{**asdict(stored), "roles": write_roles(stored.roles)}))
        return stored

    def revoke(self, stored: StoredToken, entry: Entry) -> StoredToken:
        """Mark a token as revoked from this act on."""
        changed = replace(stored, revoked_at=entry.recorded_at, chain=entry.chain, sequence=entry.sequence)
        _save(self._session, tokens, changed)
        return changed
