"""What was answered survives the death of the process, and what was altered is found."""

from __future__ import annotations

import sqlite3
import threading
from contextlib import closing
from http.client import HTTPException
from pathlib import Path

from service.demo import plant as documents
from tests.faults.conftest import Plant
from tests.faults.server import run_command


def request_for(lot: str) -> documents.Document:
    first, second = (
        documents.reading("1", f"2026-03-02T06:12:{at}Z", 2.85, distance=1.2, temperature=24)
        | {"measurement": f"{lot}/{at}"}
        for at in ("04.120", "41.480")
    )
    return documents.decision_request(lot, [first, second])


def test_a_decision_survives_sigkill_and_the_record_is_whole(plant: Plant) -> None:
    client = plant.server.client()
    answer = client.post(plant.access.line, "/v1/decisions", request_for("K-1"), key="kill-test-1")
    assert answer["outcome"] == "release"
    plant.server.kill()

    plant.server.start()
    client = plant.server.client()
    found = client.get(plant.access.line, f"/v1/decisions/{answer['id']}")
    assert {name: found[name] for name in answer} == answer
    replayed = client.call(
        "POST",
        "/v1/decisions",
        plant.access.line,
        request_for("K-1"),
        headers={"Idempotency-Key": "kill-test-1"},
    )
    assert (replayed.status, replayed.document) == (201, answer)
    assert replayed.headers["recorded-earlier"] == "true"
    assert "The record is whole." in run_command("verify", data_folder=plant.server.folder).stdout


def test_every_answer_given_before_a_kill_under_load_is_in_the_record(plant: Plant) -> None:
    answered: dict[str, str] = {}

    def ask(worker: int) -> None:
        client = plant.server.client()
        for number in range(200):
            lot = f"L-{worker}-{number}"
            try:
                answer = client.post(plant.access.line, "/v1/decisions", request_for(lot), key=f"load-{lot}")
            except (OSError, HTTPException):  # a connection that broke within an answer gave none
                return
            answered[lot] = answer["entry"]["hash"]

    workers = [threading.Thread(target=ask, args=(number,)) for number in range(4)]
    for worker in workers:
        worker.start()
    while len(answered) < 60 and any(worker.is_alive() for worker in workers):
        workers[0].join(0.01)
    plant.server.kill()
    for worker in workers:
        worker.join()
    assert 60 <= len(answered) < 800

    plant.server.start()
    client = plant.server.client()
    for lot, entry_hash in answered.items():
        found = client.get(plant.access.line, f"/v1/lots/{documents.PRODUCT}/{lot}")
        assert found["last_decision"]["entry"]["hash"] == entry_hash
    assert "The record is whole." in run_command("verify", data_folder=plant.server.folder).stdout


def test_verify_names_an_entry_of_which_one_byte_was_changed(plant: Plant) -> None:
    client = plant.server.client()
    answers = [
        client.post(plant.access.line, "/v1/decisions", request_for(f"T-{n}"), key=f"tamper-{n}")
        for n in range(3)
    ]
    assert plant.server.stop() == 0
    file = plant.server.folder / "shoalmark.sqlite3"
    change_one_byte(file, b'"lot":"T-1"', b'"lot":"T-9"')
    result = run_command("verify", data_folder=plant.server.folder)
    assert result.returncode == 1
    assert answers[1]["id"] in result.stderr
    assert "NOT whole" in result.stderr


def change_one_byte(file: Path, old: bytes, new: bytes) -> None:
    """Change the file itself, behind the back of SQLite and its triggers."""
    with closing(sqlite3.connect(file)) as connection:
        connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    content = file.read_bytes()
    assert old in content
    file.write_bytes(content.replace(old, new, 1))


def test_a_second_serving_process_is_refused_and_says_who_serves(plant: Plant) -> None:
    result = run_command("serve", data_folder=plant.server.folder, port=1024 + plant.server.port % 1000)
    assert result.returncode == 1
    assert "another process (pid" in result.stderr
    assert "Traceback" not in result.stderr


def test_a_server_with_default_settings_has_nothing_to_warn_of(plant: Plant) -> None:
    assert plant.server.log() == ""


def test_no_worker_outlives_a_killed_supervisor(plant: Plant) -> None:
    """Otherwise the port and the lock would stay taken and a restart would fail."""
    for _ in range(3):
        plant.server.kill()
        plant.server.start()


def test_a_newer_schema_is_refused_with_the_reason(tmp_path: Path) -> None:
    run_command("migrate", data_folder=tmp_path)
    with closing(sqlite3.connect(tmp_path / "shoalmark.sqlite3")) as connection:
        connection.execute("UPDATE alembic_version SET version_num = 'from-the-future'")
        connection.commit()
    for command in ("serve", "verify", "migrate"):
        result = run_command(command, data_folder=tmp_path, port=1)
        assert result.returncode == 1
        assert "from-the-future" in result.stderr
        assert "Traceback" not in result.stderr
