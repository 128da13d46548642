"""What a request says about one characteristic: the estimate, what was done, and what forbids to trust it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from math import fsum
from typing import Final
from zoneinfo import ZoneInfo

from budgets.errors import ModelError
from budgets.propagation import Counts
from budgets.reading_patterns import ReadingPattern, mean_weights
from budgets.units import conversion
from service.documents import Calibration, DecisionRequest, Reading
from service.errors import Fault, InvalidRequest
from service.workflows.evidence import FaultCollector
from service.workflows.holds import Hold
from service.workflows.register import BudgetInForce, Register
from service.workflows.replicate_checks import Replicates, replicates_of
from service.workflows.stuck_sensors import StuckSensors

_ASK_THE_LABORATORY: Final = "Have the laboratory analyse a sample of this lot."
_WEIGHTS: Final = "one weight above 0 for all readings of one presentation"
_A_PERSON: Final = "A person decides on this lot."
_SCAN_AGAIN: Final = (
    "Prepare samples as the calibration asks and scan within its conditions. A person decides on this lot."
)


@dataclass(frozen=True)
class Measured:
    """What was read for one characteristic, joined: a mean for each quantity that is read, in its own unit.

    ``scans`` are the places of its readings in the request, ``done`` says how they were grouped,
    ``estimate`` is the value of the measurement model, ``sample_means`` are those of the one quantity that is
    read, where it is one. The holds are not about the value: the readings cannot be trusted either way.
    """

    budget: BudgetInForce | None
    done: Counts | ReadingPattern | None
    samples: int
    readings: int
    means: Mapping[str, float]
    estimate: float | None
    holds: tuple[Hold, ...]
    sample_means: tuple[float, ...] = ()
    scans: tuple[int, ...] = ()
    replicates: tuple[Replicates, ...] = ()


def measure(
    register: Register,
    request: DecisionRequest,
    code: str,
    recorded_at: str,
    seen: int,
    stuck: StuckSensors,
) -> Measured:
    """Join the readings of one characteristic and find every reason not to trust them.

    The first ``seen`` of them were judged by earlier looks; the procedure counts for the others.

    Raises
    ------
    InvalidRequest
        More samples or readings than the procedure has, readings that cannot be grouped as they say, or
        analyzers that no one budget names.
    """
    channels = register.characteristics[request.product, code].derived_from or (code,)
    places = tuple(
        place
        for place, reading in enumerate(request.readings)
        if all(name in reading.values for name in channels)
    )
    scans = [request.readings[place] for place in places]
    if not scans:
        what = " and ".join(channels)
        missing = Hold(
            "characteristic-missing",
            f"No reading of {what} was sent.",
            f"Send {what} with the readings of every lot. " + _A_PERSON,
        )
        return Measured(None, None, 0, 0, {}, None, (missing,))
    budget = _budget(register, request, code, scans)
    by_channel = {name: _values(register, request, name, scans) for name in channels}
    done = _done(scans)
    samples = list(dict.fromkeys(reading.sample for reading in scans))
    weights = _weights(scans)
    means = {
        name: fsum(weight * value for weight, value in zip(weights, values, strict=True))
        for name, values in by_channel.items()
    }
    holds = [
        hold
        for reading in scans
        for hold in _scan_holds(register.calibrations[reading.calibration], reading, register.plant.time_zone)
    ]
    used = {(reading.analyzer, channel) for reading in scans for channel in channels}
    holds += [hold for sensor, hold in stuck.items() if sensor in used]
    estimate = None
    replicates: tuple[Replicates, ...] = ()
    if budget is None:
        holds = [*_nothing_in_force(code), *holds]
    else:
        replicates = replicates_of(register, budget, scans, by_channel, means)
        estimate = _estimate(budget, means)
        holds.extend(_calibration_holds(budget, scans))
        holds.extend(_range_holds(register, budget, by_channel, estimate))
        if seen < len(scans):
            holds.extend(_count_holds(budget, list(Counter(r.sample for r in scans[seen:]).values())))
        holds.extend(_lapse_holds(budget, recorded_at))
    return Measured(
        budget,
        done,
        len(samples),
        len(scans),
        means,
        estimate,
        tuple(_unique(holds)),
        _sample_means(scans, samples, by_channel),
        places,
        replicates,
    )


def _sample_means(
    scans: list[Reading], samples: list[str], by_channel: Mapping[str, list[float]]
) -> tuple[float, ...]:
    if len(by_channel) > 1:
        return ()
    (values,) = by_channel.values()
    each = [
        [value for reading, value in zip(scans, values, strict=True) if reading.sample == name]
        for name in samples
    ]
    return tuple(fsum(readings) / len(readings) for readings in each)


def _values(register: Register, request: DecisionRequest, name: str, scans: list[Reading]) -> list[float]:
    """Give the readings of one channel in the unit of its characteristic."""
    convert = conversion(request.units[name], register.characteristics[request.product, name].unit)
    return [convert(reading.values[name]) for reading in scans]


def _weights(scans: list[Reading]) -> tuple[float, ...]:
    """Give each reading its weight: as sent, else such that the estimate is the mean of sample means."""
    if scans[0].weight is not None:
        return tuple(reading.weight or 0.0 for reading in scans)
    return mean_weights([reading.sample for reading in scans])


def _done(scans: list[Reading]) -> Counts | ReadingPattern:
    """Say how the readings were grouped; mere counts where nothing but their samples tells them apart.

    Raises
    ------
    InvalidRequest
        Some readings have weights and others not, the weights do not add up to 1, or groups are not nested.
    """
    grouped = any(reading.presentation or reading.increment or reading.session for reading in scans)
    analyzers = {reading.analyzer for reading in scans}
    weighted = {reading.weight is not None for reading in scans}
    if weighted == {True, False}:
        fault = Fault("some readings have a weight and some have none", pointer="#/readings")
        raise InvalidRequest("1 fault; nothing was recorded.", faults=(fault,))
    if not grouped and len(analyzers) == 1 and weighted == {False}:
        return Counts(tuple(Counter(reading.sample for reading in scans).values()))
    collector = FaultCollector()
    weighed: dict[tuple[str, str | None, str | None], set[float | None]] = {}
    for reading in scans:
        key = (reading.sample, reading.increment, reading.presentation)
        weighed.setdefault(key, set()).add(reading.weight)
    for (sample, *_), weights in weighed.items():
        # One that weighs less, or nothing, would be set aside without a reason and without an approver.
        if len(weights) > 1 or 0 in weights:
            collector.add("#/readings", f"sample {sample}: weights {_shown(weights)}", _WEIGHTS)
    collector.finish("The readings cannot be weighed as they say.")
    pattern = collector.attempt("#/readings", _pattern, scans)
    collector.finish("The readings cannot be grouped as they say.")
    assert pattern is not None
    return pattern


def _shown(weights: set[float | None]) -> str:
    return " and ".join(f"{weight:g}" for weight in sorted(weight or 0.0 for weight in weights))


def _pattern(scans: list[Reading]) -> ReadingPattern:
    """Group the readings; by default those of a sample share one increment and one presentation.

    Labels are those within the sample, or within the analyzer, as a line would number them.
    """
    weights = tuple(reading.weight for reading in scans if reading.weight is not None)
    return ReadingPattern(
        groups={
            "presentation": tuple(f"{r.sample}/{r.increment or ''}/{r.presentation or ''}" for r in scans),
            "increment": tuple(f"{r.sample}/{r.increment or ''}" for r in scans),
            "sample": tuple(r.sample for r in scans),
            "session": tuple(f"{r.analyzer}/{r.session or ''}" for r in scans),
            "instrument": tuple(r.analyzer for r in scans),
        },
        weights=weights or None,
    )


def _budget(
    register: Register, request: DecisionRequest, code: str, scans: list[Reading]
) -> BudgetInForce | None:
    analyzers = list(dict.fromkeys(reading.analyzer for reading in scans))
    budgets = [register.budgets.get((request.product, code, analyzer)) for analyzer in analyzers]
    if any(budget is not budgets[0] for budget in budgets):
        fault = Fault(f"{code} was read on {' and '.join(analyzers)}", pointer="#/readings")
        raise InvalidRequest("A lot read on two analyzers needs a budget that names both.", faults=(fault,))
    return budgets[0]


def _estimate(budget: BudgetInForce, means: Mapping[str, float]) -> float | None:
    """Give the value of the measurement model; none where the model has none at these readings."""
    try:
        return budget.budget.estimate(means)
    except ModelError:
        return None


def _nothing_in_force(code: str) -> tuple[Hold, ...]:
    return (
        Hold(
            "nothing-in-force",
            f"No budget for {code} on this analyzer is in force.",
            "Have a budget approved. " + _ASK_THE_LABORATORY,
        ),
    )


def _scan_holds(calibration: Calibration, reading: Reading, time_zone: str) -> list[Hold]:
    holds = []
    taken_on = reading.taken_at.astimezone(ZoneInfo(time_zone)).date()
    if taken_on < calibration.starts_on:
        detail = (
            f"Sample {reading.sample} was read on {taken_on}, before the calibration {calibration.code} "
            f"began on {calibration.starts_on}."
        )
        holds.append(Hold("before-calibration", detail, "Check the clock of the analyzer. " + _A_PERSON))
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
        if value is None and bounds.required:
            words = name.replace("_", " ")
            detail = f"The scan of sample {reading.sample} came without {words}."
            holds.append(Hold("influence-missing", detail, _SCAN_AGAIN))
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


def _range_holds(
    register: Register,
    budget: BudgetInForce,
    by_channel: Mapping[str, list[float]],
    estimate: float | None,
) -> list[Hold]:
    """Every reading has to lie where it was validated; of a derived characteristic the estimate too."""
    product, characteristic = budget.document.product, budget.document.characteristic
    checked: list[tuple[str, list[float], tuple[float, float]]] = []
    if budget.budget.model is None:
        correction = budget.budget.correction
        values = [value - correction for value in by_channel[characteristic]]
        checked.append((characteristic, values, budget.budget.validated_range))
    else:
        checked += [(name, by_channel[name], ends) for name, ends in budget.budget.validated_box.items()]
        if estimate is None:
            return [Hold("outside-validated-range", "The model has no value here.", _ASK_THE_LABORATORY)]
        checked.append((characteristic, [estimate], budget.budget.validated_range))
    holds = []
    for name, values, (lower, upper) in checked:
        outside = [value for value in values if not lower <= value <= upper]
        if outside:
            unit = register.characteristics[product, name].unit
            detail = (
                f"{name}: {outside[0]:.6g} {unit} lies outside of the validated range, "
                f"{lower:g} to {upper:g} {unit}."
            )
            holds.append(Hold("outside-validated-range", detail, _ASK_THE_LABORATORY))
    return holds


def _count_holds(budget: BudgetInForce, readings_per_sample: list[int]) -> list[Hold]:
    """Too many is a fault: many readings in one call must not shrink the uncertainty beyond the plan."""
    procedure = budget.budget.procedure
    samples = ("samples", len(readings_per_sample), procedure.samples)
    readings = "readings of a sample"
    fault = tuple(
        Fault(
            f"got {number} {what}",
            expected=f"at most {planned.most}, by {budget.document.code}",
            pointer="#/readings",
        )
        for what, number, planned in (
            samples,
            (readings, max(readings_per_sample), procedure.readings_per_sample),
        )
        if number > planned.most
    )
    if fault:
        raise InvalidRequest("More was read than the procedure of the budget has.", faults=fault)
    return [
        Hold(
            "too-few-readings",
            f"{number} {what}, fewer than the {planned.least} that {budget.document.code} needs.",
            "Send what the procedure asks for with every lot. " + _A_PERSON,
        )
        for what, number, planned in (
            samples,
            (readings, min(readings_per_sample), procedure.readings_per_sample),
        )
        if number < planned.least
    ]


def _lapse_holds(budget: BudgetInForce, recorded_at: str) -> list[Hold]:
    if budget.lapses_at is None or recorded_at < budget.lapses_at:
        return []
    return [
        Hold(
            "evidence-lapsed",
            f"The evidence behind {budget.document.code} served until {budget.lapses_at}.",
            "Renew the study that lapsed and have the budget approved. " + _ASK_THE_LABORATORY,
        )
    ]


def _unique(holds: list[Hold]) -> list[Hold]:
    return list(dict.fromkeys(holds))
