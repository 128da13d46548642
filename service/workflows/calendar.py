"""The plant's calendar: when a study stops serving, as an instant, and how far ahead that is announced."""

from __future__ import annotations

from datetime import UTC, date, datetime, time, timedelta
from typing import Final
from zoneinfo import ZoneInfo

from service.documents import Plant

WEEKDAYS: Final = ("monday", "tuesday", "wednesday", "thursday", "friday", "saturday", "sunday")
NOTICE: Final = timedelta(days=30)
# So far from the ends of the calendar that neither a week of days off nor a time zone leads beyond them.
_FIRST: Final = date.min + timedelta(days=2)
_LAST: Final = date.max - timedelta(days=9)

# In force until the plant approves a document of its own.
DEFAULT_PLANT: Final = Plant(
    time_zone="UTC",
    lapse_hour=time(11),
    working_days=WEEKDAYS[:5],
    serving_days={
        "repeatability": 365,
        "duplicates": 365,
        "nested_precision": 365,
        "sampling": 365,
        "agreement": 365,
        "covariance": 365,
        "fleet": 365,
        "check_samples": 365,
        "process_stream": 365,
        "production": 365,
    },
    reason="default, until the plant approves a document of its own",
    replicate_level=0.99,
)


def lapse_instant(serves_until: date, plant: Plant) -> datetime:
    """Turn the last serving day into an instant: the lapse hour of that day or of the next working day.

    Evidence never lapses in the middle of a weekend, when nobody is there to renew it.
    """
    # Studies recorded before there was a bound may name any day, and have to be read all the same.
    day = min(max(serves_until, _FIRST), _LAST)
    while WEEKDAYS[day.weekday()] not in plant.working_days:
        day += timedelta(days=1)
    local = datetime.combine(day, plant.lapse_hour, tzinfo=ZoneInfo(plant.time_zone))
    return local.astimezone(UTC)


def serving_end(design: str, done_on: date, plant: Plant) -> date | None:
    """Give the last day on which a study of ``design`` serves when it does not say so itself.

    A design that the plant says nothing of serves as long as by default: evidence always lapses.
    """
    days = plant.serving_days.get(design, DEFAULT_PLANT.serving_days.get(design))
    return None if days is None else done_on + timedelta(days=days)
