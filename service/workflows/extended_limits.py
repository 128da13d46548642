"""A wider uncertainty must not accept more than the narrower one did.

It can: where another component has few degrees of freedom, more uncertainty of a component that is well known
raises the effective degrees of freedom, and the coverage factor falls faster than the uncertainty rises.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from budgets.derived_release import DerivedReleaseRule
from budgets.errors import LimitsError
from budgets.release import ReleaseRule
from service.errors import Fault, InvalidRequest
from service.store.rows import StoredVersion
from service.store.unit_of_work import UnitOfWork
from service.workflows.rules import RuleKey, stored_rule
from service.workflows.versioned_kind import Approval


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
            faults.append(Fault(detail, "a larger factor", "#/widening_factor"))
    if faults:
        raise InvalidRequest("The factor does not widen the guard bands.", faults=tuple(faults))


def _place(key: RuleKey) -> tuple[Any, ...]:
    return key.specification, key.specification_version, key.characteristic, key.counts


def _accepts_more(numbers: Mapping[str, Any], earlier: Mapping[str, Any]) -> bool:
    now, then = _representative(numbers), _representative(earlier)
    if now is None or then is None:
        return now is not None
    pairs = (
        (then.lower_acceptance_limit, now.lower_acceptance_limit),
        (now.upper_acceptance_limit, then.upper_acceptance_limit),
    )
    return any(inner is not None and outer is not None and inner > outer for inner, outer in pairs)


def _representative(numbers: Mapping[str, Any]) -> ReleaseRule | None:
    """Give the rule, of a derived characteristic that in the middle of its box; None: it accepts nothing."""
    rule = stored_rule(numbers)
    if not isinstance(rule, DerivedReleaseRule):
        return rule
    try:
        return rule.at({name: sum(ends) / 2 for name, ends in rule.box.ranges.items()})
    except LimitsError:
        return None
