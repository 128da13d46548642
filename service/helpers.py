"""One helper process for long computations, so that an engineer's study never delays the production line.

A computation runs there on what it is given and gives back what it finds; it sees no database and no request.
Few may wait (they hold threads that the lines need), each has a time limit, the process a memory limit. A
process that ended, for whatever reason, is started anew for the next computation.
"""

from __future__ import annotations

import contextlib
import os
import pickle
import signal
import subprocess
import sys
import threading
import traceback
import weakref
from collections.abc import Callable
from multiprocessing.connection import Connection, Pipe
from pathlib import Path
from typing import Any, Final, ParamSpec, TypeVar, cast

from service.errors import TooLarge, Unavailable

_P = ParamSpec("_P")
_T = TypeVar("_T")

SECONDS: Final = 20.0
MEMORY: Final = 2 * 1024**3
_RETRY_AFTER: Final = 5
_POLITENESS: Final = 5  # added to the nice value: lines come first
_PATIENCE: Final = 1.0
# What it may still be at when nobody waits for it any more.
_GRACE_SECONDS: Final = 5


class Helper:
    """Runs computations one after the other in a process of its own, which starts with the first of them."""

    def __init__(self, *, most: int = 2, seconds: float = SECONDS, memory: int = MEMORY) -> None:
        self._most, self._seconds, self._memory = most, seconds, memory
        self._turn = threading.Lock()
        self._state = threading.Lock()
        self._asked = 0
        self._closed = False
        self._process: subprocess.Popen[bytes] | None = None
        self._connection: Connection[Any, Any] | None = None
        self._end: Callable[[], Any] | None = None

    def run(self, function: Callable[_P, _T], /, *args: _P.args, **kwargs: _P.kwargs) -> _T:
        """Call ``function``, one of a module, in the helper process; what it raises is raised here.

        Raises
        ------
        Unavailable
            As many as may wait do so, the process ended meanwhile, or the service is stopping.
        TooLarge
            It took more time or memory than a computation may.
        """
        job = pickle.dumps((function, args, kwargs))
        with self._state:
            if self._closed:
                raise Unavailable("The service is stopping.")
            if self._asked >= self._most:
                message = "Other computations are under way; nothing was recorded, try again."
                raise Unavailable(message, retry_after=_RETRY_AFTER)
            self._asked += 1
        try:
            with self._turn:
                return cast(_T, self._answer(job))
        finally:
            with self._state:
                self._asked -= 1

    def close(self) -> None:
        """End the process, also in the middle of a computation, and take no further one."""
        with self._state:
            self._closed = True
            end = self._end
        if end is not None:
            end()

    def _answer(self, job: bytes) -> Any:
        connection = self._running()
        try:
            connection.send_bytes(job)
            if not connection.poll(self._seconds):
                self._stop()
                raise TooLarge(f"The computation takes more than {self._seconds:g} s; ask for less of it.")
            kind, found = connection.recv()
        except (EOFError, OSError):
            self._stop()
            raise Unavailable("The helper process ended; nothing was recorded, try again.") from None
        if kind == "memory":
            self._stop()
            size = self._memory // 1024**2
            raise TooLarge(f"The computation takes more than {size} MiB of memory; ask for less of it.")
        if kind == "error":
            raise found
        return found

    def _running(self) -> Connection[Any, Any]:
        if self._process is not None and self._process.poll() is not None:
            self._stop()
        if self._connection is None:
            ours, theirs = Pipe()
            with theirs:
                self._process = subprocess.Popen(
                    [
                        *(sys.executable, "-P", "-m", "service.helpers"),
                        *map(str, (theirs.fileno(), self._memory, self._seconds)),
                    ],
                    pass_fds=(theirs.fileno(),),
                    stdin=subprocess.DEVNULL,
                    env=_environment(),
                    start_new_session=True,  # it ends with us, not by the key that stops us
                )
            with self._state:
                self._connection = ours
                self._end = weakref.finalize(self, _end, self._process, ours)
                closed = self._closed
            if closed:
                self._stop()
                raise Unavailable("The service is stopping.")
        assert self._connection is not None
        return self._connection

    def _stop(self) -> None:
        with self._state:
            end, self._end = self._end, None
            self._process = self._connection = None
        if end is not None:
            end()


def _end(process: subprocess.Popen[bytes], connection: Connection[Any, Any]) -> None:
    process.kill()  # it holds nothing that could be left half done
    with contextlib.suppress(subprocess.TimeoutExpired):
        process.wait(_PATIENCE)
    with contextlib.suppress(OSError):
        connection.close()


def _environment() -> dict[str, str]:
    """Give the process our way to the modules, one thread for each computation, and none of the settings."""
    kept = {name: value for name, value in os.environ.items() if not name.startswith("SHOALMARK_")}
    folder = str(Path(__file__).parents[1])
    paths = [folder, *filter(None, [kept.get("PYTHONPATH")])]
    threads = dict.fromkeys(("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"), "1")
    return {**kept, **threads, "PYTHONPATH": os.pathsep.join(paths)}


# --- in the helper process -----------------------------------------------------------------------------


def _limit(memory: int) -> None:
    os.nice(_POLITENESS)
    with contextlib.suppress(ImportError, ValueError, OSError):  # not every system has such a limit
        import resource

        resource.setrlimit(resource.RLIMIT_AS, (memory, memory))


def _reply(job: bytes) -> bytes:
    try:
        function, args, kwargs = pickle.loads(job)
        return pickle.dumps(("value", function(*args, **kwargs)))
    except MemoryError:
        return pickle.dumps(("memory", None))
    except Exception as error:
        said = traceback.format_exc()
        error.add_note("In the helper process:\n" + said)
        try:
            return pickle.dumps(("error", error))
        except Exception:  # an error that cannot travel
            return pickle.dumps(("error", RuntimeError(said)))


def _serve(connection: Connection[Any, Any], seconds: float) -> None:
    """Answer jobs until the other end is closed; the end of our owner closes it too."""
    with contextlib.suppress(EOFError, OSError):
        while True:
            job = connection.recv_bytes()
            signal.setitimer(signal.ITIMER_REAL, seconds + _GRACE_SECONDS)
            reply = _reply(job)
            signal.setitimer(signal.ITIMER_REAL, 0)
            connection.send_bytes(reply)


if __name__ == "__main__":
    _limit(int(sys.argv[2]))
    _serve(Connection(int(sys.argv[1])), float(sys.argv[3]))
