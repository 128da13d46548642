"""Migrations are the only way a database is made: no drift, one head, triggers, copies, refusals."""

from __future__ import annotations

import re
import shutil
import sqlite3
import tomllib
from contextlib import closing
from pathlib import Path

import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import CheckConstraint, inspect, text

from service.errors import SchemaMismatch, SettingsError
from service.store import schema
from service.store.dump import dump_schema
from service.store.tables import APPEND_ONLY, metadata
from service.store.triggers import expected_triggers, present_triggers
from service.store.unit_of_work import Database
from tests.service.store.examples import connected, execute

RELEASES = Path(__file__).with_name("releases")
ROOT = Path(__file__).parents[3]


def test_models_and_migrations_do_not_differ(database_url):
    with connected(database_url) as connection:
        context = MigrationContext.configure(
            connection, opts={"compare_type": True, "compare_server_default": True}
        )
        differences = compare_metadata(context, metadata)
        # alembic does not compare these
        inspector = inspect(connection)
        for table in metadata.tables.values():
            keys = [column.name for column in table.primary_key]
            assert inspector.get_pk_constraint(table.name)["constrained_columns"] == keys
            checks = {check["name"] for check in inspector.get_check_constraints(table.name)}
            assert checks == {c.name for c in table.constraints if isinstance(c, CheckConstraint)}
    assert differences == []


def test_drift_would_be_seen(database_url):
    execute(database_url, "ALTER TABLE lots ADD COLUMN remark TEXT")
    with pytest.raises(AssertionError):
        test_models_and_migrations_do_not_differ(database_url)


def test_there_is_one_head():
    assert ScriptDirectory.from_config(schema.configuration()).get_heads() == [schema.head()]
    assert schema.head() in schema.known_revisions()


def test_no_migration_alters_the_record_in_batch():
    record = {table.name for table in APPEND_ONLY}
    for file in (Path(schema.__file__).parent / "migrations" / "versions").glob("*.py"):
        assert not record & set(re.findall(r"batch_alter_table\(\s*[\"'](\w+)", file.read_text()))


def test_the_triggers_are_there_after_the_upgrade(database):
    with database.reading() as unit:
        assert present_triggers(unit.session) == expected_triggers(
            postgresql=database.dialect == "postgresql"
        )


def test_migrating_twice_changes_nothing(database_url):
    before = dump_schema(database_url)
    assert schema.migrate(database_url) == schema.head() == schema.current(database_url)
    assert dump_schema(database_url) == before


def test_a_schema_that_is_not_this_programs_is_refused_with_the_command(empty_url):
    assert schema.current(empty_url) is None
    with pytest.raises(SchemaMismatch, match="no schema yet: run `shoalmark migrate`"):
        schema.check_current(empty_url)
    schema.migrate(empty_url)
    schema.check_current(empty_url)
    execute(empty_url, "UPDATE alembic_version SET version_num = '9999'")
    for attempt in (schema.check_current, schema.migrate):
        with pytest.raises(SchemaMismatch, match="9999, which this program does not know"):
            attempt(empty_url)


def test_tables_that_no_migration_made_are_not_taken_over(empty_url):
    execute(empty_url, "CREATE TABLE entries (chain TEXT)")
    with pytest.raises(SchemaMismatch, match="no migration made: entries"):
        schema.migrate(empty_url)


def test_a_migration_that_fails_leaves_nothing_behind(empty_url, monkeypatch):
    monkeypatch.setattr(schema, "_grant", lambda *_: (_ for _ in ()).throw(RuntimeError("power cut")))
    monkeypatch.setattr(schema, "sqlite_file", lambda _url: None)
    with pytest.raises(RuntimeError, match="power cut"):
        schema.migrate(empty_url, service_role="line")
    assert schema.current(empty_url) is None
    with connected(empty_url) as connection:
        assert inspect(connection).get_table_names() == []


def older_scripts(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Let this program have one more migration than the database."""
    folder = tmp_path / "migrations"
    shutil.copytree(schema._MIGRATIONS, folder, ignore=shutil.ignore_patterns("__pycache__"))
    (folder / "versions" / "9000_next.py").write_text(
        f"from alembic import op\nrevision = '9000'\ndown_revision = '{schema.head()}'\n"
        "def upgrade():\n    op.execute('CREATE TABLE following (code TEXT)')\n"
    )
    monkeypatch.setattr(schema, "_MIGRATIONS", folder)


def test_an_older_sqlite_file_is_copied_before_it_is_migrated(sqlite_template, tmp_path, monkeypatch):
    file = tmp_path / "plant.sqlite3"
    shutil.copyfile(sqlite_template, file)
    url, first = f"sqlite:///{file}", schema.head()
    older_scripts(tmp_path, monkeypatch)
    execute(url, "UPDATE revision SET revision = 41")
    with pytest.raises(SchemaMismatch, match=f"schema {first}, this program needs 9000: run"):
        schema.check_current(url)
    copy = schema.migrate_with_copy(url)
    assert copy == tmp_path / f"plant.sqlite3.before-{first}"
    assert (schema.current(url), schema.current(f"sqlite:///{copy}")) == ("9000", first)
    with closing(sqlite3.connect(copy)) as connection:
        assert connection.execute("SELECT revision FROM revision").fetchall() == [(41,)]
    assert schema.migrate_with_copy(url) is None


def test_a_new_sqlite_file_is_made_without_a_copy_and_a_newer_one_is_refused(tmp_path):
    url = f"sqlite:///{tmp_path / 'folder' / 'plant.sqlite3'}"
    assert schema.migrate_with_copy(url) is None
    schema.check_current(url)
    execute(url, "UPDATE alembic_version SET version_num = '9999'")
    with pytest.raises(SchemaMismatch, match="use a newer program"):
        schema.migrate_with_copy(url)
    assert [path.name for path in (tmp_path / "folder").glob("*before*")] == []


def test_the_service_does_not_migrate_postgresql_by_itself(postgresql_database):
    with pytest.raises(SettingsError, match="run `shoalmark migrate`"):
        schema.migrate_with_copy(postgresql_database(None))


def test_a_dump_is_kept_for_this_version():
    version = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]
    for dialect in ("sqlite", "postgresql"):
        assert (RELEASES / f"{version}.{dialect}.sql").exists()


def releases() -> list[str]:
    return sorted({path.name.removesuffix(".sqlite.sql") for path in RELEASES.glob("*.sqlite.sql")})


@pytest.mark.parametrize("release", releases())
def test_every_release_is_upgraded_to_the_schema_of_a_new_database(release, empty_url, tmp_path, request):
    postgresql = empty_url.startswith("postgresql")
    dialect = "postgresql" if postgresql else "sqlite"
    with connected(empty_url) as connection:
        for statement in (RELEASES / f"{release}.{dialect}.sql").read_text().splitlines():
            # psycopg reads a percent sign as a parameter
            statement = statement.replace("%", "%%") if postgresql else statement
            connection.exec_driver_sql(statement.removesuffix(";"))
        connection.commit()
    assert schema.current(empty_url) in schema.known_revisions()
    schema.migrate(empty_url)
    new = f"sqlite:///{tmp_path / 'new.sqlite3'}"
    if postgresql:
        new = request.getfixturevalue("postgresql_database")(None)
    schema.migrate(new)
    assert dump_schema(empty_url) == dump_schema(new)


def test_the_service_role_may_add_to_the_record_but_not_change_it(
    postgresql_server, postgresql_database, request
):
    url = postgresql_database(None)
    role = f"line_{url.rpartition('/')[2].partition('?')[0][-12:]}"
    execute(url, f"CREATE ROLE {role} LOGIN PASSWORD 'flow'")
    request.addfinalizer(lambda: execute(postgresql_server, f"DROP ROLE {role}"))
    schema.migrate(url, service_role=role)
    with connected(url) as connection:
        query = text(
            "SELECT t.relname, r.privilege FROM pg_class t, "
            "unnest(ARRAY['SELECT','INSERT','UPDATE','DELETE','TRUNCATE','TRIGGER']) AS r(privilege) "
            "WHERE t.relkind = 'r' AND t.relnamespace = 'public'::regnamespace "
            "AND has_table_privilege(:role, t.oid, r.privilege)"
        )
        rights: dict[str, set[str]] = {}
        for table, right in connection.execute(query, {"role": role}):
            rights.setdefault(table, set()).add(right)
        connection.execute(text(f"SET ROLE {role}"))
        with pytest.raises(Exception, match="permission denied"):
            connection.execute(text("DELETE FROM entries"))
    record = {table.name for table in APPEND_ONLY}
    for name in metadata.tables:
        expected = {"SELECT", "INSERT"} if name in record else {"SELECT", "INSERT", "UPDATE", "DELETE"}
        assert rights.pop(name) == expected
    assert rights == {"alembic_version": {"SELECT"}}
    execute(url, f"DROP OWNED BY {role}")


@pytest.mark.parametrize("role", ["nobody-here", "absent", "postgres"])
def test_a_service_role_that_cannot_be_used_is_refused(role, postgresql_database):
    url = postgresql_database(None)
    with pytest.raises(SettingsError, match=r"no name of a role|does not exist|owns the tables"):
        schema.migrate(url, service_role=role)
    assert schema.current(url) is None


def test_sqlite_has_no_service_role(tmp_path):
    with pytest.raises(SettingsError, match="no roles"):
        schema.migrate(f"sqlite:///{tmp_path / 'x'}", service_role="line")


def test_a_migrated_database_can_be_opened(database: Database):
    with database.reading() as unit:
        assert (unit.revision(), unit.ledger.heads()) == (0, {})
