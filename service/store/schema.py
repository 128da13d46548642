"""Brings a database to this program's schema, or says why it cannot be used as it is."""

from __future__ import annotations

import os
import re
import sqlite3
from collections.abc import Iterator
from contextlib import closing, contextmanager
from pathlib import Path

from alembic import command
from alembic.config import Config
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import Connection, inspect, text

from service.errors import SchemaMismatch, SettingsError
from service.store.engine import BEGIN_OPTION, driver_errors, make_engine, sqlite_file
from service.store.tables import APPEND_ONLY, metadata

_MIGRATIONS = Path(__file__).with_name("migrations")


def configuration(connection: Connection | None = None) -> Config:
    """Return the Alembic configuration; there is no alembic.ini."""
    config = Config()
    config.set_main_option("script_location", str(_MIGRATIONS).replace("%", "%%"))
    config.set_main_option("path_separator", "os")
    config.attributes["connection"] = connection
    return config


def head() -> str:
    """Return the revision that this program needs."""
    found = ScriptDirectory.from_config(configuration()).get_current_head()
    assert found is not None
    return found


def known_revisions() -> frozenset[str]:
    """Return all revisions that this program can upgrade from, and its own."""
    scripts = ScriptDirectory.from_config(configuration()).walk_revisions()
    return frozenset(script.revision for script in scripts)


def current(url: str) -> str | None:
    """Return the database's revision, or None when it has no schema of ours, or no file yet."""
    if (file := sqlite_file(url)) is not None and not file.exists():
        return None
    with _connection(url) as connection:
        return _revision_of(connection)


def check_current(url: str) -> None:
    """Raise ``SchemaMismatch``, with the command to use, unless the schema is this program's."""
    found = current(url)
    if found == head():
        return
    if found is None:
        raise SchemaMismatch("the database has no schema yet: run `shoalmark migrate`")
    if found in known_revisions():
        raise SchemaMismatch(
            f"the database has the schema {found}, this program needs {head()}: run `shoalmark migrate`"
        )
    raise SchemaMismatch(_newer(found))


def migrate(url: str, service_role: str | None = None) -> str:
    """Bring the database to this program's schema and return the revision.

    On PostgreSQL ``service_role`` names the role that the service works under; it gets the rights to add to
    the record and to read it, but not to change it.
    """
    if (file := sqlite_file(url)) is not None:
        if service_role is not None:
            raise SettingsError("SQLite has no roles: a service role is for PostgreSQL only")
        file.parent.mkdir(parents=True, exist_ok=True)
    with _connection(url, BEGIN_OPTION, "BEGIN IMMEDIATE") as connection:
        found = _revision_of(connection)
        if found is not None and found not in known_revisions():
            raise SchemaMismatch(_newer(found))
        command.upgrade(configuration(connection), "head")
        if service_role is not None:
            _grant(connection, service_role)
        connection.commit()
    return head()


def migrate_with_copy(url: str) -> Path | None:
    """Migrate a SQLite file, after copying it when its schema is older; return the copy if there is one."""
    file = sqlite_file(url)
    if file is None:
        raise SettingsError("only a SQLite file is migrated by the service itself: run `shoalmark migrate`")
    copy = None
    if file.exists() and (found := current(url)) not in (None, head()):
        if found not in known_revisions():
            raise SchemaMismatch(_newer(str(found)))
        copy = copy_file(file, file.with_name(f"{file.name}.before-{found}"))
    migrate(url)
    return copy


def copy_file(source: Path, target: Path) -> Path:
    """Copy a SQLite file that may be in use, whole and durable, under its final name only when done."""
    unfinished = target.with_name(f"{target.name}.unfinished")
    unfinished.unlink(missing_ok=True)
    with closing(sqlite3.connect(source)) as original, closing(sqlite3.connect(unfinished)) as written:
        original.backup(written)
    with unfinished.open("rb+") as file:
        os.fsync(file.fileno())
    unfinished.replace(target)
    return target


def _newer(found: str) -> str:
    return f"the database has the schema {found}, which this program does not know: use a newer program"


@contextmanager
def _connection(url: str, *option: str) -> Iterator[Connection]:
    engine = make_engine(url, pool_size=1, migrating=True)
    try:
        with driver_errors(), engine.connect() as connection:
            yield connection.execution_options(**{option[0]: option[1]}) if option else connection
    finally:
        engine.dispose()


def _revision_of(connection: Connection) -> str | None:
    heads = MigrationContext.configure(connection).get_current_heads()
    if len(heads) > 1:
        raise SchemaMismatch("the database names several revisions: restore it from a backup")
    if not heads and (strange := set(inspect(connection).get_table_names()) & set(metadata.tables)):
        names = ", ".join(sorted(strange))
        raise SchemaMismatch(f"the database holds tables that no migration made: {names}")
    return heads[0] if heads else None


def _grant(connection: Connection, role: str) -> None:
    if re.fullmatch(r"[a-z_][a-z0-9_]{0,62}", role) is None:
        raise SettingsError(f"{role!r} is no name of a role")
    if (
        connection.execute(text("SELECT 1 FROM pg_roles WHERE rolname = :role"), {"role": role}).first()
        is None
    ):
        raise SettingsError(f"the role {role} does not exist: create it first")
    if connection.execute(text("SELECT current_user = :role"), {"role": role}).scalar():
        raise SettingsError("the role that migrates owns the tables: the service needs another one")
    connection.execute(text(f'GRANT USAGE ON SCHEMA public TO "{role}"'))
    record = {table.name for table in APPEND_ONLY}
    for name in [*metadata.tables, "alembic_version"]:
        rights = "SELECT, INSERT, UPDATE, DELETE"
        if name in record:
            rights = "SELECT, INSERT"
        elif name == "alembic_version":
            rights = "SELECT"
        connection.execute(text(f'REVOKE ALL ON "{name}" FROM "{role}"'))
        connection.execute(text(f'GRANT {rights} ON "{name}" TO "{role}"'))
