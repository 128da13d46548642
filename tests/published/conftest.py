"""Published cases from data/*.json, and the way a computed figure is held against a printed one."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import pytest

DATA = Path(__file__).parent / "data"


class Case:
    """One published case: its inputs and its printed figures."""

    def __init__(self, members: dict[str, Any]) -> None:
        self.inputs = members["inputs"]
        self.expected = {item["name"]: item for item in members["expected"]}
        self.compared: set[str] = set()

    def holds(self, name: str, computed: Any) -> None:
        """Hold a figure, or a table, against the printed digits to half a unit of the last one."""
        item = self.expected[name]
        self.compared.add(name)
        if item.get("bound") == "less_than":
            assert all(c < p for c, p in zip(_flat(computed), _flat(item["value"]), strict=True))
            return
        printed = _flat(item["value"])
        tolerances = _flat(item["tol"])
        if len(tolerances) == 1:
            tolerances *= len(printed)
        misprints = {tuple(m["index"]): float(m["correct"]) for m in item.get("misprints", ())}
        width = len(item["value"][0]) if misprints else 1
        for i, (c, p, t) in enumerate(zip(_flat(computed), printed, tolerances, strict=True)):
            right = misprints.get(divmod(i, width), p)
            assert abs(c - right) <= t * (1 + 1e-9), (name, i, c, right, t)


def _flat(thing: Any) -> list[float]:
    if isinstance(thing, Sequence):
        return [value for item in thing for value in _flat(item)]
    return [float(thing)]


@pytest.fixture
def case() -> Callable[[str, str], Case]:
    def load(document: str, identity: str) -> Case:
        return Case(json.loads((DATA / f"{document}.json").read_text(encoding="utf-8"))[identity])

    return load


def degrees(value: float | str) -> float:
    return math.inf if value == "inf" else float(value)
