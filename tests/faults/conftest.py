"""The demo plant, built once over HTTP on a real server; each test gets a copy of its data folder."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest
from rich.console import Console

from service.demo.run import open_accounts
from service.demo.walk import Access, Walk
from service.settings import load_settings
from tests.faults.server import Server, free_port


@dataclass(frozen=True)
class Plant:
    """A running server and the tokens to speak to it."""

    server: Server
    access: Access


@pytest.fixture(scope="session")
def built_plant(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Access]:
    folder = tmp_path_factory.mktemp("plant")
    access = open_accounts(load_settings({"SHOALMARK_DATA_FOLDER": str(folder)}))
    server = Server(folder, free_port())
    server.start()
    try:
        Walk(server.client(), access, Console(quiet=True)).set_up()
    finally:
        assert server.stop() == 0, server.log()
    return folder, access


@pytest.fixture
def plant(built_plant: tuple[Path, Access], tmp_path: Path) -> Iterator[Plant]:
    template, access = built_plant
    folder = tmp_path / "data"
    shutil.copytree(template, folder)
    server = Server(folder, free_port())
    server.start()
    yield Plant(server, access)
    if server.process is not None:
        server.stop()
