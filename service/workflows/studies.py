"""Studies: test data in, evaluation out; previewed without a trace or recorded for good."""

from __future__ import annotations

from typing import Any

from service.access import require
from service.documents import Actor, Study
from service.errors import Conflict, NotFound
from service.ledger import Entry
from service.schemas import dump
from service.store.rows import StoredStudy
from service.store.unit_of_work import UnitOfWork
from service.workflows.paging import page_of, start_after
from service.workflows.recording import PLANT_CHAIN, Page, Request, entry_reference, record
from service.workflows.services import Services
from service.workflows.study_evaluation import evaluate, task_of


def preview(services: Services, actor: Actor, study: Study) -> dict[str, Any]:
    """Evaluate a study and store nothing. Raises InvalidRequest with all that is wrong with it."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        task = task_of(unit_of_work, study)
    complete, evaluation = evaluate(services, study, task)
    return {"recorded": False, "study": dump(complete), "evaluation": evaluation.to_document()}


def record_study(
    services: Services, actor: Actor, study: Study, request: Request
) -> tuple[dict[str, Any], bool]:
    """Evaluate a study and record both for good; gives the answer and whether it had been recorded earlier.

    Raises
    ------
    Conflict
        The code is taken; a study is never changed, a further one gets a code of its own.
    InvalidRequest
        The data cannot be evaluated.
    """
    require(actor, "record a study")
    # Evaluated here, so that the writer, which the production lines wait for, only writes it down.
    with services.database.reading() as unit_of_work:
        taken = unit_of_work.studies.get(study.code)
        task = None if taken else task_of(unit_of_work, study)
    complete, evaluation = (study, None) if task is None else evaluate(services, study, task)

    def perform(unit_of_work: UnitOfWork) -> Entry:
        if evaluation is None or unit_of_work.studies.get(study.code) is not None:
            raise Conflict(
                "already-exists",
                f"There is a study {study.code!r}; studies never change, use a new code.",
                link=f"/v1/studies/{study.code}",
            )
        content = {"study": dump(complete), "evaluation": evaluation.to_document()}
        entry = unit_of_work.append(PLANT_CHAIN, "study-recorded", actor.principal, content)
        unit_of_work.studies.add(
            study.code,
            content["study"],
            content["evaluation"],
            entry,
            product=study.product,
            characteristic=study.characteristic,
            design=study.design,
        )
        return entry

    recorded = record(services, actor, request, {PLANT_CHAIN}, perform)
    answer = {"recorded": True, **recorded.entry.content, "entry": entry_reference(recorded.entry)}
    return answer, recorded.earlier


def get(services: Services, actor: Actor, code: str) -> dict[str, Any]:
    """Read a study with its data and evaluation. Raises NotFound."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        stored = unit_of_work.studies.get(code)
        extension = unit_of_work.extensions.document_of(code)
    if stored is None:
        raise NotFound(f"There is no study {code!r}.")
    return {
        "recorded": True,
        "study": stored.document,
        "evaluation": stored.evaluation,
        "extension": extension,
    }


def listing(
    services: Services,
    actor: Actor,
    *,
    product: str | None = None,
    limit: int = 50,
    cursor: str | None = None,
) -> Page:
    """List studies without their data, newest first."""
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        before = start_after(cursor, unit_of_work.studies.get, lambda last: (last.sequence, last.code))
        found = unit_of_work.studies.list(product=product, limit=limit + 1, before=before)
    return page_of(found, limit, _summary, lambda stored: stored.code)


def _summary(stored: StoredStudy) -> dict[str, Any]:
    shown = ("code", "design", "product", "characteristic", "unit", "done_on", "serves_until")
    return {member: stored.document[member] for member in shown}
