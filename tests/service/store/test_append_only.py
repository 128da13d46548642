"""Nothing in the record is changed or removed, whatever statement tries it."""

from __future__ import annotations

import pytest
from sqlalchemy import text
from sqlalchemy.exc import IntegrityError

from service.store.acts import perform_now
from service.store.tables import APPEND_ONLY
from service.store.unit_of_work import StoredRule
from tests.service.store.examples import connected, judge, note

RULE = StoredRule("customer-b", 1, "moisture", "wmp-moisture-nir", 1, "2", {"upper_acceptance_limit": 3.085})
STUDY = {"product": "whole-milk-powder", "characteristic": "moisture", "design": "repeatability"}


@pytest.fixture
def filled_url(database, database_url):
    """Return a database with a row in every table of the record."""
    perform_now(database, judge("W26-04711"))
    perform_now(database, note(key="00000001"))

    def keep(unit, entry):
        unit.rules.add(RULE)
        unit.studies.add("wmp-rep-2026-01", {"rows": []}, {"used": 0}, entry, **STUDY)
        unit.extensions.add("wmp-rep-2026-01", {"until": "2027-03-01", "widening_factor": 1.5}, entry)

    perform_now(database, note(chain="plant", after=keep))
    return database_url


def content(connection, table):
    return connection.execute(text(f"SELECT * FROM {table.name}")).all()


@pytest.mark.parametrize("table", APPEND_ONLY, ids=lambda table: table.name)
def test_update_delete_and_replacement_are_refused(filled_url, table):
    column = next(iter(table.primary_key)).name
    statements = [
        f'UPDATE {table.name} SET "{column}" = "{column}"',
        f"DELETE FROM {table.name}",
        f'DELETE FROM {table.name} WHERE "{column}" IS NOT NULL',
    ]
    if filled_url.startswith("sqlite"):
        names = ", ".join(f'"{c.name}"' for c in table.c)
        others = ", ".join(_other(c) for c in table.c)
        statements += [
            f"INSERT OR REPLACE INTO {table.name} SELECT * FROM {table.name}",
            f"INSERT OR REPLACE INTO {table.name} (rowid, {names}) SELECT rowid, {others} FROM {table.name}",
            f"UPDATE OR REPLACE {table.name} SET \"{column}\" = 'x'",
        ]
    else:
        statements += [
            f"TRUNCATE {table.name} CASCADE",
            f"INSERT INTO {table.name} SELECT * FROM {table.name} "
            f'ON CONFLICT ON CONSTRAINT pk_{table.name} DO UPDATE SET "{column}" = EXCLUDED."{column}"',
            f"SET session_replication_role = replica; DELETE FROM {table.name}",
        ]
    with connected(filled_url) as connection:
        before = content(connection, table)
        connection.rollback()
        assert before
        for statement in statements:
            with pytest.raises(IntegrityError, match=r"append-only|holds a row with this key"):
                connection.execute(text(statement))
            connection.rollback()
        assert content(connection, table) == before


def _other(column):
    """Return another value for every key column, so that only the rowid stands in the way."""
    if not column.primary_key and column.name not in ("product", "lot", "round"):
        return f'"{column.name}"'
    name = f'"{column.name}"'
    return f"{name} + 1000" if column.type.python_type is int else f"{name} || '-other'"


@pytest.mark.parametrize("table", APPEND_ONLY, ids=lambda table: table.name)
def test_the_same_statements_do_change_a_table_without_its_triggers(filled_url, table):
    """Show that else the test above would pass for a reason of its own."""
    with connected(filled_url) as connection:
        if filled_url.startswith("sqlite"):
            connection.execute(text(f"DROP TRIGGER {table.name}_no_delete"))
            connection.execute(text("PRAGMA defer_foreign_keys = ON"))
        else:
            connection.execute(text(f"DROP TRIGGER {table.name}_no_change ON {table.name}"))
        connection.execute(text(f"DELETE FROM {table.name}"))
        assert content(connection, table) == []
        connection.rollback()
