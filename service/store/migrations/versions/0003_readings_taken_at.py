"""When a reading was taken stands beside a measurement's own identity: the same reading without it is found.

Revision ID: 0003
Revises: 0002

Rows that were written before keep no instant.
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.add_column("readings", sa.Column("taken_at", sa.Text(), nullable=True))
    op.create_index(
        "ix_readings_taken_at",
        "readings",
        ["analyzer", "taken_at", "sample"],
        sqlite_where=sa.text("taken_at IS NOT NULL"),
        postgresql_where=sa.text("taken_at IS NOT NULL"),
    )


def downgrade() -> None:
    raise NotImplementedError("restore the copy that was made before the upgrade")
