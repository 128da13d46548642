"""The schema of a database as SQL text: normalised, so that two can be compared, and executable.

A dump is kept per release; the tests build a database from it, upgrade it, and compare. ``pg_dump`` is not
used: its text changes with its version.
"""

from __future__ import annotations

import re
from collections.abc import Iterator

from sqlalchemy import Connection, text

from service.store.engine import driver_errors, make_engine

_SQLITE_OBJECTS = """
SELECT sql FROM sqlite_master WHERE sql IS NOT NULL AND name NOT LIKE 'sqlite_%'
ORDER BY CASE type WHEN 'table' THEN 0 WHEN 'index' THEN 1 ELSE 2 END, name
"""
_TABLES = """
SELECT oid, relname FROM pg_class WHERE relkind = 'r' AND relnamespace = 'public'::regnamespace
ORDER BY relname
"""
_COLUMNS = """
SELECT a.attname, format_type(a.atttypid, a.atttypmod) AS type, a.attnotnull,
    pg_get_expr(d.adbin, d.adrelid) AS default
FROM pg_attribute a LEFT JOIN pg_attrdef d ON d.adrelid = a.attrelid AND d.adnum = a.attnum
WHERE a.attrelid = :oid AND a.attnum > 0 AND NOT a.attisdropped ORDER BY a.attnum
"""
# contype 'n': not null, named from PostgreSQL 18 on; said by the columns already
_CONSTRAINTS = """
SELECT conrelid::regclass::text AS table, conname, pg_get_constraintdef(oid) AS definition
FROM pg_constraint WHERE connamespace = 'public'::regnamespace AND conrelid <> 0 AND contype <> 'n'
ORDER BY contype = 'f', 1, 2
"""
_INDEXES = """
SELECT pg_get_indexdef(i.indexrelid) FROM pg_index i JOIN pg_class c ON c.oid = i.indexrelid
WHERE c.relnamespace = 'public'::regnamespace
    AND NOT EXISTS (SELECT 1 FROM pg_constraint WHERE conindid = i.indexrelid)
ORDER BY c.relname
"""
_FUNCTIONS = """
SELECT pg_get_functiondef(oid) FROM pg_proc WHERE pronamespace = 'public'::regnamespace ORDER BY proname
"""
_TRIGGERS = """
SELECT pg_get_triggerdef(oid), tgrelid::regclass::text AS table, tgname, tgenabled FROM pg_trigger
WHERE NOT tgisinternal ORDER BY tgname
"""


def dump_schema(url: str) -> str:
    """Return the schema as SQL statements, with the revision and the rows that a migration puts in."""
    engine = make_engine(url, pool_size=1)
    try:
        with driver_errors(), engine.connect() as connection:
            sqlite = connection.dialect.name == "sqlite"
            statements = [*(_sqlite(connection) if sqlite else _postgresql(connection)), *_rows(connection)]
    finally:
        engine.dispose()
    return "".join(f"{_normal(statement)};\n" for statement in statements)


def _normal(statement: str) -> str:
    return re.sub(r"\s+", " ", statement).strip().replace("( ", "(").replace(" )", ")")


def _sqlite(connection: Connection) -> Iterator[str]:
    yield from connection.execute(text(_SQLITE_OBJECTS)).scalars()


def _postgresql(connection: Connection) -> Iterator[str]:
    for oid, name in connection.execute(text(_TABLES)).all():
        columns = []
        for column in connection.execute(text(_COLUMNS), {"oid": oid}):
            default = "" if column.default is None else f" DEFAULT {column.default}"
            required = " NOT NULL" if column.attnotnull else ""
            columns.append(f'"{column.attname}" {column.type}{default}{required}')
        yield f'CREATE TABLE "{name}" ({", ".join(columns)})'
    for table, name, definition in connection.execute(text(_CONSTRAINTS)):
        yield f'ALTER TABLE {table} ADD CONSTRAINT "{name}" {definition}'
    yield from connection.execute(text(_INDEXES)).scalars()
    yield from connection.execute(text(_FUNCTIONS)).scalars()
    for definition, table, name, enabled in connection.execute(text(_TRIGGERS)):
        yield definition
        if enabled == "A":
            yield f'ALTER TABLE {table} ENABLE ALWAYS TRIGGER "{name}"'


def _rows(connection: Connection) -> Iterator[str]:
    version = connection.execute(text("SELECT version_num FROM alembic_version")).scalar()
    yield f"INSERT INTO alembic_version (version_num) VALUES ('{version}')"
    yield "INSERT INTO revision (id, revision) VALUES (1, 0)"
