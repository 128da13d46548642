"""The trueness of a laboratory in a budget: whether it is there, and that of the right laboratory.

All reference values of a study share the bias of their laboratory: it sits in the bias that was found, and no
scatter shows it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Final

from service.documents import BudgetComponent, BudgetDocument, Study
from service.workflows.budget_evidence import channel_of
from service.workflows.evidence import Behind, FaultCollector
from service.workflows.reference_methods import is_same_method

# The designs that compare the analyzer with a reference method.
VALIDATIONS: Final = ("agreement", "covariance")

Validation = tuple[str, Study]
"""A channel, and the study in which its bias was found."""


def check_trueness(document: BudgetDocument, behind: Sequence[Behind], collector: FaultCollector) -> None:
    """Refuse a bias against a laboratory whose own trueness is in no component, or another's is."""
    against: dict[str, list[Validation]] = {}
    known = set[str]()
    for line, item in zip(document.components, behind, strict=True):
        if line.level == "reference":
            known.update(_quantities(line))
        if line.level != "calibration" or item.study is None or item.study.design not in VALIDATIONS:
            continue
        for name, channel in _channels(line, item.study):
            against.setdefault(name, []).append((channel, item.study))
    for name in sorted(against.keys() - known):
        collector.add(
            "#/components",
            f"no component of {name!r} at the level 'reference' holds the trueness of the laboratory",
            "one from a ring test, a certified material or the between-laboratory part of its limit",
        )
    for index, (line, item) in enumerate(zip(document.components, behind, strict=True)):
        if line.level == "reference" and item.laboratory is not None:
            for name in _quantities(line):
                for validation in against.get(name, ()):
                    _check_laboratory(item, validation, f"#/components/{index}/evidence", collector)


def _check_laboratory(item: Behind, validation: Validation, pointer: str, collector: FaultCollector) -> None:
    channel, study = validation
    theirs = item.laboratory
    assert theirs is not None
    if study.laboratory != theirs["code"]:
        whose = f"come from {study.laboratory!r}" if study.laboratory else "name no laboratory"
        detail = f"got {theirs['code']!r}; the reference values of {study.code} {whose}"
        collector.add_once(f"{pointer}/laboratory", detail, "the laboratory of the validation")
    # A column that the study does not have is refused where the component is made.
    known = channel in (study.characteristic, *study.characteristics)
    if known and theirs["characteristic"] != channel:
        detail = f"got {theirs['characteristic']!r}; the bias was found for {channel!r}"
        collector.add_once(f"{pointer}/characteristic", detail, f"{channel!r}")
    method = study.reference_methods.get(channel)
    if method is not None and not is_same_method(method, theirs["method"]):
        detail = f"{theirs['code']} measures by {theirs['method']!r}; {study.code} was measured by {method!r}"
        collector.add_once(pointer, detail, "the trueness of the method of the validation")


def _quantities(line: BudgetComponent) -> list[str]:
    return [line.quantity] if line.quantity is not None else list(line.quantities.values())


def _channels(line: BudgetComponent, study: Study) -> Iterator[tuple[str, str]]:
    """Give each quantity of a line with the channel that it is about."""
    if line.quantity is not None:
        yield line.quantity, channel_of(study, line.evidence)
    else:
        yield from ((name, column) for column, name in line.quantities.items())
