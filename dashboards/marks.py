"""Marks of the patient, pressed on the device or written into its diary, in their local time and beside strips.

A mark's text is the patient's or the clinic's and is shown as published, or not at all where there is none.
"""

from __future__ import annotations

from datetime import date, datetime, timedelta
from typing import Any, NamedTuple

import polars as pl

from dashboards import words
from dashboards.strips import UNITS_PER_S

TOLD_A_DAY = 3


class StripMark(NamedTuple):
    """A mark within a strip: its place in drawing units, its clock time and its text."""

    x: int
    clock: str
    text: str


def by_day(marks: pl.DataFrame, zone: str) -> dict[date, str]:
    """Return what to say of each local day with marks: the clock times and texts of the first ones."""
    days: dict[date, list[str]] = {}
    for mark in marks.sort("mark_utc", "mark_text").iter_rows(named=True):
        local = words.local_time(mark["mark_utc"], zone)
        days.setdefault(local.date(), []).append(f"{local:%H:%M} {mark['mark_text']}".strip())
    return {day: _told(said) for day, said in days.items()}


def _told(said: list[str]) -> str:
    more = len(said) - TOLD_A_DAY
    return "; ".join(said[:TOLD_A_DAY]) + (f"; {more} more" if more > 0 else "")


def within(start_utc: datetime, length_s: float, pressed: list[dict[str, Any]], zone: str) -> list[StripMark]:
    """Return the marks (rows of `marks`, in order of time) that lie within a strip."""
    end_utc = start_utc + timedelta(seconds=length_s)
    return [
        StripMark(
            round((mark["mark_utc"] - start_utc).total_seconds() * UNITS_PER_S),
            f"{words.local_time(mark['mark_utc'], zone):%H:%M:%S}",
            mark["mark_text"],
        )
        for mark in pressed
        if start_utc <= mark["mark_utc"] < end_utc
    ]
