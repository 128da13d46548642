"""The single writer: group commit, idempotency, deadlines, and what one failing act does to the others."""

from __future__ import annotations

import subprocess
import sys
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest
from sqlalchemy import text

from service.errors import Conflict, KeyReused, Unavailable
from service.store import engine as engines
from service.store.unit_of_work import Database, UnitOfWork
from service.store.verification import verify
from service.store.writer import Act, Writer, perform_now
from tests.service.store.examples import LINE, connected, judge, note, texts

LONG = 20.0


class Gate:
    """Holds the writer inside an act until it is opened, so that the acts behind it form one batch."""

    def __init__(self):
        self.entered = threading.Event()
        self.opened = threading.Event()

    def wait(self, _unit):
        self.entered.set()
        assert self.opened.wait(LONG)


@pytest.fixture
def together(writer):
    """Submit acts so that they are one batch, and return what each of them came to."""

    def submit(acts):
        gate = Gate()
        with ThreadPoolExecutor(len(acts) + 1) as pool:
            first = pool.submit(writer.submit, note("gate", before=gate.wait), LONG)
            assert gate.entered.wait(LONG)
            futures = []
            for act in acts:
                waiting = writer.queued
                futures.append(pool.submit(writer.submit, act, LONG))
                deadline = time.monotonic() + LONG
                while writer.queued == waiting and time.monotonic() < deadline:
                    time.sleep(0.0005)
            gate.opened.set()
            first.result(LONG)
            return [future.exception(LONG) or future.result() for future in futures]

    return submit


@pytest.fixture
def commits(monkeypatch):
    counted = []
    commit = UnitOfWork.commit
    monkeypatch.setattr(UnitOfWork, "commit", lambda unit: (counted.append(1), commit(unit)))
    return counted


def fail(*_arguments):
    raise Conflict("lot-already-judged", "this lot was judged")


def test_an_act_is_durable_when_it_is_answered(writer, database_url):
    recorded = writer.submit(note("one"))
    assert not recorded.earlier
    other = Database(database_url)
    assert texts(other) == ["one"]
    other.close()


def test_acts_that_wait_together_are_one_commit(together, commits, database):
    outcomes = together([note(f"n{n}", key=f"key-{n:04}") for n in range(20)])
    assert len(commits) == 2  # the gate's and the batch's
    assert [each.entry.sequence for each in outcomes] == list(range(2, 22))
    assert texts(database)[1:] == [f"n{n}" for n in range(20)]
    assert verify(database).whole


def test_an_act_that_fails_before_it_wrote_fails_alone(together, commits, database):
    outcomes = together([note("a"), note("b", before=fail), note("c"), note("d", before=fail), note("e")])
    assert [type(each).__name__ for each in outcomes] == [
        "Recorded",
        "Conflict",
        "Recorded",
        "Conflict",
        "Recorded",
    ]
    assert len(commits) == 2
    assert texts(database) == ["gate", "a", "c", "e"]


def test_an_act_that_fails_after_it_wrote_takes_nothing_with_it(together, database):
    outcomes = together(
        [
            note("a", key="key-000a"),
            note("b", after=fail, key="key-000b"),
            judge("A"),
            note("c", key="key-000c"),
        ]
    )
    assert [type(each).__name__ for each in outcomes] == ["Recorded", "Conflict", "Recorded", "Recorded"]
    with database.reading() as unit:
        kinds = [(entry.kind, entry.content.get("text")) for entry in unit.ledger.entries(LINE)]
        assert unit.keys.find("mes", "key-000b") is None
    assert kinds == [("note", "gate"), ("note", "a"), ("decision", None), ("note", "c")]
    assert verify(database).whole


def test_an_act_whose_statement_fails_takes_nothing_with_it(together, database):
    def broken(unit):
        unit.session.row(text("SELECT * FROM nowhere"))

    outcomes = together([note("a"), note("b", before=broken), note("c")])
    assert "nowhere" in str(outcomes[1])
    assert texts(database) == ["gate", "a", "c"]


def test_an_act_that_the_database_refuses_at_the_commit_takes_nothing_with_it(together, database):
    def twice(unit, entry):
        unit.readings.add([("nir-1", "m1", "1"), ("nir-1", "m1", "1")], entry)

    outcomes = together([note("a"), note("b", after=twice), note("c")])
    assert type(outcomes[1]).__name__ == "IntegrityError"
    assert texts(database) == ["gate", "a", "c"]


@pytest.mark.parametrize("entries", [0, 2])
def test_an_act_is_exactly_one_entry(writer, database, entries):
    def perform(unit):
        for _ in range(entries):
            unit.append(LINE, "note", "shift-2", {"text": "x"})
        return unit.ledger.entry(LINE, 1)

    with pytest.raises(RuntimeError, match="exactly one entry"):
        writer.submit(Act(frozenset({LINE}), "mes", perform))
    assert texts(database) == []


def test_a_replay_is_answered_from_its_entry_and_not_done_again(writer, database):
    first = writer.submit(note("one", key="key-0001"))
    again = writer.submit(note("one", key="key-0001", before=fail))
    assert (first.earlier, again.earlier) == (False, True)
    assert again.entry == first.entry
    assert again.entry.content == {"text": "one"}
    assert texts(database) == ["one"]


def test_a_key_with_another_fingerprint_is_refused(writer, database):
    writer.submit(note("one", key="key-0001"))
    with pytest.raises(KeyReused):
        writer.submit(note("two", key="key-0001"))
    assert texts(database) == ["one"]


def test_the_same_key_of_another_principal_is_another_key(writer, database):
    act = note("one", key="key-0001")
    writer.submit(act)
    other = Act(act.chains, "other-mes", act.perform, act.key, act.fingerprint)
    assert not writer.submit(other).earlier
    assert texts(database) == ["one", "one"]


def test_errors_are_not_remembered_under_a_key(writer):
    with pytest.raises(Conflict):
        writer.submit(note("one", key="key-0001", before=fail))
    assert not writer.submit(note("one", key="key-0001")).earlier


def test_twins_in_flight_become_one_entry(together, database):
    outcomes = together([note("one", key="key-0001") for _ in range(5)] + [note("two", key="key-0001")])
    assert [each.earlier for each in outcomes[:5]] == [False, True, True, True, True]
    assert len({each.entry for each in outcomes[:5]}) == 1
    assert isinstance(outcomes[5], KeyReused)
    assert texts(database) == ["gate", "one"]


def test_an_act_that_was_not_begun_at_the_deadline_is_withdrawn(writer, database):
    gate = Gate()
    with ThreadPoolExecutor(1) as pool:
        slow = pool.submit(writer.submit, note("slow", before=gate.wait), LONG)
        assert gate.entered.wait(LONG)
        began = time.monotonic()
        with pytest.raises(Unavailable, match="nothing was recorded") as caught:
            writer.submit(note("late", key="key-0001"), timeout=0.05)
        assert time.monotonic() - began < 1.0
        assert caught.value.retry_after >= 1
        gate.opened.set()
        slow.result(LONG)
    writer.submit(note("last"))
    assert texts(database) == ["slow", "last"]


def test_an_act_that_was_begun_at_the_deadline_is_found_by_its_key(writer, database):
    gate = Gate()
    with pytest.raises(Unavailable, match="found by its idempotency key"):
        writer.submit(note("one", key="key-0001", before=gate.wait), timeout=0.2)
    gate.opened.set()
    recorded = writer.submit(note("one", key="key-0001"), LONG)
    assert recorded.earlier
    assert texts(database) == ["one"]


def test_acts_done_again_one_by_one_keep_their_deadline(writer, database):
    gate = Gate()
    with ThreadPoolExecutor(4) as pool:
        pool.submit(writer.submit, note("gate", before=gate.wait), LONG)
        assert gate.entered.wait(LONG)
        slow = pool.submit(writer.submit, note("slow", after=lambda *_: (time.sleep(0.3), fail())), LONG)
        while writer.queued < 1:
            time.sleep(0.001)
        late = pool.submit(writer.submit, note("late"), 0.2)
        while writer.queued < 2:
            time.sleep(0.001)
        gate.opened.set()
        assert isinstance(slow.exception(LONG), Conflict)
        assert isinstance(late.exception(LONG), Unavailable)
    writer.submit(note("last"), LONG)
    assert texts(database) == ["gate", "last"]


def test_a_full_queue_refuses_at_once(database):
    writer = Writer(database, queue_size=2)
    gate = Gate()
    with ThreadPoolExecutor(3) as pool:
        pool.submit(writer.submit, note("gate", before=gate.wait), LONG)
        assert gate.entered.wait(LONG)
        waiting = [pool.submit(writer.submit, note(f"n{n}"), LONG) for n in range(2)]
        while writer.queued < 2:
            time.sleep(0.001)
        with pytest.raises(Unavailable, match="too many"):
            writer.submit(note("one too many"), LONG)
        gate.opened.set()
        assert all(not each.result(LONG).earlier for each in waiting)
    writer.close()


def test_closing_does_what_waits_and_takes_nothing_more(database):
    writer = Writer(database)
    gate = Gate()
    with ThreadPoolExecutor(3) as pool:
        waiting = [pool.submit(writer.submit, note("gate", before=gate.wait), LONG)]
        assert gate.entered.wait(LONG)
        waiting.append(pool.submit(writer.submit, note("waits"), LONG))
        while writer.queued < 1:
            time.sleep(0.001)
        assert writer.alive
        closing = pool.submit(writer.close)
        while writer.alive:
            time.sleep(0.001)
        with pytest.raises(Unavailable, match="stopping"):
            writer.submit(note("after"))
        gate.opened.set()
        closing.result(LONG)
        assert [each.result(LONG).entry.content["text"] for each in waiting] == ["gate", "waits"]
    assert texts(database) == ["gate", "waits"]


@pytest.mark.filterwarnings("ignore::pytest.PytestUnhandledThreadExceptionWarning")
def test_a_writer_whose_thread_ended_says_so_and_leaves_nobody_waiting(writer):
    def leave(_unit):
        raise SystemExit

    assert writer.alive
    with pytest.raises(SystemExit):
        writer.submit(note(before=leave), LONG)
    writer._thread.join(LONG)
    assert not writer.alive


def test_a_command_that_writes_beside_the_server_is_waited_for(writer, database):
    with ThreadPoolExecutor(1) as pool:
        with database.writing([LINE]) as unit:
            entry = unit.append(LINE, "note", "administrator", {"text": "command"})
            waiting = pool.submit(writer.submit, note("server"), LONG)
            time.sleep(0.1)
            assert not waiting.done()
            unit.commit()
        assert waiting.result(LONG).entry.previous == entry.hash


def test_a_database_that_stays_locked_is_unavailable_and_comes_back(sqlite_template, tmp_path, monkeypatch):
    monkeypatch.setattr(engines, "BUSY_TIMEOUT_MS", 50)
    file = tmp_path / "plant.sqlite3"
    file.write_bytes(sqlite_template.read_bytes())
    database = Database(f"sqlite:///{file}")
    writer = Writer(database)
    with database.writing([LINE]), pytest.raises(Unavailable):
        writer.submit(note("one", key="key-0001"), LONG)
    assert writer.alive
    assert not writer.submit(note("one", key="key-0001")).earlier
    writer.close()
    database.close()


def race(first: Database, second: Database):
    """Judge one lot on two lines by two processes' writers, both having seen that it was not judged."""
    both = threading.Barrier(2)
    runs = []

    def act(chain):
        def perform(unit):
            if unit.lots.get("whole-milk-powder", "A") is not None:
                fail()
            runs.append(chain)
            if runs.count(chain) == 1:
                both.wait(LONG)
            return judge("A", chain=chain).perform(unit)

        return Act(frozenset({chain}), "mes", perform)

    for chain in ("tower-1", "tower-2"):  # the first entries of chains wait for each other anyway
        perform_now(first, note(chain=chain))
    writers = [Writer(first), Writer(second)]
    with ThreadPoolExecutor(2) as pool:
        futures = [
            pool.submit(writer.submit, act(chain), LONG)
            for writer, chain in zip(writers, ("tower-1", "tower-2"), strict=True)
        ]
        outcomes = [future.exception(LONG) or future.result() for future in futures]
    for writer in writers:
        writer.close()
    return outcomes


def test_two_processes_judge_one_lot_once(postgresql):
    other = Database(postgresql.url)
    outcomes = race(postgresql, other)
    assert sorted(type(each).__name__ for each in outcomes) == ["Conflict", "Recorded"]
    with other.reading() as unit:
        assert len(unit.decisions.list()) == 1
    other.close()
    assert verify(postgresql).whole


def terminate_own_backend(url):
    """Return a step that ends the act's own session on the server, as a network fault would."""

    def step(unit, *_entry):
        pid = unit.session.row(text("SELECT pg_backend_pid()"))[0]
        with connected(url) as connection:
            connection.execute(text("SELECT pg_terminate_backend(:pid, 5000)"), {"pid": pid})

    return step


@pytest.mark.parametrize("key", ["key-0001", None], ids=["with a key", "without"])
def test_a_connection_lost_before_the_commit_loses_nothing_and_doubles_nothing(postgresql, key):
    terminate = terminate_own_backend(postgresql.url)
    runs = []

    def once(unit, entry):
        runs.append(1)
        if len(runs) == 1:
            terminate(unit)

    writer = Writer(postgresql)
    recorded = writer.submit(note("one", key=key, after=once), LONG)
    assert (recorded.earlier, len(runs)) == (False, 2)
    assert texts(postgresql) == ["one"]
    writer.close()


@pytest.mark.parametrize("key", ["key-0001", None], ids=["with a key", "without"])
def test_a_commit_whose_answer_was_lost_is_not_done_again(postgresql, monkeypatch, key):
    commit = UnitOfWork.commit

    def lose_the_answer(unit):
        commit(unit)
        raise Unavailable("the connection was lost")

    monkeypatch.setattr(UnitOfWork, "commit", lose_the_answer)
    writer = Writer(postgresql)
    recorded = writer.submit(note("one", key=key), LONG)
    assert recorded.entry.sequence == 1
    assert texts(postgresql) == ["one"]
    writer.close()


def test_a_commit_of_which_nothing_can_be_learnt_is_unavailable_and_found_by_its_key(
    writer, database, monkeypatch
):
    commit = UnitOfWork.commit

    def lose_the_answer(unit):
        commit(unit)
        monkeypatch.setattr(Database, "writing", out_of_reach)
        raise Unavailable("the connection was lost")

    def out_of_reach(*_arguments, **_options):
        raise Unavailable("out of reach")

    with monkeypatch.context() as patched:
        patched.setattr(UnitOfWork, "commit", lose_the_answer)
        with pytest.raises(Unavailable, match="the key finds what was recorded"):
            writer.submit(note("one", key="key-0001"), LONG)
    monkeypatch.undo()
    assert writer.submit(note("one", key="key-0001"), LONG).earlier
    assert texts(database) == ["one"]


def test_keys_and_fingerprints_come_in_pairs_and_are_printable():
    with pytest.raises(ValueError, match="fingerprint"):
        Act(frozenset({LINE}), "mes", judge("A").perform, key="key-0001")
    with pytest.raises(ValueError, match="printable"):
        Act(frozenset({LINE}), "mes\0", judge("A").perform)


EXIT = """
import sys, threading
from service.store.unit_of_work import Database
from service.store.writer import Writer
from tests.service.store.examples import note

writer = Writer(Database(sys.argv[1]))
entered = threading.Event()
opened = threading.Event()

def hold(unit):
    entered.set()
    opened.wait(10)

for text, before in (("held", hold), ("waits", None)):
    act = note(text, before=before)
    threading.Thread(target=writer.submit, args=(act, 20), daemon=True).start()
    entered.wait(10)
while writer.queued < 1:
    pass
threading.Timer(0.2, opened.set).start()
"""


def test_a_process_that_ends_in_order_does_what_waits(database_url):
    root = Path(__file__).parents[3]
    done = subprocess.run(
        [sys.executable, "-c", EXIT, database_url], cwd=root, capture_output=True, text=True, timeout=30
    )
    assert (done.returncode, done.stderr) == (0, "")
    database = Database(database_url)
    assert texts(database) == ["held", "waits"]
    database.close()
