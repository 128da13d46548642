"""Imports run one way, and what is heavy or foreign stays where it belongs (DEVELOPERS.md, "Imports")."""

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]

LEAVES = frozenset(
    {"service.errors", "service.documents", "service.settings", "service.ledger", "service.access"}
)

# Folder or module -> what of our own it may import; the longest name that fits counts.
ALLOWED = {
    "budgets": {"budgets"},
    "service.errors": {"service.errors"},
    "service.documents": {"service.documents"},
    "service.settings": {"service.errors"},
    "service.ledger": {"service.errors"},
    "service.access": {"service.documents", "service.errors"},
    "service.helpers": {"service.errors"},
    "service.schemas": {"service.schemas", "service.documents", "service.errors", "budgets"},
    "service.store": {"service.store", "budgets", *LEAVES},
    "service.workflows": {
        *("service.workflows", "service.store", "service.schemas", "service.helpers", "budgets"),
        *LEAVES,
    },
    "service.api": {"service.api", "service.workflows", "service.schemas", "budgets.errors", *LEAVES},
    "service.pages": {"service.pages", "service.workflows", "service.schemas", "budgets.errors", *LEAVES},
    "service.demo": {"service.demo", "service.workflows", "service.store", "service.settings", "budgets"},
    "service.published": {"service.published", "budgets"},
    # The only ones that wire the parts together.
    "service": {"service", "budgets"},
    "service.cli": {"service", "budgets"},
    "service.import_progress": {"service", "service.workflows", "service.store", *LEAVES},
    "service.serving": {"service", "budgets"},
}

# Package -> the folders that may use it at all.
ONLY_IN = {
    "flask": {"service.api", "service.pages", "service", "service.serving"},
    "flask_smorest": {"service.api"},
    "marshmallow": {"service.schemas", "service.api"},
    "sqlalchemy": {"service.store"},
    "alembic": {"service.store"},
    "psycopg": {"service.store"},
    "argon2": {"service.workflows.accounts"},
    "pint": {"budgets.units"},
    "granian": {"service.serving"},
    "environs": {"service.settings"},
    "rich": {"service.demo", "service.import_progress"},
    "openpyxl": {"service.workflows.spreadsheets"},
    "charset_normalizer": {"service.workflows.csv_files"},
    "click": {"service.cli"},
}


def modules() -> Iterator[tuple[str, Path]]:
    for package in ("budgets", "service"):
        for path in sorted((ROOT / package).rglob("*.py")):
            parts = path.relative_to(ROOT).with_suffix("").parts
            yield ".".join(parts[:-1] if parts[-1] == "__init__" else parts), path


def imports_of(path: Path) -> Iterator[str]:
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            assert node.module is not None
            yield node.module
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def fits(name: str, prefixes: set[str] | frozenset[str]) -> bool:
    return any(name == prefix or name.startswith(prefix + ".") for prefix in prefixes)


def rule_of(module: str) -> set[str]:
    names = [
        name for name in ALLOWED if name == module or (name != "service" and module.startswith(name + "."))
    ]
    assert names, f"{module} has no import rule: give it one, here and in DEVELOPERS.md"
    return ALLOWED[max(names, key=len)]


def is_module(name: str) -> bool:
    path = ROOT.joinpath(*name.split("."))
    return path.with_suffix(".py").exists() or path.is_dir()


@pytest.mark.parametrize(
    ("module", "path"), list(modules()), ids=lambda value: str(value).replace(str(ROOT), "")
)
def test_a_module_imports_only_what_its_folder_may(module: str, path: Path) -> None:
    allowed = rule_of(module)
    for name in imports_of(path):
        if name.split(".")[0] not in ("budgets", "service"):
            continue
        target = name if is_module(name) else name.rpartition(".")[0]
        if target == "service" and "service" not in allowed:
            # `from service import x` names a module that is checked by itself.
            continue
        assert fits(target, allowed), f"{module} imports {target}"


@pytest.mark.parametrize(
    ("module", "path"), list(modules()), ids=lambda value: str(value).replace(str(ROOT), "")
)
def test_a_foreign_package_is_used_only_in_its_place(module: str, path: Path) -> None:
    for name in imports_of(path):
        package = name.split(".")[0]
        if package in ONLY_IN:
            places = ONLY_IN[package]
            inside = module in places or fits(module, {place for place in places if place != "service"})
            assert inside, f"{module} imports {package}"


def test_the_computation_does_no_input_or_output_and_reads_no_clock() -> None:
    forbidden = {"io", "os", "pathlib", "socket", "time", "datetime", "logging", "subprocess", "sqlite3"}
    for module, path in modules():
        if module.startswith("budgets"):
            found = {name.split(".")[0] for name in imports_of(path)} & forbidden
            assert not found, f"{module} imports {found}"


def test_the_command_line_imports_nothing_heavy() -> None:
    """`shoalmark --help` answers at once because of this; the time itself is shown in the benchmarks."""
    heavy = (
        "numpy scipy sqlalchemy alembic flask marshmallow pint granian rich uncertainties argon2 "
        "openpyxl charset_normalizer yaml"
    ).split()
    code = f"import sys, service.cli; print([name for name in {heavy!r} if name in sys.modules])"
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    assert shown.stdout.strip() == "[]"
