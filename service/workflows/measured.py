"""What a request says about one characteristic: the estimate, what was done, and what forbids to trust it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import fsum
from typing import Final

from budgets.budget import Count
from budgets.propagation import Counts
from budgets.units import conversion
from service.documents import Calibration, DecisionRequest, Reading
from service.errors import Fault, InvalidRequest, NotSupported
from service.workflows.register import BudgetInForce, Register

_ASK_THE_LABORATORY: Final = "Have the laboratory analyse a sample of this lot."
_A_PERSON: Final = "A person decides on this lot."
_SCAN_AGAIN: Final = (
    "Prepare samples as the calibration asks and scan within its conditions. A person decides on this lot."
)


@dataclass(frozen=True)
class Hold:
    """A reason to hold that is not about the value: the reading cannot be trusted either way."""

    code: str
    detail: str
    next: str


@dataclass(frozen=True)
class Measured:
    """The readings of one characteristic, in its own unit, joined to an estimate."""

    budget: BudgetInForce | None
    counts: Counts | None
    mean: float | None
    estimate: float | None
    holds: tuple[Hold, ...]


def measure(register: Register, request: DecisionRequest, code: str, recorded_at: str) -> Measured:
    """Join the readings of one characteristic and find every reason not to trust them.

    Raises
    ------
    InvalidRequest
        More samples or readings than the procedure has, or analyzers that no one budget names.
    """
    scans = [reading for reading in request.readings if code in reading.values]
    if not scans:
        missing = Hold(
            "characteristic-missing",
            f"No reading of {code} was sent.",
            f"Send {code} with the readings of every lot. " + _A_PERSON,
        )
        return Measured(None, None, None, None, (missing,))
    budget = _budget(register, request, code, scans)
    unit = register.characteristics[request.product, code].unit
    convert = conversion(request.units[code], unit)
    by_sample: dict[str, list[float]] = {}
    for reading in scans:
        by_sample.setdefault(reading.sample, []).append(convert(reading.values[code]))
    # The mean of sample means (mathematics of the averaging weights in budgets.propagation).
    mean = fsum(fsum(values) / len(values) for values in by_sample.values()) / len(by_sample)
    counts = Counts(tuple(len(values) for values in by_sample.values()))
    holds = [
        hold for reading in scans for hold in _scan_holds(register.calibrations[reading.calibration], reading)
    ]
    if budget is None:
        return Measured(None, counts, mean, None, (*_nothing_in_force(code), *_unique(holds)))
    correction = budget.budget.bias if budget.document.bias_treatment == "corrected" else None
    estimate = mean - (correction or 0.0)
    values = [value - (correction or 0.0) for sample in by_sample.values() for value in sample]
    holds.extend(_calibration_holds(budget, scans))
    holds.extend(_range_holds(budget, values, unit))
    holds.extend(_count_holds(budget, counts))
    if budget.lapses_at is not None and recorded_at >= budget.lapses_at:
        holds.append(
            Hold(
                "evidence-lapsed",
                f"The evidence behind {budget.document.code} served until {budget.lapses_at}.",
                "Renew the study that lapsed and have the budget approved. " + _ASK_THE_LABORATORY,
            )
        )
    return Measured(budget, counts, mean, estimate, tuple(_unique(holds)))


def _budget(
    register: Register, request: DecisionRequest, code: str, scans: list[Reading]
) -> BudgetInForce | None:
    analyzers = list(dict.fromkeys(reading.analyzer for reading in scans))
    budgets = [register.budgets.get((request.product, code, analyzer)) for analyzer in analyzers]
    if len(analyzers) == 1:
        return budgets[0]
    fault = Fault(f"{code} was read on {' and '.join(analyzers)}", pointer="#/readings")
    if any(budget is None or budget is not budgets[0] for budget in budgets):
        raise InvalidRequest("A lot read on two analyzers needs a budget that names both.", faults=(fault,))
    raise NotSupported("Not supported yet: one lot read on two analyzers.", faults=(fault,))


def _nothing_in_force(code: str) -> tuple[Hold, ...]:
    return (
        Hold(
            "nothing-in-force",
            f"No budget for {code} on this analyzer is in force.",
            "Have a budget approved. " + _ASK_THE_LABORATORY,
        ),
    )


def _scan_holds(calibration: Calibration, reading: Reading) -> list[Hold]:
    holds = []
    for name, limit in calibration.flags.items():
        words = name.replace("-", " ")
        value = reading.flags.get(name)
        if value is None and limit.required:
            holds.append(
                Hold(
                    "flag-missing", f"The scan of sample {reading.sample} came without {words}.", _SCAN_AGAIN
                )
            )
        elif value is not None and value > limit.largest:
            detail = f"Sample {reading.sample}: {words} is {value:g}, more than {limit.largest:g}."
            holds.append(Hold("scan-flagged", detail, _SCAN_AGAIN))
    for name, bounds in calibration.influences.items():
        value = reading.influences.get(name)
        below = value is not None and bounds.lower is not None and value < bounds.lower
        above = value is not None and bounds.upper is not None and value > bounds.upper
        if below or above:
            words = name.replace("_", " ")
            span = _span(bounds.lower, bounds.upper)
            detail = f"Sample {reading.sample}: {words} is {value:g} {bounds.unit}, outside of {span}."
            holds.append(Hold("influence-outside-range", detail, _SCAN_AGAIN))
    return holds


def _span(lower: float | None, upper: float | None) -> str:
    if lower is None:
        return f"at most {upper:g}"
    if upper is None:
        return f"at least {lower:g}"
    return f"{lower:g} to {upper:g}"


def _calibration_holds(budget: BudgetInForce, scans: list[Reading]) -> list[Hold]:
    named: Mapping[str, str] = budget.document.calibrations
    return [
        Hold(
            "another-calibration",
            f"{reading.analyzer} read with the calibration {reading.calibration}; the budget "
            f"{budget.document.code} is for {named[reading.analyzer]}.",
            "Validate the new calibration and have its budget approved. " + _ASK_THE_LABORATORY,
        )
        for reading in scans
        if reading.calibration != named[reading.analyzer]
    ]


def _range_holds(budget: BudgetInForce, values: list[float], unit: str) -> list[Hold]:
    lower, upper = budget.budget.validated_range
    outside = [value for value in values if not lower <= value <= upper]
    if not outside:
        return []
    detail = f"{outside[0]:.6g} {unit} lies outside of the validated range, {lower:g} to {upper:g} {unit}."
    return [Hold("outside-validated-range", detail, _ASK_THE_LABORATORY)]


def _count_holds(budget: BudgetInForce, counts: Counts) -> list[Hold]:
    """Too many is a fault: many readings in one call must not shrink the uncertainty beyond the plan."""
    procedure = budget.budget.procedure
    samples, fewest = len(counts.readings_per_sample), min(counts.readings_per_sample)
    faults = [
        Fault(
            f"got {number} {what}",
            expected=f"at most {planned.most}, by {budget.document.code}",
            pointer="#/readings",
        )
        for what, number, planned in _done(
            samples, max(counts.readings_per_sample), procedure.samples, procedure.readings_per_sample
        )
        if number > planned.most
    ]
    if faults:
        raise InvalidRequest("More was read than the procedure of the budget has.", faults=tuple(faults))
    return [
        Hold(
            "too-few-readings",
            f"{number} {what}, fewer than the {planned.least} that {budget.document.code} needs.",
            "Send what the procedure asks for with every lot. " + _A_PERSON,
        )
        for what, number, planned in _done(samples, fewest, procedure.samples, procedure.readings_per_sample)
        if number < planned.least
    ]


def _done(
    samples: int, readings: int, planned: Count, planned_readings: Count
) -> list[tuple[str, int, Count]]:
    return [("samples", samples, planned), ("readings of a sample", readings, planned_readings)]


def _unique(holds: list[Hold]) -> list[Hold]:
    return list(dict.fromkeys(holds))
