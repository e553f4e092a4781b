"""A patient's page: one day axis for everything, what changed after each therapy event, shapes and strips behind it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import polars as pl

from dashboards import addresses, charts, words
from dashboards.drawings import Drawings
from dashboards.tables import Tables

FAMILIES_SHOWN = 5  # of each recording
STRIPS_SHOWN = 4  # of the first and of the last recording
ECTOPIC = ("V", "F", "S")
TIED = "\N{NO-BREAK SPACE}"


def context(tables: Tables, patient_code: str, drawings: Mapping[str, Drawings]) -> dict[str, Any]:
    """Return everything that the page of one patient shows; `drawings` are of the patient's recordings, by their id."""
    rows = {name: tables.of_patient(name, patient_code) for name in Tables.BY_PATIENT}
    wear_days = rows["wear_days"].sort("local_day")
    therapies = rows["therapies"].sort("therapy_day", "therapy_id")
    recordings = rows["recordings"].sort("start_utc", "recording_id")
    events = [_event(row, rows) for row in therapies.rows(named=True)]
    measured = wear_days.drop_nulls("v_burden_pct")
    coupled = _coupled(tables, recordings)
    return {
        "patient": rows["patients"].row(0, named=True),
        "wear_days": wear_days.rows(named=True),
        "first_day": wear_days["local_day"].min(),
        "last_day": wear_days["local_day"].max(),
        "valid_days": wear_days.filter(pl.col("is_valid_day")).height,
        "attention": rows["attention"].sort("attention_rank", "attention_code").rows(named=True),
        "events": events,
        "headline": headline(events, measured),
        "finding": range_words(measured),
        "timeline": charts.timeline(rows) if wear_days.height else None,
        "clock_map": charts.clock_map(rows["local_hours"]) if measured.height else None,
        "marks": rows["marks"].sort("mark_utc", "mark_text").rows(named=True),
        "coupling": charts.coupling(coupled) if coupled.height else None,
        "coupling_height": charts.coupling_height(coupled),
        "coupled": coupled.rows(named=True),
        "coupling_finding": coupling_words(coupled),
        "visits": _visits(rows["visits"], rows["visit_changes"]),
        "level_shifts": rows["level_shifts"].sort("local_day").rows(named=True),
        "densest": _densest(rows["local_hours"]),
        "clock_hours": _by_clock(rows["local_hours"]),
        "recordings": [_recording(tables, row, drawings[row["recording_id"]]) for row in recordings.rows(named=True)],
        "strips": list(_strips(drawings[recording_id] for recording_id in _ends(recordings["recording_id"].to_list()))),
    }


def data_files(tables: Tables, patient_code: str) -> dict[str, pl.DataFrame]:
    """Return the downloads of the page by name."""
    files = {name: tables.of_patient(name, patient_code) for name in Tables.BY_PATIENT}
    recordings = files["recordings"].sort("start_utc")["recording_id"]
    families = [tables.of_recording("families", recording_id).drop("shape_mv") for recording_id in recordings]
    return files | ({"families": pl.concat(families)} if families else {})


def headline(events: list[dict[str, Any]], measured: pl.DataFrame) -> str:
    """Return the answer for the latest therapy event, or the range of burden when there is none."""
    changes = [(event, event["changes"]["v_burden_pct"]) for event in events if "v_burden_pct" in event["changes"]]
    if not changes:
        return range_words(measured)
    event, change = changes[-1]
    return words.sentence(f"{change_words(change)} after {event['name']}")


def range_words(measured: pl.DataFrame) -> str:
    """Return what the timeline shows, in one sentence that names its figures."""
    if measured.is_empty():
        return "No analysable beat yet: ventricular burden is not known"
    shares_pct = measured["v_burden_pct"].to_list()
    on_days = words.counted(measured.height, "wear day")
    between = f"{words.number(min(shares_pct), 1)} and {words.number(max(shares_pct), 1)}"
    return f"Ventricular burden between {between} % on {on_days}"


def coupling_words(coupled: pl.DataFrame) -> str:
    """Return the coupling of the largest families of the first and the last recording that have one."""
    largest = coupled.unique("recording_id", keep="first", maintain_order=True)
    told = [
        f"{words.number(row['mean_coupling_ms'])} ms with a spread of {words.number(row['coupling_spread_ms'])} ms in "
        f"{words.counted(row['beat_count'], row['family_class'] + ' beat')} from {words.day(row['start_day'])}"
        for row in largest.iter_rows(named=True)
    ]
    ends = told if len(told) < 2 else [told[0], told[-1]]
    return f"Coupling of the largest family: {', then '.join(ends)}"


def change_words(change: dict[str, Any]) -> str:
    """Return a change in words: the verdict, never without the two values it compares."""
    name, unit, _ = words.MEASURES[change["measure"]]
    if change["verdict"] == "too_little_wear":
        return f"{name.lower()}: too little wear to judge a change"
    before, after = (words.number(change[f"{side}_value"], 1) for side in ("baseline", "after"))
    if change["recurrence_day"]:
        return f"{name.lower()} fell beyond chance at first and is back since {words.day(change['recurrence_day'])}"
    verb = {"fell_beyond_chance": "fell beyond chance", "rose_beyond_chance": "rose beyond chance"}
    said = verb.get(change["verdict"], "did not change more than chance explains")
    return f"{name.lower()} {said}, {before}{TIED}→{TIED}{after}{TIED}{unit}"


def _event(therapy: dict[str, Any], rows: dict[str, pl.DataFrame]) -> dict[str, Any]:
    of_event = {
        name: rows[name].filter(pl.col("therapy_id") == therapy["therapy_id"]).rows(named=True)
        for name in ("changes", "periods", "rate_effects")
    }
    by_measure = {row["measure"]: row for row in of_event["changes"]}
    spans = {row["period"]: row for row in of_event["periods"]}
    return {
        "name": words.therapy(therapy["therapy_kind"], therapy["therapy_detail"]),
        "day": therapy["therapy_day"],
        "rate_effect": next(iter(of_event["rate_effects"]), None),
        "changes": {measure: by_measure[measure] for measure in words.MEASURES if measure in by_measure},
        "periods": [spans[period] for period in ("baseline", "settling", "after") if period in spans],
    }


def _visits(visits: pl.DataFrame, changes: pl.DataFrame) -> list[dict[str, Any]]:
    """Return the planned visits of a trial, each with its change against the first where there is one."""
    verdicts = {row["visit"]: row for row in changes.filter(pl.col("measure") == "v_burden_pct").iter_rows(named=True)}
    ordered = visits.sort("target_day", "visit").rows(named=True)
    return [row | {"change": verdicts.get(row["visit"])} for row in ordered]


def _densest(local_hours: pl.DataFrame) -> dict[str, Any] | None:
    """Return the local hour with the highest burden."""
    known = local_hours.drop_nulls("v_burden_pct").sort("v_burden_pct", "local_day", "clock_hour")
    return known.row(-1, named=True) if known.height else None


def _by_clock(local_hours: pl.DataFrame) -> list[dict[str, Any]]:
    """Return the rows of the table beneath the map: one per day, its burden by clock hour."""
    if local_hours.is_empty():
        return []
    wide = local_hours.pivot("clock_hour", index="local_day", values="v_burden_pct", sort_columns=True).sort(
        "local_day"
    )
    return [{"local_day": row[0], "hours": dict(zip(wide.columns[1:], row[1:], strict=True))} for row in wide.rows()]


def _coupled(tables: Tables, recordings: pl.DataFrame) -> pl.DataFrame:
    """Return the largest ectopic families that have a coupling interval, with the local day their recording began."""
    families = [
        _ectopic(tables, row["recording_id"]).with_columns(
            start_day=pl.lit(words.local_time(row["start_utc"], row["zone"]).date())
        )
        for row in recordings.iter_rows(named=True)
    ]
    columns = ("start_day", "recording_id", "family", "family_class", "beat_count", "mean_coupling_ms",
               "coupling_spread_ms")  # fmt: skip
    empty = pl.DataFrame(schema=dict.fromkeys(columns, pl.Null))
    return pl.concat(families).select(columns).drop_nulls("mean_coupling_ms") if families else empty


def _ectopic(tables: Tables, recording_id: str) -> pl.DataFrame:
    """Return the largest ectopic families of a recording, largest first."""
    families = tables.of_recording("families", recording_id).filter(pl.col("family_class").is_in(ECTOPIC))
    return families.sort("beat_count", "family", descending=[True, False]).head(FAMILIES_SHOWN)


def _recording(tables: Tables, recording: dict[str, Any], drawings: Drawings) -> dict[str, Any]:
    return recording | {
        "page": addresses.recording_page(recording["recording_id"]),
        "reviewed": next(tables.of_recording("reviewed", recording["recording_id"]).iter_rows(named=True), None),
        "families": [row for row in drawings.families if row["family_class"] in ECTOPIC][:FAMILIES_SHOWN],
    }


def _ends(recording_ids: list[str]) -> list[str]:
    """First and last of the recordings, which may be one or none."""
    return list(dict.fromkeys([*recording_ids[:1], *recording_ids[-1:]]))


def _strips(ends: Iterable[Drawings]) -> Iterable[dict[str, Any]]:
    """Yield the first ectopic strips of some recordings; the calmest of each goes on paper."""
    for drawings in ends:
        drawn = [row for row in drawings.strips if row["beat_class"] in ECTOPIC][:STRIPS_SHOWN]
        calmest = min(drawn, key=lambda row: row["drawing"].height, default=None)
        yield from (row | {"on_paper": row is calmest} for row in drawn)
