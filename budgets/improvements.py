"""What to buy first: options for a better measurement, ranked by what they bring in a year."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

from budgets.budget import Budget
from budgets.changed_measurements import Change, ChangedBudget, ChangedLooks, Measuring, go_together
from budgets.errors import BudgetsError, LimitsError
from budgets.lot_procedures import Demand, LotProcedure
from budgets.money import Money
from budgets.planned_measurements import PlannedMeasurement, planned_measurement
from budgets.process_variation import ProcessVariation
from budgets.set_point_figures import Production, SetPointFigures
from budgets.set_point_search import Wanted
from budgets.set_points import cheapest_set_point

MOST_OPTIONS = 12
# A change of u by less than this is none that a reading shows.
_NO_HELP = 1e-3


@dataclass(frozen=True)
class Option:
    """Something that can be bought.

    Parameters
    ----------
    code : str
    change : Change
    cost_per_lot, cost_per_year : float

    Raises
    ------
    LimitsError
        If a cost is not a finite number from 0 up.
    """

    code: str
    change: Change
    cost_per_lot: float = 0.0
    cost_per_year: float = 0.0

    def __post_init__(self) -> None:
        for name in ("cost_per_lot", "cost_per_year"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                raise LimitsError(f"{name} must be a finite number, not below 0", where=(name,))


@dataclass(frozen=True)
class Situation:
    """A production that is to be improved.

    Parameters
    ----------
    budget : Budget
    procedure : LotProcedure
    demands : tuple of Demand
    process : ProcessVariation
    money : Money
    wanted : Wanted
        Its ``largest_risk`` bounds every set point.
    towards : str or None
    """

    budget: Budget
    procedure: LotProcedure
    demands: tuple[Demand, ...]
    process: ProcessVariation
    money: Money
    wanted: Wanted
    towards: str | None = None


@dataclass(frozen=True)
class Improvement:
    """What options give when the process runs at its cheapest set point with them.

    Parameters
    ----------
    options : tuple of str
        Their codes; empty for the measurement as it is.
    standard_uncertainty : float, unit of the characteristic
        Combined, of the first look.
    lower_acceptance_limit, upper_acceptance_limit : float or None, unit of the characteristic
        Of the first look, of all demands together.
    set_point : SetPointFigures
    gain_per_year : float
        Against the cheapest set point with the measurement as it is, before the cost of the options.
    cost_per_year : float
        Of the options.
    net_gain_per_year : float
    remarks : tuple of str
    """

    options: tuple[str, ...]
    standard_uncertainty: float
    lower_acceptance_limit: float | None
    upper_acceptance_limit: float | None
    set_point: SetPointFigures
    gain_per_year: float
    cost_per_year: float
    net_gain_per_year: float
    remarks: tuple[str, ...]


@dataclass(frozen=True)
class Impossible:
    """Options that cannot be had, and why."""

    options: tuple[str, ...]
    reason: str


@dataclass(frozen=True)
class Improvements:
    """The answer to "what to buy first".

    Parameters
    ----------
    as_it_is : Improvement
        The measurement as it is at its cheapest set point.
    ranked : tuple of Improvement
        Single options and pairs, by net gain, the largest first.
    frontier : tuple of Improvement
        Those that no other one beats in both cost and gain, by cost; the first is the measurement as it is.
    impossible : tuple of Impossible
    """

    as_it_is: Improvement
    ranked: tuple[Improvement, ...]
    frontier: tuple[Improvement, ...]
    impossible: tuple[Impossible, ...]

    @property
    def best(self) -> Improvement | None:
        """What to buy; None where nothing pays."""
        first = self.ranked[0] if self.ranked else None
        return first if first is not None and first.net_gain_per_year > 0 else None


def improvements(situation: Situation, options: Sequence[Option]) -> Improvements:
    """Return what options and pairs of options bring, each at the set point that suits it best.

    Parameters
    ----------
    situation : Situation
    options : sequence of Option
        At most 12, with different codes.

    Returns
    -------
    Improvements

    Raises
    ------
    LimitsError
        If there are too many options, or two have one code; and as `budgets.set_points.set_points` for the
        measurement as it is.

    Notes
    -----
    With all errors smaller by one factor, at fixed degrees of freedom and looks, no gain is less. With one
    error smaller it may be, by a trace, where ``largest_risk`` bounds the set point: the rule then releases
    more lots near the limit, and a larger share of them does not conform. Own observation by simulation.
    """
    codes = [option.code for option in options]
    if not 1 <= len(options) <= MOST_OPTIONS or len(set(codes)) != len(codes):
        raise LimitsError(
            f"1 to {MOST_OPTIONS} options, each with a code of its own, are compared", where=("options",)
        )
    now = Measuring(situation.budget, situation.procedure, situation.demands)
    base_measurement, base = _cheapest(situation, now)
    as_it_is = _improvement(situation, (), base_measurement, base, base)
    found: list[Improvement] = []
    impossible: list[Impossible] = []
    pairs = [pair for pair in combinations(options, 2) if go_together(pair[0].change, pair[1].change)]
    refused: set[str] = set()
    for chosen in [*((option,) for option in options), *pairs]:
        if len(chosen) > 1 and refused & {option.code for option in chosen}:
            continue
        try:
            measuring = _made(now, chosen)
            measurement, figures = _cheapest(situation, measuring)
        except BudgetsError as error:
            impossible.append(Impossible(tuple(option.code for option in chosen), error.message))
            refused |= {option.code for option in chosen} if len(chosen) == 1 else set()
            continue
        found.append(_improvement(situation, chosen, measurement, figures, base, as_it_is))
    ranked = tuple(sorted(found, key=lambda item: (-item.net_gain_per_year, item.options)))
    return Improvements(as_it_is, ranked, _frontier((as_it_is, *ranked)), tuple(impossible))


def _made(now: Measuring, chosen: Sequence[Option]) -> Measuring:
    # Another budget comes first: the numbers of samples and readings are then changed on it.
    for option in sorted(chosen, key=lambda item: not isinstance(item.change, ChangedBudget)):
        now = option.change.made(now)
    return now


def _cheapest(situation: Situation, measuring: Measuring) -> tuple[PlannedMeasurement, SetPointFigures]:
    measurement = planned_measurement(measuring.budget, measuring.procedure, measuring.demands)
    # Another analyzer has another bias: today's readings on it are moved by the difference.
    moved = (measuring.budget.bias or 0.0) - (situation.budget.bias or 0.0)
    process = replace(situation.process, mean=situation.process.mean + moved)
    production = Production(process, measurement, situation.money, situation.towards)
    return measurement, cheapest_set_point(production, situation.wanted)


def _improvement(
    situation: Situation,
    chosen: Sequence[Option],
    measurement: PlannedMeasurement,
    figures: SetPointFigures,
    base: SetPointFigures,
    as_it_is: Improvement | None = None,
) -> Improvement:
    assert base.cost is not None and figures.cost is not None  # a situation has money
    money = situation.money
    gain = (base.cost - figures.cost) * money.lots_per_year
    cost = math.fsum(option.cost_per_lot * money.lots_per_year + option.cost_per_year for option in chosen)
    first = measurement.limits[0]
    return Improvement(
        options=tuple(option.code for option in chosen),
        standard_uncertainty=measurement.standard_uncertainty,
        lower_acceptance_limit=_finite(first.lower_acceptance_limit),
        upper_acceptance_limit=_finite(first.upper_acceptance_limit),
        set_point=figures,
        gain_per_year=gain,
        cost_per_year=cost,
        net_gain_per_year=gain - cost,
        remarks=() if as_it_is is None else _remarks(chosen, measurement, as_it_is),
    )


def _remarks(
    chosen: Sequence[Option], measurement: PlannedMeasurement, as_it_is: Improvement
) -> tuple[str, ...]:
    remarks = [option.change.remark for option in chosen if option.change.remark]
    before, after = as_it_is.standard_uncertainty, measurement.standard_uncertainty
    looks_only = all(
        isinstance(option.change, ChangedLooks) and option.change.touches == {"looks"} for option in chosen
    )
    if abs(after - before) <= _NO_HELP * before and not looks_only:
        remarks.append(
            f"It does not help a reading: the combined standard uncertainty stays at {after:.4g}; what it "
            "improves is too small a part of it, or in no reading at all."
        )
    elif after > before:
        remarks.append(f"The combined standard uncertainty rises from {before:.4g} to {after:.4g}.")
    return tuple(remarks)


def _frontier(candidates: Sequence[Improvement]) -> tuple[Improvement, ...]:
    """Return those that cost more than another one only where they bring more."""
    kept: list[Improvement] = []
    for item in sorted(candidates, key=lambda each: (each.cost_per_year, -each.gain_per_year)):
        if not kept or item.gain_per_year > kept[-1].gain_per_year:
            kept.append(item)
    return tuple(kept)


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None
