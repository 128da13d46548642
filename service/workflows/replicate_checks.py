"""Whether the readings of each sample agree with each other, by the spread that their budget gives them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from statistics import median
from typing import Any, Final

from budgets.errors import BudgetsError
from budgets.replicates import ReplicateSpread, critical_range_factor, false_hold_rate, replicate_check
from service.documents import Plant, Reading, RuleOfDecision
from service.workflows.calendar import DEFAULT_PLANT
from service.workflows.holds import Hold
from service.workflows.register import BudgetInForce, Register

# So many more are read once; when they do not settle it, the median is what is left (ISO 5725-6, 5.2.2, from
# memory).
_MORE: Final = 2
_MOST_BEFORE: Final = 3


@dataclass(frozen=True)
class Replicates:
    """Readings of one channel and one sample on one analyzer, with what is known to separate them.

    ``most`` is how many of them the procedure of the budget has.
    """

    channel: str
    unit: str
    sample: str
    values: tuple[float, ...]
    spread: ReplicateSpread
    most: int


@dataclass(frozen=True)
class ReplicatesJudged:
    """What the check of replicates found: its figures, and a hold for each set that disagrees."""

    figures: dict[str, Any] | None
    holds: tuple[Hold, ...]


def replicates_of(
    register: Register,
    budget: BudgetInForce,
    scans: list[Reading],
    by_channel: Mapping[str, list[float]],
    means: Mapping[str, float],
) -> tuple[Replicates, ...]:
    """Gather the readings that repeat each other; none where the budget says nothing of their spread."""
    model = budget.budget.model
    try:
        at = means if model is None else model.estimates(means)
    except BudgetsError:
        return ()
    most = budget.budget.procedure.readings_per_sample.most
    together: dict[tuple[str, str], list[int]] = {}
    for index, scan in enumerate(scans):
        together.setdefault((scan.sample, scan.analyzer), []).append(index)
    found = []
    for (sample, _), indices in together.items():
        if len(indices) < 2:
            continue
        levels = _drawn_anew([scans[index] for index in indices])
        for channel, values in by_channel.items():
            spread = _spread(register, budget, channel, levels, at)
            if spread is not None:
                unit = register.characteristics[budget.document.product, channel].unit
                chosen = tuple(values[index] for index in indices)
                found.append(Replicates(channel, unit, sample, chosen, spread, most))
    return tuple(found)


def _spread(
    register: Register,
    budget: BudgetInForce,
    channel: str,
    levels: frozenset[str],
    at: Mapping[str, float],
) -> ReplicateSpread | None:
    try:
        return register.replicate_law(budget, channel, levels).at(at)
    except BudgetsError:
        # Nothing separates them at this value, as where all of it is proportional to a value of 0.
        return None


def _drawn_anew(scans: list[Reading]) -> frozenset[str]:
    """Name the levels whose errors separate these readings of one sample."""
    labels: dict[str, set[Any]] = {
        "increment": {scan.increment for scan in scans},
        "presentation": {(scan.increment, scan.presentation) for scan in scans},
        "session": {scan.session for scan in scans},
    }
    return frozenset({"reading", *(level for level, found in labels.items() if len(found) > 1)})


def level_of(rule: RuleOfDecision, plant: Plant) -> float:
    """Give the level of the check: the rule's, else the plant's, else the program's own."""
    for level in (rule.replicate_level, plant.replicate_level, DEFAULT_PLANT.replicate_level):
        if level is not None:
            return level
    raise AssertionError("the default plant has a level")


def judge_replicates(sets: tuple[Replicates, ...], level: float) -> ReplicatesJudged:
    """Check all sets of replicates at one level; there are no figures where nothing could be checked."""
    if not sets:
        return ReplicatesJudged(None, ())
    checks = [replicate_check(each.values, each.spread, level) for each in sets]
    figures = {
        "level": level,
        "false_hold_rate": false_hold_rate(level, len(sets)),
        "checks": [
            {
                "characteristic": each.channel,
                "sample": each.sample,
                "readings": check.number,
                "range": check.range,
                "critical_difference": check.critical_difference,
                "agrees": check.agrees,
            }
            for each, check in zip(sets, checks, strict=True)
        ],
    }
    holds = tuple(
        _hold(each, check.range, check.critical_difference, level)
        for each, check in zip(sets, checks, strict=True)
        if not check.agrees
    )
    return ReplicatesJudged(figures, holds)


def _hold(each: Replicates, found: float, critical: float, level: float) -> Hold:
    number = len(each.values)
    return Hold(
        "replicates-disagree",
        f"Sample {each.sample}: {number} readings of {each.channel} differ by {found:.3g} {each.unit}, more "
        f"than the critical difference {critical:.3g} {each.unit}. Of good lots {100 * (1 - level):.2g} % "
        "show so much by chance.",
        _next(each, level),
    )


def _next(each: Replicates, level: float) -> str:
    """Give the first remedy: two more readings, and when those do not agree either, the median."""
    number = len(each.values) + _MORE
    if len(each.values) > _MOST_BEFORE or number > each.most:
        return (
            f"Their median is {median(each.values):.6g} {each.unit}. Look for the cause, then a person "
            "decides on this lot."
        )
    factor = critical_range_factor(number, level, each.spread.degrees_of_freedom)
    allowed = factor * each.spread.standard_deviation
    return (
        f"Read sample {each.sample} {_MORE} more times. If all {number} readings lie within {allowed:.3g} "
        f"{each.unit}, their mean counts; else a person decides, on their median."
    )
