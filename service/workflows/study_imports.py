"""Files of data brought in by command: all are read before any is recorded, and each is recorded once."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import yaml

from service.documents import Actor, Study
from service.errors import InvalidRequest, ServiceError, TooLarge, Unreadable
from service.schemas import dump, load
from service.workflows import studies
from service.workflows.accounts import COMMAND_LINE
from service.workflows.csv_files import read_csv
from service.workflows.recording import Request
from service.workflows.services import Services
from service.workflows.spreadsheets import SUFFIXES, read_spreadsheet
from service.workflows.study_files import json_of, study_document

LARGEST_FILE: Final = 32 * 1024 * 1024
ABOUT_SUFFIXES: Final = (".yaml", ".yml", ".json")
_ACTOR: Final = Actor(COMMAND_LINE, frozenset({"engineer"}))


@dataclass(frozen=True)
class Imported:
    """A study that stands in the record now; ``earlier`` when this very one stood there before."""

    file: Path
    answer: dict[str, Any]
    earlier: bool


def read_study(
    file: Path, about: Path | None = None, said: Mapping[str, Any] | None = None, sheet: str | None = None
) -> Study:
    """Read a study from a file of data, or from its JSON document.

    What is known of it stands in ``about``, or else in a file of the same name beside it that ends in .yaml,
    .yml or .json; ``said`` counts before it.

    Raises
    ------
    Unreadable, TooLarge, InvalidRequest
        Every one names the file.
    """
    try:
        if file.stat().st_size > LARGEST_FILE:
            raise TooLarge(f"The file is larger than {LARGEST_FILE} bytes.")
        content = file.read_bytes()
        if file.suffix.lower() == ".json" and about is None and sheet is None:
            return load(Study, {**_mapping(file), **(said or {})})
        beside = about or _beside(file)
        members = {**({} if beside is None else _members(beside)), **(said or {})}
        if file.suffix.lower() in SUFFIXES:
            table = read_spreadsheet(file, sheet)
        elif sheet is None:
            table = read_csv(content)
        else:
            raise InvalidRequest(f"{file.name} is no spreadsheet, so it has no sheet {sheet!r}.")
        return load(Study, study_document(members, table, name=file.name, content=content))
    except OSError as error:
        raise Unreadable(f"{file}: {error.strerror or error}") from None
    except ServiceError as error:
        error.message = f"{file}: {error.message}"
        error.args = (error.message,)
        raise


def record_files(
    services: Services, found: Sequence[tuple[Path, Study]], done: Callable[[Imported], None]
) -> list[Imported]:
    """Record the studies in their order; ``done`` is told of each.

    The key of each is made of all it says: what was recorded before is found, not recorded again.

    Raises
    ------
    Conflict, InvalidRequest
        One cannot be recorded. Those before it stand; the message names the file.
    """
    imported: list[Imported] = []
    for file, study in found:
        text = json.dumps(dump(study), sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        digest = hashlib.sha256(text.encode()).hexdigest()
        try:
            answer, earlier = studies.record_study(services, _ACTOR, study, Request(digest, digest))
        except ServiceError as error:
            before = f" The {len(imported)} before it are recorded." if imported else ""
            error.message = f"{file}: {error.message}{before}"
            error.args = (error.message,)
            raise
        imported.append(Imported(file, answer, earlier))
        done(imported[-1])
    return imported


def _beside(file: Path) -> Path | None:
    found = [path for suffix in ABOUT_SUFFIXES if (path := file.with_suffix(suffix)).exists()]
    if len(found) > 1:
        names = " and ".join(path.name for path in found)
        raise InvalidRequest(f"Both {names} are there; remove one, or name the one that counts.")
    return found[0] if found else None


def _members(about: Path) -> dict[str, Any]:
    """Read what is known of a study. Raises Unreadable or InvalidRequest."""
    found = _mapping(about)
    for member in ("columns", "rows"):
        if member in found:
            raise InvalidRequest(f"{about.name} holds {member}, which the file of data gives.")
    return found


def _mapping(about: Path) -> dict[str, Any]:
    try:
        text = about.read_text("utf-8-sig")
        found = json_of(text) if about.suffix.lower() == ".json" else yaml.load(text, _OneMeaning)
    except (ValueError, yaml.YAMLError) as error:
        raise Unreadable(f"{about.name} cannot be read: {' '.join(str(error).split())}") from None
    if not isinstance(found, dict):
        raise Unreadable(f"{about.name} has to hold the members of a study, as code and design.")
    return found


class _OneMeaning(yaml.SafeLoader):
    """Reads YAML like a JSON document: dates stay text, and no member stands there twice."""

    def construct_mapping(self, node: yaml.MappingNode, deep: bool = False) -> dict[Any, Any]:
        """Refuse a key that stands there twice, or is no text."""
        keys = [self.construct_object(key, deep=True) for key, _ in node.value]
        for key in keys:
            if not isinstance(key, str):
                raise yaml.constructor.ConstructorError(None, None, f"{key!r} is no name", node.start_mark)
            if keys.count(key) > 1:
                raise yaml.constructor.ConstructorError(
                    None, None, f"{key!r} stands there twice", node.start_mark
                )
        return super().construct_mapping(node, deep)


_OneMeaning.yaml_implicit_resolvers = {
    first: [(tag, pattern) for tag, pattern in resolvers if tag != "tag:yaml.org,2002:timestamp"]
    for first, resolvers in yaml.SafeLoader.yaml_implicit_resolvers.items()
}
