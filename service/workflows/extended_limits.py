"""A wider uncertainty must not accept more than the narrower one did.

It can: where another component has few degrees of freedom, more uncertainty of a component that is well known
raises the effective degrees of freedom, and the coverage factor falls faster than the uncertainty rises.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from typing import Any, Final

from budgets.derived_release import DerivedReleaseRule
from budgets.errors import LimitsError
from budgets.item_rules import LotSpreadRule
from budgets.release import ReleaseRule
from service.errors import Fault, InvalidRequest
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.rules import AnyRule, RuleKey, stored_rule
from service.workflows.versioned_kind import Approval

_SPREADS: Final = (0.5, 1.0, 2.0, 4.0)


def check_limits_are_narrower(unit_of_work: UnitOfWork, before: StoredVersion, approval: Approval) -> None:
    """Refuse a factor with which a limit of acceptance would lie further out than without it.

    Raises
    ------
    InvalidRequest
        With a fault for each specification and number of readings.
    """
    was = {
        _place(RuleKey.of(stored)): stored.numbers
        for stored in unit_of_work.rules.for_budget(before.code, before.version)
    }
    faults = []
    for key, numbers in approval.rules:
        earlier = was.get(_place(key))
        if earlier is not None and _accepts_more(numbers, earlier):
            detail = f"{key.specification} would accept more than before with {key.counts} readings"
            faults.append(Fault(detail, "a larger factor, or a new study", "#/widening_factor"))
    if faults:
        raise InvalidRequest("The factor does not widen the guard bands.", faults=tuple(faults))


def _place(key: RuleKey) -> tuple[Any, ...]:
    return key.specification, key.specification_version, key.characteristic, key.counts


def _accepts_more(numbers: Mapping[str, Any], earlier: Mapping[str, Any]) -> bool:
    before = stored_rule(earlier)
    for now, then in zip(_rules_at(stored_rule(numbers), before), _rules_at(before, before), strict=True):
        if now is not None and (then is None or _wider(now, then)):
            return True
    return False


def _wider(now: ReleaseRule, then: ReleaseRule) -> bool:
    pairs = (
        (then.lower_acceptance_limit, now.lower_acceptance_limit),
        (now.upper_acceptance_limit, then.upper_acceptance_limit),
    )
    return any(inner is not None and outer is not None and inner > outer for inner, outer in pairs)


def _rules_at(rule: AnyRule, before: AnyRule) -> list[ReleaseRule | None]:
    """Give the rule where two are compared; None where it accepts nothing.

    Of a derived characteristic that is the middle of its box, of items whose spread is seen in the lot some
    spreads about what was measured before.
    """
    if isinstance(rule, ReleaseRule):
        return [rule]
    if isinstance(rule, DerivedReleaseRule):
        middle = {name: sum(ends) / 2 for name, ends in rule.box.ranges.items()}
        return [_rule_or_none(partial(rule.at, middle))]
    assert isinstance(before, LotSpreadRule)  # rules of one requirement are of one kind
    return [_rule_or_none(partial(rule.with_spread, before.known_spread * times)) for times in _SPREADS]


def _rule_or_none(compute: Callable[[], ReleaseRule]) -> ReleaseRule | None:
    try:
        return compute()
    except LimitsError:
        return None
