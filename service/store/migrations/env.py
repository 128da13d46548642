"""Runs migrations on the connection that service/store/schema.py hands over."""

from __future__ import annotations

from alembic import context
from sqlalchemy import text

from service.store.tables import metadata

MIGRATION_LOCK = 0x53484D4D
"""PostgreSQL advisory lock, held to the end, so that two commands never migrate at once."""


def run() -> None:
    """Run all steps in one transaction: either the whole way or nothing."""
    connection = context.config.attributes["connection"]
    context.configure(
        connection=connection,
        target_metadata=metadata,
        compare_server_default=True,
        render_as_batch=False,
        transactional_ddl=True,
        transaction_per_migration=False,
    )
    with context.begin_transaction():
        if connection.dialect.name == "postgresql":
            connection.execute(text("SET LOCAL lock_timeout = '5s'"))
            connection.execute(text(f"SELECT pg_advisory_xact_lock({MIGRATION_LOCK})"))
        context.run_migrations()


run()
