"""Exactly one process serves a SQLite file."""

from __future__ import annotations

import os
import subprocess
import sys

import pytest

from service.errors import LockHeld, SetupError
from service.store.lock import ServingLock

HOLD = (
    "import sys; from service.store.lock import ServingLock; lock = ServingLock(sys.argv[1]); lock.acquire()"
)


def test_a_second_lock_is_refused_and_names_the_holder(tmp_path):
    path = tmp_path / "folder" / "serving.lock"
    with ServingLock(path), pytest.raises(LockHeld, match=rf"pid {os.getpid()}\)"):
        ServingLock(path).acquire()
    with ServingLock(path):  # given up, it can be taken again
        pass


def test_another_process_holds_it_until_it_is_killed(tmp_path):
    path = tmp_path / "serving.lock"
    code = f"{HOLD}; print('held', flush=True); sys.stdin.read()"
    holder = subprocess.Popen(
        [sys.executable, "-c", code, str(path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    with holder:
        assert holder.stdout.readline() == "held\n"
        with pytest.raises(LockHeld, match=f"pid {holder.pid}"):
            ServingLock(path).acquire()
        holder.kill()
        holder.wait(10)
    with ServingLock(path):
        assert path.read_text() == f"{os.getpid()}\n"


def test_a_lock_is_not_taken_twice_nor_where_it_cannot_be(tmp_path):
    with ServingLock(tmp_path / "serving.lock") as lock, pytest.raises(RuntimeError, match="held already"):
        lock.acquire()
    (tmp_path / "file").write_text("")
    with pytest.raises(SetupError, match="cannot be opened"):
        ServingLock(tmp_path / "file" / "serving.lock").acquire()
