"""When evidence lapses: the plant's hour of a working day, never in the middle of a weekend."""

from dataclasses import replace
from datetime import UTC, date, datetime, time

import pytest

from budgets.evidence.study_data import DESIGNS
from service.workflows.calendar import DEFAULT_PLANT, WEEKDAYS, lapse_instant, serving_end

BERLIN = replace(DEFAULT_PLANT, time_zone="Europe/Berlin", lapse_hour=time(11))


@pytest.mark.parametrize(
    ("serves_until", "lapses"),
    [
        (date(2026, 3, 6), datetime(2026, 3, 6, 10, tzinfo=UTC)),  # a Friday, winter time
        (date(2026, 3, 7), datetime(2026, 3, 9, 10, tzinfo=UTC)),  # a Saturday waits for Monday
        (date(2026, 3, 8), datetime(2026, 3, 9, 10, tzinfo=UTC)),  # so does a Sunday
        (date(2026, 3, 28), datetime(2026, 3, 30, 9, tzinfo=UTC)),  # over the change to summer time
    ],
)
def test_evidence_lapses_at_the_plants_hour_of_a_working_day(serves_until: date, lapses: datetime) -> None:
    assert lapse_instant(serves_until, BERLIN) == lapses


def test_a_plant_that_works_on_saturdays_lapses_on_saturdays() -> None:
    plant = replace(BERLIN, working_days=("saturday",))
    assert lapse_instant(date(2026, 3, 6), plant) == datetime(2026, 3, 7, 10, tzinfo=UTC)


@pytest.mark.parametrize("zone", ["Etc/GMT+12", "Etc/GMT-14"])
@pytest.mark.parametrize("hour", [time(0), time(23, 59)])
@pytest.mark.parametrize("day", WEEKDAYS)
def test_any_day_has_an_instant_at_which_evidence_lapses(zone: str, hour: time, day: str) -> None:
    plant = replace(BERLIN, time_zone=zone, lapse_hour=hour, working_days=(day,))
    assert lapse_instant(date.max, plant).year == 9999
    assert lapse_instant(date.min, plant).year == 1


def test_a_study_serves_as_long_as_the_plant_says_for_its_design() -> None:
    assert serving_end("repeatability", date(2026, 1, 14), DEFAULT_PLANT) == date(2027, 1, 14)
    assert serving_end("unheard-of", date(2026, 1, 14), DEFAULT_PLANT) is None


def test_a_design_that_the_plant_does_not_name_serves_as_long_as_by_default() -> None:
    plant = replace(DEFAULT_PLANT, serving_days={"repeatability": 30})
    assert serving_end("repeatability", date(2026, 1, 14), plant) == date(2026, 2, 13)
    for design in DESIGNS:
        assert serving_end(design, date(2026, 1, 14), plant) is not None
