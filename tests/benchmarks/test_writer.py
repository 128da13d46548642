"""Durable entries per second: the writer's group commit beside a bare INSERT and COMMIT for each.

The bare statements go through the driver alone, with no SQLAlchemy, no hash, no chain and no key, so they
are the most that an own commit per entry could reach. ``pytest --benchmark-enable`` shows the figures.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from typing import Any

import psycopg
import pytest

from service.ledger import Entry
from service.store.acts import perform_batch
from service.store.engine import parse_url
from service.store.session import Session
from service.store.unit_of_work import Database, UnitOfWork
from service.store.verification import verify
from service.store.writer import Act, Writer
from tests.conftest import execute_on

CLIENTS = 8
ENTRIES = 1600
BODY = {"lot": "W26-04711", "outcome": "release", "verdicts": [{"estimate": 3.135, "text": "x" * 60}] * 8}
INSERT = (
    "INSERT INTO entries (chain, sequence, recorded_at, actor, kind, previous, hash, body) "
    "VALUES ('tower-1', {mark}, '2026-03-02T05:12:43.120934Z', 'mes', 'bare', 'p', 'h', {mark})"
)


@pytest.fixture(autouse=True, scope="module")
def durable_server(postgresql_server: str) -> Iterator[None]:
    """Let the server that the tests started write through to the disk, as one in a plant does."""
    if os.environ.get("TEST_DATABASE_URL"):
        yield
        return
    for setting in ("on", "off"):
        execute_on(postgresql_server, f"ALTER SYSTEM SET fsync = {setting}")
        execute_on(postgresql_server, "SELECT pg_reload_conf()")
        if setting == "on":
            yield


def bare(url: str, rounds: list[int]) -> None:
    """Insert and commit one entry after the other on one connection."""
    rounds.append(1)
    rows = [(len(rounds) * ENTRIES + n, b"x" * 1000) for n in range(ENTRIES)]
    if url.startswith("sqlite"):
        with closing(sqlite3.connect(url.removeprefix("sqlite:///"), isolation_level=None)) as connection:
            connection.execute("PRAGMA synchronous = FULL")
            for row in rows:
                connection.execute("BEGIN IMMEDIATE")
                connection.execute(INSERT.format(mark="?"), row)
                connection.execute("COMMIT")
        return
    plain = parse_url(url).set(drivername="postgresql").render_as_string(hide_password=False)
    with psycopg.connect(plain) as server:
        for row in rows:
            server.execute(INSERT.format(mark="%s"), row)
            server.commit()


def keep_decision(unit: UnitOfWork) -> Entry:
    """Append an entry of a decision's size."""
    return unit.append("tower-1", "note", "mes", BODY)


def an_act(key: str) -> Act:
    """Return a keyed act."""
    return Act(frozenset({"tower-1"}), "mes", keep_decision, key, "fingerprint")


def through_the_writer(writer: Writer, rounds: list[int], clients: int) -> None:
    """Submit as many keyed acts from several threads and wait for all answers."""
    rounds.append(1)

    def client(number: int) -> None:
        for n in range(ENTRIES // clients):
            assert not writer.submit(an_act(f"{len(rounds)}-{number}-{n:06}"), 60).earlier

    with ThreadPoolExecutor(clients) as pool:
        list(pool.map(client, range(clients)))


@pytest.mark.benchmark(group="durable entries")
def test_bare_insert_and_commit(benchmark: Callable[..., Any], database_url: str) -> None:
    benchmark.pedantic(bare, args=(database_url, []), rounds=3)  # type: ignore[attr-defined]


@pytest.mark.benchmark(group="durable entries")
@pytest.mark.parametrize("clients", [CLIENTS, 8 * CLIENTS])
def test_group_commit(benchmark: Callable[..., Any], database: Database, clients: int) -> None:
    writer = Writer(database)
    rounds: list[int] = []
    benchmark.pedantic(through_the_writer, args=(writer, rounds, clients), rounds=3)  # type: ignore[attr-defined]
    writer.close()
    verification = verify(database)
    assert verification.whole
    assert verification.chains[0].entries == len(rounds) * ENTRIES


def test_a_batch_is_one_transaction_whatever_its_size(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The shape of the cost, not seconds: neither commits nor statements grow with the number of acts."""
    executed: list[object] = []
    execute = Session._execute
    monkeypatch.setattr(Session, "_execute", lambda *a: (executed.append(a), execute(*a))[1])

    counts = []
    for size, first in ((1, 1000), (16, 2000), (256, 3000)):
        executed.clear()
        perform_batch(database, [an_act(f"key-{first + n}") for n in range(size)])
        counts.append(len(executed))
    assert counts[2] == counts[1] <= counts[0]  # the first act of a chain takes some more
