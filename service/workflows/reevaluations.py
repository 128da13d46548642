"""Studies evaluated anew, with the same data, because a study that they took out of their scatter is renewed.

Studies never change, so each becomes a further study with a code of its own; how long it serves does not
change, for its data are as old as they were. One that an approver let serve longer stays extended as it was.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Any, Final

from budgets.evidence.evaluation import Evaluation
from service.documents import Replacement, Study, StudyEvidence
from service.errors import Fault, InvalidRequest
from service.ledger import Entry
from service.schemas import dump, load
from service.store.rows import StoredStudy, StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.recording import PLANT_CHAIN
from service.workflows.services import Services
from service.workflows.study_evaluation import evaluate, task_of

_LONGEST_CODE: Final = 63


@dataclass(frozen=True)
class Reevaluation:
    """A study evaluated anew, the code of the one whose data it has, and how that was extended."""

    instead_of: str
    study: Study
    evaluation: Evaluation
    extension: Mapping[str, Any] | None

    def stored(self) -> StoredStudy:
        """Give the row that the study will have; where it is recorded is known once the entry is there."""
        return StoredStudy(
            code=self.study.code,
            product=self.study.product,
            characteristic=self.study.characteristic,
            design=self.study.design,
            document=dump(self.study),
            evaluation=self.evaluation.to_document(),
            chain=PLANT_CHAIN,
            sequence=0,
        )

    def written(self) -> dict[str, Any]:
        """Write it down for the record."""
        stored = self.stored()
        extended = {} if self.extension is None else {"extension": dict(self.extension)}
        return {
            "instead_of": self.instead_of,
            "study": stored.document,
            "evaluation": stored.evaluation,
            **extended,
        }

    def keep(self, unit_of_work: UnitOfWork, entry: Entry) -> None:
        """Add the study that an entry says."""
        stored = self.stored()
        unit_of_work.studies.add(
            stored.code,
            stored.document,
            stored.evaluation,
            entry,
            product=stored.product,
            characteristic=stored.characteristic,
            design=stored.design,
        )
        if self.extension is not None:
            unit_of_work.extensions.add(stored.code, self.extension, entry)


def evidence_of(version: StoredVersion) -> set[str]:
    """Name all studies behind a budget in force: those that it names, and those behind its laboratories."""
    evaluation = version.evaluation or {"components": []}
    behind = {item["laboratory"]["study"] for item in evaluation["components"] if "laboratory" in item}
    return set(_named(version.document)) | behind - {None}


def _named(part: Any) -> Iterator[str]:
    if isinstance(part, list):
        for item in part:
            yield from _named(item)
    elif isinstance(part, dict):
        if part.keys() == {"study", "estimate"}:
            yield part["study"]
        else:
            for item in part.values():
                yield from _named(item)


def planned(
    unit_of_work: UnitOfWork, in_force: list[StoredVersion], code: str, replacement: Replacement
) -> dict[str, str]:
    """Give the studies behind the budgets in force that took a study out, with the code that each will have.

    One that took another of them out comes after it.

    Raises
    ------
    InvalidRequest
        A code is given for a study that is not evaluated anew, or is taken.
    """
    found: dict[str, bool] = {code: True}
    after: list[str] = []

    def visit(study: str) -> bool:
        if study not in found:
            found[study] = False  # a study takes out only what was recorded before it, so there are no rings
            stored = unit_of_work.studies.get(study)
            sources = set() if stored is None else _sources(stored)
            found[study] = any([visit(source) for source in sorted(sources)])
            if found[study]:
                after.append(study)
        return found[study]

    for version in in_force:
        for study in sorted(evidence_of(version)):
            visit(study)
    return _codes(unit_of_work, after, replacement)


def _sources(stored: StoredStudy) -> set[str]:
    """Name the studies that were taken out of one, by itself or through the entry of a laboratory."""
    taken = stored.evaluation["diagnostics"].get("laboratory_components", [])
    return {*_named(stored.document["named_sources"]), *(item["study"] for item in taken)} - {None}


def _codes(unit_of_work: UnitOfWork, studies: list[str], replacement: Replacement) -> dict[str, str]:
    given = replacement.evaluated_anew
    faults = [
        Fault(f"{study!r} is not evaluated anew", f"only {', '.join(studies) or 'none'}", _pointer(study))
        for study in given
        if study not in studies
    ]
    codes: dict[str, str] = {}
    for study in studies:
        code = given.get(study) or _free_code(unit_of_work, study, {*codes.values(), *given.values()})
        if code in codes.values() or unit_of_work.studies.get(code) is not None:
            faults.append(Fault(f"{code!r} is taken", "a code that no study has", _pointer(study)))
        codes[study] = code
    if faults:
        raise InvalidRequest("The study cannot be renewed so; nothing was recorded.", faults=tuple(faults))
    return codes


def _pointer(study: str) -> str:
    return f"#/evaluated_anew/{study}"


def _free_code(unit_of_work: UnitOfWork, study: str, taken: set[str]) -> str:
    number = 2
    while True:
        suffix = f"-{number}"
        code = study[: _LONGEST_CODE - len(suffix)] + suffix
        if code not in taken and unit_of_work.studies.get(code) is None:
            return code
        number += 1


def evaluated(
    services: Services, unit_of_work: UnitOfWork, codes: Mapping[str, str], code: str, replacement: str
) -> tuple[Reevaluation, ...]:
    """Evaluate each study of a plan with the new evidence in the place of the old.

    Raises
    ------
    InvalidRequest
        One of them cannot take out what is to be taken out now; each fault names the study.
    """
    becomes = {code: replacement, **codes}
    done: list[Reevaluation] = []
    for before, anew in codes.items():
        stored = unit_of_work.studies.get(before)
        assert stored is not None  # planned just now
        study = replace(_with(load(Study, stored.document), becomes), code=anew)
        with unit_of_work.studies.expecting(item.stored() for item in done):
            try:
                task = task_of(unit_of_work, study, again=True)
                complete, evaluation = evaluate(services, study, task)
            except InvalidRequest as error:
                raise _of_study(before, error) from error
        _check_laboratories(evaluation.diagnostics, before, becomes)
        extension = unit_of_work.extensions.document_of(before)
        done.append(Reevaluation(before, complete, evaluation, extension))
    return tuple(done)


def _with(study: Study, becomes: Mapping[str, str]) -> Study:
    sources = tuple(
        replace(named, evidence=replace(named.evidence, study=becomes[named.evidence.study]))
        if isinstance(named.evidence, StudyEvidence) and named.evidence.study in becomes
        else named
        for named in study.named_sources
    )
    return replace(study, named_sources=sources)


def _check_laboratories(diagnostics: Mapping[str, Any], study: str, becomes: Mapping[str, str]) -> None:
    for item in diagnostics.get("laboratory_components", []):
        if item["study"] in becomes:
            raise laboratory_first(f"study {study}", item, becomes[item["study"]])


def laboratory_first(what: str, taken: Mapping[str, Any], replacement: str) -> InvalidRequest:
    """Say that the entry of a laboratory rests on the old study still."""
    detail = f"{what}: the {taken['component']} of {taken['code']} rests on {taken['study']!r} still"
    expected = f"{replacement!r} in the entry of the laboratory, before the study is renewed"
    fault = Fault(detail, expected, "#/study")
    return InvalidRequest("The study cannot be renewed so; nothing was recorded.", faults=(fault,))


def _of_study(code: str, error: InvalidRequest) -> InvalidRequest:
    found = error.faults or (Fault(error.message),)
    faults = []
    for fault in found:
        place = (fault.pointer or "#").removeprefix("#").removeprefix("/")
        said = f"{place}: {fault.detail}" if place else fault.detail
        faults.append(replace(fault, pointer="#/study", detail=f"study {code}: {said}"))
    return InvalidRequest("The study cannot be renewed so; nothing was recorded.", faults=tuple(faults))
