"""Whether a decision request is understood; everything that is not is named at once."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from typing import Any, Final

from budgets.errors import BudgetsError
from budgets.units import conversion
from service.documents import Calibration, DecisionRequest, Reading
from service.errors import Conflict
from service.schemas.base import counted, pointer_step
from service.workflows.evidence import FaultCollector
from service.workflows.register import Register

# How far a line's clock may run ahead of ours before a time is a fault.
CLOCK_TOLERANCE: Final = timedelta(minutes=5)

ReadingIdentity = tuple[str, str, str]


def reading_identity(reading: Reading) -> ReadingIdentity:
    """Name a reading so that it counts once: analyzer, measurement or instant to the millisecond, sample."""
    name = reading.measurement or _moment(reading.taken_at)
    return reading.analyzer, name, reading.sample


def reading_instant(reading: Reading) -> ReadingIdentity:
    """Name a reading by its instant, as one without a measurement of its own would be named."""
    return reading.analyzer, _moment(reading.taken_at), reading.sample


def recorded_reading(reading: Mapping[str, Any]) -> tuple[ReadingIdentity, str]:
    """Name a reading as it stands in an entry, as reading_identity did, with its instant."""
    moment = _moment(datetime.fromisoformat(reading["taken_at"]))
    return (reading["analyzer"], reading.get("measurement") or moment, reading["sample"]), moment


def _moment(taken_at: datetime) -> str:
    return taken_at.astimezone(UTC).isoformat(timespec="milliseconds")


def check_request(register: Register, request: DecisionRequest, now: datetime) -> None:
    """Refuse a request that names what does not exist, or readings that cannot be what they say.

    Raises
    ------
    InvalidRequest
        With every fault.
    Conflict
        The same reading stands in the request twice.
    """
    collector = FaultCollector()
    if request.product not in register.products:
        collector.add("#/product", f"there is no product {request.product!r}", "the code of a product")
    if request.line not in register.lines:
        collector.add("#/line", f"there is no line {request.line!r}", "the code of a line")
    collector.finish("The request names what does not exist.")
    _check_specifications(register, request, collector)
    _check_units(register, request, collector)
    for index, reading in enumerate(request.readings):
        _check_reading(register, request, reading, now, f"#/readings/{index}", collector)
    collector.finish(f"{counted(len(collector.faults))}; nothing was recorded.")
    _check_no_twins(request)


def _check_specifications(register: Register, request: DecisionRequest, collector: FaultCollector) -> None:
    for index, code in enumerate(request.specifications or ()):
        owner = register.specification_products.get(code)
        pointer = f"#/specifications/{index}"
        if owner is None:
            collector.add(pointer, f"there is no specification {code!r}", "the code of a specification")
        elif owner != request.product:
            collector.add(pointer, f"{code!r} is a specification of {owner!r}", f"one of {request.product!r}")


def _check_units(register: Register, request: DecisionRequest, collector: FaultCollector) -> None:
    for code, unit in request.units.items():
        characteristic = register.characteristics.get((request.product, code))
        pointer = f"#/units/{code}"
        if characteristic is None:
            collector.add(
                pointer, f"{request.product!r} has no characteristic {code!r}", "one of the product"
            )
        elif unit not in characteristic.accepted_units:
            collector.add(
                pointer, _unit_fault(unit, characteristic.unit), _units(characteristic.accepted_units)
            )


def _unit_fault(unit: str, wanted: str) -> str:
    try:
        conversion(unit, wanted)
    except BudgetsError as error:
        return error.message
    return f"{unit!r} is not accepted for this characteristic"


def _units(accepted: tuple[str, ...]) -> str:
    return f"one of {', '.join(accepted)}"


def _check_reading(
    register: Register,
    request: DecisionRequest,
    reading: Reading,
    now: datetime,
    pointer: str,
    collector: FaultCollector,
) -> None:
    line = register.lines[request.line]
    analyzer = register.analyzers.get(reading.analyzer)
    if analyzer is None or reading.analyzer not in line.analyzers:
        collector.add(
            f"{pointer}/analyzer",
            f"{reading.analyzer!r} is no analyzer of the line {line.code!r}",
            f"one of {', '.join(line.analyzers) or 'none yet'}",
        )
        return
    calibration = register.calibrations.get(reading.calibration)
    if calibration is None or calibration.analyzer != reading.analyzer:
        collector.add(
            f"{pointer}/calibration",
            f"{reading.calibration!r} is no calibration of {reading.analyzer!r}",
            "the code of one of its calibrations",
        )
    else:
        _check_conditions(calibration, reading, pointer, collector)
    if reading.taken_at > now + CLOCK_TOLERANCE:
        collector.add(f"{pointer}/taken_at", "lies in the future", "an instant that has passed")
    for code in reading.values:
        if code not in analyzer.channels:
            collector.add(
                f"{pointer}/values/{code}",
                f"{code!r} is no channel of {reading.analyzer!r}",
                f"one of {', '.join(analyzer.channels)}",
            )
        elif code not in request.units:
            collector.add(f"#/units/{code}", "is missing", f"the unit of {code!r}")


def _check_conditions(
    calibration: Calibration, reading: Reading, pointer: str, collector: FaultCollector
) -> None:
    """Refuse flags and influences that the calibration does not know: a misspelt one would be ignored."""
    for member in ("flags", "influences"):
        known = getattr(calibration, member)
        for name in getattr(reading, member):
            if name not in known:
                collector.add(
                    f"{pointer}/{member}{pointer_step(name)}",
                    f"the calibration {calibration.code!r} has no such member of its {member}",
                    f"one of {', '.join(known)}" if known else "none",
                )


def _check_no_twins(request: DecisionRequest) -> None:
    """Refuse the same reading twice; it stays the same when one of the two names its measurement."""
    seen: dict[ReadingIdentity, int] = {}
    measured_at: dict[ReadingIdentity, int] = {}
    for index, reading in enumerate(request.readings):
        identity, instant = reading_identity(reading), reading_instant(reading)
        first = seen.get(identity)
        if first is None:
            first = (measured_at if reading.measurement is None else seen).get(instant)
        if first is not None:
            raise Conflict(
                "reading-already-judged",
                f"Readings {first} and {index} are the same reading (analyzer, time, sample); "
                "the same reading twice is not two readings.",
            )
        seen[identity] = index
        if reading.measurement is not None:
            measured_at[instant] = index
