"""Repositories of budget, specification and plant versions, and of the rules compiled from them."""

from __future__ import annotations

from dataclasses import asdict, replace
from typing import Any

from sqlalchemy import Row, func, select, tuple_, update

from service.errors import Conflict, StaleVersion
from service.ledger import Entry
from service.store.rows import Document, StoredRule, StoredVersion, read_document, write_document
from service.store.session import Session
from service.store.tables import release_rules, versions

OPEN_STATES = ("draft", "submitted")


def _stored(row: Row[Any]) -> StoredVersion:
    values = dict(row._mapping)
    values["document"] = read_document(row.document)
    values["evaluation"] = None if row.evaluation is None else read_document(row.evaluation)
    return StoredVersion(**values)


def _values(version: StoredVersion) -> dict[str, Any]:
    values = asdict(version)
    values["document"] = write_document(version.document)
    values["evaluation"] = None if version.evaluation is None else write_document(version.evaluation)
    return values


class Versions:
    """Versions by kind, code and number."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def get(self, kind: str, code: str, version: int) -> StoredVersion | None:
        """Return one version."""
        return self._first(kind, code, versions.c.version == version)

    def in_force(self, kind: str, code: str) -> StoredVersion | None:
        """Return the version in force."""
        return self._first(kind, code, versions.c.state == "in_force")

    def open(self, kind: str, code: str) -> StoredVersion | None:
        """Return the version that is being worked on: a draft or a submitted one."""
        return self._first(kind, code, versions.c.state.in_(OPEN_STATES))

    def next_number(self, kind: str, code: str) -> int:
        """Return the number that the next version of a code takes."""
        query = select(func.coalesce(func.max(versions.c.version), 0) + 1)
        row = self._session.row(query.where(versions.c.kind == kind, versions.c.code == code))
        return 1 if row is None else int(row[0])

    def all(self, kind: str) -> list[StoredVersion]:
        """Return all versions of a kind, whatever their state."""
        query = select(versions).where(versions.c.kind == kind)
        rows = self._session.rows(query.order_by(versions.c.code, versions.c.version))
        return [_stored(row) for row in rows]

    def all_in_force(self, kind: str | None = None) -> list[StoredVersion]:
        """Return everything in force, by kind and code."""
        query = select(versions).where(versions.c.state == "in_force")
        if kind is not None:
            query = query.where(versions.c.kind == kind)
        return [_stored(row) for row in self._session.rows(query.order_by(versions.c.kind, versions.c.code))]

    def products(self, kind: str) -> dict[str, str]:
        """Return every code of a kind, whatever the state of its versions, with the product it is for."""
        query = select(versions.c.code, func.max(versions.c.product).label("product")).where(
            versions.c.kind == kind, versions.c.product.is_not(None)
        )
        return {row.code: row.product for row in self._session.rows(query.group_by(versions.c.code))}

    def list(
        self,
        kind: str,
        *,
        code: str | None = None,
        state: str | None = None,
        product: str | None = None,
        characteristic: str | None = None,
        limit: int = 500,
        before: tuple[int, str, int] | None = None,
    ) -> list[StoredVersion]:
        """Return versions, last changed first; ``before`` is (sequence, code, version) of a page's last."""
        wanted = {"code": code, "state": state, "product": product, "characteristic": characteristic}
        query = select(versions).where(versions.c.kind == kind)
        for name, value in wanted.items():
            if value is not None:
                query = query.where(versions.c[name] == value)
        order = (versions.c.sequence, versions.c.code, versions.c.version)
        if before is not None:
            query = query.where(tuple_(*order) < before)
        query = query.order_by(*(column.desc() for column in order)).limit(limit)
        return [_stored(row) for row in self._session.rows(query)]

    def insert(
        self,
        kind: str,
        code: str,
        version: int,
        document: Document,
        entry: Entry,
        *,
        drafted_by: str,
        product: str | None = None,
        characteristic: str | None = None,
    ) -> StoredVersion:
        """Keep a new draft; at most one version of a code is open."""
        if self.open(kind, code) is not None:
            raise Conflict("open-version-exists", f"{kind} {code} has an open version already")
        stored = StoredVersion(
            kind=kind,
            code=code,
            version=version,
            state="draft",
            revision=1,
            product=product,
            characteristic=characteristic,
            document=dict(document),
            evaluation=None,
            lapses_at=None,
            drafted_by=drafted_by,
            submitted_by=None,
            approved_by=None,
            in_force_from=None,
            chain=entry.chain,
            sequence=entry.sequence,
        )
        self._session.write(versions.insert().values(**_values(stored)))
        return stored

    def insert_in_force(self, version: StoredVersion, entry: Entry) -> None:
        """Keep a version that comes into force by the act that makes it; none of its code may be in force."""
        made = replace(version, state="in_force", chain=entry.chain, sequence=entry.sequence)
        self._session.write(versions.insert().values(**_values(made)))

    def revise(
        self, stored: StoredVersion, document: Document, entry: Entry, **changes: Any
    ) -> StoredVersion:
        """Replace the document of a draft; ``changes`` are further columns, as product or drafted_by."""
        if stored.state != "draft":
            raise Conflict(
                "not-in-this-state", f"version {stored.version} of {stored.code} is {stored.state}"
            )
        return self._save(stored, replace(stored, document=dict(document), **changes), entry)

    def set_state(self, stored: StoredVersion, state: str, entry: Entry, **changes: Any) -> StoredVersion:
        """Move a version to another state; ``changes`` are further columns, never the document."""
        if "document" in changes:
            raise ValueError("a change of state leaves the document as it is")
        return self._save(stored, replace(stored, state=state, **changes), entry)

    def _save(self, stored: StoredVersion, changed: StoredVersion, entry: Entry) -> StoredVersion:
        changed = replace(changed, revision=stored.revision + 1, chain=entry.chain, sequence=entry.sequence)
        statement = update(versions).where(
            versions.c.kind == stored.kind,
            versions.c.code == stored.code,
            versions.c.version == stored.version,
            versions.c.revision == stored.revision,
        )
        if self._session.write(statement.values(**_values(changed))) != 1:
            raise StaleVersion(f"version {stored.version} of {stored.code} was changed meanwhile")
        return changed

    def _first(self, kind: str, code: str, condition: Any) -> StoredVersion | None:
        query = select(versions).where(versions.c.kind == kind, versions.c.code == code, condition)
        row = self._session.row(query)
        return None if row is None else _stored(row)


def _rule(row: Row[Any]) -> StoredRule:
    return StoredRule(**{**row._mapping, "numbers": read_document(row.numbers)})


class Rules:
    """Compiled release rules; stored once at approval, never changed."""

    def __init__(self, session: Session) -> None:
        self._session = session

    def add(self, rule: StoredRule) -> None:
        """Keep a rule."""
        self._session.insert(release_rules, {**asdict(rule), "numbers": write_document(rule.numbers)})

    def get(
        self,
        specification: str,
        specification_version: int,
        characteristic: str,
        budget: str,
        budget_version: int,
        counts: str,
    ) -> StoredRule | None:
        """Return the rule of one pair of versions and one way of measuring."""
        found = self._where(
            release_rules.c.specification == specification,
            release_rules.c.specification_version == specification_version,
            release_rules.c.characteristic == characteristic,
            release_rules.c.budget == budget,
            release_rules.c.budget_version == budget_version,
            release_rules.c.counts == counts,
        )
        return found[0] if found else None

    def for_specification(self, specification: str, version: int) -> list[StoredRule]:
        """Return all rules of a specification version."""
        table = release_rules
        return self._where(table.c.specification == specification, table.c.specification_version == version)

    def for_budget(self, budget: str, version: int) -> list[StoredRule]:
        """Return all rules of a budget version."""
        return self._where(release_rules.c.budget == budget, release_rules.c.budget_version == version)

    def all(self) -> list[StoredRule]:
        """Return all rules, whether or not they are in force."""
        return self._where()

    def in_force(self) -> list[StoredRule]:
        """Return all rules whose specification version and budget version are both in force."""
        table, specification, budget = release_rules, versions.alias("s"), versions.alias("b")
        return self._where(
            specification.c.kind == "specification",
            specification.c.state == "in_force",
            specification.c.code == table.c.specification,
            specification.c.version == table.c.specification_version,
            budget.c.kind == "budget",
            budget.c.state == "in_force",
            budget.c.code == table.c.budget,
            budget.c.version == table.c.budget_version,
        )

    def _where(self, *conditions: Any) -> list[StoredRule]:
        table = release_rules
        query = select(table).where(*conditions).order_by(*table.primary_key.columns)
        return [_rule(row) for row in self._session.rows(query, table)]
