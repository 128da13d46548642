"""The single writer of a process: takes what is queued, commits it as one transaction, then answers.

One commit for a whole batch is what makes durable acts cheap (group commit), and one thread that reads the
state under the heads' locks is what makes them free of races. An act that fails before it wrote anything
fails alone; otherwise the batch is rolled back and its acts are done again one by one.
"""

from __future__ import annotations

import atexit
import os
import threading
import time
import weakref
from collections import deque
from collections.abc import Sequence

from service.errors import Unavailable
from service.store.acts import Act, BatchFailed, Recorded, perform_batch, perform_now
from service.store.unit_of_work import Clock, Database

__all__ = ["Act", "Recorded", "Writer", "perform_now"]

LARGEST_BATCH = 256
LARGEST_QUEUE = 4096
PATIENCE = 0.0005
"""Seconds that a batch waits at most for the acts that are likely to come."""

_WAITING, _BEGUN, _DONE, _WITHDRAWN = range(4)


class _Job:
    """An act on its way, with the place where its answer is put."""

    __slots__ = ("act", "deadline", "done", "error", "lock", "recorded", "state")

    def __init__(self, act: Act, deadline: float) -> None:
        self.act = act
        self.deadline = deadline
        self.done = threading.Event()
        self.lock = threading.Lock()
        self.state = _WAITING
        self.recorded: Recorded | None = None
        self.error: BaseException | None = None

    def begin(self) -> bool:
        """Take the act up, unless it was withdrawn or its time is over."""
        with self.lock:
            if self.state != _WAITING:
                return False
            self.state = _BEGUN if time.monotonic() < self.deadline else _WITHDRAWN
            begun = self.state == _BEGUN
        if not begun:
            self.done.set()
        return begun

    def withdraw(self) -> bool:
        """Take the act back; fails when it was begun."""
        with self.lock:
            if self.state == _WAITING:
                self.state = _WITHDRAWN
            return self.state == _WITHDRAWN

    def answer(self, recorded: Recorded | None, error: BaseException | None = None) -> None:
        """Put the answer where the waiting thread finds it; neither of the two: nothing was recorded."""
        with self.lock:
            self.recorded, self.error, self.state = recorded, error, _DONE
        self.done.set()


class Writer:
    """One daemon thread that records acts; any number of threads submit them."""

    def __init__(
        self, database: Database, clock: Clock | None = None, *, queue_size: int = LARGEST_QUEUE
    ) -> None:
        self._database = database
        self._clock = clock
        self._queue_size = queue_size
        self._closed = False
        self._reset()
        reference = weakref.ref(self)
        atexit.register(lambda: _close(reference))
        if hasattr(os, "register_at_fork"):
            os.register_at_fork(after_in_child=lambda: _reset(reference))

    def submit(self, act: Act, timeout: float = 2.0) -> Recorded:
        """Record an act and return once it is durable.

        Raises
        ------
        Unavailable
            The queue is full, the database cannot be reached, or the time is over. An act that was not
            begun is withdrawn; whether one that was begun got recorded is found by its key.
        KeyReused
            The key was used with another fingerprint.
        Exception
            Whatever ``act.perform`` raised.
        """
        job = _Job(act, time.monotonic() + timeout)
        self._enqueue(job)
        if not job.done.wait(timeout) and not job.withdraw() and not job.done.is_set():
            raise Unavailable(
                "the time is over; whether the act was recorded is found by its idempotency key"
            )
        if job.error is not None:
            raise job.error
        if job.recorded is None:
            raise Unavailable("the time is over and nothing was recorded: try again")
        return job.recorded

    @property
    def alive(self) -> bool:
        """Say whether acts are taken and will be done."""
        return not self._closed and (self._thread is None or self._thread.is_alive())

    @property
    def queued(self) -> int:
        """Return how many acts wait."""
        return len(self._queue)

    def close(self, timeout: float = 10.0) -> None:
        """Take no further act, do those that wait, and end the thread."""
        with self._changed:
            self._closed = True
            self._changed.notify_all()
            thread = self._thread
        if thread is not None and thread is not threading.current_thread():
            thread.join(timeout)

    def _reset(self) -> None:
        self._queue: deque[_Job] = deque()
        self._changed = threading.Condition()
        self._thread: threading.Thread | None = None
        self._expected = 0

    def _enqueue(self, job: _Job) -> None:
        with self._changed:
            if self._closed:
                raise Unavailable("the service is stopping")
            if len(self._queue) >= self._queue_size:
                raise Unavailable("too many acts are waiting: try again")
            if self._thread is None:
                self._thread = threading.Thread(target=self._run, name="shoalmark-writer", daemon=True)
                self._thread.start()
            self._queue.append(job)
            self._changed.notify()

    def _run(self) -> None:
        while True:
            with self._changed:
                while not self._queue and not self._closed:
                    self._changed.wait()
                if not self._queue:
                    return
                # Those who were just answered come back at once when the load is high: a moment's patience
                # then makes one commit of two. A lone client never waits.
                self._changed.wait_for(self._all_are_back, PATIENCE)
                jobs = [self._queue.popleft() for _ in range(min(len(self._queue), LARGEST_BATCH))]
            batch = [job for job in jobs if job.begin()]
            if batch:
                self._record(batch)
            self._expected = min(len(batch) + len(self._queue), LARGEST_BATCH)

    def _all_are_back(self) -> bool:
        return self._closed or len(self._queue) >= self._expected

    def _record(self, batch: Sequence[_Job]) -> None:
        try:
            if len(batch) > 1 and self._record_together(batch):
                return
            for job in batch:
                self._record_alone(job)
        except BaseException as error:  # whatever it is, nobody may be left waiting
            for job in batch:
                if not job.done.is_set():
                    job.answer(None, error)
            if not isinstance(error, Exception):
                raise

    def _record_together(self, batch: Sequence[_Job]) -> bool:
        """Record a batch by one commit; False when its acts have to be done one by one."""
        try:
            outcomes = perform_batch(self._database, [job.act for job in batch], self._clock)
        except BatchFailed as failed:
            if failed.opened:
                return False
            for job in batch:  # the database is out of reach: it will be for each of them
                job.answer(None, failed.cause)
            return True
        for job, outcome in zip(batch, outcomes, strict=True):
            if isinstance(outcome, Recorded):
                job.answer(outcome)
            else:
                job.answer(None, outcome)
        return True

    def _record_alone(self, job: _Job) -> None:
        if time.monotonic() >= job.deadline:
            job.answer(None)
            return
        try:
            job.answer(perform_now(self._database, job.act, self._clock))
        except Exception as error:
            job.answer(None, error)


def _close(reference: weakref.ref[Writer]) -> None:
    if (writer := reference()) is not None:
        writer.close()


def _reset(reference: weakref.ref[Writer]) -> None:
    """In a forked child: the parent's queue and thread are not here."""
    if (writer := reference()) is not None:
        writer._reset()
