"""A recording's page: what could be analysed, the shapes found, the hours, and the strips behind the counts."""

from __future__ import annotations

from itertools import takewhile
from typing import Any

import polars as pl

from dashboards import addresses, charts, words
from dashboards.drawings import Drawings
from dashboards.patient import ECTOPIC
from dashboards.tables import Tables

EPISODES_SHOWN = 60
WINDOWS_SHOWN = 40
FAMILIES_SHOWN = 12
SMALLEST_SHARE_PCT = 0.02  # of a family that is drawn, beyond the first few
FAMILIES_ALWAYS = 4
LISTED_EPISODES = ("run", "sv_run", "pause", "bigeminy", "trigeminy", "irregular")


def context(tables: Tables, recording: dict[str, Any], drawings: Drawings) -> dict[str, Any]:
    """Return everything that the page of one recording (a row of `recordings`) shows."""
    recording_id, zone = recording["recording_id"], recording["zone"]
    hours = tables.of_recording("hours", recording_id).sort("hour_utc")
    episodes = tables.large("episodes", recording_id)
    counted = episodes.filter("is_counted")
    windows = tables.large("quality_windows", recording_id).sort("duration_s", "start_utc", descending=[True, False])
    families = drawings.families
    shown = _large(families)
    marks = tables.of_recording("marks", recording_id).sort("mark_utc", "mark_text")
    return {
        "recording": recording,
        "patient_page": addresses.patient_page(recording["patient_code"]) if recording["patient_code"] else None,
        "reviewed": next(tables.of_recording("reviewed", recording_id).iter_rows(named=True), None),
        "review_page": addresses.review_page(recording_id),
        "findings": _findings(recording, tables.of_recording("findings", recording_id)),
        "segments": tables.of_recording("segments", recording_id).sort("segment").rows(named=True),
        "hours": hours.rows(named=True),
        "wearing": charts.wearing(hours, marks, zone) if hours.height else None,
        "marks": marks.rows(named=True),
        "families": shown,
        "other_families": families[len(shown) :],
        "families_count": len(families),
        "families_share_pct": sum(row["share_pct"] for row in shown),
        "episode_counts": _counts(counted, "episode_kind"),
        "episodes_left_out": episodes.filter(pl.col("is_automatic") & ~pl.col("is_counted")).height,
        "episodes": _longest(counted),
        "episodes_shown": EPISODES_SHOWN,
        "windows": windows.head(WINDOWS_SHOWN).rows(named=True),
        "windows_count": windows.height,
        "strips": [(name, of_class) for name, of_class in _by_class(drawings.strips) if of_class],
    }


def data_files(tables: Tables, recording_id: str) -> dict[str, pl.DataFrame]:
    """Return the downloads of the page by name."""
    return {
        "hours": tables.of_recording("hours", recording_id),
        "families": tables.of_recording("families", recording_id).drop("shape_mv"),
        "episodes": tables.large("episodes", recording_id),
        "quality_windows": tables.large("quality_windows", recording_id),
    }


def _findings(recording: dict[str, Any], of_detector: pl.DataFrame) -> list[str]:
    """Return what a reader of the numbers must know: oddities of the file, then findings of the detector."""
    codes = (recording["findings"] or "").split()
    of_file = [words.FINDINGS.get(code, words.sentence(words.plain(code))) for code in codes]
    return of_file + [
        f"{words.sentence(words.plain(code))}: {detail}" if detail else words.sentence(words.plain(code))
        for code, detail in of_detector.select("finding_code", "finding_detail").iter_rows()
    ]


def _large(families: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Return the families worth drawing, of rows that are sorted by size: the first few, and others of some share."""
    others = takewhile(lambda row: row["share_pct"] >= SMALLEST_SHARE_PCT, families[FAMILIES_ALWAYS:FAMILIES_SHOWN])
    return [*families[:FAMILIES_ALWAYS], *others]


def _counts(frame: pl.DataFrame, column: str) -> dict[str, int]:
    return dict(frame.group_by(column).len().sort(column).rows())


def _longest(episodes: pl.DataFrame) -> list[dict[str, Any]]:
    listed = episodes.filter(pl.col("episode_kind").is_in(LISTED_EPISODES))
    return (
        listed.sort("duration_s", "start_utc", descending=[True, False])
        .head(EPISODES_SHOWN)
        .sort("start_utc", "episode_kind")
        .rows(named=True)
    )


def _by_class(drawn: list[dict[str, Any]]) -> list[tuple[str, list[dict[str, Any]]]]:
    titles = {beat_class: f"{words.sentence(words.CLASSES[beat_class])} beats" for beat_class in ECTOPIC}
    groups = [(title, [strip for strip in drawn if strip["beat_class"] == key]) for key, title in titles.items()]
    return [*groups, ("Other rhythm", [strip for strip in drawn if strip["beat_class"] not in ECTOPIC])]
