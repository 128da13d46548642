"""The published cases: read from the JSON files beside this module, and held against what is computed."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import Any

AGREES, DIFFERS, LATER = "agrees", "differs", "not computed yet"

Runner = Callable[[Mapping[str, Any]], Mapping[str, Any]]


@dataclass(frozen=True)
class Expected:
    """One printed figure, or a table of them, with the tolerance that its last digit leaves."""

    name: str
    published: Any
    value: Any
    tolerance: Any
    tolerance_reason: str
    bound: str | None
    misprints: tuple[Mapping[str, Any], ...]
    does_not_follow: str


@dataclass(frozen=True)
class Case:
    """One published case with its source, the way it was come by, and its figures."""

    id: str
    title: str
    source: str
    clause: str
    provenance: str
    provenance_note: str
    doubt: str
    remark: str
    inputs: Mapping[str, Any]
    expected: tuple[Expected, ...]


@dataclass(frozen=True)
class Document:
    """A published document and its cases."""

    name: str
    title: str
    cases: tuple[Case, ...]


@dataclass(frozen=True)
class Outcome:
    """What came out for one printed figure; `deviation` is the largest of a table."""

    name: str
    published: Any
    computed: Any
    deviation: float | None
    status: str
    remark: str


@cache
def document(name: str) -> Document:
    """Read the cases of a document by the name of its file, without the ending."""
    text = resources.files("service.published").joinpath(f"{name}.json").read_text(encoding="utf-8")
    members = json.loads(text)
    return Document(name, members["document"], tuple(_case(item) for item in members["cases"]))


def document_names() -> tuple[str, ...]:
    """Name the documents there are, in alphabetical order."""
    files = (item.name for item in resources.files("service.published").iterdir())
    return tuple(sorted(name.removesuffix(".json") for name in files if name.endswith(".json")))


def _case(members: Mapping[str, Any]) -> Case:
    expected = tuple(
        Expected(
            name=item["name"],
            published=item["published"],
            value=item["value"],
            tolerance=item["tol"],
            tolerance_reason=item.get("tol_reason", ""),
            bound=item.get("bound"),
            misprints=tuple(item.get("misprints", ())),
            does_not_follow=item.get("does_not_follow", ""),
        )
        for item in members["expected"]
    )
    return Case(**{**members, "expected": expected})


def outcomes(case: Case, runner: Runner) -> tuple[Outcome, ...]:
    """Hold what a runner computes from the inputs of a case against every printed figure."""
    computed = runner(case.inputs)
    unknown = set(computed) - {item.name for item in case.expected}
    if unknown:
        raise ValueError(f"{case.id}: nothing printed is called {', '.join(sorted(unknown))}")
    return tuple(_outcome(item, computed.get(item.name)) for item in case.expected)


def _outcome(item: Expected, computed: Any) -> Outcome:
    remark = item.does_not_follow and f"does not follow from its inputs: {item.does_not_follow}"
    if computed is None:
        return Outcome(item.name, item.published, None, None, LATER, remark)
    values = _flat(computed)
    printed = _corrected(item)
    if item.bound == "less_than":
        agrees = all(value < bound for value, bound in zip(values, printed, strict=True))
        return Outcome(item.name, item.published, computed, None, AGREES if agrees else DIFFERS, remark)
    tolerances = _flat(item.tolerance)
    tolerances = tolerances * len(printed) if len(tolerances) == 1 else tolerances
    deviations = [abs(value - right) for value, right in zip(values, printed, strict=True)]
    agrees = all(d <= t * (1 + 1e-9) for d, t in zip(deviations, tolerances, strict=True))
    return Outcome(
        item.name, item.published, computed, max(deviations), AGREES if agrees else DIFFERS, remark
    )


def _corrected(item: Expected) -> list[float]:
    """Return the printed values with known misprints put right."""
    printed = _flat(item.value)
    for misprint in item.misprints:
        row, column = misprint["index"]
        printed[row * len(item.value[0]) + column] = float(misprint["correct"])
    return printed


def _flat(thing: Any) -> list[float]:
    if isinstance(thing, Sequence) and not isinstance(thing, str):
        return [value for item in thing for value in _flat(item)]
    return [float(thing)]


def degrees(value: float | str) -> float:
    """Read degrees of freedom, which JSON writes as ``"inf"`` where they are infinite."""
    return math.inf if value == "inf" else float(value)
