"""One connection in one transaction, as the repositories see it.

Rows that are added, or replace others, are gathered and written by one statement per table, before that table
is next read and at the commit: this is what makes a batch of acts cheap.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from functools import lru_cache
from typing import Any

from sqlalchemy import Connection, Executable, Insert, Row, Table, TextClause, insert, text
from sqlalchemy.dialects.postgresql import insert as postgresql_insert
from sqlalchemy.dialects.sqlite import insert as sqlite_insert
from sqlalchemy.exc import DataError

from service.store.engine import driver_errors

Values = Mapping[str, Any]
# PostgreSQL's text holds no NUL, so a name with one (from a URL, say) is a name of nothing.
_NUL = "cannot contain NUL"


class Session:
    """Executes statements, keeps count of writes, and remembers when a statement failed."""

    def __init__(self, connection: Connection, *, may_write: bool) -> None:
        self._connection = connection
        self._may_write = may_write
        self._pending: dict[Table, list[Values]] = {}
        self._replacing: dict[Table, dict[tuple[Any, ...], Values]] = {}
        self.writes = 0
        self.broken = False
        self.postgresql = connection.dialect.name == "postgresql"

    def rows(self, statement: Executable, *tables: Table, **parameters: Any) -> Sequence[Row[Any]]:
        """Return all rows of a query; ``tables`` names the gathered ones that it reads."""
        self.flush(*tables)
        try:
            found: Sequence[Row[Any]] = self._execute(statement, parameters).all()
        except DataError as error:
            if _NUL not in str(error.orig):
                raise
            self.broken = False  # refused by the driver before anything was sent
            return []
        return found

    def rows_among(
        self, table: Table, names: tuple[str, ...], wanted: Sequence[tuple[str, ...]]
    ) -> Sequence[Row[Any]]:
        """Return the rows whose named text columns are one of the tuples wanted, by one index search each.

        Gathered rows are not among them: the repositories that use this remember what they added.
        """
        if not wanted:
            return []
        if not self.postgresql:
            return self.rows(_among_on_sqlite(table, names), wanted=json.dumps(wanted))
        columns = {f"w{place}": list(values) for place, values in enumerate(zip(*wanted, strict=True))}
        return self.rows(_among_on_postgresql(table, names), **columns)

    def row(self, statement: Executable, *tables: Table, **parameters: Any) -> Row[Any] | None:
        """Return the first row of a query or None."""
        found = self.rows(statement, *tables, **parameters)
        return found[0] if found else None

    def write(self, statement: Executable) -> int:
        """Execute a change at once and return the number of rows it met."""
        self._count_write()
        return int(self._execute(statement).rowcount)

    def insert(self, table: Table, values: Values) -> None:
        """Gather a row for a table."""
        self._count_write()
        self._pending.setdefault(table, []).append(values)

    def upsert(self, table: Table, values: Values) -> None:
        """Gather a row that replaces the one with its primary key, if there is one."""
        self._count_write()
        key = tuple(values[column.name] for column in table.primary_key)
        self._replacing.setdefault(table, {})[key] = values

    def flush(self, *tables: Table) -> None:
        """Write the gathered rows of the tables named."""
        for table in tables:
            if rows := self._pending.pop(table, None):
                self._execute(_insert(table), rows)
            if replacing := self._replacing.pop(table, None):
                # in the order of the keys, so that two processes never wait for each other in a ring
                ordered = [replacing[key] for key in sorted(replacing)]
                self._execute(_upsert(table, tuple(ordered[0]), self.postgresql), ordered)

    def flush_all(self) -> None:
        """Write all gathered rows."""
        self.flush(*{**self._pending, **self._replacing})

    def _count_write(self) -> None:
        if not self._may_write:
            raise RuntimeError("this unit of work only reads")
        self.writes += 1

    def _execute(self, statement: Executable, parameters: Any = None) -> Any:
        try:
            with driver_errors():
                return self._connection.execute(statement, parameters)
        except Exception:
            # After a failed statement PostgreSQL takes no further one in this transaction.
            self.broken = True
            raise


# Statements are built once: building them costs more than running them.
@lru_cache
def _insert(table: Table) -> Insert:
    return insert(table)


@lru_cache
def _upsert(table: Table, names: tuple[str, ...], postgresql: bool) -> Insert:
    maker: Any = postgresql_insert if postgresql else sqlite_insert
    statement = maker(table)
    keys = [column.name for column in table.primary_key]
    changes = {name: statement.excluded[name] for name in names if name not in keys}
    upsert: Insert = statement.on_conflict_do_update(index_elements=keys, set_=changes)
    return upsert


# Not `(a, b) IN (...)`: for more than one tuple SQLite reads the whole table then.
@lru_cache
def _among_on_sqlite(table: Table, names: tuple[str, ...]) -> TextClause:
    pairs = (f"t.\"{name}\" = json_extract(w.value, '$[{place}]')" for place, name in enumerate(names))
    # CROSS JOIN keeps SQLite from turning the order of the two round
    return text(f"SELECT t.* FROM json_each(:wanted) w CROSS JOIN {table.name} t WHERE {' AND '.join(pairs)}")


@lru_cache
def _among_on_postgresql(table: Table, names: tuple[str, ...]) -> TextClause:
    arrays = ", ".join(f"CAST(:w{place} AS text[])" for place in range(len(names)))
    columns = ", ".join(f"w{place}" for place in range(len(names)))
    pairs = " AND ".join(f't."{name}" = w.w{place}' for place, name in enumerate(names))
    return text(f"SELECT t.* FROM unnest({arrays}) AS w({columns}) JOIN {table.name} t ON {pairs}")
