"""Whoever gets past the triggers and alters the record is found, and the first altered entry is named."""

from __future__ import annotations

import pytest
from sqlalchemy import text

from service.ledger import Anchor
from service.store.acts import perform_now
from service.store.engine import make_engine
from service.store.unit_of_work import Database
from service.store.verification import verify
from tests.service.store.examples import LINE, drop_triggers, execute, judge, note


@pytest.fixture
def record(database):
    """Return the entries of a record with two chains, decisions and a key."""
    acts = [judge("A"), judge("B", "hold"), note(key="key-0001"), judge("C"), note(chain="plant")]
    return [perform_now(database, act).entry for act in acts]


def without_references(url, *statements):
    """Execute statements with the checks of references off, which the owner of a database can do."""
    engine = make_engine(url, migrating=True)
    with engine.begin() as connection:
        if engine.dialect.name == "postgresql":
            for table in ("decisions", "readings", "lots", "idempotency_keys"):
                connection.execute(text(f"ALTER TABLE {table} DROP CONSTRAINT fk_{table}_entries"))
        for statement in statements:
            connection.execute(text(statement))
    engine.dispose()


def test_a_whole_record_is_called_whole_with_its_heads(database, record):
    anchors = [Anchor(entry.chain, entry.sequence, entry.hash) for entry in record]
    verification = verify(database, anchors)
    assert verification.whole
    found = [(chain.chain, chain.entries, chain.hash) for chain in verification.chains]
    assert found == [("plant", 1, record[4].hash), ("tower-1", 4, record[3].hash)]


def test_an_empty_record_is_whole(database):
    assert verify(database).whole


def altered(finding, sequence, detail, chain=LINE):
    assert finding is not None
    assert (finding.chain, finding.sequence) == (chain, sequence)
    assert detail in finding.detail


def test_one_altered_byte_in_the_file_is_named(database, record, database_url):
    """On SQLite the byte is changed in the file itself, past every trigger."""
    body = record[1].body
    changed = body.replace(b'"outcome":"hold"', b'"outcome":"gold"')
    if database_url.startswith("sqlite"):
        execute(database_url, "PRAGMA user_version = 1")
        database.close()
        with_wal = make_engine(database_url)
        with with_wal.connect() as connection:
            connection.exec_driver_sql("PRAGMA user_version")
            connection.rollback()
            raw = connection.connection.driver_connection
            assert raw.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchone()[0] == 0
        with_wal.dispose()
        file = database_url.removeprefix("sqlite:///")
        with open(file, "rb+") as stream:
            content = stream.read()
            assert content.count(body) == 1
            stream.seek(content.index(body) + body.index(b'"hold"') + 1)
            stream.write(b"g")
    else:
        drop_triggers(database_url, "entries")
        execute(
            database_url,
            "UPDATE entries SET body = :body WHERE chain = 'tower-1' AND sequence = 2",
            values={"body": changed},
        )
    altered(verify(database).finding, 2, "hash is not that of the entry's bytes")


@pytest.mark.parametrize(
    ("statement", "sequence", "detail"),
    [
        ("UPDATE entries SET kind = 'note' WHERE chain = 'tower-1' AND sequence = 2", 2, "column kind"),
        ("UPDATE entries SET actor = 'x' WHERE chain = 'tower-1' AND sequence = 3", 3, "column actor"),
        ("UPDATE entries SET hash = 'x' WHERE chain = 'tower-1' AND sequence = 1", 1, "hash is not that"),
        ("UPDATE entries SET sequence = 9 WHERE chain = 'tower-1' AND sequence = 4", 4, "entry 4 is missing"),
        ("UPDATE entries SET sequence = 0 WHERE chain = 'tower-1' AND sequence = 1", 1, "sequence goes back"),
        ("DELETE FROM entries WHERE chain = 'tower-1' AND sequence = 2", 2, "entry 2 is missing"),
        ("DELETE FROM entries WHERE chain = 'tower-1' AND sequence = 4", 3, "head names entry 4"),
        ("UPDATE chains SET hash = 'x' WHERE chain = 'tower-1'", 4, "head names entry 4 (x...)"),
        ("UPDATE chains SET sequence = 3 WHERE chain = 'tower-1'", 4, "head names entry 3"),
        ("DELETE FROM chains WHERE chain = 'tower-1'", None, "no head"),
    ],
)
def test_altered_entries_and_heads_are_named(database, record, database_url, statement, sequence, detail):
    drop_triggers(database_url, "entries")
    without_references(database_url, statement)
    altered(verify(database).finding, sequence, detail)


def test_a_body_that_became_text_is_a_finding_too(sqlite_template, tmp_path):
    file = tmp_path / "plant.sqlite3"
    file.write_bytes(sqlite_template.read_bytes())
    url = f"sqlite:///{file}"
    database = Database(url)
    perform_now(database, note("over"))
    drop_triggers(url, "entries")
    execute(url, "UPDATE entries SET body = replace(CAST(body AS TEXT), 'over', 'under')")
    altered(verify(database).finding, 1, "hash is not that")
    execute(url, "UPDATE entries SET body = 'x', sequence = 'first'")
    altered(verify(database).finding, 1, "another type")
    database.close()


def test_a_chain_cut_off_with_its_head_is_found_by_an_anchor_alone(database, record, database_url):
    for table in ("entries", "decisions", "readings"):
        drop_triggers(database_url, table)
    where = "WHERE chain = 'tower-1' AND sequence = 4"
    cut = [f"DELETE FROM {table} {where}" for table in ("entries", "decisions", "readings", "lots")]
    last = "FROM entries WHERE chain = 'tower-1' AND sequence = 3"
    head = (
        f"UPDATE chains SET sequence = 3, hash = (SELECT hash {last}), "
        f"recorded_at = (SELECT recorded_at {last}) WHERE chain = 'tower-1'"
    )
    without_references(database_url, *cut, head)
    finding = verify(database).finding
    assert finding is not None
    assert "triggers" in finding.detail  # all that still shows: the triggers are gone
    altered(verify(database, [Anchor(LINE, 4, record[3].hash)]).finding, 4, "ends at 3")
    altered(verify(database, [Anchor("tower-9", 1, "f" * 64)]).finding, 1, "ends at 0", chain="tower-9")


@pytest.mark.parametrize("table", ["decisions", "readings", "idempotency_keys"])
def test_rows_that_name_no_entry_are_found(database, record, database_url, table):
    drop_triggers(database_url, table)
    without_references(
        database_url, f"UPDATE {table} SET sequence = 77 WHERE sequence = (SELECT max(sequence) FROM {table})"
    )
    altered(verify(database).finding, 77, f"a row of {table}")


def test_a_decision_whose_row_is_gone_or_moved_is_found(database, record, database_url):
    drop_triggers(database_url, "decisions")
    execute(
        database_url, "UPDATE decisions SET recorded_at = '2026-01-01T00:00:00.000000Z' WHERE sequence = 2"
    )
    altered(verify(database).finding, 2, "a row of decisions")
    execute(database_url, "DELETE FROM decisions WHERE sequence = 2")
    altered(verify(database).finding, 2, "no row in decisions")


@pytest.mark.parametrize("table", ["entries", "studies"])
def test_missing_triggers_are_found(database, record, database_url, table):
    drop_triggers(database_url, table)
    finding = verify(database).finding
    assert finding is not None
    assert f"{table}.{table}_no_" in finding.detail


def test_a_trigger_that_was_switched_off_is_found(postgresql):
    execute(postgresql.url, "ALTER TABLE entries DISABLE TRIGGER entries_no_change")
    finding = verify(postgresql).finding
    assert finding is not None
    assert "entries.entries_no_change" in finding.detail
