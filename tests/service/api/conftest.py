"""The real application on SQLite files; each file is a copy of one that was built once in the session."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from flask import Flask

from service import create_app, create_services
from service.helpers import Helper
from service.settings import Settings, load_settings
from service.store.schema import migrate
from service.workflows import accounts
from tests.service.api import house
from tests.service.api.house import Caller

TOKENS = {
    "mes": ("line",),
    "engineer": ("engineer",),
    "auditor": ("auditor",),
    "robot": ("engineer", "approver"),
}
PEOPLE = {"ada": ("engineer", "approver"), "max": ("approver",)}


def settings_for(folder: Path) -> Settings:
    return load_settings({"SHOALMARK_DATA_FOLDER": str(folder)})


class SharedHelper(Helper):
    """One helper process for the applications of all tests: to start it takes longer than most of them."""

    def close(self) -> None:
        """Stay, for the next test."""


HELPER = SharedHelper()


@pytest.fixture(scope="session", autouse=True)
def _no_process_is_left() -> Iterator[None]:
    yield
    Helper.close(HELPER)


def open_app(folder: Path) -> Flask:
    app = create_app(create_services(settings_for(folder), HELPER))
    app.testing = True
    return app


def copied(template: Path, folder: Path) -> Path:
    shutil.copytree(template, folder, dirs_exist_ok=True)
    return folder


@pytest.fixture(scope="session")
def empty_template(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, str]]:
    """Make a database with accounts and nothing else, and the tokens by whom they belong to."""
    folder = tmp_path_factory.mktemp("empty")
    migrate(settings_for(folder).database_url)
    app = open_app(folder)
    database = app.extensions["shoalmark"].database
    for person, roles in PEOPLE.items():
        accounts.add_person(database, person, person.title(), roles, house.PASSWORD)
    tokens = {name: accounts.add_token(database, name, roles).secret for name, roles in TOKENS.items()}
    tokens |= {person: accounts.add_token(database, person, ()).secret for person in PEOPLE}
    app.extensions["shoalmark"].close()
    return folder, tokens


@pytest.fixture(scope="session")
def house_template(
    empty_template: tuple[Path, dict[str, str]], tmp_path_factory: pytest.TempPathFactory
) -> Path:
    """Build the plant with its evidence, a budget and two specifications in force; no lot judged yet."""
    template, tokens = empty_template
    folder = copied(template, tmp_path_factory.mktemp("house"))
    app = open_app(folder)
    client = app.test_client()
    house.build(Caller(client, tokens["engineer"]), Caller(client, tokens["max"]))
    app.extensions["shoalmark"].close()
    return folder


@pytest.fixture
def empty_app(empty_template: tuple[Path, dict[str, str]], tmp_path: Path) -> Iterator[Flask]:
    app = open_app(copied(empty_template[0], tmp_path / "data"))
    yield app
    app.extensions["shoalmark"].close()


@pytest.fixture
def app(house_template: Path, tmp_path: Path) -> Iterator[Flask]:
    app = open_app(copied(house_template, tmp_path / "data"))
    yield app
    app.extensions["shoalmark"].close()


class Callers(dict[str, Caller]):
    """Callers by name; ``nobody`` has no token."""


def callers_of(app: Flask, tokens: dict[str, str]) -> Callers:
    client = app.test_client()
    return Callers({"nobody": Caller(client, None), **{k: Caller(client, t) for k, t in tokens.items()}})


@pytest.fixture
def at_start(empty_app: Flask, empty_template: tuple[Path, dict[str, str]]) -> Callers:
    """Callers of a service in which nothing was recorded but accounts."""
    return callers_of(empty_app, empty_template[1])


@pytest.fixture
def callers(app: Flask, empty_template: tuple[Path, dict[str, str]]) -> Callers:
    """Callers of the whole house."""
    return callers_of(app, empty_template[1])
