"""The tables. Migrations make them; a test holds the two together.

Tables named in ``APPEND_ONLY`` are the record: triggers refuse every change and removal of a row. All
others are projections of the record, kept for look-up.
"""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    CheckConstraint,
    Column,
    ForeignKeyConstraint,
    Index,
    LargeBinary,
    MetaData,
    Table,
    Text,
    UniqueConstraint,
    text,
)

metadata = MetaData(
    naming_convention={
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "fk": "fk_%(table_name)s_%(referred_table_name)s",
        "pk": "pk_%(table_name)s",
    }
)


def _required(name: str, *, key: bool = False) -> Column[str]:
    return Column(name, Text, primary_key=key, nullable=False)


def _number(name: str, *, key: bool = False) -> Column[int]:
    return Column(name, BigInteger, primary_key=key, autoincrement=False, nullable=False)


def _entry_columns() -> tuple[Column[str], Column[int], ForeignKeyConstraint]:
    """Return the columns that name the entry of the act; checked at commit, as rows come in any order."""
    entry = ForeignKeyConstraint(
        ["chain", "sequence"],
        ["entries.chain", "entries.sequence"],
        deferrable=True,
        initially="DEFERRED",
    )
    return _required("chain"), _number("sequence"), entry


chains = Table(
    "chains",
    metadata,
    _required("chain", key=True),
    _number("sequence"),
    _required("hash"),
    _required("recorded_at"),
)

entries = Table(
    "entries",
    metadata,
    _required("chain", key=True),
    _number("sequence", key=True),
    _required("recorded_at"),
    _required("actor"),
    _required("kind"),
    _required("previous"),
    _required("hash"),
    Column("body", LargeBinary, nullable=False),
)

idempotency_keys = Table(
    "idempotency_keys",
    metadata,
    _required("principal", key=True),
    _required("key", key=True),
    _required("fingerprint"),
    *_entry_columns(),
)

decisions = Table(
    "decisions",
    metadata,
    _required("chain", key=True),
    _number("sequence", key=True),
    _required("product"),
    _required("lot"),
    _number("round"),
    _required("outcome"),
    _required("recorded_at"),
    _entry_columns()[2],
    UniqueConstraint("product", "lot", "round"),
    Index("ix_decisions_recorded_at", "recorded_at", "chain", "sequence"),
)

readings = Table(
    "readings",
    metadata,
    _required("analyzer", key=True),
    _required("identity", key=True),
    _required("sample", key=True),
    *_entry_columns(),
    # When it was taken, where its identity does not say so.
    Column("taken_at", Text),
    Index(
        "ix_readings_taken_at",
        "analyzer",
        "taken_at",
        "sample",
        sqlite_where=text("taken_at IS NOT NULL"),
        postgresql_where=text("taken_at IS NOT NULL"),
    ),
)

lots = Table(
    "lots",
    metadata,
    _required("product", key=True),
    _required("lot", key=True),
    _required("line"),
    _required("outcome"),
    _number("rounds"),
    *_entry_columns(),
    _required("recorded_at"),
    Index("ix_lots_outcome_recorded_at", "outcome", "recorded_at", "product", "lot"),
)

master_documents = Table(
    "master_documents",
    metadata,
    _required("kind", key=True),
    _required("key", key=True),
    _number("revision"),
    _required("document"),
    *_entry_columns(),
)

_OPEN = text("state IN ('draft', 'submitted')")
_IN_FORCE = text("state = 'in_force'")

versions = Table(
    "versions",
    metadata,
    _required("kind", key=True),
    _required("code", key=True),
    _number("version", key=True),
    _required("state"),
    _number("revision"),
    Column("product", Text),
    Column("characteristic", Text),
    _required("document"),
    Column("evaluation", Text),
    Column("lapses_at", Text),
    _required("drafted_by"),
    Column("submitted_by", Text),
    Column("approved_by", Text),
    Column("in_force_from", Text),
    *_entry_columns(),
    CheckConstraint("kind IN ('budget', 'specification', 'plant')", name="kind"),
    CheckConstraint("state IN ('draft', 'submitted', 'in_force', 'superseded', 'withdrawn')", name="state"),
    Index("ix_versions_state", "kind", "state"),
    Index("uq_versions_open", "kind", "code", unique=True, sqlite_where=_OPEN, postgresql_where=_OPEN),
    Index(
        "uq_versions_in_force",
        "kind",
        "code",
        unique=True,
        sqlite_where=_IN_FORCE,
        postgresql_where=_IN_FORCE,
    ),
)

release_rules = Table(
    "release_rules",
    metadata,
    _required("specification", key=True),
    _number("specification_version", key=True),
    _required("characteristic", key=True),
    _required("budget", key=True),
    _number("budget_version", key=True),
    _required("counts", key=True),
    _required("numbers"),
    Index("ix_release_rules_budget_budget_version", "budget", "budget_version"),
)

studies = Table(
    "studies",
    metadata,
    _required("code", key=True),
    _required("product"),
    _required("characteristic"),
    _required("design"),
    _required("document"),
    _required("evaluation"),
    *_entry_columns(),
)

study_extensions = Table(
    "study_extensions",
    metadata,
    _required("study", key=True),
    _required("document"),
    *_entry_columns(),
)

people = Table(
    "people",
    metadata,
    _required("code", key=True),
    _required("name"),
    _required("roles"),
    _required("password_hash"),
    *_entry_columns(),
    Column("disabled_at", Text),
)

tokens = Table(
    "tokens",
    metadata,
    _required("code", key=True),
    _required("principal"),
    Column("person", Text),
    _required("roles"),
    _required("digest"),
    _required("created_at"),
    Column("revoked_at", Text),
    *_entry_columns(),
    UniqueConstraint("digest"),
)

revision = Table(
    "revision",
    metadata,
    _number("id", key=True),
    _number("revision"),
    CheckConstraint("id = 1", name="one_row"),
)

APPEND_ONLY = (entries, idempotency_keys, decisions, readings, release_rules, studies, study_extensions)
"""The tables whose rows are never changed nor removed."""
