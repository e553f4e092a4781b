"""The programme's first page: what arrived, who needs a look, who wore the patch when."""

from __future__ import annotations

from datetime import date, timedelta
from typing import Any, NamedTuple

import polars as pl

from dashboards import addresses, words
from dashboards.tables import Tables

PAGE = "index.html"
TABLES = (
    "patients", "wear_days", "recordings", "therapies", "changes", "attention", "deliveries", "runs_of_flow",
    "review_effort",
)  # fmt: skip
SHEETS_SHOWN = 8
LONGEST_CALENDAR_D = 120
SHORTEST_CALENDAR_D = 28
WEAR_LEVELS = ("none", "short", "valid")


class WearStrip(NamedTuple):
    """A patient's days of the calendar: a path per wear level, places of therapy events, the hours to read out."""

    levels: dict[str, str]
    therapy_places: list[int]
    hours: str  # whole analysable hours of each day, separated by commas, empty where nothing was worn


def context(tables: Tables) -> dict[str, Any]:
    """Return everything that the overview shows."""
    wear_days = tables.whole("wear_days")
    days: list[date] = wear_days["local_day"].to_list()
    first_day, last_day = min(days, default=None), max(days, default=None)
    calendar = calendar_days(first_day, last_day) if first_day and last_day else None
    attention = tables.whole("attention").sort("attention_rank", "patient_code", "attention_code")
    ranks = _first_ranks(attention)
    codes = sorted(tables.whole("patients")["patient_code"], key=lambda code: (ranks.get(code, len(ranks) + 1), code))
    deliveries = tables.whole("deliveries").sort("received_utc", "delivery_id", descending=[True, False])
    return {
        "last_day": last_day,
        "calendar": calendar,
        "attention": [_reasons(attention, code) for code in ranks],
        "patients": [_patient(tables, code, calendar) for code in codes],
        "last_run": _last_run(tables),
        "open_deliveries": deliveries.filter(pl.col("status").is_in(["waiting", "quarantined"])).rows(named=True),
        "recent_deliveries": deliveries.filter(pl.col("status").is_in(["accepted", "skipped"]))
        .head(20)
        .rows(named=True),
        "recordings": tables.whole("recordings").height,
        "effort": _effort(tables),
        "sheets": _sheets(tables),
    }


def data_files(tables: Tables) -> dict[str, pl.DataFrame]:
    """Return the downloads of the overview by name."""
    return {name: tables.whole(name) for name in ("attention", "wear_days", "deliveries", "changes", "review_effort")}


def _effort(tables: Tables) -> dict[str, Any] | None:
    """Return what the over-read sheets of all recordings ask for: the fewest and the most decisions and minutes."""
    effort = tables.whole("review_effort")
    if effort.is_empty():
        return None
    figures = effort.select(
        "seconds_per_decision",
        fewest=pl.col("decisions_to_goal").min(),
        most=pl.col("decisions_to_goal").max(),
        median_min=pl.col("minutes_to_goal").median(),
        most_min=pl.col("minutes_to_goal").max(),
        sheets=pl.len(),
        untouched=(pl.col("decided_v_pct") == 0).sum(),
    )
    return figures.row(0, named=True)


def _sheets(tables: Tables) -> list[dict[str, Any]]:
    """Return the sheets on which most ventricular beats wait for a decision."""
    burdens = tables.whole("recordings").select("recording_id", "v_beats", "all_beats", "v_burden_pct", "analysable_h")
    waiting = tables.whole("review_effort").join(burdens, on="recording_id")
    ordered = waiting.sort(
        (100 - pl.col("decided_v_pct")) * pl.col("v_beats"), "recording_id", descending=[True, False]
    )
    return [
        row | {"page": addresses.review_page(row["recording_id"])}
        for row in ordered.head(SHEETS_SHOWN).iter_rows(named=True)
    ]


def _first_ranks(attention: pl.DataFrame) -> dict[str, int]:
    firsts = attention.unique("patient_code", keep="first", maintain_order=True)["patient_code"]
    return {code: place for place, code in enumerate(firsts)}


def _reasons(attention: pl.DataFrame, code: str) -> dict[str, Any]:
    reasons = attention.filter(pl.col("patient_code") == code).rows(named=True)
    return {"patient_code": code, "page": addresses.patient_page(code), "reasons": reasons}


def _last_run(tables: Tables) -> dict[str, Any] | None:
    runs = tables.whole("runs_of_flow").sort("finished_utc", "run_id")
    return runs.row(-1, named=True) if runs.height else None


def _patient(tables: Tables, code: str, calendar: list[date] | None) -> dict[str, Any]:
    wear_days = tables.of_patient("wear_days", code).sort("local_day")
    recordings = tables.of_patient("recordings", code).sort("start_utc")
    measured = recordings.drop_nulls("v_burden_pct")
    return {
        "patient_code": code,
        "page": addresses.patient_page(code),
        "last_day": wear_days["local_day"].max(),
        "wear_days": wear_days.height,
        "valid_days": wear_days.filter(pl.col("is_valid_day")).height,
        "recordings": recordings.height,
        "latest": measured.row(-1, named=True) if measured.height else None,
        "change": _latest_change(tables, code),
        "attention": tables.of_patient("attention", code).height,
        "wear": wear_strip(wear_days, tables.of_patient("therapies", code), calendar) if calendar else None,
    }


def _latest_change(tables: Tables, code: str) -> dict[str, Any] | None:
    changes = tables.of_patient("changes", code).filter(pl.col("measure") == "v_burden_pct")
    dated = changes.join(tables.of_patient("therapies", code), on="therapy_id").sort("therapy_day", "therapy_id")
    if dated.is_empty():
        return None
    row = dated.row(-1, named=True)
    return row | {"therapy": words.therapy(row["therapy_kind"], row["therapy_detail"])}


def calendar_days(first_wear: date, last_wear: date) -> list[date]:
    """Return the days that the wear calendar shows: all days with wear as long as they fit, always up to the last."""
    length = min(max((last_wear - first_wear).days + 1, SHORTEST_CALENDAR_D), LONGEST_CALENDAR_D)
    return [last_wear - timedelta(days=back) for back in range(length - 1, -1, -1)]


def wear_strip(wear_days: pl.DataFrame, therapies: pl.DataFrame, calendar: list[date]) -> WearStrip:
    """Return a patient's wear on the days of the calendar, one unit of width a day."""
    hours: list[str] = [""] * len(calendar)
    levels: list[str] = [""] * len(calendar)
    for day, is_valid, analysable_h in wear_days.select("local_day", "is_valid_day", "analysable_h").iter_rows():
        place = (day - calendar[0]).days
        if 0 <= place < len(calendar):
            hours[place] = f"{analysable_h or 0:.0f}"
            levels[place] = "valid" if is_valid else "short" if analysable_h else "none"
    places = [(day - calendar[0]).days for day in therapies["therapy_day"].drop_nulls()]
    return WearStrip(
        {level: path for level in WEAR_LEVELS if (path := _blocks(levels, level))},
        sorted(place for place in places if 0 <= place < len(calendar)),
        ",".join(hours),
    )


def _blocks(levels: list[str], level: str) -> str:
    """Return one rectangle per unbroken stretch of days at this level, as one SVG path."""
    starts = [
        place for place, found in enumerate(levels) if found == level and (place == 0 or levels[place - 1] != level)
    ]
    ends = [next((p for p in range(start, len(levels)) if levels[p] != level), len(levels)) for start in starts]
    return "".join(f"M{start} 0H{end}V1H{start}z" for start, end in zip(starts, ends, strict=True))
