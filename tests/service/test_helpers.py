"""The helper process: its answers, its limits, and that it neither stays behind nor stays away."""

from __future__ import annotations

import math
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from budgets.errors import EvidenceError
from budgets.evidence.study_data import StudyData, evaluate_study
from service.errors import TooLarge, Unavailable
from service.helpers import Helper

ROOT = Path(__file__).parents[2]
Make = Callable[..., Helper]


@pytest.fixture
def make() -> Iterator[Make]:
    made: list[Helper] = []

    def new(**limits: Any) -> Helper:
        made.append(Helper(**limits))
        return made[-1]

    yield new
    for helper in made:
        helper.close()


def is_alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    return True


def ends(process: int, within: float = 5.0) -> bool:
    deadline = time.monotonic() + within
    while is_alive(process) and time.monotonic() < deadline:
        time.sleep(0.02)
    return not is_alive(process)


def begun(helper: Helper, seconds: float) -> threading.Thread:
    """Have the helper busy with a computation of so many seconds, whatever becomes of it."""
    helper.run(os.getpid)  # it has started

    def busy() -> None:
        try:
            helper.run(time.sleep, seconds)
        except Unavailable:
            pass

    thread = threading.Thread(target=busy)
    thread.start()
    time.sleep(0.1)
    return thread


def test_it_computes_in_another_process_with_none_of_the_settings(
    make: Make, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("SHOALMARK_DATABASE_URL", "postgresql://a:secret@b/c")
    helper = make()
    assert helper.run(math.comb, 52, 5) == 2_598_960
    assert helper.run(os.getpid) == helper.run(os.getpid) != os.getpid()
    assert helper.run(os.getenv, "SHOALMARK_DATABASE_URL") is None


def test_it_evaluates_as_this_process_would(make: Make) -> None:
    rows = tuple((f"P{n // 2}", n % 2, 3.0 + math.sin(n)) for n in range(12))
    data = StudyData(("sample", "replicate", "reading"), rows)
    assert make().run(evaluate_study, "repeatability", data, study="s") == evaluate_study(
        "repeatability", data, study="s"
    )


def test_an_error_arrives_with_all_its_faults(make: Make) -> None:
    data = StudyData(("sample", "reading"), (("P", "x"), ("P", "y")))
    with pytest.raises(EvidenceError) as caught:
        make().run(evaluate_study, "repeatability", data, study="s")
    assert [fault.where for fault in caught.value.each()] == [("rows", 0, 1), ("rows", 1, 1)]
    assert "In the helper process" in caught.value.__notes__[0]


def test_a_computation_that_takes_too_long_is_ended_and_the_next_one_starts_anew(make: Make) -> None:
    helper = make(seconds=1.5)
    first = helper.run(os.getpid)
    with pytest.raises(TooLarge, match=r"more than 1\.5 s"):
        helper.run(time.sleep, 60)
    assert ends(first)
    assert helper.run(os.getpid) != first


def test_a_computation_that_takes_too_much_memory_is_ended(make: Make) -> None:
    helper = make(memory=2**29)
    first = helper.run(os.getpid)
    with pytest.raises(TooLarge, match="512 MiB"):
        helper.run(bytearray, 2**30)
    assert ends(first)
    assert helper.run(len, "ok") == 2


def test_a_process_that_dies_is_replaced(make: Make) -> None:
    helper = make()
    with pytest.raises(Unavailable, match="ended"):
        helper.run(os._exit, 3)
    idle = helper.run(os.getpid)
    os.kill(idle, signal.SIGKILL)
    time.sleep(0.2)
    # Nobody waited for anything when it died, so nobody hears of it.
    assert helper.run(os.getpid) != idle


def test_no_more_wait_than_may(make: Make) -> None:
    helper = make(most=1)
    thread = begun(helper, 0.6)
    with pytest.raises(Unavailable) as caught:
        helper.run(os.getpid)
    assert caught.value.retry_after > 0
    thread.join()
    assert helper.run(len, "free") == 4


def test_those_who_wait_get_their_turn(make: Make) -> None:
    helper = make(most=2)
    thread = begun(helper, 0.4)
    assert helper.run(len, "after") == 5
    thread.join(0)
    assert not thread.is_alive()


def test_the_end_of_the_service_ends_it_in_the_middle_of_a_computation(make: Make) -> None:
    helper = make()
    process = helper.run(os.getpid)
    thread = begun(helper, 60)
    helper.close()
    thread.join(5)
    assert not thread.is_alive()
    assert ends(process)
    with pytest.raises(Unavailable, match="stopping"):
        helper.run(os.getpid)


def test_it_does_not_outlive_an_owner_that_was_killed() -> None:
    code = (
        "import os, time; from service.helpers import Helper; helper = Helper(); "
        "print(helper.run(os.getpid), flush=True); time.sleep(60)"
    )
    command = [sys.executable, "-c", code]
    with subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, text=True) as owner:
        assert owner.stdout is not None
        process = int(owner.stdout.readline())
        assert is_alive(process)
        owner.kill()
    assert ends(process)
