"""`shoalmark demo`: a database of its own, a real server process on loopback, the job walked through."""

from __future__ import annotations

import json
import os
import secrets
import shlex
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import time
from contextlib import closing, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

from rich.console import Console

from service.demo import plant
from service.demo.client import Client
from service.demo.set_point_walk import SetPointWalk
from service.demo.walk import Access, Walk
from service.settings import Settings, load_settings
from service.workflows.accounts import add_person, add_token

HOST: Final = "127.0.0.1"
USUAL_PORT: Final = 8080
_START_SECONDS: Final = 20.0


class Stopped(Exception):
    """The demo was asked to stop."""


def run(*, check: bool, port: int | None) -> int:
    """Build the demo plant, serve it, walk the job; stay up unless ``check``. Gives the exit status."""
    console = Console(soft_wrap=False, width=None if sys.stdout.isatty() else 118)
    signal.signal(signal.SIGTERM, _stop)
    folder = Path(tempfile.mkdtemp(prefix="shoalmark-demo-"))
    server: subprocess.Popen[bytes] | None = None
    try:
        environment = _environment(folder, _free_port(port))
        settings = load_settings(environment)
        console.print("Demo plant, invented: a milk drying plant. Not for real release decisions.\n")
        access = open_accounts(settings)
        server = _start(environment, settings, folder)
        client = Client(settings.host, settings.port)
        walk = Walk(client, access, console)
        walk.set_up()
        walk.decide_first_lot()
        walk.decide_production()
        SetPointWalk(client, access.engineer, console).ask()
        whole = walk.verify()
        client.close()
        if check:
            return 0 if whole else 1
        _say_how_to_go_on(console, settings, access, folder)
        return server.wait()
    except (KeyboardInterrupt, Stopped):
        return 0
    finally:
        if server is not None:
            _end(server)
        shutil.rmtree(folder, ignore_errors=True)


def _environment(folder: Path, port: int) -> dict[str, str]:
    """Give the server's environment: nothing of the settings of this shell gets into the demo."""
    kept = {name: value for name, value in os.environ.items() if not name.startswith("SHOALMARK_")}
    return kept | {
        "SHOALMARK_DATA_FOLDER": str(folder),
        "SHOALMARK_HOST": HOST,
        "SHOALMARK_PORT": str(port),
        "SHOALMARK_LOG_LEVEL": "warning",
        "SHOALMARK_DEMO": "yes",
    }


def open_accounts(settings: Settings) -> Access:
    """Make the database with the accounts of the demo, before anything serves it."""
    from service.store.schema import migrate
    from service.store.unit_of_work import Database

    migrate(settings.database_url)
    database = Database(settings.database_url)
    try:
        approver_password = secrets.token_urlsafe(12)
        add_person(database, "engineer-a", "Engineer A", ("engineer",), secrets.token_urlsafe(12))
        add_person(database, "approver-b", "Approver B", ("approver",), approver_password)
        return Access(
            line=add_token(database, "mes", ("line",)).secret,
            engineer=add_token(database, "engineer-a", ()).secret,
            approver=add_token(database, "approver-b", ()).secret,
            approver_password=approver_password,
        )
    finally:
        database.close()


def _start(environment: dict[str, str], settings: Settings, folder: Path) -> subprocess.Popen[bytes]:
    log = folder / "server.log"
    with log.open("wb") as output:
        server = subprocess.Popen(
            [sys.executable, "-c", "from service.cli import main; main()", "serve"],
            env=environment,
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=subprocess.STDOUT,
        )
    deadline = time.monotonic() + _START_SECONDS
    while time.monotonic() < deadline:
        if server.poll() is not None:
            break
        with suppress(OSError), closing(Client(settings.host, settings.port)) as client:
            if client.call("GET", "/readyz", None).status == 200:
                return server
        time.sleep(0.05)
    _end(server)
    raise SystemExit(f"The server did not start:\n{log.read_text(errors='replace')}")


def _say_how_to_go_on(console: Console, settings: Settings, access: Access, folder: Path) -> None:
    address = f"http://{settings.host}:{settings.port}"
    now = datetime.now(UTC)
    lot = f"T-{now:%H%M%S}"
    request = plant.decision_request(
        lot,
        [
            plant.reading("1", f"{now:%Y-%m-%d}T00:00:{second}Z", moisture, distance=1.4, temperature=24.0)
            | {"measurement": f"{lot}-{second}"}
            for second, moisture in (("04.120", 2.84), ("41.480", 2.88))
        ],
    )

    def say(text: str = "") -> None:
        console.print(text, highlight=False, markup=False, soft_wrap=True)

    say()
    say(f"The demo plant is up: {address}   (Ctrl-C stops it and removes {folder})")
    say(f"  token of the line (role line):           {access.line}")
    say(f"  token of engineer-a (role engineer):     {access.engineer}")
    say(f"  token of approver-b (role approver):     {access.approver}")
    say(f"  password of approver-b, for signatures:  {access.approver_password}")
    say()
    say("Judge a lot yourself:")
    say()
    say(
        f"curl -sS {address}/v1/decisions -H 'Authorization: Bearer {access.line}' "
        f"-H 'Idempotency-Key: {lot}-first-look' -H 'Content-Type: application/json' "
        f"-d {shlex.quote(json.dumps(request))}"
    )
    say()


def _free_port(wanted: int | None) -> int:
    """Give the port that is wanted, else the usual one when nobody has it, else any."""
    for port in (USUAL_PORT, 0) if wanted is None else (wanted,):
        with socket.socket() as probe, suppress(OSError):
            probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            probe.bind((HOST, port))
            return int(probe.getsockname()[1])
    if wanted is not None:
        raise SystemExit(f"The port {wanted} of the loopback address is in use; choose another one.")
    raise SystemExit("There is no free port on the loopback address.")


def _end(server: subprocess.Popen[bytes]) -> None:
    if server.poll() is None:
        server.terminate()
        try:
            server.wait(10)
        except subprocess.TimeoutExpired:
            server.kill()
            server.wait()


def _stop(number: int, frame: object) -> None:
    raise Stopped
