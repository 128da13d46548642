"""The triggers that keep the record append-only: what must be there, and what is."""

from __future__ import annotations

from sqlalchemy import text

from service.store.session import Session
from service.store.tables import APPEND_ONLY

_SQLITE = "SELECT tbl_name || '.' || name FROM sqlite_master WHERE type = 'trigger'"
# 'A': fires always, also in a session that plays a replica
_POSTGRESQL = (
    "SELECT relname || '.' || tgname FROM pg_trigger JOIN pg_class ON pg_class.oid = tgrelid "
    "WHERE NOT tgisinternal AND tgenabled = 'A' AND pg_table_is_visible(tgrelid)"
)


def expected_triggers(*, postgresql: bool) -> frozenset[str]:
    """Return the triggers of the head schema as ``table.trigger``."""
    suffixes = ("no_change",) if postgresql else ("no_update", "no_delete", "no_replace")
    return frozenset(f"{table.name}.{table.name}_{suffix}" for table in APPEND_ONLY for suffix in suffixes)


def present_triggers(session: Session) -> frozenset[str]:
    """Return the triggers of the database that are in effect."""
    return frozenset(row[0] for row in session.rows(text(_POSTGRESQL if session.postgresql else _SQLITE)))


def missing_triggers(session: Session) -> list[str]:
    """Return the triggers that should be there and are not, in order."""
    return sorted(expected_triggers(postgresql=session.postgresql) - present_triggers(session))
