"""One study renewed behind many budgets: versions drafted and submitted in one act, approved in another.

A renewal is the versions that one entry submitted, as far as they still wait. Each is an ordinary version, so
a single one can still be returned or withdrawn, and approved by itself.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import Any, Final, TypeVar

from service.access import require
from service.documents import Actor, Replacement
from service.errors import Conflict, Fault, InvalidRequest, NotFound, Unavailable
from service.ledger import Entry
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.approvals import RENEWED, approval_of
from service.workflows.budget_validation import Findings
from service.workflows.monte_carlo import findings
from service.workflows.recording import PLANT_CHAIN, Request, entry_reference, record, was_recorded
from service.workflows.reevaluations import Reevaluation, evaluated, evidence_of, laboratory_first, planned
from service.workflows.services import Services
from service.workflows.version_steps import Answer, answer_of, changed_version

_T = TypeVar("_T")
_APPROVED: Final = "renewal-approved"


def submit(
    services: Services, actor: Actor, code: str, replacement: Replacement, request: Request
) -> tuple[Answer, bool]:
    """Draft and submit a version of every budget in force that uses a study, with another one in its place.

    Studies that took the old one out of their scatter are evaluated anew with the other one, in the same act,
    and take the place of what they were.

    Raises
    ------
    NotFound
        There is no such study.
    Conflict
        No budget in force uses it, or one of them is being worked on.
    InvalidRequest
        The other study does not suit one of the budgets or studies; nothing is recorded then.
    Unavailable
        The budgets in force changed meanwhile.
    """
    for act in ("draft a version", "submit a version", "record a study"):
        require(actor, act)
    anew = _evaluated_anew(services, actor, code, replacement, request)
    found = findings(services, actor, request, lambda unit: _expected(unit, actor, code, replacement, anew))

    def perform(unit_of_work: UnitOfWork) -> Entry:
        _check_studies(unit_of_work, code, replacement.study)
        drafts = _drafts(unit_of_work, actor, code, replacement, anew)
        becomes = _becomes(code, replacement, anew)
        with _coming(unit_of_work, anew):
            each_budget(drafts, lambda draft: _check_draft(unit_of_work, draft, becomes, found))
        submitted = [
            changed_version(draft, state="submitted", submitted_by=actor.principal) for draft in drafts
        ]
        content = {
            "study": code,
            "replacement": replacement.study,
            "reason": replacement.reason,
            "studies": [item.written() for item in anew],
            "versions": [{"version": answer_of(version), "evaluation": None} for version in submitted],
        }
        entry = unit_of_work.append(PLANT_CHAIN, RENEWED, actor.principal, content)
        for item in anew:
            item.keep(unit_of_work, entry)
        for draft in drafts:
            _keep_submitted(unit_of_work, actor, draft, entry)
        return entry

    return renewal_recorded(services, actor, request, perform)


# --- the budgets of a study ----------------------------------------------------------------------------


def _check_studies(unit_of_work: UnitOfWork, code: str, replacement: str) -> None:
    if unit_of_work.studies.get(code) is None:
        raise NotFound(f"There is no study {code!r}.")
    if replacement == code:
        raise refused([Fault("got the study itself", "the code of another recorded study", "#/study")])
    if unit_of_work.studies.get(replacement) is None:
        detail = f"there is no study {replacement!r}"
        raise refused([Fault(detail, "the code of a recorded study", "#/study")])


def _evaluated_anew(
    services: Services, actor: Actor, code: str, replacement: Replacement, request: Request
) -> tuple[Reevaluation, ...]:
    """Evaluate outside of the writer what took the old study out; nothing for a request that was recorded."""
    with services.database.reading() as unit_of_work:
        if was_recorded(unit_of_work, actor, request):
            return ()
        _check_studies(unit_of_work, code, replacement.study)
        in_force = unit_of_work.versions.all_in_force("budget")
        codes = planned(unit_of_work, in_force, code, replacement)
        return evaluated(services, unit_of_work, codes, code, replacement.study)


def _drafts(
    unit_of_work: UnitOfWork,
    actor: Actor,
    code: str,
    replacement: Replacement,
    anew: Sequence[Reevaluation],
) -> list[StoredVersion]:
    """Draft a version of each budget that uses the study, or one that is evaluated anew; none is kept yet."""
    in_force = unit_of_work.versions.all_in_force("budget")
    codes = planned(unit_of_work, in_force, code, replacement)
    if codes != {item.instead_of: item.study.code for item in anew}:
        raise Unavailable("The budgets in force changed while studies were evaluated anew; try again.")
    becomes = _becomes(code, replacement, anew)
    using = [version for version in in_force if evidence_of(version) & becomes.keys()]
    drafts = [_draft(unit_of_work, actor, before, becomes, replacement) for before in using]
    if not drafts:
        raise Conflict("nothing-in-force", f"No budget in force uses the study {code!r}.")
    return drafts


def _becomes(code: str, replacement: Replacement, anew: Sequence[Reevaluation]) -> dict[str, str]:
    return {code: replacement.study, **{item.instead_of: item.study.code for item in anew}}


@contextmanager
def _coming(unit_of_work: UnitOfWork, anew: Sequence[Reevaluation]) -> Iterator[None]:
    """Have studies that are evaluated anew, and their extensions, found as if they were kept."""
    extensions = {item.study.code: item.extension for item in anew if item.extension is not None}
    studies = [item.stored() for item in anew]
    with unit_of_work.studies.expecting(studies), unit_of_work.extensions.expecting(extensions):
        yield


def _expected(
    unit_of_work: UnitOfWork,
    actor: Actor,
    code: str,
    replacement: Replacement,
    anew: Sequence[Reevaluation],
) -> Iterator[StoredVersion]:
    """Give the drafts one by one, each while the studies that are evaluated anew are known to be coming."""
    drafts = _drafts(unit_of_work, actor, code, replacement, anew)
    with _coming(unit_of_work, anew):
        yield from drafts


def _check_draft(
    unit_of_work: UnitOfWork, draft: StoredVersion, becomes: Mapping[str, str], found: Findings
) -> None:
    """Refuse a draft that could not be approved, or still rests on the old study through a laboratory."""
    evaluation = approval_of(unit_of_work, draft, found).evaluation
    assert evaluation is not None  # of a budget
    for item in evaluation["components"]:
        if "laboratory" in item and item["laboratory"]["study"] in becomes:
            taken = item["laboratory"]
            raise laboratory_first("its evidence", taken, becomes[taken["study"]])


def _replaced(part: Any, becomes: Mapping[str, str]) -> Any:
    """Give a part of a document with the evidence of other studies in the place of some."""
    if isinstance(part, list):
        return [_replaced(item, becomes) for item in part]
    if not isinstance(part, dict):
        return part
    if part.keys() == {"study", "estimate"} and part["study"] in becomes:
        return {**part, "study": becomes[part["study"]]}
    return {name: _replaced(item, becomes) for name, item in part.items()}


def _draft(
    unit_of_work: UnitOfWork,
    actor: Actor,
    before: StoredVersion,
    becomes: Mapping[str, str],
    replacement: Replacement,
) -> StoredVersion:
    opened = unit_of_work.versions.open("budget", before.code)
    if opened is not None:
        raise Conflict(
            "open-version-exists",
            f"Version {opened.version} of {before.code!r} is still {opened.state}; "
            "approve or withdraw it before the study is renewed.",
            link=f"/v1/budgets/{before.code}/versions/{opened.version}",
        )
    document = _replaced(before.document, becomes)
    return dataclasses.replace(
        before,
        version=unit_of_work.versions.next_number("budget", before.code),
        state="draft",
        revision=1,
        document={**document, "reason": replacement.reason},
        evaluation=None,
        lapses_at=None,
        drafted_by=actor.principal,
        submitted_by=None,
        approved_by=None,
        in_force_from=None,
    )


def _keep_submitted(unit_of_work: UnitOfWork, actor: Actor, draft: StoredVersion, entry: Entry) -> None:
    kept = unit_of_work.versions.insert(
        draft.kind,
        draft.code,
        draft.version,
        draft.document,
        entry,
        drafted_by=draft.drafted_by,
        product=draft.product,
        characteristic=draft.characteristic,
    )
    unit_of_work.versions.set_state(kept, "submitted", entry, submitted_by=actor.principal)


def each_budget(
    versions: list[StoredVersion],
    step: Callable[[StoredVersion], _T],
    *,
    pointer: str = "#/study",
    act: str = "renewed",
) -> list[_T]:
    """Do a step for each version; all are refused with every fault of each, by the code of its budget."""
    done: list[_T] = []
    faults: list[Fault] = []
    for stored in versions:
        try:
            done.append(step(stored))
        except InvalidRequest as error:
            found = error.faults or (Fault(error.message),)
            faults.extend(_of_budget(stored.code, fault, pointer) for fault in found)
    if faults:
        raise refused(faults, act)
    return done


def _of_budget(code: str, fault: Fault, pointer: str) -> Fault:
    place = (fault.pointer or "#").removeprefix("#").removeprefix("/")
    said = f"{place}: {fault.detail}" if place else fault.detail
    return dataclasses.replace(fault, pointer=pointer, detail=f"budget {code}: {said}")


def refused(faults: list[Fault], act: str = "renewed") -> InvalidRequest:
    """Say that an act on a study cannot be done so."""
    return InvalidRequest(f"The study cannot be {act} so; nothing was recorded.", faults=tuple(faults))


# --- answers -------------------------------------------------------------------------------------------


def renewal_recorded(services: Services, actor: Actor, request: Request, perform: Any) -> tuple[Answer, bool]:
    """Have an act on a renewal recorded; gives the answer and whether it had been recorded earlier."""
    act = record(services, actor, request, {PLANT_CHAIN}, perform)
    content = act.entry.content
    answer = {
        "study": content["study"],
        "replacement": content["replacement"],
        "evaluated_anew": evaluated_in(content),
        "budgets": [part["version"] for part in content["versions"]],
        "entry": entry_reference(act.entry),
    }
    return answer, act.earlier


def evaluated_in(content: Mapping[str, Any]) -> list[Answer]:
    """Name the studies that an entry evaluated anew, each with the code that it has now."""
    return [
        {"study": part["instead_of"], "becomes": part["study"]["code"]} for part in content.get("studies", ())
    ]
