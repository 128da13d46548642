"""Studies that an approver let serve longer: a table of the record, with its triggers.

Revision ID: 0002
Revises: 0001
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

TABLE = "study_extensions"


def upgrade() -> None:
    op.create_table(
        TABLE,
        sa.Column("study", sa.Text(), nullable=False),
        sa.Column("document", sa.Text(), nullable=False),
        sa.Column("chain", sa.Text(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.ForeignKeyConstraint(
            ["chain", "sequence"],
            ["entries.chain", "entries.sequence"],
            name=op.f("fk_study_extensions_entries"),
            initially="DEFERRED",
            deferrable=True,
        ),
        sa.PrimaryKeyConstraint("study", name=op.f("pk_study_extensions")),
    )
    if op.get_context().dialect.name == "sqlite":
        _refuse_changes_on_sqlite()
    else:
        _refuse_changes_on_postgresql()


def downgrade() -> None:
    raise NotImplementedError("restore the copy that was made before the upgrade")


def _refuse_changes_on_sqlite() -> None:
    for act in ("UPDATE", "DELETE"):
        op.execute(
            f"CREATE TRIGGER {TABLE}_no_{act.lower()} BEFORE {act} ON {TABLE} "
            f"BEGIN SELECT RAISE(ABORT, '{TABLE} is append-only'); END"
        )
    # As in 0001: INSERT OR REPLACE would remove the row that stands in the way without its delete trigger.
    taken = ("study = NEW.study", "rowid = NEW.rowid")
    condition = " OR ".join(f"EXISTS (SELECT 1 FROM {TABLE} WHERE {key})" for key in taken)
    op.execute(
        f"CREATE TRIGGER {TABLE}_no_replace BEFORE INSERT ON {TABLE} WHEN {condition} "
        f"BEGIN SELECT RAISE(ABORT, '{TABLE} holds a row with this key'); END"
    )


def _refuse_changes_on_postgresql() -> None:
    op.execute(
        f"CREATE TRIGGER {TABLE}_no_change BEFORE UPDATE OR DELETE OR TRUNCATE ON {TABLE} "
        "FOR EACH STATEMENT EXECUTE FUNCTION refuse_change()"
    )
    # ALWAYS: also in a session that plays a replica, which skips ordinary triggers
    op.execute(f"ALTER TABLE {TABLE} ENABLE ALWAYS TRIGGER {TABLE}_no_change")
