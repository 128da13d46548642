"""The serving process: schema, lock, application, and the end of it all when its supervisor is gone."""

from __future__ import annotations

import logging
import os
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

from service.settings import Settings, load_settings

if TYPE_CHECKING:
    from flask import Flask

LOG_FORMAT: Final = "%(asctime)s %(levelname)s %(name)s %(message)s"
_SUPERVISOR_CHECK_SECONDS: Final = 0.2


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
    with _lock(file):
        return migrate_with_copy(settings.database_url)


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
        process_name=None,
    ).serve()


def application() -> Flask:
    """Make the application in the worker process; holds the serving lock as long as that lives."""
    from service import create_app, create_services
    from service.store.engine import sqlite_file

    settings = load_settings(os.environ)
    logging.basicConfig(level=settings.log_level.upper(), format=LOG_FORMAT)
    file = sqlite_file(settings.database_url)
    app_lock: Any = None
    if file is not None:
        app_lock = _lock(file)
        app_lock.acquire()
    _end_with_supervisor(os._exit)
    app = create_app(create_services(settings))
    app.extensions["shoalmark.lock"] = app_lock
    return app


def _lock(file: Path) -> Any:
    from service.store.lock import ServingLock

    return ServingLock(file.with_name(f"{file.name}.lock"))


def _end_with_supervisor(end: Callable[[int], None]) -> None:
    """End this process when its supervisor was killed: an orphan would keep the port and the lock."""
    supervisor = os.getppid()

    def watch() -> None:
        while os.getppid() == supervisor:
            time.sleep(_SUPERVISOR_CHECK_SECONDS)
        end(1)

    threading.Thread(target=watch, name="supervisor-watch", daemon=True).start()
