"""The serving process: schema, lock, application, and the end of it all when its supervisor is gone."""

from __future__ import annotations

import ctypes
import logging
import os
import signal
import sys
import threading
import time
from pathlib import Path
from typing import TYPE_CHECKING, Final

from service.errors import LockHeld
from service.settings import Settings, load_settings

if TYPE_CHECKING:
    from flask import Flask

    from service.store.lock import ServingLock

LOG_FORMAT: Final = "%(asctime)s %(levelname)s %(name)s %(message)s"
# A request takes 2 s at most; whatever hangs longer is killed, and what was answered is on disk already.
_STOP_SECONDS: Final = 10
_PR_SET_PDEATHSIG: Final = 1  # linux/prctl.h
_SUPERVISOR_CHECK_SECONDS: Final = 0.2
_LOCK_SECONDS: Final = 1.0


def prepare(settings: Settings) -> Path | None:
    """Bring the schema up to date on SQLite, or refuse another one on PostgreSQL.

    Gives the copy that was made of an older SQLite file, if any.

    Raises
    ------
    LockHeld
        Another process serves this SQLite file.
    SchemaMismatch
        The schema is not this program's; the message names the command.
    """
    from service.store.engine import sqlite_file
    from service.store.schema import check_current, migrate_with_copy

    file = sqlite_file(settings.database_url)
    if file is None:
        check_current(settings.database_url)
        return None
    lock = _acquire(file)
    try:
        return migrate_with_copy(settings.database_url)
    finally:
        lock.release()


def serve(settings: Settings) -> None:
    """Serve until stopped; one worker process, whose threads share the one writer."""
    from granian import Granian
    from granian.constants import Interfaces
    from granian.log import LogLevels

    prepare(settings)
    Granian(
        "service.serving:application",
        factory=True,
        interface=Interfaces.WSGI,
        address=settings.host,
        port=settings.port,
        workers=1,
        blocking_threads=settings.threads,
        ssl_cert=settings.tls_certificate,
        ssl_key=settings.tls_key,
        log_level=LogLevels(settings.log_level),
        websockets=False,
        workers_kill_timeout=_STOP_SECONDS,
    ).serve()


def application() -> Flask:
    """Make the application in the worker process; holds the serving lock as long as that lives."""
    from service import create_app, create_services
    from service.store.engine import sqlite_file

    _end_with_supervisor()
    # Until the server puts its own handlers in place, those of the supervisor are inherited: they would
    # swallow a request to stop that comes now.
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, signal.SIG_DFL)
    settings = load_settings(os.environ)
    logging.basicConfig(level=settings.log_level.upper(), format=LOG_FORMAT)
    file = sqlite_file(settings.database_url)
    held = None if file is None else _acquire(file)
    app = create_app(create_services(settings))
    app.extensions["shoalmark.lock"] = held
    return app


def _lock(file: Path) -> ServingLock:
    from service.store.lock import ServingLock

    return ServingLock(file.with_name(f"{file.name}.lock"))


def _acquire(file: Path) -> ServingLock:
    """Take the lock; the worker of a server that was killed a moment ago may need a moment to end."""
    lock = _lock(file)
    deadline = time.monotonic() + _LOCK_SECONDS
    while True:
        try:
            lock.acquire()
            return lock
        except LockHeld:
            if time.monotonic() > deadline:
                raise
            time.sleep(0.05)


def _end_with_supervisor() -> None:
    """End this process when its supervisor was killed: an orphan would keep the port and the lock.

    Linux does it at once; elsewhere a thread looks a few times a second.
    """
    supervisor = os.getppid()
    if sys.platform == "linux":
        libc = ctypes.CDLL(None, use_errno=True)
        if libc.prctl(_PR_SET_PDEATHSIG, signal.SIGKILL) == 0 and os.getppid() == supervisor:
            return

    def watch() -> None:
        while os.getppid() == supervisor:
            time.sleep(_SUPERVISOR_CHECK_SECONDS)
        os._exit(1)

    threading.Thread(target=watch, name="supervisor-watch", daemon=True).start()
