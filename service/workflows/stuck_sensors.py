"""Whether an analyzer shows the same digits again and again: then nobody knows when it last measured.

Readings count in the order in which they were taken, within a call, and before it in the order in which
the decisions of its line were recorded.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from datetime import datetime
from itertools import groupby
from typing import Any, Final

from service.documents import DecisionRequest
from service.store.unit_of_work import UnitOfWork
from service.workflows.holds import Hold

CODE: Final = "stuck-sensor"
# What a channel of an analyzer showed: its value as it was sent, and the unit.
Shown = tuple[float, str]
StuckSensors = Mapping[tuple[str, str], Hold]


def stuck_sensors(unit_of_work: UnitOfWork, request: DecisionRequest, identical: int) -> StuckSensors:
    """Give a hold for every channel of an analyzer that showed ``identical`` equal values in a row.

    The record is asked only where all readings of this call are equal: a channel that moved is not stuck.
    """
    found: dict[tuple[str, str], Hold] = {}
    for (analyzer, channel), shown in _by_channel(request).items():
        longest = max(len(list(run)) for _, run in groupby(shown))
        if longest == len(shown) and longest < identical:
            longest += _before(unit_of_work, request.line, analyzer, channel, shown[0], identical - longest)
        if longest >= identical:
            found[analyzer, channel] = _hold(analyzer, channel, shown[-1], longest)
    return found


def stuck_before(decisions: Iterable[Mapping[str, Any]], characteristic: str) -> tuple[Hold, ...]:
    """Give the holds of earlier looks at a lot: joined with others, their readings are no evidence still."""
    found = [
        Hold(CODE, reason["detail"], "Its readings stay with the lot. A person decides on it.")
        for content in decisions
        for reason in content["reasons"]
        if reason["code"] == CODE and reason["characteristic"] == characteristic
    ]
    return tuple(dict.fromkeys(found))


def _by_channel(request: DecisionRequest) -> dict[tuple[str, str], list[Shown]]:
    found: dict[tuple[str, str], list[Shown]] = {}
    for reading in sorted(request.readings, key=lambda reading: reading.taken_at):
        for channel, value in reading.values.items():
            unit = request.units.get(channel, "")
            found.setdefault((reading.analyzer, channel), []).append((value, unit))
    return found


def _before(
    unit_of_work: UnitOfWork, line: str, analyzer: str, channel: str, shown: Shown, wanted: int
) -> int:
    """Count the readings before this call that showed the same, as many as are wanted at most."""
    count = 0
    for earlier in _recorded(unit_of_work, line, analyzer, channel, wanted):
        if earlier != shown or count == wanted:
            break
        count += 1
    return count


def _recorded(
    unit_of_work: UnitOfWork, line: str, analyzer: str, channel: str, decisions: int
) -> Iterator[Shown]:
    """Give what a channel showed in the last decisions of a line, the last reading first."""
    for stored in unit_of_work.decisions.list(line=line, limit=decisions):
        said: dict[str, Any] = stored.entry.content["request"]
        unit = said["units"].get(channel, "")
        readings = [
            reading
            for reading in said["readings"]
            if reading["analyzer"] == analyzer and channel in reading["values"]
        ]
        for reading in sorted(readings, key=_instant, reverse=True):
            yield reading["values"][channel], unit


def _instant(reading: Mapping[str, Any]) -> datetime:
    return datetime.fromisoformat(reading["taken_at"])


def _hold(analyzer: str, channel: str, shown: Shown, times: int) -> Hold:
    value, unit = shown
    return Hold(
        CODE,
        f"{analyzer} has shown {channel} = {value:g} {unit} at least {times} times in a row.",
        "Read a check sample on the analyzer before it judges again. Have the laboratory analyse a sample of "
        "this lot.",
    )
