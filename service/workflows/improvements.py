"""What to buy first: options for a better measurement, each at the set point that suits it best."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any

from budgets.changed_measurements import (
    Change,
    ChangedBudget,
    ChangedComponent,
    ChangedLooks,
    CorrectedBias,
    ReferenceDeterminations,
    component_of,
)
from budgets.errors import LimitsError
from budgets.improvements import Improvement, Improvements, Option, Situation, improvements
from service.access import require
from service.documents import Actor, BudgetDocument, ImprovementOption, ImprovementsRequest
from service.schemas import load
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import FaultCollector
from service.workflows.resolved_budgets import resolve_budget
from service.workflows.services import Services
from service.workflows.set_point_questions import Answer, Question, question_of
from service.workflows.set_points import CAUTION, question_figures
from service.workflows.stored_budgets import budget_from_evaluation


def compare(services: Services, actor: Actor, request: ImprovementsRequest) -> Answer:
    """Rank options by what they bring in a year after their cost; nothing is recorded.

    Raises
    ------
    InvalidRequest
        Something that is named is not there, there is no money, or no set point can be given as it is.
    Conflict
        Nothing is in force, or the evidence has lapsed.
    Unavailable
        Other computations are under way.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        question = question_of(services, unit_of_work, request.production, "#/production")
        options = _options(unit_of_work, question, request.options)
    collector = FaultCollector()
    situation = collector.attempt("#/production", _situation, question)
    production = collector.attempt("#/production", question.production)
    found = None
    if situation is not None and production is not None:
        # Seconds of computation, where rules have rounds: in the helper they delay no line.
        found = collector.attempt("#/production", services.helper.run, improvements, situation, options)
    collector.finish("The options cannot be compared.")
    assert found is not None and production is not None
    return {
        **question_figures(question, production),
        "as_it_is": _improvement(found.as_it_is),
        "ranked": [_improvement(item) for item in found.ranked],
        "frontier": [list(item.options) for item in found.frontier],
        "impossible": [{"options": list(item.options), "detail": item.reason} for item in found.impossible],
        "best": None if found.best is None else list(found.best.options),
        "statement": _statement(question, found),
        "caution": CAUTION,
    }


def _situation(question: Question) -> Situation:
    if question.money is None:
        raise LimitsError("improvements are compared by what they bring in money: state it", where=("money",))
    return Situation(
        question.budget.budget,
        question.procedure,
        question.demands,
        question.variation.process,
        question.money,
        question.wanted,
        question.request.towards,
    )


def _options(
    unit_of_work: UnitOfWork, question: Question, stated: tuple[ImprovementOption, ...]
) -> list[Option]:
    collector = FaultCollector()
    found = [
        collector.attempt(f"#/options/{index}", _option, unit_of_work, question, option)
        for index, option in enumerate(stated)
    ]
    codes = [option.code for option in stated]
    for index, code in enumerate(codes):
        if code in codes[:index]:
            collector.add(f"#/options/{index}/code", f"got {code!r} a second time", "codes of their own")
    collector.finish("The options cannot be compared.")
    return [option for option in found if option is not None]


def _option(unit_of_work: UnitOfWork, question: Question, stated: ImprovementOption) -> Option:
    return Option(
        stated.code, _change(unit_of_work, question, stated), stated.cost_per_lot, stated.cost_per_year
    )


def _change(unit_of_work: UnitOfWork, question: Question, stated: ImprovementOption) -> Change:
    """Turn an option into a change; its members are there by the schema."""
    members: dict[str, Any] = asdict(stated)
    factor = question.convert.factor
    if stated.component is not None:
        line = component_of(question.budget.budget, stated.component)
    if stated.kind == "component":
        relative = bool(line.relative_terms)
        u = stated.standard_uncertainty
        return ChangedComponent(
            members["component"],
            # A relative error is a fraction, whatever the unit.
            None if u is None else u * (1.0 if relative else factor),
            stated.factor,
            stated.degrees_of_freedom,
        )
    if stated.kind == "corrected_bias":
        return CorrectedBias()
    if stated.kind == "reference_determinations":
        names = ("component", "standard_deviation", "determinations", "instead_of", "pairs")
        members["standard_deviation"] *= factor
        return ReferenceDeterminations(**{name: members[name] for name in names})
    if stated.kind == "budget":
        return ChangedBudget(_other_budget(unit_of_work, question, members["budget"], members["version"]))
    return ChangedLooks(
        stated.samples, stated.readings_per_sample, stated.increments_per_sample, stated.looks
    )


def _other_budget(unit_of_work: UnitOfWork, question: Question, code: str, version: int) -> Any:
    stored = unit_of_work.versions.get("budget", code, version)
    document = None if stored is None else load(BudgetDocument, stored.document)
    own = question.budget.document
    if (
        stored is None
        or document is None
        or (document.product, document.characteristic, document.unit)
        != (own.product, own.characteristic, own.unit)
    ):
        raise LimitsError(
            f"there is no version {version} of a budget {code!r} of {own.characteristic} in {own.unit}",
            where=("budget",),
        )
    if stored.evaluation is not None:
        return budget_from_evaluation(document, stored.evaluation)
    return resolve_budget(unit_of_work, document).budget


# --- what is shown -------------------------------------------------------------------------------------


def _improvement(item: Improvement) -> Answer:
    return {
        "options": list(item.options),
        "combined_standard_uncertainty": item.standard_uncertainty,
        "lower_acceptance_limit": item.lower_acceptance_limit,
        "upper_acceptance_limit": item.upper_acceptance_limit,
        "set_point": item.set_point.set_point,
        "true_mean": item.set_point.true_mean,
        "release_rate": item.set_point.release_rate,
        "conditional_global_consumers_risk": item.set_point.conditional_global_consumers_risk,
        "cost": item.set_point.cost,
        "gain_per_year": item.gain_per_year,
        "cost_per_year": item.cost_per_year,
        "net_gain_per_year": item.net_gain_per_year,
        "remarks": list(item.remarks),
    }


def _statement(question: Question, found: Improvements) -> str:
    money, unit = question.request.money, question.characteristic.unit
    assert money is not None  # a situation has money
    best = found.best
    if not found.ranked:
        return "None of the options can be had; see why under impossible."
    if best is None:
        return (
            "Nothing pays: none of the options, alone or in pairs, brings in a year what it costs. The "
            f"measurement as it is serves best, at {found.as_it_is.set_point.set_point:.4g} {unit}."
            f"{_released(question, found.as_it_is)}"
        )
    others = "" if math.isclose(best.cost_per_year, 0) else f", after {best.cost_per_year:,.0f} for them"
    return (
        f"First {' with '.join(best.options)}: {best.net_gain_per_year:,.0f} {money.currency} a year"
        f"{others}; "
        f"the set point moves from {found.as_it_is.set_point.set_point:.4g} to "
        f"{best.set_point.set_point:.4g} {unit}.{_released(question, best)}"
    )


def _released(question: Question, item: Improvement) -> str:
    """Say so where the cheapest set point, which options are compared at, releases less than is wanted."""
    rate, wanted = item.set_point.release_rate, question.wanted.release_rate
    if rate >= wanted:
        return ""
    return f" There {100 * rate:.1f} % of the lots are released, fewer than the wanted {100 * wanted:.4g} %."
