"""Rounding for display, and the sentence that states a result and its rule.

Only what people read is rounded, never what is decided on or recorded. Rounding works on the shortest decimal
digits of a number: 2.675 is meant as 2.675 and goes to 2.68 (half to even), whatever its binary neighbour is.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Context, Decimal

from budgets.decision_rules import DecisionRule
from budgets.errors import ModelError
from budgets.judgements import Judgement
from budgets.release import ReleaseRule

_SMALLEST_PROBABILITY = Decimal("0.0001")
# Wide enough for every double at every decimal place of another.
_CONTEXT = Context(prec=1400)


@dataclass(frozen=True)
class Rounded:
    """An estimate and its expanded uncertainty as they are printed.

    Parameters
    ----------
    estimate, expanded_uncertainty : str
    decimals : int
        Decimal places of both; negative for tens and hundreds.
    """

    estimate: str
    expanded_uncertainty: str
    decimals: int


def _decimal(value: float) -> Decimal:
    if not math.isfinite(value):
        raise ModelError(f"{value} cannot be printed as a number")
    return Decimal(repr(float(value)))


def _quantum(decimals: int) -> Decimal:
    return Decimal(1).scaleb(-decimals)


def _text(value: Decimal) -> str:
    # A zero has no sign in print.
    return f"{abs(value) if value == 0 else value:f}"


def significant_decimals(uncertainty: float, *, digits: int = 2) -> int:
    """Return the decimal places that leave an uncertainty so many significant digits.

    Parameters
    ----------
    uncertainty : float
        Above zero.
    digits : int

    Returns
    -------
    int
        After rounding: 0.0996 keeps 2 decimals, for it is printed as 0.10.

    Raises
    ------
    ModelError
        If the uncertainty is not a finite number above zero.

    Notes
    -----
    Source: JCGM 100:2008, 7.2.6 (from memory): at most two significant digits.

    Examples
    --------
    >>> significant_decimals(0.139), significant_decimals(0.0996), significant_decimals(1234.0)
    (2, 2, -2)
    """
    if not uncertainty > 0:
        raise ModelError(f"an uncertainty of {uncertainty} cannot be printed")
    exact = _decimal(uncertainty)
    decimals = digits - 1 - exact.adjusted()
    rounded_once = exact.quantize(_quantum(decimals), ROUND_HALF_EVEN, _CONTEXT)
    return digits - 1 - rounded_once.adjusted()


def rounded(estimate: float, expanded_uncertainty: float) -> Rounded:
    """Return an estimate and its expanded uncertainty rounded for print.

    Parameters
    ----------
    estimate, expanded_uncertainty : float, unit of the characteristic

    Returns
    -------
    Rounded
        The uncertainty to two significant digits, the estimate to the same decimal place.

    Raises
    ------
    ModelError
        If one of them is not finite or the uncertainty is not above zero.

    Notes
    -----
    Source: JCGM 100:2008, 7.2.6 (from memory).

    Examples
    --------
    >>> rounded(3.135, 0.1394)
    Rounded(estimate='3.14', expanded_uncertainty='0.14', decimals=2)
    """
    decimals = significant_decimals(expanded_uncertainty)
    quantum = _quantum(decimals)
    return Rounded(
        _text(_decimal(estimate).quantize(quantum, ROUND_HALF_EVEN, _CONTEXT)),
        _text(_decimal(expanded_uncertainty).quantize(quantum, ROUND_HALF_EVEN, _CONTEXT)),
        decimals,
    )


def acceptance_limit_text(limit: float, decimals: int, *, side: str) -> str:
    """Return an acceptance limit rounded inward, so that the printed one never accepts more.

    Parameters
    ----------
    limit : float, unit of the characteristic
    decimals : int
    side : {"lower", "upper"}

    Returns
    -------
    str

    Raises
    ------
    ModelError
        If the side is neither, or the limit is not finite.

    Examples
    --------
    >>> acceptance_limit_text(3.0859, 2, side="upper"), acceptance_limit_text(2.1001, 2, side="lower")
    ('3.08', '2.11')
    """
    if side not in ("lower", "upper"):
        raise ModelError(f"a limit is lower or upper, not {side!r}")
    rounding = ROUND_FLOOR if side == "upper" else ROUND_CEILING
    return _text(_decimal(limit).quantize(_quantum(decimals), rounding, _CONTEXT))


def rejection_limit_text(limit: float, decimals: int, *, side: str) -> str:
    """Return a rejection limit rounded outward, so that the printed one never rejects more.

    Parameters
    ----------
    limit : float, unit of the characteristic
    decimals : int
    side : {"lower", "upper"}

    Returns
    -------
    str

    Examples
    --------
    >>> rejection_limit_text(3.3141, 2, side="upper")
    '3.32'
    """
    return acceptance_limit_text(limit, decimals, side="lower" if side == "upper" else "upper")


def probability_text(probability: float) -> str:
    """Return a probability for the screen; nothing below 0.01 % is claimed.

    Parameters
    ----------
    probability : float
        From 0 to 1.

    Returns
    -------
    str

    Raises
    ------
    ModelError
        If it is not from 0 to 1.

    Examples
    --------
    >>> probability_text(0.1717), probability_text(3e-7), probability_text(0.99999)
    ('17.2 %', '< 0.01 %', '> 99.99 %')
    """
    if not 0 <= probability <= 1:
        raise ModelError(f"{probability} is no probability")
    exact = _decimal(probability)
    if exact < _SMALLEST_PROBABILITY:
        return "< 0.01 %"
    if exact > 1 - _SMALLEST_PROBABILITY:
        return "> 99.99 %"
    percent = exact * 100
    quantum = Decimal("0.01") if percent < 1 or percent > 99 else Decimal("0.1")
    return f"{_text(percent.quantize(quantum, ROUND_HALF_EVEN, _CONTEXT))} %"


def number_text(value: float) -> str:
    """Return a stated number, such as a tolerance limit, with the digits it was given."""
    return _text(_decimal(value).normalize())


def decimal_text(value: float, decimals: int) -> str:
    """Return a number rounded to so many decimal places, half to even."""
    return _text(_decimal(value).quantize(_quantum(decimals), ROUND_HALF_EVEN, _CONTEXT))


def rule_text(rule: DecisionRule) -> str:
    """Return a decision rule in words.

    Parameters
    ----------
    rule : DecisionRule

    Returns
    -------
    str

    Examples
    --------
    >>> rule_text(DecisionRule("guarded_by_specific_risk", largest_risk=0.05))
    'guarded acceptance with a specific risk of at most 5 %'
    """
    text = _kind_text(rule) + (", and guarded rejection" if rule.rejection == "guarded" else "")
    return text if rule.rounds == 1 else f"{text}, held over {rule.rounds} rounds"


def _kind_text(rule: DecisionRule) -> str:
    if rule.specific_risk_cap is not None and rule.largest_risk is not None:
        return (
            f"guarded acceptance with a global consumer's risk of at most {_percent(rule.largest_risk)} % "
            f"and a specific risk of at most {_percent(rule.specific_risk_cap)} %"
        )
    if rule.largest_risk is not None:
        return f"guarded acceptance with a specific risk of at most {_percent(rule.largest_risk)} %"
    if rule.multiple is not None and rule.coverage_probability is not None:
        sided = "one-sided" if rule.sides == 1 else "two-sided"
        return (
            f"guarded acceptance with a guard band of {number_text(rule.multiple)} U "
            f"({sided}, p = {_percent(rule.coverage_probability)} %)"
        )
    conditions = []
    if rule.largest_standard_uncertainty is not None:
        conditions.append(
            f"a standard uncertainty of at most {number_text(rule.largest_standard_uncertainty)}"
        )
    if rule.least_capability_index is not None:
        conditions.append(f"a capability index of at least {number_text(rule.least_capability_index)}")
    return f"simple acceptance, agreed for {' and '.join(conditions)}"


def _percent(fraction: float) -> str:
    return _text((_decimal(fraction) * 100).normalize())


def statement(
    *,
    characteristic: str,
    unit: str,
    estimate: float,
    rule: ReleaseRule,
    judgement: Judgement,
    at_this_reading: bool = False,
) -> str:
    """Return the sentences that state a result, its uncertainty, the limits and the rule.

    Parameters
    ----------
    characteristic, unit : str
    estimate : float, unit of the characteristic
    rule : ReleaseRule
    judgement : Judgement
    at_this_reading : bool
        The acceptance limits are said to be those at this reading: a derived characteristic has no others.

    Returns
    -------
    str

    Raises
    ------
    ModelError
        If a figure cannot be printed.

    Notes
    -----
    Source: ISO/IEC 17025:2017, 7.8.6.2 (from memory): to which result the statement applies, which
    specification is met or not, and the decision rule. The expanded uncertainty is given with its coverage
    factor and probability, JCGM 100:2008, 7.2.3 (from memory).
    """
    # Where the uncertainty depends on the estimate, the one at this estimate is stated.
    u = judgement.combined_standard_uncertainty
    expanded = rule.expanded_uncertainty if u is None else rule.coverage_factor * u
    shown = rounded(estimate, expanded)
    accepted = _acceptance_text(
        rule.lower_acceptance_limit, rule.upper_acceptance_limit, shown.decimals + 1, unit
    )
    return " ".join(
        (
            _result_text(characteristic, unit, shown, rule.coverage_factor, rule.coverage_probability),
            f"Tolerance limits{_share_text(rule)}: {_tolerance_text(rule, unit)}; "
            f"acceptance limits{' at this reading' if at_this_reading else ''}: {accepted}"
            f"{_rejection_text(rule, shown.decimals + 1, unit)}.",
            _verdict_text(judgement, rule.decision_rule),
        )
    )


def _result_text(
    characteristic: str, unit: str, shown: Rounded, coverage_factor: float, coverage_probability: float
) -> str:
    return (
        f"{characteristic}: ({shown.estimate} ± {shown.expanded_uncertainty}) {unit}, expanded uncertainty "
        f"with k = {coverage_factor:.2f} for a coverage probability of {_percent(coverage_probability)} %."
    )


def _verdict_text(judgement: Judgement, rule: DecisionRule) -> str:
    return (
        f"Outcome: {judgement.outcome}; conformance probability "
        f"{probability_text(judgement.conformance_probability)}. Decision rule: {rule_text(rule)}."
    )


def _share_text(rule: ReleaseRule) -> str:
    return "" if rule.items is None else f" for at least {_percent(rule.items.least_share)} % of the items"


def _tolerance_text(rule: ReleaseRule, unit: str) -> str:
    stated = _pair_text(*rule.tolerance.stated_ends, unit)
    if rule.stated_limits is None:
        return stated
    effective = _pair_text(rule.lower_tolerance_limit, rule.upper_tolerance_limit, unit)
    places = rule.stated_limits.decimals
    return f"{stated}, compared after rounding to {places} decimals, which is {effective} unrounded"


def _rejection_text(rule: ReleaseRule, decimals: int, unit: str) -> str:
    if rule.decision_rule.rejection != "guarded":
        return ""
    lower, upper = rule.lower_rejection_limit, rule.upper_rejection_limit
    limits = _joined(
        None if lower is None else rejection_limit_text(lower, decimals, side="lower"),
        None if upper is None else rejection_limit_text(upper, decimals, side="upper"),
        unit,
    )
    return f"; rejection limits: {limits or 'none'}"


def _pair_text(lower: float | None, upper: float | None, unit: str) -> str:
    return _joined(
        None if lower is None else number_text(lower), None if upper is None else number_text(upper), unit
    )


def _acceptance_text(lower: float | None, upper: float | None, decimals: int, unit: str) -> str:
    return _joined(
        None if lower is None else acceptance_limit_text(lower, decimals, side="lower"),
        None if upper is None else acceptance_limit_text(upper, decimals, side="upper"),
        unit,
    )


def _joined(lower: str | None, upper: str | None, unit: str) -> str:
    parts = []
    if lower is not None:
        parts.append(f"lower {lower} {unit}")
    if upper is not None:
        parts.append(f"upper {upper} {unit}")
    return ", ".join(parts)
