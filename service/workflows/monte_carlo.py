"""Monte Carlo runs for budgets, in the helper process: before a version is approved, and on demand."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from contextlib import suppress
from dataclasses import replace
from functools import partial
from typing import Any, Final

from budgets.budget import Budget
from budgets.budget_validation import BudgetValidation, validate_budget
from budgets.errors import BudgetsError
from budgets.propagation import Counts, combined
from budgets.propagation_validation import numerical_tolerance, validate
from service.access import require
from service.documents import Actor, BudgetDocument, MonteCarloRequest
from service.errors import Conflict, Forbidden, InvalidRequest, NotFound, Unavailable
from service.schemas import load
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.budget_figures import subject_of
from service.workflows.budget_validation import Findings, validation_document
from service.workflows.evidence import FaultCollector
from service.workflows.recording import Request, was_recorded
from service.workflows.resolved_budgets import resolve_budget
from service.workflows.services import Services
from service.workflows.stored_budgets import budget_evaluation

# Every version is checked with the same draws: a difference between two of them is one of the budgets.
SEED: Final = 1
MOST_TRIALS: Final = 10_000_000
"""What one request may ask for: some seconds of the helper process."""


def findings(
    services: Services,
    actor: Actor,
    request: Request,
    versions: Callable[[UnitOfWork], Iterable[StoredVersion]],
) -> Findings:
    """Check the budgets among versions that are about to be submitted or approved, outside of the writer.

    Raises
    ------
    Unavailable
        The helper process is busy.
    TooLarge
        The runs take more time than a computation may.
    """
    budgets: dict[str, Budget] = {}
    with services.database.reading() as unit_of_work:
        if was_recorded(unit_of_work, actor, request):
            return {}
        # What is wrong is said by the act itself, among whatever else is.
        with suppress(Conflict, Forbidden, InvalidRequest, NotFound, Unavailable):
            for stored in versions(unit_of_work):
                with suppress(InvalidRequest):
                    budgets.update(_budget_of(unit_of_work, stored))
    return {
        digest: services.validations.get(digest, partial(_found, services, budget))
        for digest, budget in budgets.items()
    }


def _budget_of(unit_of_work: UnitOfWork, stored: StoredVersion) -> dict[str, Budget]:
    if stored.kind != "budget":
        return {}
    resolved = resolve_budget(unit_of_work, load(BudgetDocument, stored.document))
    return {budget_evaluation(stored.document, resolved)["digest"]: resolved.budget}


def _found(services: Services, budget: Budget) -> BudgetValidation | BudgetsError:
    try:
        return services.helper.run(validate_budget, budget, seed=SEED)
    except BudgetsError as error:
        return error


def run(
    services: Services, actor: Actor, code: str, version: int, wanted: MonteCarloRequest
) -> dict[str, Any]:
    """Hold the law of propagation of a budget version against a Monte Carlo run; nothing is recorded.

    Raises
    ------
    NotFound
        There is no such version.
    InvalidRequest
        The draft cannot be computed, or not at these readings or with so many trials.
    Unavailable
        The helper process is busy.
    TooLarge
        The run takes more time than a computation may.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        subject = subject_of(unit_of_work, code, version)
    at = subject.centre if wanted.at is None else dict(wanted.at)
    collector = FaultCollector()
    _check_places(collector, subject.budget, at)
    collector.finish("The run cannot be made.")
    document = collector.attempt("#", _validated, services, subject.budget, subject.counts, at, wanted)
    collector.faults = [
        replace(fault, pointer=(fault.pointer or "#").replace("#/estimates", "#/at", 1))
        for fault in collector.faults
    ]
    collector.finish("The run cannot be made.")
    assert document is not None
    return {
        "code": code,
        "version": version,
        "state": subject.stored.state,
        "unit": subject.document.unit,
        "digest": subject.evaluation["digest"],
        "samples": len(subject.counts.readings_per_sample),
        "readings_per_sample": subject.counts.readings_per_sample[0],
        "at": at,
        "seed": wanted.seed,
        **document,
    }


def _check_places(collector: FaultCollector, budget: Budget, at: Mapping[str, float]) -> None:
    """Refuse readings that the evidence does not speak of: nothing is validated there."""
    plain = budget.model is None
    ranges = {budget.characteristic: budget.validated_range} if plain else budget.validated_box
    for name, (lower, upper) in ranges.items():
        value = at.get(name)
        if value is not None and not lower <= value <= upper:
            collector.add(
                f"#/at/{name}", f"{value:g} lies outside of the validated range", f"{lower:g} to {upper:g}"
            )


def _validated(
    services: Services, budget: Budget, counts: Counts, at: dict[str, float], wanted: MonteCarloRequest
) -> dict[str, Any]:
    """Make the run. Raises the errors of the computation."""
    digits = wanted.significant_digits
    u = combined(budget, counts, estimates=at).standard_uncertainty
    found = services.helper.run(
        validate,
        budget,
        counts,
        estimates=at,
        seed=wanted.seed,
        trials=wanted.trials,
        tolerance=None if digits is None else numerical_tolerance(u, significant_digits=digits),
        most_trials=MOST_TRIALS,
    )
    return validation_document(found)
