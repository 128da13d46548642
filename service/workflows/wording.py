"""The words and rounded figures of a verdict, for people; the record keeps every digit beside them."""

from __future__ import annotations

from typing import Any, Final

from budgets.judgements import Judgement
from budgets.release import ReleaseRule
from budgets.reporting import (
    acceptance_limit_text,
    decimal_text,
    number_text,
    probability_text,
    rejection_limit_text,
    rounded,
    statement,
)
from budgets.sureness import Sureness, sureness_text
from service.documents import Characteristic
from service.workflows.holds import Hold

# Every double is told from its neighbours by then.
_MOST_DECIMALS: Final = 17
IN_GUARD_BAND: Final = "in-guard-band"
_NO_FURTHER_READINGS: Final = (
    "The rule plans no further readings. A person decides, with an analysis by the laboratory."
)


def display(
    rule: ReleaseRule,
    estimate: float,
    judgement: Judgement | None,
    sure: Sureness | None,
    characteristic: Characteristic,
    limits: str | None,
) -> dict[str, Any]:
    """Give the figures of a verdict rounded for print; a statement only where a judgement was made."""
    shown = rounded(estimate, rule.expanded_uncertainty)
    lower, upper = rule.lower_acceptance_limit, rule.upper_acceptance_limit
    decimals = shown.decimals + 1
    return {
        "estimate": shown.estimate,
        "expanded_uncertainty": shown.expanded_uncertainty,
        "lower_acceptance_limit": None
        if lower is None
        else acceptance_limit_text(lower, decimals, side="lower"),
        "upper_acceptance_limit": None
        if upper is None
        else acceptance_limit_text(upper, decimals, side="upper"),
        "conformance_probability": None
        if judgement is None
        else probability_text(judgement.conformance_probability),
        "how_sure": None
        if judgement is None
        else sureness_text(sure, characteristic.unit, items=rule.items is not None),
        "statement": None
        if judgement is None
        else statement(
            characteristic=f"{characteristic.code} ({characteristic.basis})",
            unit=characteristic.unit,
            estimate=estimate,
            rule=rule,
            judgement=judgement,
            at_this_reading=limits == "at_this_reading",
        ),
    }


def about_the_value(rule: ReleaseRule, estimate: float, outcome: str, unit: str) -> Hold:
    """Say why a value is held or rejected: which limit it misses, and what to do next."""
    side = "upper" if _misses_upper(rule, estimate) else "lower"
    relation = "above" if side == "upper" else "below"
    tolerance_limit = getattr(rule, f"{side}_tolerance_limit")
    guarded = rule.decision_rule.rejection == "guarded"
    if outcome == "reject":
        limit = getattr(rule, f"{side}_rejection_limit") if guarded else tolerance_limit
        shown = _told_apart(rule, estimate, limit)
        named = (
            f"the rejection limit {_rejection_text(limit, shown, side)} {unit}"
            if guarded
            else _tolerance_text(rule, side, unit)
        )
        return Hold(
            "outside-tolerance",
            f"{shown} {unit} is {relation if estimate != limit else 'at'} {named}.",
            "The lot does not meet the specification. A person decides what becomes of it.",
        )
    if not rule.tolerance.holds(estimate):
        return _not_proved(rule, estimate, side, unit)
    acceptance_limit = getattr(rule, f"{side}_acceptance_limit")
    shown = _told_apart(rule, estimate, acceptance_limit)
    return Hold(
        IN_GUARD_BAND,
        f"{shown} {unit} is within {_tolerance_text(rule, side, unit)} but {relation} "
        f"the acceptance limit {_acceptance_text(acceptance_limit, shown, side)} {unit}.",
        _NO_FURTHER_READINGS,
    )


def _not_proved(rule: ReleaseRule, estimate: float, side: str, unit: str) -> Hold:
    """Say that an estimate is outside of tolerance, but not so far that nonconformity is proved."""
    limit = getattr(rule, f"{side}_rejection_limit")
    shown = _told_apart(rule, estimate, getattr(rule, f"{side}_tolerance_limit"))
    beyond = (
        "no value proves that"
        if limit is None
        else f"only beyond the rejection limit {_rejection_text(limit, shown, side)} {unit} that is proved"
    )
    return Hold(
        IN_GUARD_BAND,
        f"{shown} {unit} is not within {_tolerance_text(rule, side, unit)}, but {beyond}.",
        _NO_FURTHER_READINGS,
    )


def _tolerance_text(rule: ReleaseRule, side: str, unit: str) -> str:
    """Name a tolerance limit as it is stated, and what rounding makes of it."""
    effective = getattr(rule, f"{side}_tolerance_limit")
    if rule.stated_limits is None:
        return f"the tolerance limit {number_text(effective)} {unit}"
    stated = getattr(rule.stated_limits, side)
    return (
        f"the tolerance limit {number_text(stated)} {unit} (rounded to {rule.stated_limits.decimals} "
        f"decimals, so {number_text(effective)} {unit} unrounded)"
    )


def _acceptance_text(limit: float, beside: str, side: str) -> str:
    return acceptance_limit_text(limit, len(beside.partition(".")[2]), side=side)


def _rejection_text(limit: float, beside: str, side: str) -> str:
    return rejection_limit_text(limit, len(beside.partition(".")[2]), side=side)


def _misses_upper(rule: ReleaseRule, estimate: float) -> bool:
    """Say at which side an estimate that is not accepted lies."""
    lower, upper = rule.lower_acceptance_limit, rule.upper_acceptance_limit
    if lower is None or upper is None:
        return upper is not None
    return estimate - upper > lower - estimate


def _told_apart(rule: ReleaseRule, estimate: float, limit: float) -> str:
    """Round an estimate no further than the limit that it misses lets it be seen."""
    decimals = max(rounded(estimate, rule.expanded_uncertainty).decimals + 1, 0)
    while decimals < _MOST_DECIMALS:
        text = decimal_text(estimate, decimals)
        if (float(text) > limit) == (estimate > limit) and (float(text) < limit) == (estimate < limit):
            return text
        decimals += 1
    return number_text(estimate)
