"""One transaction: heads, moments, rollback by default, and two threads at once."""

from __future__ import annotations

import threading
import time
from datetime import UTC, datetime, timedelta

import pytest

from service.ledger import GENESIS, format_instant
from service.store.acts import perform_now
from service.store.unit_of_work import PLANT, Database
from service.store.verification import verify
from tests.service.store.examples import LINE, START, connected, note, texts


def test_entries_follow_each_other_in_their_chain(database):
    with database.writing([LINE, PLANT]) as unit:
        first = unit.append(LINE, "note", "shift-2", {"text": "one"})
        other = unit.append(PLANT, "note", "shift-2", {"text": "other"})
        second = unit.append(LINE, "note", "shift-2", {"text": "two"})
        unit.commit()
    assert (first.sequence, first.previous, other.sequence) == (1, GENESIS, 1)
    assert (second.sequence, second.previous) == (2, first.hash)
    with database.reading() as unit:
        assert unit.ledger.entry(LINE, 2) == second
        assert unit.ledger.entry(LINE, 3) is None
        assert unit.ledger.entries(LINE) == [first, second]
        assert unit.ledger.entries(LINE, after=1, limit=5) == [second]
        heads = unit.ledger.heads()
    assert (heads[LINE].sequence, heads[LINE].hash) == (2, second.hash)
    assert heads[LINE].recorded_at == second.recorded_at
    with database.writing([LINE]) as unit:
        assert unit.append(LINE, "note", "shift-2", {}).previous == second.hash


def test_without_commit_nothing_stays(database):
    with database.writing([LINE]) as unit:
        unit.append(LINE, "note", "shift-2", {})
    with pytest.raises(ZeroDivisionError), database.writing([LINE]) as unit:
        unit.append(LINE, "note", "shift-2", {})
        raise ZeroDivisionError
    assert verify(database).chains == ()


def test_a_unit_reads_what_it_wrote_itself(database):
    with database.writing([LINE]) as unit:
        entry = unit.append(LINE, "note", "shift-2", {})
        assert unit.ledger.entry(LINE, 1) == entry
        unit.readings.add([("nir-1", "2026-03-02T05:12:04.120Z", "1")], entry)
        assert len(unit.readings.find([("nir-1", "2026-03-02T05:12:04.120Z", "1")])) == 1


def test_only_a_chain_that_is_held_can_be_written(database):
    with database.writing([LINE]) as unit, pytest.raises(RuntimeError, match="tower-2 is not held"):
        unit.append("tower-2", "note", "shift-2", {})
    with database.reading() as unit, pytest.raises(RuntimeError, match="not held"):
        unit.append(LINE, "note", "shift-2", {})
    perform_now(database, note())
    with database.reading() as unit, pytest.raises(RuntimeError, match="only reads"):
        unit.master.put("product", "p", {}, unit.ledger.entry(LINE, 1))


def test_the_revision_counts_up_and_needs_the_plants_chain(database):
    with database.writing([PLANT]) as unit:
        assert unit.revision() == 0
        assert [unit.bump_revision(), unit.bump_revision(), unit.revision()] == [1, 2, 2]
        unit.commit()
    with database.writing([LINE]) as unit:
        assert unit.revision() == 2
        with pytest.raises(RuntimeError, match="plant's chain"):
            unit.bump_revision()


def test_the_moment_is_fixed_for_an_act_and_taken_by_its_entry(database):
    ticks = iter(START + timedelta(seconds=n) for n in range(9))
    with database.writing([LINE], clock=lambda: next(ticks)) as unit:
        unit.begin_act()
        moment = unit.now(LINE)
        assert moment == unit.now(LINE) == format_instant(START)
        assert unit.append(LINE, "note", "shift-2", {}).recorded_at == moment
        unit.begin_act()
        assert unit.now(LINE) == format_instant(START + timedelta(seconds=1))


def test_recorded_at_never_goes_back_in_any_chain(database_url):
    clock = [START]
    database = Database(database_url, clock=lambda: clock[0])
    perform_now(database, note(chain=PLANT))
    clock[0] = START - timedelta(hours=1)  # somebody set the clock back
    assert perform_now(database, note()).entry.recorded_at == format_instant(START)
    with database.reading() as unit:
        assert unit.now(LINE) == format_instant(START)
    clock[0] = START + timedelta(seconds=1)
    assert perform_now(database, note()).entry.recorded_at == format_instant(clock[0])
    database.close()


def test_a_clock_far_behind_the_record_is_warned_of_once_a_minute(database, monkeypatch, caplog):
    monotonic = [1000.0]
    monkeypatch.setattr("service.store.clock_watch.monotonic", lambda: monotonic[0])
    at = {
        seconds: (lambda seconds=seconds: START + timedelta(seconds=seconds)) for seconds in (0, -300, -301)
    }
    perform_now(database, note(chain=PLANT), at[0])
    perform_now(database, note(), at[-300])  # a line's chain: the newest entry of all chains counts
    assert caplog.records == []
    perform_now(database, note(), at[-301])
    perform_now(database, note(), at[-301])
    with database.reading() as unit:
        unit.now(LINE)
    (record,) = caplog.records
    assert record.levelname == "WARNING"
    assert format_instant(START) in record.getMessage()
    assert format_instant(START - timedelta(seconds=301)) in record.getMessage()
    monotonic[0] += 61
    perform_now(database, note(), at[-301])
    perform_now(database, note(), at[0])
    assert len(caplog.records) == 2


def test_the_clock_is_the_databases_on_postgresql_and_ours_on_sqlite(database, monkeypatch):
    monkeypatch.setattr("service.store.unit_of_work.system_clock", lambda: START)
    recorded_at = perform_now(database, note()).entry.recorded_at
    if database.dialect == "sqlite":
        assert recorded_at == format_instant(START)
    else:
        distance = datetime.now(UTC) - datetime.fromisoformat(recorded_at)
        assert abs(distance) < timedelta(seconds=5)


def test_a_reading_unit_sees_one_state(database):
    perform_now(database, note("before"))
    with database.reading() as unit:
        assert len(unit.ledger.entries(LINE)) == 1
        perform_now(database, note("meanwhile"))
        assert len(unit.ledger.entries(LINE)) == 1
    assert texts(database) == ["before", "meanwhile"]


def in_threads(*works):
    errors = []

    def guarded(work):
        try:
            work()
        except BaseException as error:
            errors.append(error)

    threads = [threading.Thread(target=guarded, args=(work,)) for work in works]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(30)
    assert errors == []


@pytest.mark.parametrize("known", [True, False], ids=["chain with a head", "new chain"])
def test_two_threads_on_one_chain_wait_for_each_other(database, known):
    if known:
        perform_now(database, note("zero"))
    both = threading.Barrier(2)

    def work():
        both.wait(10)
        for _ in range(10):
            with database.writing([LINE]) as unit:
                before = unit.ledger.heads().get(LINE)
                entry = unit.append(LINE, "note", "shift-2", {})
                assert entry.sequence == (1 if before is None else before.sequence + 1)
                time.sleep(0.001)
                unit.commit()

    in_threads(work, work)
    verification = verify(database)
    assert verification.whole
    assert verification.chains[0].entries == 20 + known


def test_heads_are_locked_in_sorted_order_so_that_crossed_acts_do_not_block(database):
    both = threading.Barrier(2)

    def work(*chains):
        both.wait(10)
        for _ in range(10):
            with database.writing(chains) as unit:
                for chain in chains:
                    unit.append(chain, "note", "shift-2", {})
                unit.commit()

    in_threads(lambda: work("tower-1", "tower-2"), lambda: work("tower-2", "tower-1"))
    assert [(chain.chain, chain.entries) for chain in verify(database).chains] == [
        ("tower-1", 20),
        ("tower-2", 20),
    ]


def test_lines_decide_side_by_side_on_postgresql_but_never_beside_an_approval(postgresql):
    database = postgresql
    for chain in ("tower-1", "tower-2", PLANT):
        perform_now(database, note(chain=chain))
    with database.writing(["tower-1"]) as first, database.writing(["tower-2"]) as second:
        first.append("tower-1", "note", "shift-2", {})
        second.append("tower-2", "note", "shift-2", {})
        second.commit()
        first.commit()
    order: list[str] = []

    def approve():
        with database.writing([PLANT]) as unit:
            order.append(unit.append(PLANT, "note", "approver", {}).recorded_at)
            unit.bump_revision()
            unit.commit()

    with database.writing(["tower-1"]) as unit:
        thread = threading.Thread(target=approve)
        thread.start()
        time.sleep(0.2)
        assert order == []  # the approval waits for the decision under way
        decided = unit.append("tower-1", "note", "shift-2", {}).recorded_at
        unit.commit()
    thread.join(10)
    assert order[0] > decided


def test_the_events_of_all_chains_come_in_order_and_once(database):
    for n in range(7):
        perform_now(database, note(f"n{n}", chain=("plant", "tower-1", "tower-2")[n % 3]))
    position: dict[str, int] = {}
    seen: list[str] = []
    with database.reading() as unit:
        while True:
            found, position = unit.ledger.events(position, limit=3)
            if not found:
                break
            assert len(found) <= 3
            seen += [entry.content["text"] for entry in found]
    assert seen == [f"n{n}" for n in range(7)]
    assert position == {"plant": 3, "tower-1": 2, "tower-2": 2}


def test_many_keys_are_found_by_index_searches(sqlite_template):
    from service.store.session import _among_on_sqlite
    from service.store.tables import idempotency_keys

    statement = _among_on_sqlite(idempotency_keys, ("principal", "key")).text.replace(":wanted", "?")
    with connected(f"sqlite:///{sqlite_template}") as connection:
        plan = connection.exec_driver_sql(f"EXPLAIN QUERY PLAN {statement}", ('[["a","b"],["c","d"]]',)).all()
    steps = [row[3] for row in plan]
    assert any(step.startswith("SEARCH t USING INDEX") and "principal=? AND key=?" in step for step in steps)
    assert not any(step.startswith("SCAN t") for step in steps)
