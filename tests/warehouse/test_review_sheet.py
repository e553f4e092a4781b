"""The order in which an over-reader decides, and how much of the burden each decision settles."""

from typing import Any

import pytest


def _sheet(lake: Any, families: list[tuple[str, int]]) -> list[dict[str, Any]]:
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-01T04:00")
    rows = [
        {"recording_id": "R1", "fingerprint": "f1", "family": number, "family_class": kind, "beat_count": count}
        for number, (kind, count) in enumerate(families)
    ]
    lake.land("families", "R1", rows, "f1")
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
