"""${message}

Revision ID: ${up_revision}
Revises: ${down_revision | comma,n}

Before you commit this file:
- The record (entries, idempotency_keys, decisions, readings, release_rules, studies) only ever gains
  columns, nullable ones. Never alter these tables in batch: on SQLite that copies the table and silently
  drops its triggers. Entries are never rewritten.
- Projections may be altered in batch, or emptied and rebuilt from the record.
- A new table of the record gets its triggers HERE, in full; import nothing from service.
- One transaction, run by a plant that waits: no step that takes minutes on a large table.
- The way back is the copy made before (SQLite) or the backup (PostgreSQL): there is no downgrade.
- Afterwards: run the tests (drift, triggers, upgrade from every release); at a release add its dump.
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = ${repr(up_revision)}
down_revision = ${repr(down_revision)}
branch_labels = None
depends_on = None


def upgrade() -> None:
    ${upgrades if upgrades else "raise NotImplementedError"}


def downgrade() -> None:
    raise NotImplementedError("restore the copy that was made before the upgrade")
