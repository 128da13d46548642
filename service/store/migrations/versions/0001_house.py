"""The house: the record, its projections, and the triggers that keep the record as it was written.

Revision ID: 0001
Revises:
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

# Per table of the record the columns of its keys. SQLite needs them: INSERT OR REPLACE removes the row that
# stands in the way, and by default without its delete trigger, so a row whose key is taken is refused first.
RECORD: dict[str, list[tuple[str, ...]]] = {
    "entries": [("chain", "sequence")],
    "idempotency_keys": [("principal", "key")],
    "decisions": [("chain", "sequence"), ("product", "lot", "round")],
    "readings": [("analyzer", "identity", "sample")],
    "release_rules": [
        ("specification", "specification_version", "characteristic", "budget", "budget_version", "counts")
    ],
    "studies": [("code",)],
}


def upgrade() -> None:
    _create_chains()
    _create_entries()
    _create_release_rules()
    _create_revision()
    _create_decisions()
    _create_idempotency_keys()
    _create_lots()
    _create_master_documents()
    _create_people()
    _create_readings()
    _create_studies()
    _create_tokens()
    _create_versions()
    _index_versions()
    op.execute("INSERT INTO revision (id, revision) VALUES (1, 0)")
    if op.get_context().dialect.name == "sqlite":
        _refuse_changes_on_sqlite()
    else:
        _refuse_changes_on_postgresql()


def downgrade() -> None:
    raise NotImplementedError("restore the copy that was made before the upgrade")


def _create_chains() -> None:
    op.create_table(
        "chains",
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("hash", sa.Text(), nullable=False),
        sa.Column("recorded_at", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("chain", name=op.f("pk_chains")),
    )


def _create_entries() -> None:
    op.create_table(
        "entries",
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("recorded_at", sa.Text(), nullable=False),
        sa.Column("actor", sa.Text(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("previous", sa.Text(), nullable=False),
        sa.Column("hash", sa.Text(), nullable=False),
        sa.Column("body", sa.LargeBinary(), nullable=False),
        sa.PrimaryKeyConstraint("chain", "sequence", name=op.f("pk_entries")),
    )


def _create_release_rules() -> None:
    op.create_table(
        "release_rules",
        sa.Column("specification", sa.Text(), nullable=False),
        sa.Column("specification_version", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("characteristic", sa.Text(), nullable=False),
        sa.Column("budget", sa.Text(), nullable=False),
        sa.Column("budget_version", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("counts", sa.Text(), nullable=False),
        sa.Column("numbers", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint(
            "specification",
            "specification_version",
            "characteristic",
            "budget",
            "budget_version",
            "counts",
            name=op.f("pk_release_rules"),
        ),
    )
    op.create_index(
        "ix_release_rules_budget_budget_version", "release_rules", ["budget", "budget_version"], unique=False
    )


def _create_revision() -> None:
    op.create_table(
        "revision",
        sa.Column("id", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("revision", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.CheckConstraint("id = 1", name=op.f("ck_revision_one_row")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_revision")),
    )


def _create_decisions() -> None:
    op.create_table(
        "decisions",
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("product", sa.Text(), nullable=False),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("round", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("outcome", sa.Text(), nullable=False),
        sa.Column("recorded_at", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_decisions_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("chain", "sequence", name=op.f("pk_decisions")),
        sa.UniqueConstraint("product", "lot", "round", name=op.f("uq_decisions_product_lot_round")),
    )
    op.create_index(
        "ix_decisions_recorded_at", "decisions", ["recorded_at", "chain", "sequence"], unique=False
    )


def _create_idempotency_keys() -> None:
    op.create_table(
        "idempotency_keys",
        sa.Column("principal", sa.Text(), nullable=False),
        sa.Column("key", sa.Text(), nullable=False),
        sa.Column("fingerprint", sa.Text(), nullable=False),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_idempotency_keys_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("principal", "key", name=op.f("pk_idempotency_keys")),
    )


def _create_lots() -> None:
    op.create_table(
        "lots",
        sa.Column("product", sa.Text(), nullable=False),
        sa.Column("lot", sa.Text(), nullable=False),
        sa.Column("line", sa.Text(), nullable=False),
        sa.Column("outcome", sa.Text(), nullable=False),
        sa.Column("rounds", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("recorded_at", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_lots_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("product", "lot", name=op.f("pk_lots")),
    )
    op.create_index(
        "ix_lots_outcome_recorded_at", "lots", ["outcome", "recorded_at", "product", "lot"], unique=False
    )


def _create_master_documents() -> None:
    op.create_table(
        "master_documents",
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("key", sa.Text(), nullable=False),
        sa.Column("revision", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("document", sa.Text(), nullable=False),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_master_documents_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("kind", "key", name=op.f("pk_master_documents")),
    )


def _create_people() -> None:
    op.create_table(
        "people",
        sa.Column("code", sa.Text(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("roles", sa.Text(), nullable=False),
        sa.Column("password_hash", sa.Text(), nullable=False),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("disabled_at", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_people_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("code", name=op.f("pk_people")),
    )


def _create_readings() -> None:
    op.create_table(
        "readings",
        sa.Column("analyzer", sa.Text(), nullable=False),
        sa.Column("identity", sa.Text(), nullable=False),
        sa.Column("sample", sa.Text(), nullable=False),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_readings_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("analyzer", "identity", "sample", name=op.f("pk_readings")),
    )


def _create_studies() -> None:
    op.create_table(
        "studies",
        sa.Column("code", sa.Text(), nullable=False),
        sa.Column("product", sa.Text(), nullable=False),
        sa.Column("characteristic", sa.Text(), nullable=False),
        sa.Column("design", sa.Text(), nullable=False),
        sa.Column("document", sa.Text(), nullable=False),
        sa.Column("evaluation", sa.Text(), nullable=False),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_studies_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("code", name=op.f("pk_studies")),
    )


def _create_tokens() -> None:
    op.create_table(
        "tokens",
        sa.Column("code", sa.Text(), nullable=False),
        sa.Column("principal", sa.Text(), nullable=False),
        sa.Column("person", sa.Text(), nullable=True),
        sa.Column("roles", sa.Text(), nullable=False),
        sa.Column("digest", sa.Text(), nullable=False),
        sa.Column("created_at", sa.Text(), nullable=False),
        sa.Column("revoked_at", sa.Text(), nullable=True),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_tokens_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("code", name=op.f("pk_tokens")),
        sa.UniqueConstraint("digest", name=op.f("uq_tokens_digest")),
    )


def _create_versions() -> None:
    op.create_table(
        "versions",
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("code", sa.Text(), nullable=False),
        sa.Column("version", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("revision", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("product", sa.Text(), nullable=True),
        sa.Column("characteristic", sa.Text(), nullable=True),
        sa.Column("document", sa.Text(), nullable=False),
        sa.Column("evaluation", sa.Text(), nullable=True),
        sa.Column("lapses_at", sa.Text(), nullable=True),
        sa.Column("drafted_by", sa.Text(), nullable=False),
        sa.Column("submitted_by", sa.Text(), nullable=True),
        sa.Column("approved_by", sa.Text(), nullable=True),
        sa.Column("in_force_from", sa.Text(), nullable=True),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.CheckConstraint("kind IN ('budget', 'specification', 'plant')", name=op.f("ck_versions_kind")),
        sa.CheckConstraint(
            "state IN ('draft', 'submitted', 'in_force', 'superseded', 'withdrawn')",
            name=op.f("ck_versions_state"),
        ),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_versions_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("kind", "code", "version", name=op.f("pk_versions")),
    )


def _index_versions() -> None:
    op.create_index("ix_versions_state", "versions", ["kind", "state"], unique=False)
    op.create_index(
        "uq_versions_in_force",
        "versions",
        ["kind", "code"],
        unique=True,
        sqlite_where=sa.text("state = 'in_force'"),
        postgresql_where=sa.text("state = 'in_force'"),
    )
    op.create_index(
        "uq_versions_open",
        "versions",
        ["kind", "code"],
        unique=True,
        sqlite_where=sa.text("state IN ('draft', 'submitted')"),
        postgresql_where=sa.text("state IN ('draft', 'submitted')"),
    )


def _refuse_changes_on_sqlite() -> None:
    for table, keys in RECORD.items():
        for act in ("UPDATE", "DELETE"):
            op.execute(
                f"CREATE TRIGGER {table}_no_{act.lower()} BEFORE {act} ON {table} "
                f"BEGIN SELECT RAISE(ABORT, '{table} is append-only'); END"
            )
        taken = [" AND ".join(f"{column} = NEW.{column}" for column in key) for key in keys]
        taken.append("rowid = NEW.rowid")  # -1 unless a statement names a rowid, to replace by it
        condition = " OR ".join(f"EXISTS (SELECT 1 FROM {table} WHERE {key})" for key in taken)
        op.execute(
            f"CREATE TRIGGER {table}_no_replace BEFORE INSERT ON {table} WHEN {condition} "
            f"BEGIN SELECT RAISE(ABORT, '{table} holds a row with this key'); END"
        )


def _refuse_changes_on_postgresql() -> None:
    op.execute(
        "CREATE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$ BEGIN "
        "RAISE EXCEPTION '% is append-only', TG_TABLE_NAME USING ERRCODE = 'integrity_constraint_violation'; "
        "END $$"
    )
    for table in RECORD:
        op.execute(
            f"CREATE TRIGGER {table}_no_change BEFORE UPDATE OR DELETE OR TRUNCATE ON {table} "
            "FOR EACH STATEMENT EXECUTE FUNCTION refuse_change()"
        )
        # ALWAYS: also in a session that plays a replica, which skips ordinary triggers
        op.execute(f"ALTER TABLE {table} ENABLE ALWAYS TRIGGER {table}_no_change")
