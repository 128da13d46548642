"""Every error has its problem document: no class and no slug is left out of the one table."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

from budgets.errors import BudgetsError
from service.api.answer_forms import ANSWERS
from service.api.problems import CONFLICTS, INTERNAL, KINDS, kind_of, slugs
from service.errors import Conflict, ServiceError, SetupError

ROOT = Path(__file__).parents[2]


def tree(root: type[Exception]) -> Iterator[type[Exception]]:
    yield root
    for child in root.__subclasses__():
        yield from tree(child)


@pytest.mark.parametrize("error", sorted(set(tree(ServiceError)), key=lambda each: each.__name__))
def test_every_error_of_the_service_stands_in_the_table(error: type[ServiceError]) -> None:
    assert error in KINDS


@pytest.mark.parametrize("error", sorted(set(tree(BudgetsError)), key=lambda each: each.__name__))
def test_every_error_of_the_computation_is_a_fault_of_the_request(error: type[BudgetsError]) -> None:
    # Without its constructor, whose arguments differ: only the class decides.
    assert kind_of(error.__new__(error)).status == 422


def test_only_set_up_and_the_unknown_are_failures_of_the_service() -> None:
    failing = {error for error, kind in KINDS.items() if kind is INTERNAL}
    assert failing == {*tree(SetupError), ServiceError}
    assert kind_of(RuntimeError("unknown")) is INTERNAL


def conflict_codes() -> set[str]:
    """Give the codes of all conflicts that the program raises, read from its source."""
    codes = set()
    for file in (ROOT / "service").rglob("*.py"):
        for node in ast.walk(ast.parse(file.read_text())):
            if isinstance(node, ast.Call) and getattr(node.func, "id", "") == Conflict.__name__:
                (code, *_) = node.args
                assert isinstance(code, ast.Constant), f"{file}: the code of a conflict is written out"
                codes.add(code.value)
    return codes


def test_every_conflict_that_is_raised_has_its_title() -> None:
    assert conflict_codes() == CONFLICTS.keys()


def test_every_slug_is_documented() -> None:
    examples = ANSWERS["Problem"]["properties"]["type"]["examples"]
    assert set(examples) == {"about:blank", *(f"/problems/{slug}" for slug in slugs())}


def test_every_slug_is_provoked_by_a_test() -> None:
    tested = "".join(file.read_text() for file in (ROOT / "tests" / "service" / "api").glob("test_*.py"))
    # No error of the plain class Conflict is raised without a code of its own.
    unprovoked = {slug for slug in slugs() - {"conflict"} if f'"{slug}"' not in tested}
    assert {slug for slug in unprovoked if f"/problems/{slug}" not in tested} == set()
