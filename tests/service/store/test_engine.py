"""Connections as they must be, and which driver errors mean "try again"."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from sqlalchemy import text
from sqlalchemy.exc import IntegrityError, ProgrammingError

from service.errors import SettingsError, Unavailable
from service.store import engine as engines
from service.store.engine import driver_errors, make_engine, parse_url, sqlite_file
from service.store.unit_of_work import Database
from tests.service.store.examples import connected


@pytest.mark.parametrize(
    "url",
    ["sqlite://", "sqlite:///:memory:", "sqlite:////tmp/x?mode=ro", "mysql://a:secret@b/c", "a:secret b", ""],
)
def test_urls_that_cannot_be_used_are_refused_without_showing_them(url):
    with pytest.raises(SettingsError) as caught:
        parse_url(url)
    assert "secret" not in caught.value.message


def test_urls_get_their_driver():
    assert parse_url("postgresql://a@b/c").drivername == "postgresql+psycopg"
    assert str(sqlite_file("sqlite:////data/plant.sqlite3")) == "/data/plant.sqlite3"
    assert sqlite_file("postgresql://a@b/c") is None


def test_sqlite_is_durable_and_checks_references(sqlite_template):
    with connected(f"sqlite:///{sqlite_template}") as connection:
        found = {
            name: connection.exec_driver_sql(f"PRAGMA {name}").scalar()
            for name in ("journal_mode", "synchronous", "foreign_keys", "busy_timeout", "recursive_triggers")
        }
    # synchronous 2 is FULL: SQLite documentation, pragma synchronous (from memory)
    assert found == {
        "journal_mode": "wal",
        "synchronous": 2,
        "foreign_keys": 1,
        "busy_timeout": 5000,
        "recursive_triggers": 1,
    }


def test_postgresql_ends_a_session_that_hangs_in_a_transaction(postgresql_server):
    with connected(postgresql_server) as connection:
        for name in ("idle_in_transaction_session_timeout", "statement_timeout"):
            assert connection.execute(text(f"SHOW {name}")).scalar() == "10s"
        assert connection.execute(text("SHOW lock_timeout")).scalar() == "5s"
        assert connection.execute(text("SHOW synchronous_commit")).scalar() == "on"


def test_ddl_is_rolled_back_with_its_transaction(database_url):
    with connected(database_url) as connection:
        connection.execute(text("CREATE TABLE passing (a TEXT)"))
        connection.execute(text("INSERT INTO passing VALUES ('x')"))
        connection.rollback()
        with pytest.raises(Exception, match="passing"):
            connection.execute(text("SELECT * FROM passing"))


def test_a_busy_sqlite_file_is_unavailable_and_readers_are_not_stopped(
    sqlite_template, tmp_path, monkeypatch
):
    monkeypatch.setattr(engines, "BUSY_TIMEOUT_MS", 50)
    database = Database(f"sqlite:///{sqlite_template}")
    with database.writing(["tower-1"]), database.reading() as reader:
        assert reader.ledger.heads() == {}
        with pytest.raises(Unavailable) as caught, database.writing(["tower-2"]):
            pass
    assert caught.value.retry_after == 1
    database.close()


def test_a_server_out_of_reach_is_unavailable(tmp_path):
    database = Database(f"postgresql://nobody@/none?host={tmp_path}")
    with pytest.raises(Unavailable), database.reading():
        pass
    with pytest.raises(Unavailable), database.writing(["tower-1"]):
        pass


def test_a_statement_that_takes_too_long_is_unavailable(postgresql_server):
    with connected(postgresql_server) as connection:
        connection.execute(text("SET statement_timeout = 20"))
        with pytest.raises(Unavailable), driver_errors():
            connection.execute(text("SELECT pg_sleep(5)"))


def test_a_fault_of_ours_is_not_hidden_as_unavailable(database_url):
    with connected(database_url) as connection:
        with pytest.raises(Exception, match="nowhere") as caught, driver_errors():
            connection.execute(text("SELECT * FROM nowhere"))
        assert not isinstance(caught.value, Unavailable)
        connection.rollback()
        with pytest.raises(IntegrityError), driver_errors():
            connection.execute(text("INSERT INTO revision (id, revision) VALUES (1, 0)"))
    assert not engines.means_unavailable(ProgrammingError("x", None, ValueError()))
    assert not engines.means_unavailable(ValueError())


def test_a_damaged_sqlite_file_is_not_called_busy(sqlite_template, tmp_path):
    file = tmp_path / "damaged.sqlite3"
    content = bytearray(sqlite_template.read_bytes())
    content[:16] = b"no SQLite header"
    file.write_bytes(content)
    database = Database(f"sqlite:///{file}")
    with pytest.raises(Exception, match="not a database") as caught, database.reading() as unit:
        unit.ledger.heads()
    assert not isinstance(caught.value, Unavailable)
    database.close()


def test_without_the_driver_the_extra_is_named(monkeypatch):
    def missing(*_args, **_options):
        raise ModuleNotFoundError("No module named 'psycopg'")

    monkeypatch.setattr(engines, "create_engine", missing)
    with pytest.raises(SettingsError, match=r"shoalmark\[postgres\]"):
        make_engine("postgresql://a@b/c")


FORK = """
import os, sys
from service.store.unit_of_work import Database
from service.store.writer import Writer
from tests.service.store.examples import note, texts

database = Database(sys.argv[1])
writer = Writer(database)
writer.submit(note("parent"))
child = os.fork()
if child == 0:
    status = 1
    try:
        writer.submit(note("child"))
        status = 0 if texts(database) == ["parent", "child"] else 2
    finally:
        os._exit(status)
assert os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) == 0
writer.submit(note("parent again"))
writer.close()
assert texts(database) == ["parent", "child", "parent again"]
"""


def test_a_forked_child_has_connections_and_a_writer_of_its_own(database_url):
    root = Path(__file__).parents[3]
    done = subprocess.run(
        [sys.executable, "-c", FORK, database_url], cwd=root, capture_output=True, text=True, timeout=30
    )
    assert (done.returncode, done.stderr) == (0, "")
