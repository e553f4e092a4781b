"""Time zone rules as tables, so that the models count local days by joins and by the same rules as the rest.

The rules come from the Python time zone database and not from DuckDB's own copy: the two are of different age, and for
a midnight that comes twice DuckDB takes the second one, which would put an hour of wear into the wrong day.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from datetime import UTC, date, datetime, time, timedelta
from zoneinfo import ZoneInfo

import polars as pl

_DAY, _QUARTER = timedelta(days=1), timedelta(minutes=15)
_END_UTC = datetime.fromisoformat("9999-01-01T00:00")  # the last span has no end

OFFSETS = {"zone": "VARCHAR", "from_utc": "TIMESTAMP", "to_utc": "TIMESTAMP", "offset_s": "INTEGER"}
DAYS = {"zone": "VARCHAR", "local_day": "DATE", "day_h": "DOUBLE"}


def zone_offsets(zones: Iterable[str], first_utc: datetime, last_utc: datetime) -> pl.DataFrame:
    """Spans of constant offset from UTC in each zone, over all instants from `first_utc` to `last_utc` (naive UTC).

    Columns as in OFFSETS: the offset holds from `from_utc` (included) to `to_utc` (excluded).
    """
    rows = []
    for zone in zones:
        changes = list(_changes(ZoneInfo(zone), first_utc - _DAY, last_utc + _DAY))
        ends = [begin for begin, _ in changes[1:]] + [_END_UTC]
        rows += [(zone, begin, end, offset_s) for (begin, offset_s), end in zip(changes, ends, strict=True)]
    return pl.DataFrame(rows, schema=list(OFFSETS), orient="row")


def zone_rules(zones: Iterable[str], first_utc: datetime | None, last_utc: datetime | None) -> dict[str, str]:
    """The offsets of each zone over the whole years that the span touches, as text to compare."""
    first_year, last_year = (2000 if instant is None else instant.year for instant in (first_utc, last_utc))
    ends = date(first_year, 1, 1), date(last_year, 12, 31)
    years = [datetime.combine(day, time()) for day in ends]
    return {zone: repr((zone, *_changes(ZoneInfo(zone), *years))) for zone in sorted(set(zones))}


def _changes(zone: ZoneInfo, first_utc: datetime, last_utc: datetime) -> Iterator[tuple[datetime, int]]:
    """Instants from which another offset holds, each with that offset in seconds; the first is midnight before."""
    midnight = datetime.combine(first_utc, time())
    offset_s = _offset_s(zone, midnight)
    yield midnight, offset_s
    while midnight <= last_utc:
        if _offset_s(zone, midnight + _DAY) != offset_s:
            for quarter in (midnight + n * _QUARTER for n in range(1, 97)):
                if _offset_s(zone, quarter) != offset_s:
                    offset_s = _offset_s(zone, quarter)
                    yield quarter, offset_s
        midnight += _DAY


def _offset_s(zone: ZoneInfo, instant_utc: datetime) -> int:
    offset = instant_utc.replace(tzinfo=UTC).astimezone(zone).utcoffset()
    return int(offset.total_seconds()) if offset else 0


def local_days(zones: Iterable[str], first_utc: datetime, last_utc: datetime) -> pl.DataFrame:
    """Length in hours of every local day that the span can touch, for each zone; columns as in DAYS."""
    rows = []
    for zone in zones:
        day = first_utc.date() - _DAY
        while day <= last_utc.date() + _DAY:
            rows.append((zone, day, day_length_h(day, ZoneInfo(zone))))
            day += _DAY
    return pl.DataFrame(rows, schema=list(DAYS), orient="row")


def day_length_h(day: date, zone: ZoneInfo) -> float:
    """Hours from the day's midnight to the next; of a midnight that comes twice the first one counts."""
    begin, end = (midnight_utc(each, zone) for each in (day, day + _DAY))
    return (end - begin) / timedelta(hours=1)


def midnight_utc(day: date, zone: ZoneInfo) -> datetime:
    """Instant (naive UTC) at which a local day begins."""
    return datetime.combine(day, time(), zone).astimezone(UTC).replace(tzinfo=None)
