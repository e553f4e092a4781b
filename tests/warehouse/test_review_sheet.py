"""The order in which an over-reader decides, and how much of the burden each decision settles."""

from datetime import datetime
from typing import Any

import pytest


def _sheet(lake: Any, families: list[tuple[str, int]]) -> list[dict[str, Any]]:
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-01T04:00")
    rows = [
        {"recording_id": "R1", "fingerprint": "f1", "family": number, "family_class": kind, "beat_count": count}
        for number, (kind, count) in enumerate(families)
    ]
    lake.land("families", "R1", [row | {"beat_count": row["beat_count"] + 3} for row in rows], "f1")
    quarter = {"quarter_utc": datetime.fromisoformat("2026-05-01T00:00")}
    counted = [
        {name: row[name] for name in row if name != "family_class"} | quarter for row in rows if row["beat_count"]
    ]
    lake.land("family_quarters", "R1", counted, "f1")
    with lake.built() as build:
        assert build.check() == []
        return build.frame("review_sheet").sort("review_rank").rows(named=True)


def test_the_largest_ventricular_family_is_decided_first(lake: Any) -> None:
    """Ventricular families lead, largest first, each with its share and the share settled so far."""
    rows = _sheet(lake, [("N", 9000), ("V", 200), ("S", 50), ("V", 700), ("V", 100)])
    assert [row["family"] for row in rows] == [3, 1, 4, 0, 2]
    # Source: shares and running sums of 700, 200 and 100 of 1,000, by hand
    assert [row["v_share_pct"] for row in rows] == pytest.approx([70, 20, 10, 0, 0])
    assert [row["settled_pct"] for row in rows] == pytest.approx([70, 90, 100, 100, 100])


def test_without_a_ventricular_family_there_is_nothing_to_settle(lake: Any) -> None:
    """No ventricular family means no share, not a share of zero."""
    (row,) = _sheet(lake, [("N", 9000)])
    assert (row["review_rank"], row["v_share_pct"], row["settled_pct"]) == (1, None, None)


def test_a_family_without_counted_beats_is_not_on_the_sheet(lake: Any) -> None:
    """A family all of whose beats lie outside analysable time moves nothing, whatever is decided."""
    assert [row["family"] for row in _sheet(lake, [("V", 40), ("V", 0)])] == [0]


def test_the_effort_counts_decisions_up_to_95_percent(lake: Any) -> None:
    """The decisions that settle 95 % of the ventricular beats, and the minutes at the stated time a decision."""
    _sheet(lake, [("N", 9000), ("V", 700), ("V", 200), ("V", 60), ("V", 40)])
    with lake.built() as build:
        (row,) = build.frame("review_effort").rows(named=True)
    # Source: running sums 70, 90, 96, by hand; 3 decisions of 20 s (common practice, no source)
    assert (row["decisions_to_goal"], row["settled_pct"], row["decided_v_pct"]) == (3, pytest.approx(96), 0)
    assert row["minutes_to_goal"] == pytest.approx(1)
