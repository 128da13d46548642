"""`shoalmark demo --check` walks the whole job over HTTP against a real server process."""

from __future__ import annotations

import os
import re
import socket
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).parents[3]


def test_the_check_walks_the_job_and_ends_well(tmp_path: Path) -> None:
    environment = {name: value for name, value in os.environ.items() if not name.startswith("SHOALMARK_")}
    result = subprocess.run(
        [sys.executable, "-c", "from service.cli import main; main()", "demo", "--check"],
        cwd=ROOT,
        env=environment | {"TMPDIR": str(tmp_path)},
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert result.returncode == 0, result.stdout + result.stderr
    for what in (
        "days-and-runs",
        "sampling",
        "held-sample",
        "stream",
        "check-samples",
        "fleet",
        "production",
    ):
        assert f"│ moisture-{what} " in result.stdout
    assert "Lot W26-04711: RELEASE" in result.stdout
    outcomes = dict(re.findall(r"│ (release|hold|reject) +│ +(\d+) │", result.stdout))
    assert sum(map(int, outcomes.values())) == 200
    # Most lots are good, but not all can be proved and a few are beyond the customer's limit.
    assert int(outcomes["release"]) > int(outcomes["hold"]) > int(outcomes["reject"]) > 0
    assert "The record is whole." in result.stdout
    # The process engineer's question is answered from the record of these lots.
    assert re.search(r"^\d+ first readings of lots in the record", result.stdout, re.M)
    assert re.search(r"^For the controller: 2\.\d\d %, as nir-1 with wmp-7 reads it", result.stdout, re.M)
    assert re.search(r"^\d+ released lots lay on average ", result.stdout, re.M)
    assert re.search(r"^First [a-z-]+( with [a-z-]+)?: [\d,]+ EUR a year", result.stdout, re.M)
    assert "composite-of-four does not pay. It does not help a reading" in result.stdout
    # Nothing of it is left: no database, no server.
    assert list(tmp_path.iterdir()) == []


def test_a_port_in_use_is_said_before_anything_is_built(tmp_path: Path) -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        result = subprocess.run(
            [sys.executable, "-c", "from service.cli import main; main()", "demo", "--port", str(port)],
            cwd=ROOT,
            env={**os.environ, "TMPDIR": str(tmp_path)},
            capture_output=True,
            text=True,
            timeout=60,
        )
    assert result.returncode == 1
    assert f"The port {port} of the loopback address is in use" in result.stderr
    assert list(tmp_path.iterdir()) == []
