"""Wall clocks to instants: which UTC instants a local time can mean, at clock changes none or two."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo


def possible_utc(local: datetime, zone: str) -> tuple[datetime, ...]:
    """Naive UTC instants that a naive wall-clock time can mean, earliest first.

    One on ordinary days. Two for a time that happened twice, and two for one that never happened: what a clock shows
    that was not set back or forward.
    """
    place = ZoneInfo(zone)
    instants = {local.replace(tzinfo=place, fold=fold).astimezone(UTC).replace(tzinfo=None) for fold in (0, 1)}
    return tuple(sorted(instants))


def offset_at(instant_utc: datetime, zone: str) -> timedelta:
    """How far local time is ahead of UTC at a naive UTC instant."""
    shift = instant_utc.replace(tzinfo=UTC).astimezone(ZoneInfo(zone)).utcoffset()
    return shift if shift is not None else timedelta(0)
