"""A real serving process on the loopback address, started and killed by the tests that own it."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import time
from contextlib import closing, suppress
from dataclasses import dataclass, field
from pathlib import Path

from service.demo.client import Client

ROOT = Path(__file__).parents[2]
COMMAND = (sys.executable, "-c", "from service.cli import main; main()")
_START_SECONDS = 30.0


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def environment(**settings: object) -> dict[str, str]:
    """Give the environment of this process with the settings given and no others."""
    kept = {name: value for name, value in os.environ.items() if not name.startswith("SHOALMARK_")}
    return kept | {f"SHOALMARK_{name.upper()}": str(value) for name, value in settings.items()}


def run_command(
    *arguments: str, text_input: str = "", **settings: object
) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*COMMAND, *arguments],
        cwd=ROOT,
        env=environment(**settings),
        input=text_input,
        capture_output=True,
        text=True,
        timeout=60,
    )


@dataclass
class Server:
    """`shoalmark serve` with a data folder and a port of its own."""

    folder: Path
    port: int
    settings: dict[str, str] = field(default_factory=dict)
    process: subprocess.Popen[bytes] | None = None
    clients: list[Client] = field(default_factory=list)

    def start(self) -> None:
        with (self.folder / "server.log").open("ab") as log:
            self.process = subprocess.Popen(
                [*COMMAND, "serve"],
                cwd=ROOT,
                env=environment(
                    data_folder=self.folder, port=self.port, log_level="warning", **self.settings
                ),
                stdin=subprocess.DEVNULL,
                stdout=log,
                stderr=subprocess.STDOUT,
            )
        deadline = time.monotonic() + _START_SECONDS
        while time.monotonic() < deadline and self.process.poll() is None:
            with suppress(OSError), closing(Client("127.0.0.1", self.port)) as client:
                if client.call("GET", "/readyz", None).status == 200:
                    return
            time.sleep(0.05)
        raise AssertionError(f"the server did not start: {self.log()}")

    def client(self) -> Client:
        """Give a client of its own connection; all are closed with the server."""
        self.clients.append(Client("127.0.0.1", self.port))
        return self.clients[-1]

    def log(self) -> str:
        return (self.folder / "server.log").read_text(errors="replace")

    def kill(self) -> None:
        """SIGKILL to the process that was started; no chance to tidy up."""
        assert self.process is not None
        self.process.send_signal(signal.SIGKILL)
        self.process.wait()
        self._close_clients()

    def stop(self) -> int:
        assert self.process is not None
        self._close_clients()
        if self.process.poll() is None:
            self.process.terminate()
        return self.process.wait(20)

    def _close_clients(self) -> None:
        while self.clients:
            self.clients.pop().close()
