"""Local days follow the time zone database, in every zone, also where midnight comes twice or not at all."""

from datetime import UTC, date, datetime, timedelta
from typing import Any
from zoneinfo import ZoneInfo, available_timezones

import polars as pl
import pytest

from warehouse.zones import day_length_h, zone_offsets

FIRST, LAST = datetime.fromisoformat("2026-01-01T00:00"), datetime.fromisoformat("2026-12-31T23:45")
# Names without a place, such as "Factory" or "EST", stand for fixed offsets or for "not set".
ZONES = sorted(zone for zone in available_timezones() if "/" in zone and not zone.startswith(("Etc/", "SystemV/")))
QUARTER = timedelta(minutes=15)


def test_offsets_are_those_of_the_time_zone_database_at_every_change() -> None:
    """In every zone the spans join without a gap, and just before and after each join the offset is the zone's own."""
    offsets = zone_offsets(ZONES, FIRST, LAST)
    for zone, begin, end, offset_s in offsets.iter_rows():
        for instant in (begin, begin + QUARTER, min(end, LAST) - timedelta(seconds=1)):
            # Source: tz database as read by zoneinfo, Python standard library
            local = instant.replace(tzinfo=UTC).astimezone(ZoneInfo(zone))
            assert local.utcoffset() == timedelta(seconds=offset_s), (zone, instant)
    joined = offsets.with_columns(pl.col("from_utc").shift(-1).over("zone").alias("next_utc")).drop_nulls("next_utc")
    assert joined["to_utc"].equals(joined["next_utc"], check_names=False)


def test_every_offset_is_a_whole_number_of_quarter_hours() -> None:
    """No zone in use cuts a quarter hour in two, so a quarter hour belongs to one local day."""
    # Source: tz database as read by zoneinfo, Python standard library
    assert set(zone_offsets(ZONES, FIRST, LAST)["offset_s"] % 900) == {0}


@pytest.mark.parametrize(
    ("zone", "day", "day_h"),
    [
        # Source: tz database: clocks go back from 01:00 to 00:00 of the same day; the first midnight begins the day
        ("Atlantic/Azores", date(2026, 10, 25), 25),
        ("Atlantic/Azores", date(2026, 10, 24), 24),
        # Source: tz database: clocks go forward at midnight, so the day begins at 01:00
        ("Africa/Cairo", date(2026, 4, 24), 23),
        # Source: tz database: Samoa had no 30 December 2011
        ("Pacific/Apia", date(2011, 12, 30), 0),
        # Source: tz database: clocks change by half an hour
        ("Australia/Lord_Howe", date(2026, 4, 5), 24.5),
    ],
)
def test_days_with_an_unusual_midnight(zone: str, day: date, day_h: float) -> None:
    """A midnight that comes twice counts the first time; a day that was skipped has no hours."""
    assert day_length_h(day, ZoneInfo(zone)) == day_h


@pytest.mark.parametrize("zone", ["Atlantic/Azores", "America/Havana", "Africa/Cairo", "Australia/Lord_Howe"])
@pytest.mark.parametrize("month", [3, 4, 10, 11])
def test_continuous_wear_fills_every_day_exactly(lake: Any, zone: str, month: int) -> None:
    """Over a month in which clocks change, worn hours equal the length of each day, and every check holds."""
    lake.patient("P1", zone)
    lake.recording("R1", "P1", f"2026-{month:02}-01T00:00", f"2026-{month + 1:02}-05T00:00")
    with lake.built() as build:
        days = build.frame("wear_days")[1:-1]
        assert build.check() == []
    assert days["worn_h"].to_list() == days["day_h"].to_list()


def test_an_empty_programme_builds(lake: Any) -> None:
    """Without patients, recordings and therapies every table is there and empty, and every check holds."""
    with lake.built() as build:
        assert build.check() == []
        assert build.frame("wear_days").is_empty()
