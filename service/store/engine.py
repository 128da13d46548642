"""Engines for the two databases, and what their drivers' errors mean.

SQLite: WAL with ``synchronous=FULL``, and transactions begun by us: the driver's own way begins them late
and commits before DDL. PostgreSQL: psycopg 3, with time limits that end a session which hangs in a
transaction, so that it cannot keep the heads of the chains locked.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import URL, Connection, Engine, create_engine, event, make_url
from sqlalchemy.exc import ArgumentError, DBAPIError, InterfaceError, OperationalError
from sqlalchemy.exc import TimeoutError as PoolTimeout

from service.errors import SettingsError, Unavailable

BUSY_TIMEOUT_MS = 5_000
BEGIN_OPTION = "shoalmark_begin"
"""Execution option that holds the statement which begins a transaction on SQLite."""

_POSTGRESQL_LIMITS_MS = {
    "statement_timeout": 10_000,
    "lock_timeout": 5_000,
    "idle_in_transaction_session_timeout": 10_000,
}
# Primary result codes: BUSY, LOCKED, READONLY, IOERR, FULL, CANTOPEN. A damaged file is not among them:
# trying again later does not help there.
_SQLITE_UNAVAILABLE = frozenset({5, 6, 8, 10, 13, 14})


def parse_url(url: str) -> URL:
    """Return the URL with the driver that is meant; refuses what cannot be used."""
    try:
        parsed = make_url(url)
    except (ArgumentError, ValueError) as error:
        raise SettingsError(
            "the database URL cannot be read"
        ) from error  # never show it: it may hold a password
    if parsed.drivername in ("postgresql", "postgres", "postgresql+psycopg"):
        return parsed.set(drivername="postgresql+psycopg")
    if parsed.drivername in ("sqlite", "sqlite+pysqlite"):
        if parsed.database in (None, "", ":memory:") or parsed.query:
            raise SettingsError("a SQLite database must be a plain file, as in sqlite:////folder/file")
        return parsed.set(drivername="sqlite+pysqlite")
    raise SettingsError(f"{parsed.drivername} is not supported; expected sqlite or postgresql")


def sqlite_file(url: str) -> Path | None:
    """Return the database file, or None on PostgreSQL."""
    parsed = parse_url(url)
    return Path(str(parsed.database)) if parsed.get_backend_name() == "sqlite" else None


def make_engine(url: str, *, pool_size: int = 20, migrating: bool = False) -> Engine:
    """Make an engine; a migrating one has foreign keys off on SQLite and longer limits on PostgreSQL."""
    parsed = parse_url(url)
    if parsed.get_backend_name() == "sqlite":
        engine = create_engine(
            parsed,
            pool_size=pool_size,
            max_overflow=pool_size,
            pool_timeout=2.0,
            connect_args={"timeout": BUSY_TIMEOUT_MS / 1000, "check_same_thread": False},
        )
        _prepare_sqlite(engine, foreign_keys=not migrating)
        return engine
    limits = _POSTGRESQL_LIMITS_MS | ({"statement_timeout": 600_000} if migrating else {})
    options = " ".join(f"-c {name}={value}" for name, value in limits.items())
    try:
        return create_engine(
            parsed,
            pool_size=pool_size,
            max_overflow=pool_size,
            pool_timeout=2.0,
            pool_pre_ping=True,
            connect_args={"options": options, "connect_timeout": 5, "application_name": "shoalmark"},
        )
    except ModuleNotFoundError as error:
        raise SettingsError("PostgreSQL needs the extra: pip install 'shoalmark[postgres]'") from error


def _prepare_sqlite(engine: Engine, *, foreign_keys: bool) -> None:
    @event.listens_for(engine, "connect")
    def connect(connection: Any, _record: object) -> None:
        connection.isolation_level = None  # the driver begins nothing by itself
        for pragma in (
            f"busy_timeout = {BUSY_TIMEOUT_MS}",
            "journal_mode = WAL",
            "synchronous = FULL",
            f"foreign_keys = {'ON' if foreign_keys else 'OFF'}",
            "recursive_triggers = ON",  # else REPLACE would remove a row without its delete trigger
            "trusted_schema = OFF",
        ):
            connection.execute(f"PRAGMA {pragma}")

    @event.listens_for(engine, "begin")
    def begin(connection: Connection) -> None:
        connection.exec_driver_sql(connection.get_execution_options().get(BEGIN_OPTION, "BEGIN"))


def sqlstate(error: BaseException | None) -> str:
    """Return PostgreSQL's error code behind an error, or empty text."""
    origin = error.orig if isinstance(error, DBAPIError) else None
    return str(getattr(origin, "sqlstate", None) or "")


def means_unavailable(error: BaseException) -> bool:
    """Say whether the database was busy or out of reach, so that the same call may succeed later."""
    if isinstance(error, PoolTimeout):
        return True
    if not isinstance(error, DBAPIError):
        return False
    if error.connection_invalidated:
        return True
    code = getattr(error.orig, "sqlite_errorcode", None)
    if code is not None:
        return (code & 0xFF) in _SQLITE_UNAVAILABLE
    return (
        isinstance(error, OperationalError | InterfaceError) and "sqlite3" not in type(error.orig).__module__
    )


@contextmanager
def driver_errors() -> Iterator[None]:
    """Turn driver errors that mean "busy or out of reach" into ``Unavailable``."""
    try:
        yield
    except (DBAPIError, PoolTimeout) as error:
        if not means_unavailable(error):
            raise
        raise Unavailable("the database is busy or out of reach; nothing was lost, try again") from error
