"""What the repositories hand out and take: frozen rows, with documents already read."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from service.ledger import Entry

Document = Mapping[str, Any]
ReadingIdentity = tuple[str, str, str]
"""(analyzer, taken_at to the millisecond or measurement, sample)."""


def write_document(document: Document) -> str:
    """Return the JSON text of a document."""
    return json.dumps(document, ensure_ascii=False, allow_nan=False, separators=(",", ":"))


def read_document(text: str) -> dict[str, Any]:
    """Read a document back from its JSON text."""
    document: dict[str, Any] = json.loads(text)
    return document


def write_roles(roles: tuple[str, ...]) -> str:
    """Return roles as words of one text."""
    return " ".join(roles)


def read_roles(text: str) -> tuple[str, ...]:
    """Read roles back from their text."""
    return tuple(text.split())


@dataclass(frozen=True)
class StoredKey:
    """An idempotency key that was used, with the entry it stands for."""

    fingerprint: str
    chain: str
    sequence: int


@dataclass(frozen=True)
class StoredDocument:
    """A master document as it stands; ``revision`` counts its replacements from 1."""

    kind: str
    key: str
    revision: int
    document: dict[str, Any]
    chain: str
    sequence: int


@dataclass(frozen=True)
class StoredVersion:
    """A version of a budget, a specification or the plant document."""

    kind: str
    code: str
    version: int
    state: str
    revision: int
    product: str | None
    characteristic: str | None
    document: dict[str, Any]
    evaluation: dict[str, Any] | None
    lapses_at: str | None
    drafted_by: str
    submitted_by: str | None
    approved_by: str | None
    in_force_from: str | None
    chain: str
    sequence: int


@dataclass(frozen=True)
class StoredRule:
    """The numbers of a compiled release rule for one pair of versions and one way of measuring."""

    specification: str
    specification_version: int
    characteristic: str
    budget: str
    budget_version: int
    counts: str
    numbers: dict[str, Any]


@dataclass(frozen=True)
class StoredStudy:
    """A study with its evaluation."""

    code: str
    product: str
    characteristic: str
    design: str
    document: dict[str, Any]
    evaluation: dict[str, Any]
    chain: str
    sequence: int


@dataclass(frozen=True)
class StoredExtension:
    """What was said of a study when it was let serve longer."""

    study: str
    document: dict[str, Any]
    chain: str
    sequence: int


@dataclass(frozen=True)
class StoredDecision:
    """A decision's look-up columns and the entry that says it in full."""

    chain: str
    sequence: int
    product: str
    lot: str
    round: int
    outcome: str
    recorded_at: str
    entry: Entry

    @property
    def identity(self) -> str:
        """The decision's id, as in ``tower-1.18233``."""
        return f"{self.chain}.{self.sequence}"


@dataclass(frozen=True)
class StoredLot:
    """Where a lot stands, with the entry of its last decision."""

    product: str
    lot: str
    line: str
    outcome: str
    rounds: int
    chain: str
    sequence: int
    recorded_at: str


@dataclass(frozen=True)
class StoredReading:
    """A reading that was judged, with the entry that used it.

    ``taken_at`` is None where the identity is the instant itself, or was stored before there was a column.
    """

    analyzer: str
    identity: str
    sample: str
    chain: str
    sequence: int
    taken_at: str | None = None


@dataclass(frozen=True)
class StoredPerson:
    """A person who may sign in and sign."""

    code: str
    name: str
    roles: tuple[str, ...]
    password_hash: str
    disabled_at: str | None
    chain: str
    sequence: int


@dataclass(frozen=True)
class StoredToken:
    """A bearer token; only the SHA-256 of its secret is kept."""

    code: str
    principal: str
    person: str | None
    roles: tuple[str, ...]
    digest: str
    created_at: str
    revoked_at: str | None
    chain: str
    sequence: int
