"""How close to the limit a process may run: set points, what they bring, and a figure to take as it is."""

from __future__ import annotations

import math
from dataclasses import asdict, replace
from typing import Final

from budgets.errors import LimitsError
from budgets.planned_measurements import PlannedMeasurement
from budgets.required_uncertainty import required_uncertainty
from budgets.set_point_figures import Production, SetPointFigures
from budgets.set_points import SetPoints, nearest_set_point, set_points
from service.access import require
from service.documents import Actor, SetPointRequest
from service.workflows.evidence import FaultCollector
from service.workflows.services import Services
from service.workflows.set_point_questions import Answer, Question, question_of, references

CAUTION: Final = (
    "These figures speak of the named characteristic only, for a process that varies as stated and for the "
    "evidence of the budget. Holds that are not about its value (flags, replicates that disagree, other "
    "characteristics) are not counted. They replace no verdict on a lot; local regulations and the plant's "
    "authorised person decide."
)

MOST_DECIMALS: Final = 12


def ask(services: Services, actor: Actor, request: SetPointRequest) -> Answer:
    """Give the set points of a production; nothing is recorded.

    Raises
    ------
    InvalidRequest
        Something that is named is not there, or no set point can be given; with what is impossible and why.
    Conflict
        Nothing is in force, or the evidence has lapsed.
    """
    require(actor, "read")
    with services.database.reading() as unit_of_work:
        question = question_of(services, unit_of_work, request)
    collector = FaultCollector()
    production = collector.attempt("#", question.production)
    found = None if production is None else collector.attempt("#", set_points, production, question.wanted)
    needed = collector.attempt("#", _needed, question)
    collector.finish("No set point can be given.")
    assert production is not None and found is not None
    return {
        **question_figures(question, production),
        "nearest": _with_gain(found.nearest, found.nearest_bound_by, found.gain_of_nearest),
        "keeping_what_is_wanted": {"lower": found.lowest, "upper": found.highest},
        "cheapest": _with_gain(found.cheapest, found.cheapest_bound_by, found.gain_of_cheapest),
        "today": _figures(found.today),
        "best_centre": None if found.best_centre is None else _figures(found.best_centre),
        "nearest_without_drift": found.without_drift,
        "nearest_over_the_interval": _over_the_interval(question, production),
        "required_uncertainty": needed,
        "curve": [_figures(point) for point in found.curve],
        "controller": _controller(question, found),
        "statement": _statement(question, found),
        "caution": CAUTION,
    }


def question_figures(question: Question, production: Production) -> Answer:
    """Write what an answer rests on: versions, variation, measurement, wishes and money."""
    request, measurement, process = question.request, production.measurement, production.process
    random = float(measurement.random_covariance[0, 0])
    return {
        "product": request.product,
        "characteristic": request.characteristic,
        "analyzer": request.analyzer,
        "unit": question.characteristic.unit,
        **references(question),
        "procedure": asdict(question.procedure),
        "process_variation": {
            "from": request.process_variation.source,
            "mean": process.mean,
            "lot_to_lot": process.lot_to_lot,
            "drift": process.drift,
            "within_lot": process.within_lot,
            "steering": process.steering,
            "true_standard_deviation": process.true_standard_deviation(random),
            "reading_standard_deviation": math.sqrt(float(production.lots.covariance[1, 1])),
            **question.variation.facts,
        },
        "measurement": _measurement(measurement),
        "wanted": {
            "release_rate": question.wanted.release_rate,
            "largest_risk": question.wanted.largest_risk,
        },
        "towards": production.towards,
        "money": None if request.money is None else asdict(request.money),
    }


def _measurement(measurement: PlannedMeasurement) -> Answer:
    rule = max(measurement.rules, key=lambda each: each.combined_standard_uncertainty)
    freedom = rule.effective_degrees_of_freedom
    first = measurement.limits[0]
    return {
        "combined_standard_uncertainty": measurement.standard_uncertainty,
        "effective_degrees_of_freedom": freedom if math.isfinite(freedom) else None,
        "random_standard_uncertainty": measurement.random_standard_uncertainty,
        "common_standard_uncertainty": measurement.common_standard_uncertainty,
        "lower_acceptance_limit": _finite(first.lower_acceptance_limit),
        "upper_acceptance_limit": _finite(first.upper_acceptance_limit),
        "lower_tolerance_limit": _finite(measurement.tolerance[0]),
        "upper_tolerance_limit": _finite(measurement.tolerance[1]),
        "reading_less_estimate": measurement.reading_offset,
        "uncorrected_bias": measurement.residual_bias,
    }


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _figures(figures: SetPointFigures) -> Answer:
    return asdict(figures)


def _with_gain(figures: SetPointFigures | None, bound_by: str | None, gain: float | None) -> Answer | None:
    if figures is None:
        return None
    return {**_figures(figures), "bound_by": bound_by, "gain_per_year": gain}


def _over_the_interval(question: Question, production: Production) -> Answer | None:
    """Give the nearest set point for both ends of the interval of the variation; null where none keeps it."""
    interval = question.variation.facts["interval"]
    process = production.process
    if interval is None or production.towards is None:
        return None
    whole = process.unsteered_standard_deviation

    def nearest(deviation: float) -> float | None:
        ratio = deviation / whole
        moved = replace(process, lot_to_lot=process.lot_to_lot * ratio, drift=process.drift * ratio)
        try:
            return nearest_set_point(replace(production, process=moved), question.wanted)
        except LimitsError:
            # Nothing varies at the lower end, or too much at the upper one.
            return None

    return {"least_variation": nearest(interval["lower"]), "most_variation": nearest(interval["upper"])}


def _needed(question: Question) -> Answer | None:
    """Answer the reverse question, where it is asked."""
    wanted = question.request.wanted_set_point
    if wanted is None:
        return None
    found = required_uncertainty(
        question.budget.budget,
        question.procedure,
        question.demands,
        question.variation.process,
        question.wanted,
        question.convert(wanted),
    )
    return asdict(found)


# --- the figure to take as it is, and the sentence -----------------------------------------------------


def recommended(found: SetPoints) -> SetPointFigures | None:
    """Give the set point to run at: the cheapest if that keeps what is wanted, else nearest or centre."""
    if found.cheapest is not None and found.lowest <= found.cheapest.set_point <= found.highest:
        return found.cheapest
    return found.nearest or found.best_centre


def _controller(question: Question, found: SetPoints) -> Answer | None:
    chosen = recommended(found)
    if chosen is None:
        return None
    basis = "best_centre"
    if chosen is found.cheapest:
        basis = "cheapest"
    elif chosen is found.nearest:
        basis = "nearest"
    return {
        "set_point": _inward(chosen.set_point, question.characteristic.decimals, found),
        "unit": question.characteristic.unit,
        "scale": "reading",
        "analyzer": question.request.analyzer,
        "calibration": question.budget.document.calibrations[question.request.analyzer],
        "valid_until": question.valid_until,
        "basis": basis,
    }


def _inward(set_point: float, decimals: int, found: SetPoints) -> float:
    """Round a set point away from the end that it is near; to more decimals where there is little room."""
    towards_upper = found.highest - set_point < set_point - found.lowest
    for digits in range(decimals, MOST_DECIMALS):
        scale = 10.0**digits
        rounded = (math.floor if towards_upper else math.ceil)(set_point * scale) / scale
        if found.lowest <= rounded <= found.highest:
            return round(rounded, digits)
    return set_point


def _statement(question: Question, found: SetPoints) -> str:
    unit, decimals = question.characteristic.unit, question.characteristic.decimals

    def text(value: float) -> str:
        return f"{value:.{decimals}f} {unit}"

    parts = [f"Today the readings average {text(found.today.set_point)}: {_share(found.today)}."]
    if found.nearest is not None:
        parts.append(f"Nearest the limit: {text(found.nearest.set_point)}, {_share(found.nearest)}.")
    if found.best_centre is not None:
        parts.append(f"Best centre: {text(found.best_centre.set_point)}, {_share(found.best_centre)}.")
    money = question.request.money
    if found.cheapest is not None and found.gain_of_cheapest is not None and money is not None:
        parts.append(
            f"Cheapest: {text(found.cheapest.set_point)}, {_share(found.cheapest)}; "
            f"{_amount(found.gain_of_cheapest, money.currency)} a year against today."
        )
    return " ".join(parts)


def _share(figures: SetPointFigures) -> str:
    if figures.release_rate == 0:
        return "no lot released"
    risk = 100 * figures.conditional_global_consumers_risk
    # Nothing below 0.01 % is shown; the figures keep their digits.
    nonconforming = "less than 0.01 %" if risk < 0.01 else f"{risk:.{2 if risk < 10 else 3}g} %"
    return f"{100 * figures.release_rate:.1f} % of lots released, {nonconforming} of them nonconforming"


def _amount(value: float, currency: str) -> str:
    return f"{value:+,.0f} {currency}"
