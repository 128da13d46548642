"""Whoever alters a table that decisions are made from, instead of an entry, is found as well."""

from __future__ import annotations

import shutil
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pytest

from service import create_app, create_services
from service.demo.run import open_accounts
from service.settings import load_settings
from service.store.tables import APPEND_ONLY
from service.store.unit_of_work import Database
from service.workflows.accounts import add_token, revoke_token
from service.workflows.ledger import verify_record
from tests.project.test_documents import Caller, documents_of


@pytest.fixture(scope="module")
def template(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Build the demo plant with a few decisions."""
    folder = tmp_path_factory.mktemp("record")
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(folder)})
    access = open_accounts(settings)
    services = create_services(settings)
    list(documents_of(Caller(create_app(services).test_client(), access)))
    revoke_token(services.database, add_token(services.database, "old-mes", ("line",)).code)
    services.close()
    return folder / "shoalmark.sqlite3"


@pytest.fixture
def file(template: Path, tmp_path: Path) -> Path:
    return Path(shutil.copy(template, tmp_path))


@pytest.fixture
def database(file: Path) -> Iterator[Database]:
    database = Database(f"sqlite:///{file}")
    yield database
    database.close()


def alter(file: Path, statement: str) -> None:
    """Change a row past the triggers, which are put back as they were."""
    with closing(sqlite3.connect(file)) as connection:
        names = tuple(table.name for table in APPEND_ONLY)
        marks = ",".join("?" * len(names))
        triggers = connection.execute(
            f"SELECT name, sql FROM sqlite_master WHERE type = 'trigger' AND tbl_name IN ({marks})", names
        ).fetchall()
        for name, _ in triggers:
            connection.execute(f"DROP TRIGGER {name}")
        assert connection.execute(statement).rowcount == 1
        for _, sql in triggers:
            connection.execute(sql)
        connection.commit()


def test_a_record_with_everything_in_it_is_whole(database: Database) -> None:
    assert verify_record(database).whole


@pytest.mark.parametrize(
    ("statement", "words"),
    [
        (
            "UPDATE release_rules SET numbers = replace(numbers, '\"upper_acceptance_limit\":3.048',"
            " '\"upper_acceptance_limit\":3.148') WHERE specification = 'customer-b'"
            " AND characteristic = 'moisture' AND counts = '2'",
            "the rule customer-b/1/moisture/wmp-moisture-nir/1/2 stands in the tables other than",
        ),
        (
            "DELETE FROM release_rules WHERE specification = 'legal' AND characteristic = 'moisture'"
            " AND counts = '2,2'",
            "the rule legal/1/moisture/wmp-moisture-nir/1/2,2 is missing",
        ),
        (
            "UPDATE versions SET state = 'withdrawn' WHERE code = 'customer-b'",
            "the version specification/customer-b/1 stands in the tables other than",
        ),
        (
            "UPDATE versions SET product = 'butter' WHERE code = 'customer-b'",
            "the version specification/customer-b/1 stands in the tables other than",
        ),
        (
            "UPDATE lots SET line = 'tower-2' WHERE lot = 'W26-hold'",
            "does not stand as its last decision says",
        ),
        (
            "UPDATE versions SET lapses_at = NULL WHERE code = 'wmp-moisture-nir'",
            "the version budget/wmp-moisture-nir/1 stands in the tables other than",
        ),
        (
            "UPDATE master_documents SET document = replace(document, '3.0', '9.0') WHERE key = 'wmp-7'",
            "the master calibration/wmp-7 stands in the tables other than",
        ),
        (
            "UPDATE studies SET evaluation = replace(evaluation, '0.0', '0.1') WHERE code = 'moisture-scans'",
            "the study moisture-scans stands in the tables other than",
        ),
        (
            "UPDATE lots SET outcome = 'release' WHERE lot = 'W26-hold'",
            "does not stand as its last decision says",
        ),
        ("DELETE FROM lots WHERE lot = 'W26-reject'", "as if this decision had not been made"),
        (
            "UPDATE decisions SET product = 'butter' WHERE lot = 'W26-hold'",
            "does not stand as its last decision says",
        ),
        (
            "INSERT INTO release_rules SELECT specification, 9, characteristic, budget, budget_version,"
            " counts, numbers FROM release_rules WHERE specification = 'legal'"
            " AND characteristic = 'moisture' AND counts = '2'",
            "but no entry says so",
        ),
        (
            "DELETE FROM readings WHERE identity = '2026-03-02T05:12:03.120+00:00'",
            "the reading nir-1/2026-03-02T05:12:03.120+00:00/1 is missing from the readings",
        ),
        (
            "UPDATE readings SET sample = '9' WHERE identity = '2026-03-02T05:12:03.120+00:00'",
            "the reading nir-1/2026-03-02T05:12:03.120+00:00/1 is missing from the readings",
        ),
        (
            "UPDATE readings SET sequence = 1 WHERE identity = '2026-03-02T05:12:03.120+00:00'",
            "the reading nir-1/2026-03-02T05:12:03.120+00:00/1 stands in the tables as one of another",
        ),
        (
            "UPDATE readings SET taken_at = '2026-03-02T05:12:09.000+00:00'"
            " WHERE identity = '2026-03-02T05:12:03.120+00:00'",
            "the reading nir-1/2026-03-02T05:12:03.120+00:00/1 stands in the tables as taken at another time",
        ),
        (
            "INSERT INTO readings VALUES ('nir-1', '2026-03-02T05:12:55.120+00:00', '1', 'tower-1', 1, NULL)",
            "tower-1.1: the reading nir-1/2026-03-02T05:12:55.120+00:00/1 stands in the tables as judged",
        ),
        (
            "UPDATE people SET roles = 'engineer approver' WHERE code = 'engineer-a'",
            "the person engineer-a stands in the tables other than",
        ),
        (
            "UPDATE people SET disabled_at = '2026-01-01T00:00:00.000000Z' WHERE code = 'approver-b'",
            "the person approver-b stands in the tables other than",
        ),
        (
            "INSERT INTO people SELECT 'approver-c', name, roles, password_hash, chain, sequence, disabled_at"
            " FROM people WHERE code = 'approver-b'",
            "the person approver-c stands in the tables, but no entry says so",
        ),
        ("DELETE FROM people WHERE code = 'approver-b'", "the person approver-b is missing from the tables"),
        (
            "UPDATE tokens SET roles = 'line approver' WHERE code = 'mes.1'",
            "the token mes.1 stands in the tables other than",
        ),
        (
            "UPDATE tokens SET person = 'approver-b' WHERE code = 'engineer-a.1'",
            "the token engineer-a.1 stands in the tables other than",
        ),
        (
            "UPDATE tokens SET revoked_at = NULL WHERE code = 'old-mes.1'",
            "the token old-mes.1 stands in the tables other than",
        ),
        (
            "INSERT INTO tokens SELECT 'ghost.1', principal, person, roles, 'abc', created_at, revoked_at,"
            " chain, sequence FROM tokens WHERE code = 'engineer-a.1'",
            "the token ghost.1 stands in the tables, but no entry says so",
        ),
        ("DELETE FROM tokens WHERE code = 'old-mes.1'", "the token old-mes.1 is missing from the tables"),
    ],
)
def test_an_altered_table_is_named(file: Path, database: Database, statement: str, words: str) -> None:
    alter(file, statement)
    verification = verify_record(database)
    assert verification.finding is not None
    assert words in str(verification.finding)


def test_a_decision_and_its_lot_altered_alike_differ_from_the_entry(file: Path, database: Database) -> None:
    for table in ("decisions", "lots"):
        alter(file, f"UPDATE {table} SET outcome = 'release' WHERE lot = 'W26-hold'")
    assert "the columns of this decision differ" in str(verify_record(database).finding)
