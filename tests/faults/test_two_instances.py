"""Two serving processes on one PostgreSQL: one record, one truth (design.md, promises 1 to 3)."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from rich.console import Console

from service.demo import plant as documents
from service.demo.run import open_accounts
from service.demo.walk import Access, Walk
from service.settings import load_settings
from tests.faults.server import Server, free_port, run_command
from tests.faults.test_killed_server import request_for

Instances = tuple[Server, Server, Access]


@pytest.fixture(scope="module")
def instances(
    postgresql_server: str, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[tuple[Server, Server, Access]]:
    from tests.conftest import execute_on, url_on

    execute_on(postgresql_server, "CREATE DATABASE shoalmark_two_instances")
    url = url_on(postgresql_server, "shoalmark_two_instances")
    folders = [tmp_path_factory.mktemp("instance") for _ in range(2)]
    access = open_accounts(
        load_settings({"SHOALMARK_DATA_FOLDER": str(folders[0]), "SHOALMARK_DATABASE_URL": url})
    )
    first, second = (Server(folder, free_port(), {"database_url": url}) for folder in folders)
    first.start()
    second.start()
    Walk(first.client(), access, Console(quiet=True)).set_up()
    yield first, second, access
    first.stop()
    second.stop()
    execute_on(postgresql_server, "DROP DATABASE shoalmark_two_instances WITH (FORCE)")


def test_an_approval_answered_by_one_is_honoured_by_the_next_decision_of_the_other(
    instances: Instances,
) -> None:
    first, second, access = instances
    before = second.client().post(access.line, "/v1/decisions", request_for("P-1"))
    assert before["verdicts"][0]["budget"]["version"] == 1
    client = first.client()
    document = documents.budget() | {"reason": "a second version"}
    path = f"/v1/budgets/{documents.BUDGET}/versions"
    client.post(access.engineer, path, document)
    client.post(access.engineer, f"{path}/2/submit")
    act = {"reason": "checked", "signature": {"password": access.approver_password}}
    client.post(access.approver, f"{path}/2/approve", act)
    after = second.client().post(access.line, "/v1/decisions", request_for("P-2"))
    assert after["verdicts"][0]["budget"]["version"] == 2


def test_a_key_used_at_one_is_known_to_the_other(instances: Instances) -> None:
    first, second, access = instances
    answer = first.client().post(access.line, "/v1/decisions", request_for("P-3"), key="shared-key-1")
    replay = second.client().call(
        "POST",
        "/v1/decisions",
        access.line,
        request_for("P-3"),
        headers={"Idempotency-Key": "shared-key-1"},
    )
    assert (replay.status, replay.document) == (201, answer)


def test_of_many_askers_about_one_lot_exactly_one_is_answered(instances: Instances) -> None:
    first, second, access = instances
    statuses: list[int] = []

    def ask(server: Server, number: int) -> None:
        answer = server.client().call(
            "POST",
            "/v1/decisions",
            access.line,
            request_for("P-4"),
            headers={"Idempotency-Key": f"race-for-a-lot-{number}"},
        )
        statuses.append(answer.status)

    together([lambda n=n: ask((first, second)[n % 2], n) for n in range(8)])
    assert sorted(statuses) == [201] + [409] * 7


def test_the_record_written_by_both_is_whole(instances: Instances, tmp_path: Path) -> None:
    first, second, access = instances
    lots: list[dict[str, Any]] = []

    def ask(server: Server, worker: int) -> None:
        client = server.client()
        for number in range(25):
            lot = f"P-{worker}-{number}"
            lots.append(client.post(access.line, "/v1/decisions", request_for(lot), key=f"both-{lot}"))

    together([lambda n=n: ask((first, second)[n % 2], n) for n in range(4)])
    assert len({lot["id"] for lot in lots}) == 100
    verified = run_command("verify", data_folder=tmp_path, **first.settings)
    assert "The record is whole." in verified.stdout, verified.stderr


def test_another_schema_is_refused_and_the_command_is_named(
    postgresql_database: Callable[[str | None], str], tmp_path: Path
) -> None:
    result = run_command("serve", data_folder=tmp_path, database_url=postgresql_database(None), port=1)
    assert result.returncode == 1
    assert "shoalmark migrate" in result.stderr


def together(asks: list[Callable[[], None]]) -> None:
    threads = [threading.Thread(target=ask) for ask in asks]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
