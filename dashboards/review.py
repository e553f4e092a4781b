"""The over-read sheet of a recording: families in the order in which a decision moves the burden, strips beside them.

The page keeps the reader's decisions and saves them as a file (assets/decisions.schema.json describes it); nothing is
decided here, and no number is made that `review_sheet` does not hold.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import polars as pl

from dashboards import addresses, words
from dashboards.drawings import Drawings
from dashboards.tables import Tables

FAMILIES_SHOWN = 40
STRIPS_OF_A_FAMILY = 2
EPISODES_SHOWN = 30
READ_EPISODES = ("run", "sv_run", "pause")


def context(tables: Tables, recording: dict[str, Any], drawings: Drawings) -> dict[str, Any]:
    """Return everything that the over-read sheet of one recording (a row of `recordings`) shows."""
    recording_id = recording["recording_id"]
    sheet = tables.of_recording("review_sheet", recording_id).sort("review_rank")
    shapes = {row["family"]: row for row in drawings.families}
    said = _said(tables.of_recording("decisions", recording_id), recording["fingerprint"])
    items = [
        row | {"shape": shapes[row["family"]], "said": said.get(row["family"], []), "parts": _parts(row)}
        for row in sheet.head(FAMILIES_SHOWN).rows(named=True)
    ]
    shown = _with_strips(items, drawings.strips)
    beside = [strip for item in shown for strip in item["strips"]]
    return {
        "recording": recording,
        "recording_page": addresses.recording_page(recording_id),
        "items": shown,
        "families_count": sheet.height,
        "effort": next(tables.of_recording("review_effort", recording_id).iter_rows(named=True), None),
        "other_strips": [strip for strip in drawings.strips if not _stands(strip, beside)],
        "episodes": _episodes(tables.large("episodes", recording_id)),
    }


def _said(decisions: pl.DataFrame, fingerprint: str | None) -> dict[int, list[str]]:
    """Return what each reader last said of each family in decisions that count already, in words."""
    seen = decisions.filter(pl.col("read_fingerprint") == fingerprint).sort(
        "reviewed_utc", "delivery_id", "decision_order"
    )
    parts: dict[tuple[str, int], list[str]] = {}
    for row in seen.filter(pl.col("decision_subject") == "part").iter_rows(named=True):
        told = f"{row['automatic_class']} {_as_word(row)}"
        parts.setdefault((row["delivery_id"], row["family"]), []).append(told)
    of_families = seen.filter(pl.col("decision_subject") == "family")
    latest = of_families.unique(("family", "reader_code"), keep="last", maintain_order=True).sort("reader_code")
    said: dict[int, list[str]] = {}
    for row in latest.filter(pl.col("decision").ne_missing("withdraw")).iter_rows(named=True):
        told = _in_words(row, parts.get((row["delivery_id"], row["family"]), []))
        said.setdefault(row["family"], []).append(f"{row['reader_code']}: {told}")
    return said


def _parts(family: dict[str, Any]) -> list[tuple[str, int]]:
    """Return the parts into which a family can be split: the classes found in it and their beats; none for one class."""
    counts = [(letter, family[f"{letter.lower()}_beats"] or 0) for letter in words.CLASSES]
    held = [(letter, count) for letter, count in counts if count]
    return held if len(held) > 1 else []


def _in_words(row: dict[str, Any], parts: list[str]) -> str:
    if row["is_mixed"]:
        return f"split, {'; '.join(parts) or 'nothing decided'}"
    if row["decision"] is None:
        return (
            f"same shape as family {row['same_as_family']}" if row["same_as_family"] is not None else "nothing decided"
        )
    return f"accepted as {row['automatic_class']}" if row["decision"] == "accept" else str(row["decision"])


def _as_word(row: dict[str, Any]) -> str:
    return "accepted" if row["decision"] == "accept" else f"as {row['decision']}"


def _with_strips(items: list[dict[str, Any]], drawn: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Give each family the strips that show it, each of its parts first; a strip stands beside the first family that takes it."""
    free = drawn
    for item in items:
        showing = [strip for strip in free if item["family"] in (strip["beat_families"] or ())]
        # Strips chosen for a beat of the family's class tell more than those in which it only happens to occur.
        showing.sort(key=lambda strip: strip["beat_class"] != item["family_class"])
        of_parts = [
            next((s for s in showing if _shows(s, item["family"], letter)), None) for letter, _ in item["parts"]
        ]
        needed = [strip for place, strip in enumerate(of_parts) if strip and not _stands(strip, of_parts[:place])]
        others = [strip for strip in showing if not _stands(strip, needed)]
        item["strips"] = [*needed, *others[: max(STRIPS_OF_A_FAMILY - len(needed), 0)]]
        free = [strip for strip in free if not _stands(strip, item["strips"])]
    return items


def _shows(strip: dict[str, Any], family: int, letter: str) -> bool:
    """Tell whether a beat of the family that was found as this class lies in a strip."""
    beats = zip(strip["beat_families"], strip["drawing"].marks, strict=True)
    return any(found == family and mark.beat_class == letter for found, mark in beats)


def _stands(strip: dict[str, Any], among: Sequence[dict[str, Any] | None]) -> bool:
    return any(strip is other for other in among)


def _episodes(episodes: pl.DataFrame) -> list[dict[str, Any]]:
    of_kind = episodes.filter(pl.col("episode_kind").is_in(READ_EPISODES))
    return of_kind.sort("duration_s", "start_utc", descending=[True, False]).head(EPISODES_SHOWN).rows(named=True)
