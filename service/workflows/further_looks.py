"""What a further look at a lot may be: whether the terms still hold, how many are left, what to read next."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any, Final

from budgets.errors import BudgetsError
from budgets.joined_looks import covariance_of_looks
from budgets.looks import power_of_a_further_look
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern
from budgets.release import ReleaseRule
from service.documents import Requirement
from service.workflows.earlier_looks import EarlierLooks
from service.workflows.holds import Hold
from service.workflows.measured import Measured
from service.workflows.register import (
    MOST_COMPILED,
    BudgetInForce,
    Outlook,
    Register,
    SpecificationInForce,
)
from service.workflows.rules import rule_here

_A_PERSON: Final = "A person decides, with an analysis by the laboratory."
# From here on more readings are worth their cost; below the second they settle nothing.
_LIKELY, _HOPELESS = 0.5, 0.05


def stated_rule(requirement: Requirement) -> dict[str, Any]:
    """Write the decision rule as a verdict shows it; a prior has a member of its own there."""
    stated = vars(requirement.decision_rule)
    return {name: value for name, value in stated.items() if value is not None and name != "prior"}


def looks_after(
    earlier: EarlierLooks, requirement: Requirement, measured: Measured, *, compared: bool
) -> int:
    """Count the looks at a characteristic, with this one if new readings of it are compared with a limit."""
    before = earlier.counted(requirement.characteristic)
    return before.looks + (1 if compared and measured.readings > before.readings else 0)


def changed_terms(
    earlier: EarlierLooks,
    specification: SpecificationInForce,
    requirement: Requirement,
    budget: BudgetInForce,
    rule: ReleaseRule,
) -> tuple[Hold, ...]:
    """Hold where a look by other terms counted: the risk per look is for looks by the same ones."""
    ours: dict[str, Any] = {
        "decision_rule": stated_rule(requirement),
        "lower_tolerance_limit": rule.lower_tolerance_limit,
        "upper_tolerance_limit": rule.upper_tolerance_limit,
        "judged": requirement.judged,
    }
    for verdict in earlier.compared(specification.document.code, requirement.characteristic):
        used: Mapping[str, Any] = verdict["budget"]
        if (used["code"], used["version"]) != (budget.document.code, budget.version):
            what = f"the budget {used['code']}, version {used['version']}"
        elif any(verdict.get(name) != value for name, value in ours.items()):
            what = f"{specification.document.code}, version {verdict['specification']['version']}"
        else:
            continue
        detail = (
            f"An earlier round was judged by {what}, and another version is in force now; the rule holds the "
            "risk of rounds by the same versions only."
        )
        return (Hold("terms-changed", detail, _A_PERSON),)
    return ()


def next_look(
    register: Register,
    specification: SpecificationInForce,
    requirement: Requirement,
    measured: Measured,
    looks: int,
) -> str:
    """Say what to read next, and how likely that releases a lot that is held by its value."""
    assert measured.budget is not None and measured.estimate is not None
    procedure = measured.budget.budget.procedure
    best, power = 0, -1.0
    for samples in sorted({procedure.samples.least, procedure.samples.plan, procedure.samples.most}):
        outlook = _outlook(register, specification, requirement, measured, looks + 1, samples)
        if outlook is None:
            continue
        found = power_of_a_further_look(
            measured.estimate,
            ((outlook.before, outlook.shared), (outlook.shared, outlook.then)),
            (outlook.lower_acceptance_limit, outlook.upper_acceptance_limit),
            outlook.effective_degrees_of_freedom,
        )
        if found > power:
            best, power = samples, found
        if power >= _LIKELY:
            break
    if power < _HOPELESS:
        return f"No further reading within the procedure can settle it. {_A_PERSON}"
    each = procedure.readings_per_sample.plan
    what = f"{best} more sample" + ("s" if best > 1 else "")
    if each > 1:
        what += f", {each} readings of each" if best > 1 else f", {each} readings"
    likely = "likely" if power >= _LIKELY else "possible"
    return f"Take {what}: release is then {likely} ({power:.2f})."


def _outlook(
    register: Register,
    specification: SpecificationInForce,
    requirement: Requirement,
    measured: Measured,
    looks: int,
    samples: int,
) -> Outlook | None:
    """Look ahead by some new samples, read as planned; None where no rule can be made then.

    Kept for the next lot that is held, where the uncertainty is the same whatever was read.
    """
    assert measured.budget is not None and measured.done is not None and measured.estimate is not None
    budget = measured.budget.budget
    keeps = budget.model is None and not any(item.relative_terms for item in budget.components)
    key = register.rule_key(specification, requirement, measured.budget, measured.done)
    if keeps and (known := register.outlooks.get((key, looks, samples))) is not None:
        return known
    before = _pattern(measured.done)
    joined = _with_new_samples(before, samples, budget.procedure.readings_per_sample.plan)
    where = measured.means if budget.model is not None else {budget.characteristic: measured.estimate}
    try:
        compiled = register.rule(specification, requirement, measured.budget, joined, looks)
        then = rule_here(compiled, measured.means, measured.estimate)
        covariance = covariance_of_looks(budget, (before, joined), where)
    except BudgetsError:
        return None
    lower, upper = then.lower_acceptance_limit, then.upper_acceptance_limit
    found = Outlook(
        before=float(covariance[0, 0]),
        shared=float(covariance[0, 1]),
        then=float(covariance[1, 1]),
        lower_acceptance_limit=-math.inf if lower is None else lower,
        upper_acceptance_limit=math.inf if upper is None else upper,
        effective_degrees_of_freedom=then.effective_degrees_of_freedom,
    )
    if keeps and len(register.outlooks) < MOST_COMPILED:
        register.outlooks[key, looks, samples] = found
    return found


def _pattern(done: Counts | ReadingPattern) -> ReadingPattern:
    if isinstance(done, ReadingPattern):
        return done
    numbers = enumerate(done.readings_per_sample)
    return ReadingPattern({"sample": tuple(str(i) for i, number in numbers for _ in range(number))})


def _with_new_samples(pattern: ReadingPattern, samples: int, readings: int) -> ReadingPattern:
    """Add samples that are not there yet, read in the session and on the instrument of the first reading."""
    # A line break is in no label that was sent.
    new = tuple(f"\n{i}" for i in range(samples) for _ in range(readings))
    return ReadingPattern(
        {
            level: (*labels, *((labels[0],) * len(new) if level in ("session", "instrument") else new))
            for level, labels in pattern.groups.items()
        }
    )
