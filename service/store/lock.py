"""The lock of the serving process: on one SQLite file exactly one process serves."""

from __future__ import annotations

import fcntl
import os
from pathlib import Path
from types import TracebackType
from typing import Self

from service.errors import LockHeld, SetupError


class ServingLock:
    """Holds a lock file until it is released or the process ends, however it ends."""

    def __init__(self, path: Path) -> None:
        self.path = Path(path)
        self._descriptor: int | None = None

    def acquire(self) -> None:
        """Take the lock.

        Raises
        ------
        LockHeld
            Another process serves; the message names its process id.
        """
        if self._descriptor is not None:
            raise RuntimeError("this lock is held already")
        try:
            self.path.parent.mkdir(parents=True, exist_ok=True)
            descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
        except OSError as error:
            raise SetupError(f"the lock file {self.path} cannot be opened: {error.strerror}") from error
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            holder = os.pread(descriptor, 32, 0).decode("ascii", "replace").strip() or "unknown"
            os.close(descriptor)
            raise LockHeld(f"another process (pid {holder}) serves this database: {self.path}") from error
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, f"{os.getpid()}\n".encode(), 0)
        self._descriptor = descriptor

    def release(self) -> None:
        """Give the lock up. The file stays: removing it would let two processes hold two locks."""
        if self._descriptor is not None:
            os.close(self._descriptor)
            self._descriptor = None

    def __enter__(self) -> Self:
        self.acquire()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        self.release()
