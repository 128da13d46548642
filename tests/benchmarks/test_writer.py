"""Durable entries per second: the writer's group commit beside a bare INSERT and COMMIT for each.

The bare statements go through the driver alone, with no SQLAlchemy, no hash, no chain and no key, so they
are the most that an own commit per entry could reach. ``pytest --benchmark-enable`` shows the figures.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from typing import Any

import pytest

from service.store.engine import parse_url
from service.store.unit_of_work import Database
from service.store.verification import verify
from service.store.writer import Act, Writer

CLIENTS = 8
ENTRIES = 1600
BODY = {"lot": "W26-04711", "outcome": "release", "verdicts": [{"estimate": 3.135, "text": "x" * 60}] * 8}
INSERT = (
    "INSERT INTO entries (chain, sequence, recorded_at, actor, kind, previous, hash, body) "
    "VALUES ('tower-1', {0}, '2026-03-02T05:12:43.120934Z', 'mes', 'bare', 'p', 'h', {0})"
)


def bare(url: str, rounds: list[int]) -> None:
    """Insert and commit one entry after the other on one connection."""
    rounds.append(1)
    body = b"x" * 1000
    first = len(rounds) * ENTRIES
    if url.startswith("sqlite"):
        with closing(sqlite3.connect(url.removeprefix("sqlite:///"), isolation_level=None)) as connection:
            connection.execute("PRAGMA synchronous = FULL")
            for sequence in range(first, first + ENTRIES):
                connection.execute("BEGIN IMMEDIATE")
                connection.execute(INSERT.format("?1").replace("?1)", "?2)"), (sequence, body))
                connection.execute("COMMIT")
        return
    import psycopg

    with psycopg.connect(
        parse_url(url).set(drivername="postgresql").render_as_string(hide_password=False)
    ) as pg:
        statement = INSERT.replace("{0}", "%s")
        for sequence in range(first, first + ENTRIES):
            pg.execute(statement, (sequence, body))
            pg.commit()


def through_the_writer(writer: Writer, rounds: list[int], clients: int) -> None:
    """Submit the same number of keyed acts from several threads and wait for all answers."""
    rounds.append(1)

    def client(number: int) -> None:
        for n in range(ENTRIES // clients):
            key = f"{len(rounds)}-{number}-{n:06}"
            perform = lambda unit: unit.append("tower-1", "decision-like", "mes", BODY)  # noqa: E731
            assert not writer.submit(Act(frozenset({"tower-1"}), "mes", perform, key, "f"), 60).earlier

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


def test_a_batch_costs_far_less_than_its_acts_alone(
    database: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The shape of the cost, not seconds: the number of transactions does not grow with that of acts."""
    from service.store.acts import perform_batch
    from service.store.unit_of_work import UnitOfWork

    statements: list[object] = []
    execute = UnitOfWork.commit
    monkeypatch.setattr(UnitOfWork, "commit", lambda unit: (statements.append(unit), execute(unit))[1])

    def act(n: int) -> Act:
        return Act(
            frozenset({"tower-1"}), "mes", lambda u: u.append("tower-1", "n", "mes", {}), f"key-{n:05}", "f"
        )

    perform_batch(database, [act(n) for n in range(256)])
    assert len(statements) == 1
