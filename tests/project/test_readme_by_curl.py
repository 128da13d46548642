"""What the README pastes into a shell, pasted into one: by curl, against a real server with the demo plant.

The blocks run in the order in which they stand, from the first lot to the budget out of the demo's raw data.
"""

from __future__ import annotations

import math
import re
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest
from rich.console import Console

from service.demo import plant
from service.demo.run import open_accounts
from service.demo.walk import Access, Walk
from service.settings import load_settings
from tests.faults.server import Server, free_port

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text("utf-8")
SECTIONS = (
    "A budget and a decision by curl",
    "From raw data to a limit by curl",
    "How close to the limit, and what to buy first",
)
NEEDED = (7, 87)  # has --url-query
# A 4xx or 5xx of any call ends the shell.
PRELUDE = 'set -euo pipefail\ncurl() { command curl --fail-with-body "$@"; }\n'


def blocks(section: str) -> list[str]:
    text = re.search(rf"^## {section}\n(.*?)^## ", README, re.M | re.S)
    assert text is not None, section
    return re.findall(r"^```sh\n(.*?)^```$", text[1], re.M | re.S)


def has_curl() -> bool:
    if shutil.which("curl") is None or shutil.which("bash") is None:
        return False
    shown = subprocess.run(["curl", "--version"], capture_output=True, text=True, check=True).stdout
    return tuple(map(int, re.findall(r"\d+", shown)[:2])) >= NEEDED


@pytest.fixture(scope="module")
def served(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[Server, Access]]:
    if not has_curl():
        pytest.skip("the blocks of the README need bash and curl 7.87 or newer")
    folder = tmp_path_factory.mktemp("readme-by-curl")
    access = open_accounts(load_settings({"SHOALMARK_DATA_FOLDER": str(folder)}))
    server = Server(folder, free_port())
    server.start()
    try:
        Walk(server.client(), access, Console(quiet=True)).set_up()
        yield server, access
    finally:
        server.stop()


@pytest.fixture(scope="module")
def printed(served: tuple[Server, Access], tmp_path_factory: pytest.TempPathFactory) -> str:
    """Paste all blocks into one shell, in a folder that has the raw data where the README says."""
    server, access = served
    folder = tmp_path_factory.mktemp("shell")
    (folder / "service").symlink_to(ROOT / "service")
    said = {
        "URL": f"http://127.0.0.1:{server.port}",
        "LINE": access.line,
        "ENGINEER": access.engineer,
        "APPROVER": access.approver,
        "PASSWORD": access.approver_password,
    }
    (first, *others), *further = (blocks(section) for section in SECTIONS)
    assert re.findall(r"^(\w+)=", first, re.M) == list(said)
    script = "".join(f"{name}='{value}'\n" for name, value in said.items())
    script = PRELUDE + script + "\necho\n".join([*others, *(block for each in further for block in each)])
    result = subprocess.run(
        ["bash", "-c", script], cwd=folder, capture_output=True, text=True, timeout=120, check=False
    )
    assert result.returncode == 0, result.stdout[-3000:] + result.stderr
    return result.stdout


def test_every_study_file_of_the_demo_is_recorded_and_its_evaluation_read(printed: str) -> None:
    names = {path.stem for path in (ROOT / "service/demo/data").glob("*.csv")} - {"production-lots"}
    recorded = re.findall(r"^[a-z-]+-again \(\w+, (\d+) used of (\d+) rows\)$", printed, re.M)
    assert len(recorded) == len(names) == 18
    # All rows count: nothing is left out unasked.
    rows = [len(plant.rows_of(f"{name}.csv")) for name in names]
    assert sorted(int(of) for _, of in recorded) == sorted(rows) == sorted(int(used) for used, _ in recorded)
    sent = "\n".join(blocks(SECTIONS[1]))
    for name in names:
        assert re.search(rf" ({name}|\$channel-{name.partition('-')[2]})( |$)", sent, re.M), name
    for estimate in ("between_days", "sampling", "between_instruments", "remainder_covariance"):
        assert re.search(rf"^  {estimate}\b", printed, re.M), estimate


def test_the_set_point_and_what_to_buy_are_answered(printed: str) -> None:
    assert re.search(
        r'"statement": "Today the readings average 2\.83 %: [^"]+ EUR a year against today\."', printed
    )
    assert re.search(r'"statement": "First [a-z-]+[^"]*: [\d,]+ EUR a year', printed)
    assert re.search(r'"statement": "\d+ released lots lay on average', printed)


def test_the_budget_out_of_them_is_in_force_and_explained(
    printed: str, served: tuple[Server, Access]
) -> None:
    lines = re.findall(
        r"^(\S+) +each (\S+) +u (\d\.\d+) %, share +(\d+) %, limit without it (\d\.\d+) %$", printed, re.M
    )
    assert [code for code, *_ in lines] == [
        *("repeatability", "increments", "remainder", "bias", "reference-trueness")
    ]
    total = re.search(
        r"^combined (\S+) %, U = (\S+) % \(k = (\S+)\), acceptance limit (\S+) %$", printed, re.M
    )
    assert total is not None
    combined, expanded, factor, limit = map(float, total.groups())
    # JCGM 100:2008, 5.1.2, eq. (10): independent inputs, so the squares add up; 7.2.1: U = k u_c.
    assert combined == pytest.approx(math.hypot(*(float(u) for _, _, u, *_ in lines)), abs=2e-4)
    assert expanded == pytest.approx(factor * combined, rel=0.01)
    assert sum(int(share) for *_, share, _ in lines) == pytest.approx(100, abs=3)
    # Taking a source of error away moves the limit towards the tolerance limit of 3.2 %.
    assert all(limit < float(without) < 3.2 for *_, without in lines)
    server, access = served
    found = server.client().get(access.line, f"/v1/acceptance-limits/{plant.PRODUCT}/moisture")
    (now,) = [
        item for item in found["items"] if item["planned"] and item["specification"]["code"] == "customer-b"
    ]
    assert now["upper_acceptance_limit"] == pytest.approx(limit, abs=5e-4)
