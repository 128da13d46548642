"""What only the store's tests need."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from service.store.unit_of_work import Database
from service.store.writer import Writer


@pytest.fixture(params=["sqlite", "postgresql"])
def empty_url(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Return the URL of a database that no migration has touched."""
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'empty.sqlite3'}"
    return str(request.getfixturevalue("postgresql_database")(None))


@pytest.fixture
def postgresql(
    postgresql_database: Callable[[str | None], str], postgresql_template: str
) -> Iterator[Database]:
    """Return a migrated database on PostgreSQL: for what SQLite, with one writer at a time, cannot show."""
    database = Database(postgresql_database(postgresql_template))
    yield database
    database.close()


@pytest.fixture
def writer(database: Database) -> Iterator[Writer]:
    writer = Writer(database)
    yield writer
    writer.close()
