"""What it cost, over the released lots of a period, to run further from the limit than needed."""

from __future__ import annotations

from dataclasses import asdict

from budgets.errors import LimitsError
from budgets.giveaway import Giveaway, giveaway
from budgets.set_point_figures import Production, SetPointFigures
from budgets.set_points import set_points
from service.access import require
from service.documents import Actor, GiveawayRequest
from service.workflows.evidence import FaultCollector
from service.workflows.recorded_lots import RecordedLots, recorded_lots
from service.workflows.services import Services
from service.workflows.set_point_questions import Answer, Question, question_of
from service.workflows.set_points import CAUTION, question_figures, recommended


def giveaway_of(services: Services, actor: Actor, request: GiveawayRequest) -> Answer:
    """Count what the released lots of a period gave away, beside the set point that was possible.

    Raises
    ------
    InvalidRequest
        As in set_points.ask; or there is no money, no limit to run towards, or no released lot.
    Conflict
        Nothing is in force, or the evidence has lapsed.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        question = question_of(services, unit_of_work, request.production, "#/production")
        lots = recorded_lots(
            unit_of_work,
            services.remembered,
            services.registers.current(unit_of_work),
            question.budget,
            request.production.analyzer,
            first_day=request.first_day,
            last_day=request.last_day,
        )
    collector = FaultCollector()
    production = collector.attempt("#/production", question.production)
    needed = found = None
    if production is not None:
        needed = collector.attempt("#/production", _needed, question, production)
    if needed is not None and production is not None:
        found = collector.attempt("#", _counted, question, production, needed, lots)
    collector.finish("What was given away cannot be said.")
    assert production is not None and needed is not None and found is not None
    days = [lot.day for lot in lots.released]
    return {
        **question_figures(question, production),
        "first_day": min(days).isoformat(),
        "last_day": max(days).isoformat(),
        "whole_record_read": lots.all_read,
        "needed_set_point": needed.set_point,
        "giveaway": asdict(found),
        "statement": _statement(question, found),
        "caution": CAUTION,
    }


def _needed(question: Question, production: Production) -> SetPointFigures:
    """Give the set point that would have been near enough: the recommended one."""
    if question.money is None or production.towards is None:
        raise LimitsError(
            "what is given away is counted in money, towards a limit: state both",
            where=("money",) if question.money is None else ("towards",),
        )
    chosen = recommended(set_points(production, question.wanted))
    assert chosen is not None  # there is a limit to run towards
    return chosen


def _counted(
    question: Question, production: Production, needed: SetPointFigures, lots: RecordedLots
) -> Giveaway:
    assert question.money is not None and production.towards is not None  # by _needed
    measurement = production.measurement
    return giveaway(
        [lot.true_value for lot in lots.released],
        needed.true_mean,
        production.towards,
        question.money,
        common_standard_uncertainty=measurement.common_standard_uncertainty,
        random_standard_uncertainty=measurement.random_standard_uncertainty,
    )


def _statement(question: Question, found: Giveaway) -> str:
    money, unit = question.request.money, question.characteristic.unit
    assert money is not None  # by _needed
    side = "further from the limit than needed" if found.distance >= 0 else "nearer the limit than wanted"
    return (
        f"{found.lots} released lots lay on average {abs(found.distance):.3g} {unit} {side}: "
        f"{found.value:,.0f} {money.currency} in all, with a standard uncertainty of "
        f"{found.standard_uncertainty:,.0f} {money.currency}."
    )
