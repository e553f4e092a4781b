"""Wall clocks to instants at clock changes."""

from datetime import datetime, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from flows.arrivals.clocks import offset_at, possible_utc


@pytest.mark.parametrize(
    ("zone", "first", "hours"),
    [("Europe/Berlin", "2026-03-28", 23), ("Europe/Berlin", "2026-10-24", 25), ("America/New_York", "2026-03-07", 23)],
)
def test_noon_to_noon_over_a_clock_change(zone, first, hours):
    """From noon to noon a day with a clock change has 23 or 25 hours."""
    noon = datetime.fromisoformat(f"{first}T12:00")
    (begin,), (end,) = possible_utc(noon, zone), possible_utc(noon + timedelta(days=1), zone)
    # Source: tz database
    assert end - begin == timedelta(hours=hours)


@pytest.mark.parametrize(
    ("local", "expected"),
    [
        ("2026-10-25T02:30", ["2026-10-25T00:30", "2026-10-25T01:30"]),
        ("2026-03-29T02:30", ["2026-03-29T00:30", "2026-03-29T01:30"]),
        ("2026-06-01T02:30", ["2026-06-01T00:30"]),
    ],
)
def test_doubled_and_missing_hours_have_two_instants(local, expected):
    """A time that came twice or never in Berlin can mean two instants, any other time one."""
    found = possible_utc(datetime.fromisoformat(local), "Europe/Berlin")
    # Source: tz database, Europe/Berlin
    assert list(found) == [datetime.fromisoformat(instant) for instant in expected]


@given(
    instant=st.datetimes(datetime.fromisoformat("1975-01-01"), datetime.fromisoformat("2037-12-31")),
    zone=st.sampled_from(["Europe/Berlin", "America/New_York", "Australia/Lord_Howe", "Asia/Kathmandu", "UTC"]),
)
def test_every_instant_is_among_those_that_its_wall_clock_can_mean(instant, zone):
    """An instant shown on the wall clock is found again among the possible instants."""
    assert instant in possible_utc(instant + offset_at(instant, zone), zone)
