"""A decision that was answered is in the record, whatever happens to the process a millisecond later."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

from service.store.unit_of_work import Database
from service.store.verification import verify
from service.store.writer import Writer
from tests.service.store.examples import note

LOAD = """
import sys, threading
from service.store.unit_of_work import Database
from service.store.writer import Writer
from tests.service.store.examples import note

writer = Writer(Database(sys.argv[1]))
printing = threading.Lock()

def work(thread):
    for n in range(1_000_000):
        key = f"key-{thread}-{n:06}"
        recorded = writer.submit(note(key, key=key, chain=f"tower-{thread % 2 + 1}"), 30)
        with printing:
            print(key, recorded.entry.chain, recorded.entry.sequence, recorded.entry.hash, flush=True)

threads = [threading.Thread(target=work, args=(thread,)) for thread in range(6)]
for thread in threads:
    thread.start()
"""


def test_a_killed_process_has_recorded_all_that_it_answered(database_url):
    root = Path(__file__).parents[3]
    process = subprocess.Popen(
        [sys.executable, "-c", LOAD, database_url], cwd=root, stdout=subprocess.PIPE, text=True
    )
    with process:
        answered = [process.stdout.readline()]
        time.sleep(0.7)
        process.kill()  # SIGKILL, in the middle of the load
        answered += process.stdout.readlines()
    assert process.returncode == -9
    if not answered[-1].endswith("\n"):
        answered.pop()  # cut off while it was printed
    assert len(answered) > 50

    database = Database(database_url)
    verification = verify(database)
    assert verification.whole, str(verification.finding)
    with database.reading() as unit:
        hashes = {
            (entry.chain, entry.sequence): entry.hash
            for chain in ("tower-1", "tower-2")
            for entry in unit.ledger.entries(chain, limit=10**6)
        }
        recorded = [
            e.content["text"] for c in ("tower-1", "tower-2") for e in unit.ledger.entries(c, limit=10**6)
        ]
    assert len(recorded) == len(set(recorded))
    for line in answered:
        _key, chain, sequence, digest = line.split()
        assert hashes[chain, int(sequence)] == digest

    # The line sends its last request again: it learns what was recorded, and the record goes on.
    writer = Writer(database)
    key, chain, sequence, digest = answered[-1].split()
    again = writer.submit(note(key, key=key, chain=chain), 20)
    assert (again.earlier, again.entry.sequence, again.entry.hash) == (True, int(sequence), digest)
    assert not writer.submit(note("next", chain=chain), 20).earlier
    writer.close()
    assert verify(database).whole
    database.close()
